"""The recorded setpoint step and what the fitted plant makes of it with the present settings: whether to believe the plant."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from loopfit.core.arrays import Array
from loopfit.core.errors import UsageError
from loopfit.loop.simulate import simulate
from loopfit.report.retune_lines import DRAWS, Band, band_of, confidence_of, scanning_of
from loopfit.report.retune_recorded import recorded_step
from loopfit.tuning.result import Retuning


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Overlay:
    """The recorded step and what the fitted plant does with the present settings, on the record's clock, s."""

    recorded_time: Array
    recorded: Array
    time: Array
    setpoint: Array
    predicted: Band
    view_s: tuple[float, float]


def overlay_of(retuning: Retuning) -> Overlay | None:
    """Return the record over its prediction; None unless it is one of a setpoint step with known settings.

    The loop is simulated from rest before the step, with the recorded setpoint and the output's limits.
    """
    found, current, step = retuning.identified, retuning.current, recorded_step(retuning)
    if current is None or step is None:
        return None
    record = step.record
    seen = (record.time >= step.window_s[0]) & (record.time <= step.window_s[1])
    time, measured = record.time[seen], record.measurement.values[seen]
    before = time < step.time_s
    if not before.any():
        return None
    span = float(time[-1] - time[0])
    interval, scans = scanning_of(found.plant, current, span)
    at = time[0] + interval * np.arange(scans)
    if record.setpoint is None:
        setpoint = np.where(at < step.time_s, step.from_, step.to)
    else:
        rows = np.searchsorted(time, at + 1e-9 * span, side="right") - 1
        setpoint = record.setpoint.values[seen][np.maximum(rows, 0)]
    output = None if record.output is None else float(np.mean(record.output.values[seen][before]))
    limits = current.settings.output_limits if output is not None else None
    try:
        ran = simulate(
            [found.plant, *found.draws[:DRAWS]],
            current.gains,
            scan_s=interval,
            scans=scans,
            setpoint=setpoint,
            initial_measurement=float(np.mean(measured[before])),
            initial_setpoint=float(setpoint[0]),
            initial_output=output or 0.0,
            output_limits=limits,
        )
    except UsageError:
        return None
    inside = at <= time[-1]
    return Overlay(
        recorded_time=time,
        recorded=measured,
        time=at[inside],
        setpoint=setpoint[inside],
        view_s=step.view_s,
        predicted=band_of(ran.controlled[inside], confidence_of(retuning)),
    )
