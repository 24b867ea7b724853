"""From a record to the part that is fitted: which step, which rows, which input."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from loopfit.analysis.result import StepUsed
from loopfit.core.arrays import Array
from loopfit.core.errors import RecordError, UsageError
from loopfit.core.finding import Finding
from loopfit.figures.swings import find_swings
from loopfit.fit.columns import Input
from loopfit.fit.estimate import Trace
from loopfit.record.record import Record
from loopfit.step.detect import Step, Stepped, StepsFound, find_steps
from loopfit.step.noise import noise_rms
from loopfit.step.release import release_row

_CHANGES_AT_MOST = 200
_AFTER_AT_LEAST = 5
_SWINGS = 3
_SPAN_S = (1e-9, 1e12)
_LARGEST = 1e30
_BEFORE_AT_LEAST = 10
_BEFORE_SHARE = 0.15


@dataclass(frozen=True, slots=True, kw_only=True)
class StatedStep:
    """A step that the user states: instant, s on the file's clock, and levels."""

    at_s: float
    from_: float
    to: float


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Prepared:
    """What the estimator gets, and what is known about the step.

    `held_before`: a record without a step begins with the measurement at rest. `separate`: where several steps
    are taken together, each one with the trace of its own.
    """

    trace: Trace
    step: StepUsed | None
    steps: tuple[StepUsed, ...]
    findings: tuple[Finding, ...]
    held_before: bool = False
    separate: tuple[tuple[StepUsed, Trace], ...] = ()


def prepare(record: Record, *, number: int | None, stated: StatedStep | None) -> Prepared:
    """Return the trace of one step of a record.

    Parameters
    ----------
    record : Record
        As read.
    number : int, optional
        Which step, counted from 1; all together by default.
    stated : StatedStep, optional
        Overrides the column.

    Raises
    ------
    RecordError
        If there is no such step, or too little of the record after it.
    """
    _check_scale(record)
    if np.ptp(record.measurement.values) == 0:
        raise RecordError(
            record.source,
            "the measurement is the same in every row: nothing moved, or the wrong column was taken "
            "(choose with --measurement)",
            column=record.measurement.name,
        )
    if stated is not None:
        return _stated(record, stated)
    found, other = _stepped(record)
    if found is None or not found.steps:
        if number is not None:
            raise RecordError(record.source, "no step was found, so there is no step to choose; drop --step")
        if found is not None and found.always_moving:
            raise RecordError(
                record.source,
                "the output moves all the time and no setpoint was recorded, so no step can be told; "
                "name the setpoint column with --setpoint, or state the step with --step-at, --step-from and --step-to",
            )
        return _release(record, other)
    if number is None and len(found.steps) > 1:
        return _all_of(record, found)
    return _one_of(record, found, number or 1)


def _check_scale(record: Record) -> None:
    """Refuse numbers so large, small or fast that floating point would spoil the answer."""
    if not _SPAN_S[0] <= record.duration_s <= _SPAN_S[1]:
        raise RecordError(
            record.source,
            f"the record spans {record.duration_s:.3g} s, which no loop does; state the unit of time in the header, or --interval",
        )
    for role in ("measurement", "setpoint", "output"):
        signal = getattr(record, role)
        if signal is None:
            continue
        largest, travel = float(np.max(np.abs(signal.values))), float(np.ptp(signal.values))
        if largest > _LARGEST or 0 < travel < 1.0 / _LARGEST:
            raise RecordError(
                record.source,
                f"the {role} reaches {largest:.3g} over a range of {travel:.3g}: rescale it",
                column=signal.name,
            )


def _stepped(record: Record) -> tuple[StepsFound | None, bool]:
    """Return the steps of the setpoint, else of the output; and whether such a column stood still."""
    still = False
    moving: StepsFound | None = None
    roles: tuple[Stepped, ...] = ("setpoint", "output")
    for role in roles:
        signal = record.setpoint if role == "setpoint" else record.output
        if signal is None:
            continue
        found = find_steps(record.time, signal.values, role)
        if found.steps:
            return found, False
        if found.always_moving:
            moving = found
        still = still or not found.always_moving
    return moving, still


def _one_of(record: Record, found: StepsFound, number: int) -> Prepared:
    """Return the trace of one step, the others left out."""
    count = len(found.steps)
    if not 1 <= number <= count:
        raise RecordError(
            record.source,
            f"there is no step {number}: the record holds {count}; "
            f"choose with --step 1{'' if count == 1 else f' to {count}'}",
        )
    step = found.steps[number - 1]
    begin, end = _rows_of(record, found, number)
    if end - step.row < _AFTER_AT_LEAST:
        raise RecordError(
            record.source,
            f"only {end - step.row} rows follow the step at {step.time_s:g} s; "
            "record longer after the step" + (", or choose another with --step" if count > 1 else ""),
        )
    return Prepared(
        trace=_between(record, found, step, begin, end),
        step=_used(step, used=True),
        steps=tuple(_used(s, used=s is step) for s in found.steps),
        findings=_about_steps(record, found, number),
    )


def _all_of(record: Record, found: StepsFound) -> Prepared:
    """Return the trace of all steps together, and that of each one alone."""
    usable = []
    for number, step in enumerate(found.steps, start=1):
        begin, end = _rows_of(record, found, number)
        if end - step.row >= _AFTER_AT_LEAST:
            usable.append((step, _between(record, found, step, begin, end)))
    if len(usable) < 2:
        number = found.steps.index(usable[0][0]) + 1 if usable else 1
        return _one_of(record, found, number)
    first = usable[0][0]
    used = [step for step, _ in usable]
    return Prepared(
        trace=_between(record, found, first, 0, record.time.size),
        step=_used(first, used=True),
        steps=tuple(_used(step, used=step in used) for step in found.steps),
        findings=_about_steps(record, found, None),
        separate=tuple((_used(step, used=True), trace) for step, trace in usable),
    )


def _rows_of(record: Record, found: StepsFound, number: int) -> tuple[int, int]:
    """Return the first row and the row beyond the last of what belongs to a step.

    After an earlier step only so many rows before this one are taken as show where it starts: the earlier
    response is still in the rows before them.
    """
    step = found.steps[number - 1]
    end = found.steps[number].row if number < len(found.steps) else record.time.size
    if number == 1:
        return 0, end
    before = max(_BEFORE_AT_LEAST, int(_BEFORE_SHARE * (end - step.row)))
    return max(found.steps[number - 2].last_row, step.row - before), end


def _between(record: Record, found: StepsFound, step: Step, begin: int, end: int) -> Trace:
    inside = found.rows < end  # earlier steps too: their tails run on
    rows, sizes = found.rows[inside], found.sizes[inside]
    if rows.size > _CHANGES_AT_MOST:
        rows, sizes = _thinned(rows, sizes)
    return Trace(
        time=record.time[begin:end],
        values=record.measurement.values[begin:end],
        input=Input(times=record.time[rows], sizes=sizes),
        begins=step.time_s,
        step_row=step.row - begin,
    )


def _used(step: Step, *, used: bool) -> StepUsed:
    return StepUsed(signal=step.signal, time_s=step.time_s, from_=step.from_, to=step.to, used=used)


def _thinned(rows: np.ndarray, sizes: Array) -> tuple[np.ndarray, Array]:
    """Join the changes of a long ramp, so that no more are kept than the answer needs."""
    starts = np.linspace(0, rows.size, _CHANGES_AT_MOST, endpoint=False).astype(np.intp)
    ends = np.append(starts[1:], rows.size)
    middles = rows[(starts + ends - 1) // 2]
    return middles, np.add.reduceat(sizes, starts)


def _about_steps(record: Record, found: StepsFound, number: int | None) -> tuple[Finding, ...]:
    findings = []
    count = len(found.steps)
    if number is not None and count > 1:
        one = found.steps[number - 1]
        findings.append(
            Finding(
                code="one_of_several_steps",
                severity="note",
                text=f"The record holds {count} steps; the figures are of step {number} alone, at {one.time_s:g} s.",
            )
        )
    last = found.steps[-1]
    if count > 1 and record.time.size - last.row < _AFTER_AT_LEAST:
        findings.append(
            Finding(
                code="step_at_end",
                severity="note",
                at_s=(last.time_s, last.time_s),
                text=f"A second step at the end, at {last.time_s:g} s, comes too late to tell anything."
                if count == 2
                else f"The step at the end, at {last.time_s:g} s, comes too late to tell anything.",
            )
        )
    wanted = found.steps if number is None else found.steps[number - 1 : number]
    findings += [
        Finding(
            code="gradual_change",
            severity="note",
            at_s=(step.time_s, float(record.time[step.last_row])),
            text=f"The {step.signal} changes over {step.last_row - step.row + 1} rows at {step.time_s:g} s; it is used "
            "as the input it is, and the figures are those of an ideal step.",
        )
        for step in wanted
        if step.last_row > step.row
    ]
    return tuple(findings)


def _stated(record: Record, stated: StatedStep) -> Prepared:
    if stated.from_ == stated.to:
        raise UsageError("--step-from and --step-to are the same: that is no step")
    row = int(np.searchsorted(record.time, stated.at_s - 1e-9 * max(1.0, abs(stated.at_s))))
    if record.time.size - row < _AFTER_AT_LEAST:
        raise RecordError(
            record.source,
            f"fewer than {_AFTER_AT_LEAST} rows follow the stated step at {stated.at_s:g} s; "
            f"the record runs from {record.time[0]:g} to {record.time[-1]:g} s",
        )
    y = record.measurement.values
    tail = max(3, y.size // 20)
    noise = noise_rms(y)
    reaches = abs(float(np.mean(y[-tail:])) - stated.to) <= 0.02 * abs(stated.to - stated.from_) + 2.0 * noise
    signal: Stepped = "setpoint" if reaches and record.output is None else "output"
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


def _release(record: Record, column_stood_still: bool) -> Prepared:
    y = record.measurement.values
    row = release_row(y, noise_rms(y))
    if y.size - row < 2 * _AFTER_AT_LEAST:
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
