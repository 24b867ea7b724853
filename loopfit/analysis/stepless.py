"""Records whose step is in no column: stated by the user, or none at all."""

from __future__ import annotations

import numpy as np

from loopfit.analysis.prepared import AFTER_AT_LEAST, Prepared, StatedStep
from loopfit.analysis.result import StepUsed
from loopfit.core.errors import RecordError, UsageError
from loopfit.core.finding import Finding
from loopfit.figures.swings import find_swings
from loopfit.fit.columns import Input
from loopfit.fit.estimate import Trace
from loopfit.record.record import Record
from loopfit.step.detect import Stepped
from loopfit.step.noise import noise_rms
from loopfit.step.release import release_row

_SWINGS = 3
_AT_LEVEL = 0.02


def stated_step(record: Record, stated: StatedStep) -> Prepared:
    """Return the trace of a step that the user states."""
    if stated.from_ == stated.to:
        raise UsageError("--step-from and --step-to are the same: that is no step")
    row = int(np.searchsorted(record.time, stated.at_s - 1e-9 * max(1.0, abs(stated.at_s))))
    if record.time.size - row < AFTER_AT_LEAST:
        raise RecordError(
            record.source,
            f"fewer than {AFTER_AT_LEAST} rows follow the stated step at {stated.at_s:g} s; "
            f"the record runs from {record.time[0]:g} to {record.time[-1]:g} s",
        )
    y = record.measurement.values
    signal = _stated_signal(record, stated, row)
    step = StepUsed(signal=signal, time_s=stated.at_s, from_=stated.from_, to=stated.to)
    trace = Trace(
        time=record.time,
        values=y,
        begins=stated.at_s,
        step_row=row,
        input=Input(times=np.array([stated.at_s]), sizes=np.array([step.size])),
    )
    note = Finding(
        code="stated_step",
        severity="note",
        text=f"The step was stated by the user and is taken as one of the {signal}; columns were not used for it.",
    )
    return Prepared(trace=trace, step=step, steps=(step,), findings=(note,))


def _stated_signal(record: Record, stated: StatedStep, row: int) -> Stepped:
    """Return which signal a stated step is of: the column at that level after it, else what the measurement does."""
    size = abs(stated.to - stated.from_)
    for role in ("setpoint", "output"):
        signal = record.setpoint if role == "setpoint" else record.output
        if signal is not None and abs(float(np.median(signal.values[row:])) - stated.to) <= _AT_LEVEL * size:
            return "setpoint" if role == "setpoint" else "output"
    if record.setpoint is not None and record.output is None:
        return "setpoint"
    y = record.measurement.values
    end = float(np.mean(y[-max(3, y.size // 20) :]))
    reaches = abs(end - stated.to) <= _AT_LEVEL * size + 2.0 * noise_rms(y)
    return "setpoint" if reaches and record.output is None else "output"


def release(record: Record, *, column_stood_still: bool) -> Prepared:
    """Return the trace of a return to rest; a stepped column that stood still must have a swing beside it."""
    y = record.measurement.values
    row = release_row(y, noise_rms(y))
    if y.size - row < 2 * AFTER_AT_LEAST:
        raise RecordError(
            record.source,
            "nothing moves in this record: no step in the setpoint or the output, "
            "and the measurement stays where it is",
        )
    if column_stood_still and not _swings(record):
        raise RecordError(
            record.source,
            "no step in the "
            + (
                "setpoint or the output"
                if record.setpoint and record.output
                else "setpoint"
                if record.setpoint
                else "output"
            )
            + "; state where it began with --step-at, --step-from and --step-to",
        )
    trace = Trace(time=record.time[row:], values=y[row:], input=None, begins=float(record.time[row]), step_row=0)
    text = (
        "No step in the columns: taken as a release that returns to rest"
        if column_stood_still
        else "No setpoint or output column: taken as a release that returns to rest"
    )
    text += f" from {record.time[row]:g} s on." if row else " from the first row on."
    note = Finding(code="taken_as_release", severity="note", text=text)
    return Prepared(trace=trace, step=None, steps=(), findings=(note,), held_before=row > 0)


def _swings(record: Record) -> bool:
    """Tell whether the measurement swings about its last level, as after a disturbance."""
    y = record.measurement.values
    rest = float(np.median(y[-max(5, y.size // 5) :]))
    return find_swings(record.time, y - rest, noise_rms(y)).heights.size >= _SWINGS
