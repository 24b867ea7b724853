"""Curves of a retuning's picture: what the loop does with the present and the proposed settings, and with the record's step."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from loopfit.core.arrays import Array
from loopfit.core.errors import UsageError
from loopfit.loop.loop import Loop
from loopfit.loop.plant import Plant
from loopfit.loop.simulate import simulate
from loopfit.report.retune_recorded import RecordedStep, recorded_step
from loopfit.tuning.result import Retuning, Side

DRAWS = 40  # plants that a band is taken over
_SPANS = 12.0  # time constants of the slowest root: more than enough, and cut to what moves
_OF_OTHER = 4.0  # times the view that the proposed settings need, shown of the present ones
_SCANS, _MOST_SCANS = 1200, 6000
_AT_REST, _MORE = 0.015, 1.25  # of the change; and of the time until then that is shown
_FAR = 1e12  # what runs away; the picture clips it
_BEFORE = 0.06  # of the view, before the step


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Band:
    """A curve (n,) on the fitted plant, and the bounds (n,) over the plants that the record allows as well."""

    value: Array
    low: Array
    high: Array


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class SideCurves:
    """Departures from rest after a step of the setpoint and after one of the load: measurement and output."""

    setpoint_measurement: Band
    setpoint_output: Band
    load_measurement: Band
    load_output: Band


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Curves:
    """Curves of both sides at `time` (n,), s, the steps at 0."""

    time: Array
    setpoint_step: float  # measurement units
    limits: tuple[float, float] | None  # of the output, from its rest; None where it is not known where it rests
    present: SideCurves | None
    proposed: SideCurves | None


def curves_of(retuning: Retuning) -> Curves:
    """Return the curves of the present and the proposed settings over a common time."""
    plant = retuning.identified.plant
    found, confidence = recorded_step(retuning), confidence_of(retuning)
    step = 1.0 if found is None else found.to - found.from_
    sides = (retuning.current, retuning.proposed)
    spans = [None if side is None else _span(plant, side) for side in sides]
    known = [span for span in spans if span is not None]
    end = max(known, default=_SPANS * (plant.dead_time_s + sum(plant.time_constants_s or (1.0,))))
    if spans[0] is not None and spans[1] is not None:
        end = min(end, _OF_OTHER * spans[1])
    plants = [plant, *retuning.identified.draws[:DRAWS]]
    limits = _limits(retuning, found)
    drawn = [None if side is None else _side_curves(plants, side, step, end, confidence, limits) for side in sides]
    shown = [_until(time, curves) for item in drawn if item is not None for time, curves in (item,)]
    end = min(end, max(shown, default=end))
    if drawn[1] is not None and retuning.proposed is not None and retuning.proposed.figures.stable:
        end = min(end, _OF_OTHER * _until(*drawn[1]))
    time = np.concatenate([[-_BEFORE * end, -1e-9 * end], np.linspace(0.0, end, _SCANS)])
    present, proposed = (None if item is None else _at(time, *item) for item in drawn)
    return Curves(time=time, setpoint_step=step, limits=limits, present=present, proposed=proposed)


def _limits(retuning: Retuning, found: RecordedStep | None) -> tuple[float, float] | None:
    """Return how far the output can go either way from where it rested before the recorded step."""
    current = retuning.current
    if found is None or found.record.output is None or current is None or current.settings.output_limits is None:
        return None
    before = found.record.time < found.time_s
    if not before.any():
        return None
    rest = float(np.mean(found.record.output.values[before]))
    low, high = (limit - rest for limit in current.settings.output_limits)
    return (low, high) if low < 0.0 < high else None


def confidence_of(retuning: Retuning) -> float:
    """Return the confidence of the bands, a fraction."""
    analysis = retuning.identified.analysis
    return 0.95 if analysis is None else analysis.confidence_percent / 100.0


def _span(plant: Plant, side: Side) -> float | None:
    """Return how long it may take until a loop rests, s; None where it does not."""
    try:
        swing = Loop(plant, side.settings).swing
    except UsageError:
        return None
    if not swing.stable or not len(swing.roots):
        return None
    slowest = 1.0 / max(float(-swing.roots[0].real), 1e-12)
    return plant.dead_time_s + _SPANS * slowest


def scanning_of(plant: Plant, side: Side, span: float) -> tuple[float, int]:
    """Return scan interval and count: the controller's own, or so fine that it is nearly continuous."""
    scan = side.settings.scan_s
    interval = span / _SCANS if scan is None else scan
    if scan is None and side.gains.kd != 0.0:
        interval = min(interval, 0.5 * side.gains.filter_s)
    if plant.dead_time_s > 0.0 and scan is None:
        interval = min(interval, 0.05 * plant.dead_time_s)
    interval = max(interval, span / _MOST_SCANS)
    return interval, max(math.ceil(span / interval), 2) + 1


def _side_curves(
    plants: Sequence[Plant],
    side: Side,
    step: float,
    end: float,
    confidence: float,
    limits: tuple[float, float] | None,
) -> tuple[Array, SideCurves]:
    count = len(plants)
    interval, scans = scanning_of(plants[0], side, end)
    setpoint = np.zeros((scans, 2 * count))
    load = np.zeros((scans, 2 * count))
    setpoint[:, :count], load[:, count:] = step, 1.0
    ran = simulate(
        [*plants, *plants], side.gains, scan_s=interval, scans=scans, setpoint=setpoint, load=load,
        initial_setpoint=0.0,
        output_limits=limits,
    )  # fmt: skip
    halves = [(values[:, :count], values[:, count:]) for values in (ran.controlled, ran.output)]
    if not side.figures.stable:  # the band of a loop that runs away says nothing
        halves = [(a[:, :1], b[:, :1]) for a, b in halves]
    (stepped, loaded), (stepped_output, loaded_output) = halves
    return ran.time, SideCurves(
        setpoint_measurement=band_of(stepped, confidence),
        setpoint_output=band_of(stepped_output, confidence),
        load_measurement=band_of(loaded, confidence),
        load_output=band_of(loaded_output, confidence),
    )


def band_of(values: Array, confidence: float) -> Band:
    """Return the first column of (n, P) with the bounds over all; what runs away ends far outside the picture."""
    safe = np.clip(np.nan_to_num(values, nan=_FAR, posinf=_FAR, neginf=-_FAR), -_FAR, _FAR)
    tail = 0.5 * (1.0 - confidence)
    low, high = np.quantile(safe, [tail, 1.0 - tail], axis=1)
    value = safe[:, 0]
    return Band(value=value, low=np.minimum(low, value), high=np.maximum(high, value))


def in_view(band: Band, low: float, high: float) -> Band:
    """Return the curve and its bounds no further than one height outside a view; a curve that runs away ends where it leaves."""
    room = high - low
    least, most = low - room, high + room
    outside = (band.value <= least) | (band.value >= most)
    gone = band.value.size
    if outside[-(band.value.size // 10 + 1) :].any():
        gone = int(np.flatnonzero(outside)[0]) + 1
    kept = np.arange(band.value.size) < gone

    def cut(values: Array) -> Array:
        return np.where(kept, np.clip(values, least, most), np.nan)

    return Band(value=cut(band.value), low=cut(band.low), high=cut(band.high))


def _until(time: Array, curves: SideCurves) -> float:
    """Return until when there is something to see, s."""
    ends = []
    for band in (curves.setpoint_measurement, curves.load_measurement):
        away = np.abs(band.value - band.value[-1])
        moving = np.flatnonzero(away > _AT_REST * max(float(np.ptp(band.value)), 1e-300))
        ends.append(_MORE * float(time[moving[-1]]) if moving.size else 0.0)
    return min(max(ends), float(time[-1])) or float(time[-1])


def _at(time: Array, own_time: Array, curves: SideCurves) -> SideCurves:
    def moved(band: Band, *, held: bool) -> Band:
        return Band(**{name: _sampled(time, own_time, getattr(band, name), held) for name in ("value", "low", "high")})

    return SideCurves(
        setpoint_measurement=moved(curves.setpoint_measurement, held=False),
        setpoint_output=moved(curves.setpoint_output, held=True),
        load_measurement=moved(curves.load_measurement, held=False),
        load_output=moved(curves.load_output, held=True),
    )


def _sampled(time: Array, own_time: Array, values: Array, held: bool) -> Array:
    """Return values at other times: 0 before the step; an output holds between the scans."""
    if held:
        rows = np.searchsorted(own_time, time * (1.0 + 1e-12), side="right") - 1
        found = values[np.clip(rows, 0, values.size - 1)]
    else:
        found = np.interp(time, own_time, values)
    return np.where(time < 0.0, 0.0, found)
