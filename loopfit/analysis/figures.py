"""The fitted model and its response in the words of the result."""

from __future__ import annotations

import math

from loopfit.analysis.judge import Figures, Verdict
from loopfit.analysis.result import Kind, Model, ResponseFigures
from loopfit.core.quantity import Quantity
from loopfit.fit.estimate import Fit
from loopfit.fit.figures_of import Points, rest_crossings

_MOST_DAMPED = 11.0  # a damping ratio beyond this is a first-order lag (r = 0.002)
_NEAR_CRITICAL = (0.95, 1.05)
_UNSEEN = 0.5  # lags shorter than this many rows are no more than a dead time


def model_of(fit: Fit, figures: Figures, verdict: Verdict, interval: float) -> Model:
    """Return the model with its intervals, regime and adequacy."""
    kind = _kind(fit, figures, interval)
    damping = None if kind in ("integrating", "dead_time") else figures["damping_ratio"]
    damping = None if damping is None else capped(damping)
    target = fit.columns.target
    mean = float(target @ fit.columns.samples.root_count) / float(fit.columns.samples.rows)
    about_mean = target - mean * fit.columns.samples.root_count
    power = float(about_mean @ about_mean)
    return Model(
        kind=kind,
        gain=figures["gain"],
        damping_ratio=damping,
        natural_frequency_rad_s=_frequency(figures["natural_frequency_rad_s"], damping),
        damped_frequency_rad_s=None if kind == "dead_time" else figures["damped_frequency_rad_s"],
        damped_period_s=None if kind == "dead_time" else figures["damped_period_s"],
        dead_time_s=_between_rows(figures["dead_time_s"], interval) if kind == "dead_time" else figures["dead_time_s"],
        time_constants_s=_lags(kind, figures["slow_time_constant_s"], figures["fast_time_constant_s"]),
        lag_plus_dead_time_s=None if kind == "dead_time" else figures["lag_plus_dead_time_s"],
        zero_s=figures["zero_s"],
        regime=None if damping is None else regime(damping),
        residual_rms=math.sqrt(fit.sse / fit.columns.samples.rows),
        r_squared=max(0.0, 1.0 - fit.sse / power) if power > 0 else 0.0,
        adequate=verdict.adequate,
        reasons=verdict.reasons,
    )


def _between_rows(dead_time: Quantity | None, interval: float) -> Quantity | None:
    """Return the dead time of a jump: a record can tell it no closer than the rows before and after."""
    if dead_time is None:
        return None
    return Quantity(dead_time.value, max(dead_time.low - interval, 0.0), dead_time.high + interval)


def _kind(fit: Fit, figures: Figures, interval: float) -> Kind:
    if fit.structure.rungs == (2,):
        return "integrating"
    if fit.structure.rungs == (1, 0):
        return "second_order_zero"
    damping, frequency = figures["damping_ratio"], figures["natural_frequency_rad_s"]
    if damping is not None and frequency is not None and fit.columns.input is not None:
        unseen = _UNSEEN * interval
        if 2.0 * damping.value < unseen * frequency.value and unseen * frequency.value > 1.0:
            return "dead_time"
    if damping is not None and damping.value > _MOST_DAMPED and damping.high == math.inf:
        return "first_order"
    return "second_order"


def _frequency(frequency: Quantity | None, damping: Quantity | None) -> Quantity | None:
    """Return omega_n at the capped damping ratio: T = 2 zeta / omega_n is what the record determines."""
    if frequency is None or damping is None:
        return None
    if damping.value == _MOST_DAMPED and damping.high == math.inf:
        return Quantity.spanning(
            min(frequency.value, frequency.low * _MOST_DAMPED / damping.low), frequency.low, math.inf
        )
    return frequency


def _lags(kind: Kind, slow: Quantity | None, fast: Quantity | None) -> tuple[Quantity, ...] | None:
    if slow is None or fast is None or kind == "dead_time":
        return None
    return (slow,) if kind in ("first_order", "integrating") else (slow, fast)


def capped(damping: Quantity) -> Quantity:
    """Return the damping ratio with its value at most 11: beyond it is a first-order lag."""
    if damping.value > _MOST_DAMPED:
        return Quantity(_MOST_DAMPED, min(damping.low, _MOST_DAMPED), math.inf)
    value = damping.value
    return Quantity.spanning(value, min(damping.low, value), damping.high)


def regime(damping: Quantity) -> str:
    """Return the regime in words, as the whole interval allows."""
    low, high = _NEAR_CRITICAL
    if damping.low >= low and damping.high <= high:
        return "critically damped"
    if damping.high < 1.0:
        return "underdamped"
    if damping.low > 1.0:
        return "overdamped"
    return "cannot tell"


def response_of(fit: Fit, figures: Figures, points: Points, band: float, model: Model) -> ResponseFigures | None:
    """Return the figures of the model's response; None where it has no final value."""
    if model.kind == "integrating":
        return None
    if model.kind == "dead_time":
        assert model.dead_time_s is not None
        rise = model.dead_time_s.high - model.dead_time_s.value
        return ResponseFigures(
            overshoot_percent=Quantity(0.0, 0.0, 0.0),
            peak_time_s=None,
            rise_time_s=Quantity(0.0, 0.0, rise),
            settling_time_s=model.dead_time_s,
            delay_time_s=model.dead_time_s,
            decay_ratio=None,
            rest_crossings=None,
        )
    return ResponseFigures(
        overshoot_percent=figures["overshoot_percent"],
        peak_time_s=figures["peak_time_s"],
        rise_time_s=figures["rise_time_s"],
        settling_time_s=figures["settling_time_s"],
        delay_time_s=figures["delay_time_s"],
        decay_ratio=figures["decay_ratio"],
        rest_crossings=None if fit.columns.input is not None else rest_crossings(fit.columns, points, band),
    )
