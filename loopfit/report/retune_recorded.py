"""The record behind a retuning: its units, and the setpoint step on it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from loopfit.record.record import Record
from loopfit.report.plot_lines import view_of
from loopfit.tuning.result import Retuning

_STEPPED = 0.1  # of the rows: a setpoint that changes at more of them is led, not stepped
_LARGE = 0.5  # of the largest change: from which one counts as a step
_BEFORE = 0.2  # of the time after the step, shown before it


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class RecordedStep:
    """A setpoint step on a record: its instant, s, its size; the rows used and those in view, s on the record's clock."""

    record: Record
    time_s: float
    from_: float
    to: float
    window_s: tuple[float, float]
    view_s: tuple[float, float]


def record_of(retuning: Retuning) -> Record | None:
    """Return the record; None for a plant that was given or told by several records."""
    found = retuning.identified
    return found.record if found.analysis is None else found.analysis.record


def record_units(retuning: Retuning) -> tuple[str | None, str | None]:
    """Return the units of measurement and output, where the record names them."""
    record = record_of(retuning)
    if record is None:
        return None, None
    return record.measurement.unit, None if record.output is None else record.output.unit


def recorded_step(retuning: Retuning) -> RecordedStep | None:
    """Return the setpoint step on the record, the first of several; None where there is none."""
    analysis, record = retuning.identified.analysis, record_of(retuning)
    if record is None:
        return None
    if analysis is not None:
        step = analysis.step
        if step is None or step.signal != "setpoint":
            return None
        return RecordedStep(
            record=record, time_s=step.time_s, from_=step.from_, to=step.to, window_s=analysis.window_s,
            view_s=view_of(analysis),
        )  # fmt: skip
    if record.setpoint is None:
        return None
    changes = np.abs(np.diff(record.setpoint.values))
    moved = np.flatnonzero(changes > 0.0)
    if not moved.size or moved.size > max(_STEPPED * changes.size, 1.0):
        return None
    at = int(np.flatnonzero(changes >= _LARGE * changes.max())[0])
    time, end = float(record.time[at + 1]), float(record.time[-1])
    return RecordedStep(
        record=record,
        time_s=time,
        from_=float(record.setpoint.values[at]),
        to=float(record.setpoint.values[at + 1]),
        window_s=(float(record.time[0]), end),
        view_s=(max(float(record.time[0]), time - _BEFORE * (end - time)), end),
    )
