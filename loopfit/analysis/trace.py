"""From a record to the part that is fitted: which step, which rows, which input."""

from __future__ import annotations

import numpy as np

from loopfit.analysis.prepared import AFTER_AT_LEAST, Prepared, StatedStep
from loopfit.analysis.result import StepUsed
from loopfit.analysis.stepless import release, stated_step
from loopfit.core.arrays import Array
from loopfit.core.errors import RecordError
from loopfit.core.finding import Finding
from loopfit.fit.columns import Input
from loopfit.fit.estimate import Trace
from loopfit.record.record import Record
from loopfit.step.detect import Step, Stepped, StepsFound, find_steps

_CHANGES_AT_MOST = 200
_SPAN_S = (1e-9, 1e12)
_LARGEST = 1e30
_BEFORE_AT_LEAST = 10
_BEFORE_SHARE = 0.15
_STEPS_AT_MOST = 12  # more steps tell little more, and take long


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
        return stated_step(record, stated)
    found, other = _stepped(record)
    if found is None or not found.steps:
        if number is not None:
            raise RecordError(record.source, "no step was found, so there is no step to choose; drop --step")
        if found is not None and found.always_moving:
            raise RecordError(
                record.source,
                "the output moves all the time and "
                + ("the setpoint does not step here" if record.setpoint is not None else "no setpoint was recorded")
                + ", so no step can be told; choose another part with --from and --to, name the setpoint column with "
                "--setpoint, or state the step with --step-at, --step-from and --step-to",
            )
        return release(record, column_stood_still=other)
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
    if end - step.row < AFTER_AT_LEAST:
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
    usable: list[tuple[Step, Trace]] = []
    for number, step in enumerate(found.steps, start=1):
        if len(usable) == _STEPS_AT_MOST:
            break
        begin, end = _rows_of(record, found, number)
        if end - step.row >= AFTER_AT_LEAST:
            usable.append((step, _between(record, found, step, begin, end)))
    if len(usable) < 2:
        number = found.steps.index(usable[0][0]) + 1 if usable else 1
        return _one_of(record, found, number)
    first = usable[0][0]
    used = [step for step, _ in usable]
    last = found.steps.index(used[-1]) + 1
    findings = _about_steps(record, found, None)
    if last < len(found.steps) and len(used) == _STEPS_AT_MOST:
        text = f"The record holds {len(found.steps)} steps; the first {_STEPS_AT_MOST} are used."
        findings = (*findings, Finding(code="first_steps_used", severity="note", text=text))
    return Prepared(
        trace=_between(record, found, first, 0, _rows_of(record, found, last)[1]),
        step=_used(first, used=True),
        steps=tuple(_used(step, used=step in used) for step in found.steps),
        findings=findings,
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


def _blip(record: Record, found: StepsFound, row: int) -> Finding:
    name = found.steps[0].signal
    signal = record.setpoint if name == "setpoint" else record.output
    assert signal is not None
    at = float(record.time[row])
    return Finding(
        code="one_row_change",
        severity="warning",
        at_s=(at, at),
        text=f"The {name} reads {signal.values[row]:g} in one row only, at {at:.6g} s, between rows at {signal.values[row - 1]:g}: "
        "taken for a false reading, not for a pulse.",
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
    findings = [_blip(record, found, row) for row in found.blips]
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
    if count > 1 and record.time.size - last.row < AFTER_AT_LEAST:
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
