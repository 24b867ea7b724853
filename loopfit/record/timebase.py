"""Which column is the time."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from loopfit.core.arrays import Array
from loopfit.core.errors import RecordError
from loopfit.core.finding import Finding
from loopfit.record.clock import Clock, UndecidedStampsError, stamp_clock
from loopfit.record.content import known_of
from loopfit.record.epoch import numeric_clock
from loopfit.record.layout import STAMP
from loopfit.record.stated import intervals_in
from loopfit.record.table import Column, Table
from loopfit.record.units import seconds_per
from loopfit.record.wording import names_text
from loopfit.record.words import is_counter_name, weight


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class TimeBase:
    """The clock of a table, the columns it was made of, and other columns that only tell time or count rows."""

    clock: Clock
    name: str | None
    used: frozenset[int]
    set_aside: frozenset[int]
    findings: tuple[Finding, ...]


def time_base(table: Table, wanted: Column | None, interval_s: float | None, taken: frozenset[int]) -> TimeBase:
    """Return the clock from the wanted column, the interval, or the best candidate.

    Raises
    ------
    RecordError
        If no column can be the time and no interval is given, or stamps can be read in two ways.
    """
    source = table.source
    free = [column for column in table.columns if column.number not in taken]
    if interval_s is not None:
        return _even(table, wanted, interval_s, free)
    if wanted is not None:
        clock = clock_of(source, wanted)
        if clock is None:
            raise RecordError(source, "this column holds no times", column=wanted.name)
        return TimeBase(
            clock=clock, name=wanted.name, used=frozenset({wanted.number}), set_aside=_other_times(free), findings=()
        )
    stamped = [column for column in free if is_stamped(column)]
    numeric = [column for column in free if column.values is not None and _is_rising(column.values)]
    named = [column for column in numeric if _says_time(column)]
    joined = _date_and_time(source, stamped)
    if joined is not None:
        clock, pair = joined
        names = f"{pair[0].name} {pair[1].name}"
        used = frozenset(column.number for column in pair)
        return TimeBase(clock=clock, name=names, used=used, set_aside=_other_times(free), findings=clock.findings)
    if stamped:
        chosen = max(stamped, key=lambda column: (weight(column.name, "time"), -column.number))
        clock = clock_of(source, chosen)
        device = next((column for column in named if not is_counter_name(column.name)), None)
        if clock is not None and (device is None or not _is_coarse(clock)):
            return TimeBase(
                clock=clock,
                name=chosen.name,
                used=frozenset({chosen.number}),
                set_aside=_other_times(free),
                findings=clock.findings,
            )
        if device is not None:
            text = f"time is taken from {device.name!r}; the stamps of {chosen.name!r} are coarser"
            return _numeric(device, free, (Finding(code="time_column", severity="note", text=text),))
    # a column that is named for the time but does not rise is reported where it runs back, not passed over
    claimed = [
        c
        for c in free
        if c.values is not None and weight(c.name, "time") == 2 and c not in named and _claims_time(c, c.values)
    ]
    if named or claimed:
        return _numeric((named or claimed)[0], free, ())
    if numeric:
        counters = [column for column in numeric if _counts(column.values)]
        better = [column for column in numeric if column not in counters and _is_even(column.values)]
        if better:
            text = f"time is taken from {better[0].name!r} because it rises evenly; its name does not say so"
            return _numeric(better[0], free, (Finding(code="time_by_content", severity="note", text=text),))
        if counters and (stated := intervals_in(table.preamble)):
            return _stated(table, counters[0], stated, free)
        if counters:
            reason = (
                f"{names_text([counters[0].name])} only counts the rows; give --interval SECONDS (or --time "
                f"{counters[0].number} if it is in seconds)"
            )
            raise RecordError(source, reason)
    if stated := intervals_in(table.preamble):
        return _stated(table, None, stated, free)
    reason = (
        f"no column of times among {names_text([column.name for column in table.columns])}; give --interval "
        f"SECONDS, or --time COL"
    )
    raise RecordError(source, reason)


def _stated(
    table: Table, counter: Column | None, stated: Sequence[tuple[float, str]], free: Sequence[Column]
) -> TimeBase:
    """Return the clock of the interval that the lines above the data state."""
    interval, line = stated[0]
    if len(stated) > 1:
        both = " and ".join(f"{value:g}" for value, _ in stated[:3])
        raise RecordError(
            table.source, f"the lines above the data state {both} s between rows; give --interval SECONDS"
        )
    base = _even(table, counter, interval, free)
    shown = " ".join(line.split())[:60]
    what = "the count of rows" if counter is None else f"the count in {counter.name!r}"
    text = f"there is no column of times; the file states {shown!r}, so time is {what} times {interval:g} s"
    return replace(base, findings=(Finding(code="interval_stated", severity="note", text=text),))


def _even(table: Table, wanted: Column | None, interval_s: float, free: Sequence[Column]) -> TimeBase:
    count = len(table.lines)
    if wanted is not None:
        if wanted.values is None or not _is_whole(wanted.values):
            raise RecordError(
                table.source, "with --interval the time column must count samples, in whole numbers", column=wanted.name
            )
        seconds = (wanted.values - wanted.values[np.isfinite(wanted.values)][0]) * interval_s
        text = f"time is the count in {wanted.name!r} times the interval given, {interval_s:g} s"
        used = frozenset({wanted.number})
    else:
        seconds = np.arange(count, dtype=np.float64) * interval_s
        text = f"time is the count of rows times the interval given, {interval_s:g} s, from 0 at the first row"
        used = frozenset()
    clock = Clock(seconds=seconds, kind="seconds", of_day_s=None, weekday=None, findings=())
    name = None if wanted is None else wanted.name
    aside = _other_times(free)
    if all(column.number in aside or column.number in used or column.values is None for column in free):
        aside = frozenset()  # a single column that happens to count is still the measurement
    finding = Finding(code="interval_given", severity="note", text=text)
    return TimeBase(clock=clock, name=name, used=used, set_aside=aside, findings=(finding,))


def _numeric(column: Column, free: Sequence[Column], findings: tuple[Finding, ...]) -> TimeBase:
    assert column.values is not None
    clock = numeric_clock(column.values, column.name, column.unit, column.cells)
    used = frozenset({column.number})
    aside = _other_times([other for other in free if other is not column])
    return TimeBase(clock=clock, name=column.name, used=used, set_aside=aside, findings=(*findings, *clock.findings))


def clock_of(source: str, column: Column) -> Clock | None:
    """Return the clock of one column, None when it holds no times."""
    if column.values is not None:
        return numeric_clock(column.values, column.name, column.unit, column.cells)
    if column.cells is None:
        return None
    try:
        return stamp_clock(column.cells, f"{column.name} {column.unit or ''}".strip())
    except UndecidedStampsError as problem:
        raise RecordError(source, str(problem), column=column.name) from None


def _date_and_time(source: str, stamped: Sequence[Column]) -> tuple[Clock, tuple[Column, Column]] | None:
    """Return the clock of a column of dates beside one of times of day."""
    dates = [column for column in stamped if column.cells is not None and ":" not in _example(column)]
    times = [
        column
        for column in stamped
        if column.cells is not None and STAMP.fullmatch(_example(column)) and _example(column).find(":") in (1, 2)
    ]
    if not dates or not times:
        return None
    day, hour = dates[0], times[0]
    assert day.cells is not None
    assert hour.cells is not None
    cells = [f"{a} {b}".strip() for a, b in zip(day.cells, hour.cells, strict=True)]
    try:
        clock = stamp_clock(cells, day.name)
    except UndecidedStampsError as problem:
        raise RecordError(source, str(problem), column=day.name) from None
    return None if clock is None else (clock, (day, hour))


def _example(column: Column) -> str:
    return next((cell for cell in column.cells or () if cell), "")


def is_stamped(column: Column) -> bool:
    """Return whether a column holds dates or times written out."""
    if column.values is not None or column.cells is None:
        return False
    full = [cell for cell in column.cells if cell]
    sample = full[:20] + full[-20:]
    return bool(sample) and sum(STAMP.fullmatch(cell) is not None for cell in sample) >= 0.9 * len(sample)


def _is_coarse(clock: Clock) -> bool:
    known = clock.seconds[np.isfinite(clock.seconds)]
    return len(known) > 2 and float(np.mean(np.diff(known) == 0)) > 0.2


def _says_time(column: Column) -> bool:
    return weight(column.name, "time") == 2 or seconds_per(column.unit) is not None


def _unnamed(column: Column) -> bool:
    return column.name == f"column {column.number}"


def _is_rising(values: Array) -> bool:
    """Return whether the numbers never fall and rise in most rows or in bursts, NaN passed over."""
    if len(values) > 1 and values[-1] < values[0]:
        return False
    known = known_of(values)
    if len(known) < 2 or not known[-1] > known[0] or bool(np.any(known[:-1:97] > known[-1])):
        return False
    step = np.diff(known)
    return bool(np.all(step >= 0)) and float(np.mean(step > 0)) > 0.05


def _claims_time(column: Column, values: Array) -> bool:
    """Return whether a column named for the time rises in half of its rows, or falls throughout (but for "T")."""
    step = np.diff(known_of(values))
    falls = len(column.name) > 1 and bool(np.all(step < 0))
    return len(step) > 0 and (falls or float(np.mean(step > 0)) >= 0.5)


def _is_even(values: Array | None) -> bool:
    """Return whether the steps are alike: nine in ten within half of the median."""
    if values is None:
        return False
    step = np.diff(known_of(values))
    usual = float(np.median(step))
    return usual > 0 and float(np.mean(np.abs(step - usual) <= 0.5 * usual)) >= 0.9


def _is_whole(values: Array) -> bool:
    known = known_of(values)
    return len(known) > 0 and bool(np.all(known == np.round(known)))


def _counts(values: Array | None) -> bool:
    """Return whether the numbers count rows: whole, mostly one more each."""
    if values is None or not _is_whole(values):
        return False
    step = np.diff(known_of(values))
    return len(step) > 0 and bool(np.all(step >= 0)) and float(np.mean(step == 1)) >= 0.9


def _counts_rows(column: Column) -> bool:
    return _counts(column.values) and (is_counter_name(column.name) or _unnamed(column))


def _other_times(free: Sequence[Column]) -> frozenset[int]:
    """Return the columns that tell time or count rows: no signals, whoever is chosen."""
    return frozenset(
        column.number
        for column in free
        if is_stamped(column)
        or (
            column.values is not None
            and (_says_time(column) or is_counter_name(column.name) or _unnamed(column))
            and _is_rising(column.values)
            and (_says_time(column) or _counts_rows(column))
        )
    )
