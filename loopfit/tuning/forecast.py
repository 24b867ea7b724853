"""What a loop will do with given settings: figures on the fitted plant, intervals over the plants the record allows."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from loopfit.core.arrays import Array
from loopfit.core.errors import UsageError
from loopfit.core.quantity import Quantity
from loopfit.figures.sampled import sampled_figures
from loopfit.loop.gains import Gains
from loopfit.loop.margins import margins_of
from loopfit.loop.plant import Plant
from loopfit.loop.simulate import simulate
from loopfit.loop.visible import Swing
from loopfit.tuning.cautions import noise_gain
from loopfit.tuning.family import pace_of
from loopfit.tuning.result import LoopFigures
from loopfit.tuning.screen import lag_sum
from loopfit.tuning.swing import swing_on

_SPANS = 7.0  # time constants of the slowest root that a person sees
_SCANS_AT_MOST = 4_000
_SCANS_PER_PACE = 40
_LONGER = 4
_EDGE = 0.97  # swing back from which a loop is on the edge of stability, and its response no figure
_FROM_STEP = ("overshoot_percent", "rise_time_s", "settling_time_s")


def forecast(
    plant: Plant, gains: Gains, draws: Sequence[Plant], *, scan_s: float | None = None, late: bool = False,
    band: float = 0.02, confidence: float = 0.95,
) -> LoopFigures:  # fmt: skip
    """Return the figures of a loop.

    Parameters
    ----------
    plant : Plant
        The fitted one, of which the values are.
    gains : Gains
    draws : sequence of Plant
        Those that the record allows as well; none: the intervals are the values.
    scan_s : float, optional
        Scan interval; None: the controller is continuous, stepped finely here.
    band, confidence : float
        Settling band and confidence of the intervals, as fractions.
    """
    plants = [plant, *draws]
    swings = [swing_on(one, gains, scan_s, late=late) for one in plants]
    first = swings[0]
    if first is None or not first.stable:
        return LoopFigures(stable=False)
    usable = [i for i, swing in enumerate(swings) if swing is not None and swing.stable]
    if first.visible_swing > _EDGE:
        return LoopFigures(stable=True, damping_ratio=Quantity(*(first.visible_damping,) * 3),
                           swing_percent=Quantity(*(100.0 * first.visible_swing,) * 3))  # fmt: skip
    table = _steps([plants[i] for i in usable], gains, first, scan_s, late=late, band=band)
    table |= _margins([plants[i] for i in usable], gains)
    table["damping_ratio"] = np.array([swings[i].visible_damping for i in usable])  # type: ignore[union-attr]
    table["swing_percent"] = np.array([100.0 * swings[i].visible_swing for i in usable])  # type: ignore[union-attr]
    lost = 1.0 - len(usable) / len(plants)
    figures = {name: _spread(values, confidence, lost) for name, values in table.items()}
    return LoopFigures(stable=True, **figures)


def step_figures(
    plants: Sequence[Plant], gains: Gains, *, scan_s: float | None, band: float
) -> tuple[Array, Array] | None:
    """Return overshoot, percent, and settling time, s, after a setpoint step (P,); None where the first loop is unstable."""
    swing = swing_on(plants[0], gains, scan_s, late=False)
    if swing is None or not swing.stable:
        return None
    figures = _steps(plants, gains, swing, scan_s, late=False, band=band, load=False)
    return figures["overshoot_percent"], figures["settling_time_s"]


def _spread(values: Array, confidence: float, lost: float) -> Quantity | None:
    """Return value and interval; open upwards where more plants are unstable than the interval leaves out."""
    value = float(values[0])
    if math.isnan(value):
        return None
    there = values[~np.isnan(values)]
    tail = 0.5 * (1.0 - confidence)
    low, high = np.quantile(there, [tail, 1.0 - tail], method="inverted_cdf")
    if lost > tail:
        low, high = -math.inf, math.inf
    return Quantity.spanning(value, float(low), float(high))


def span_of(swing: Swing, plant: Plant) -> float:
    """Return how long a response of the loop is worth looking at, s."""
    seen = swing.roots[: max(1, min(len(swing.roots), 3))]
    slowest = float(np.max(1.0 / np.maximum(-seen.real, 1e-12)))
    return plant.dead_time_s + _SPANS * min(slowest, 50.0 * (lag_sum(plant) + pace_of(plant)))


def step_of(plant: Plant, span: float, scan_s: float | None) -> float:
    """Return the scan interval to simulate with, s."""
    if scan_s is not None:
        return scan_s
    return max(pace_of(plant) / _SCANS_PER_PACE, span / _SCANS_AT_MOST)


def _steps(
    plants: Sequence[Plant],
    gains: Gains,
    swing: Swing,
    scan_s: float | None,
    *,
    late: bool,
    band: float,
    load: bool = True,
) -> dict[str, Array]:
    """Return figures (P,) read off simulated steps of the setpoint and of the load."""
    span = span_of(swing, plants[0])
    for _ in range(_LONGER):
        step = step_of(plants[0], span, scan_s)
        scans = min(max(int(span / step) + 2, 50), 4 * _SCANS_AT_MOST)
        followed = simulate(plants, gains, scan_s=step, scans=scans, setpoint=1.0, late=late)
        measurement = followed.measurement.reshape(scans, -1).T
        final = np.array([final_value(plant, gains) for plant in plants])
        with np.errstate(all="ignore"):
            figures = sampled_figures(followed.time, measurement / final[:, None], band)
        if np.isfinite(figures["settling_time_s"][0]):
            break
        span *= 2.0  # several roots that meet die more slowly than each alone
    out = {name: figures[name] for name in _FROM_STEP}
    out["peak_output"] = np.abs(followed.output.reshape(scans, -1)).max(axis=0)
    out["output_noise"] = np.full(len(plants), noise_gain(gains, step if scan_s is None else scan_s))
    if gains.ki and load:
        loaded = simulate(plants, gains, scan_s=step, scans=scans, load=1.0, late=late).measurement.reshape(scans, -1).T
        out["load_integrated_error"] = np.full(len(plants), 1.0 / gains.ki)
        out["load_absolute_error"] = np.maximum(np.abs(loaded).sum(axis=1) * step, abs(1.0 / gains.ki))
    return out


def final_value(plant: Plant, gains: Gains) -> float:
    """Return where the measurement of a stable loop ends after a setpoint step of 1."""
    if gains.ki or plant.integrating:
        return 1.0 if gains.ki else gains.setpoint_weight
    through = plant.gain * gains.kp
    return through * gains.setpoint_weight / (1.0 + through)


def _margins(plants: Sequence[Plant], gains: Gains) -> dict[str, Array]:
    names = ("gain_margin", "phase_margin_deg", "delay_margin_s", "max_sensitivity")
    rows = []
    for plant in plants:
        try:
            found = margins_of(plant, gains)
        except UsageError:
            rows.append([math.nan] * len(names))
            continue
        rows.append([math.nan if (value := getattr(found, name)) is None else float(value) for name in names])
    return dict(zip(names, np.array(rows).T, strict=True))
