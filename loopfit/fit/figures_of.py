"""All figures of many models at once, from their coordinates and linear parameters."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from loopfit.core.arrays import Array
from loopfit.core.quantity import Quantity
from loopfit.figures import release as rest
from loopfit.figures import unit_step
from loopfit.fit.columns import Columns

MODEL_FIGURES = (
    "gain",
    "damping_ratio",
    "natural_frequency_rad_s",
    "damped_frequency_rad_s",
    "damped_period_s",
    "dead_time_s",
    "slow_time_constant_s",
    "fast_time_constant_s",
    "lag_plus_dead_time_s",
    "zero_s",
)
RESPONSE_FIGURES = ("overshoot_percent", "peak_time_s", "rise_time_s", "settling_time_s", "delay_time_s", "decay_ratio")
_LEVELS = np.array([0.1, 0.5, 0.9])  # rise time from the first to the last, delay time to the middle


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Points:
    """P models on or inside the likelihood-ratio surface: coordinates (P, 3) and linear parameters (P, q)."""

    theta: Array
    linear: Array

    @staticmethod
    def joined(parts: list[Points]) -> Points:
        """Return all the points in one."""
        return Points(theta=np.concatenate([p.theta for p in parts]), linear=np.concatenate([p.linear for p in parts]))


def figures_of(columns: Columns, points: Points, band: float) -> dict[str, Array]:
    """Return each figure at each point (P,); nan where a figure does not exist.

    Parameters
    ----------
    columns : Columns
        What the points are models of.
    points : Points
    band : float
        Settling band as a fraction of the change (of the displacement, for a release).
    """
    chart = columns.chart
    T, r = chart.lags(points.theta)
    zeta = chart.damping(points.theta)
    frequency = chart.frequency(points.theta)
    dead = points.theta[:, 2]
    nothing = np.full(r.size, np.nan)
    swings = r > 0.25
    with np.errstate(invalid="ignore"):
        damped = np.where(swings, frequency * np.sqrt(np.maximum(1.0 - zeta**2, 0.0)), np.nan)
        root = np.sqrt(np.where(swings, np.nan, 1.0 - 4.0 * r))
    out = dict.fromkeys((*MODEL_FIGURES, *RESPONSE_FIGURES), nothing)
    out |= {
        "damping_ratio": zeta,
        "natural_frequency_rad_s": frequency,
        "damped_frequency_rad_s": damped,
        "damped_period_s": 2.0 * np.pi / np.where(damped > 0, damped, np.nan),
        "dead_time_s": dead,
        "slow_time_constant_s": T * 0.5 * (1.0 + root),
        "fast_time_constant_s": 2.0 * T * r / (1.0 + root),
        "lag_plus_dead_time_s": T + dead,
    }
    growing = zeta <= 0
    decay = np.where(growing, np.nan, unit_step.decay_ratio(r))
    if columns.input is None:
        ratio = _push(points)
        settle = T * rest.release_settling_time(r, band, ratio)
        out |= {
            "decay_ratio": decay,
            "settling_time_s": np.where(growing, np.inf, settle),
            "dead_time_s": nothing,
            "lag_plus_dead_time_s": nothing,
        }
        return out
    out["gain"] = points.linear[:, columns.rungs.index(1)] if 1 in columns.rungs else points.linear[:, 0]
    kappa: Array | float = 0.0
    if columns.rungs == (1, 0):
        kappa = _push(points)
        out["zero_s"] = kappa * (T if chart.by_lags else 1.0 / frequency)
        kappa = out["zero_s"] / T
    if 1 not in columns.rungs:
        return out
    height, peak_time = unit_step.first_peak(r, kappa)
    first, half, last = unit_step.crossing_time(r, _LEVELS[:, None], kappa)
    out |= {
        "overshoot_percent": np.where(growing, np.inf, 100.0 * height),
        "peak_time_s": np.where(growing, np.nan, dead + T * peak_time),
        "rise_time_s": T * (last - first),
        "settling_time_s": np.where(growing, np.inf, dead + T * unit_step.settling_time(r, band, kappa)),
        "delay_time_s": dead + T * half,
        "decay_ratio": decay,
    }
    return out


def _push(points: Points) -> Array:
    """Return the push of a release over its displacement, within what the figures can hold."""
    displacement = points.linear[:, 0]
    tiny = np.where(np.abs(displacement) < 1e-200, 1e-200, displacement)
    ratio: Array = np.clip(np.clip(points.linear[:, 1], -1e90, 1e90) / tiny, -1e12, 1e12)
    return ratio


def quantile_of_f(confidence: float, degrees: int) -> float:
    """Return the threshold of F(1, degrees) at the confidence (a fraction)."""
    from scipy.special import stdtrit  # scipy.stats would cost half a second of start-up

    return float(stdtrit(max(degrees, 1), 0.5 + 0.5 * confidence)) ** 2


def finite_ends(values: Array) -> tuple[float, float]:
    """Return the least and greatest of the values that exist; nan, nan when none does."""
    there = values[~np.isnan(values)]
    return (float(there.min()), float(there.max())) if there.size else (math.nan, math.nan)


def rest_crossings(columns: Columns, points: Points, band: float) -> Quantity | None:
    """Return how often a release crosses its rest value by a swing larger than the band."""
    _, r = columns.chart.lags(points.theta)
    ratio = _push(points)
    counts = rest.release_crossings(r, ratio, band)
    low, high = finite_ends(counts)
    if math.isnan(float(counts[0])):
        return None
    return Quantity.spanning(float(counts[0]), low, high)
