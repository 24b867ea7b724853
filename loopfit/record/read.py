"""From a file, a stream or arrays to a record."""

from __future__ import annotations

import os
from collections.abc import Iterator, Mapping, Sequence

import numpy as np
from numpy.typing import ArrayLike, NDArray

from loopfit.core.arrays import Array, read_only
from loopfit.core.errors import RecordError
from loopfit.core.finding import Finding
from loopfit.record.checks import check_count, check_interval, check_roles, check_window, usable_rows
from loopfit.record.longform import wide_from_long, without_flagged
from loopfit.record.record import Record, Signal
from loopfit.record.rising import rising, spacing
from loopfit.record.roles import assign_roles
from loopfit.record.source import read_table
from loopfit.record.table import Column, Table
from loopfit.record.timebase import TimeBase, clock_of, is_stamped, time_base
from loopfit.record.units import split_unit
from loopfit.record.wording import names_text

Window = tuple[float | None, float | None]


def read_record(
    source: str | os.PathLike[str],
    *,
    columns: Mapping[str, str | int] | None = None,
    interval_s: float | None = None,
    window_s: Window | None = None,
) -> Record:
    """Return the record in a file.

    Parameters
    ----------
    source : str or path
        File to read; "-" reads the standard input. Delimited text, spreadsheet, Parquet, each also
        packed by gzip or zip: the contents decide, not the name.
    columns : mapping, optional
        Column by role ("time", "measurement", "setpoint", "output"): a name of the header, or a number from 1.
    interval_s : float, optional
        Time between rows, s, for files without a usable time column. With a time column named in `columns`
        that column counts samples.
    window_s : (float or None, float or None), optional
        Part of the record to keep, s on the file's own clock.

    Returns
    -------
    Record
        Times in seconds: on the file's own clock, or from the first row for dates and times of day.
        `findings` tell every choice made and every row left out. Values of `others` may be NaN.

    Raises
    ------
    RecordError
        If the file cannot be used: one line that tells what, where and what to do.
    UsageError
        If an argument does not make sense.
    """
    check_roles(columns)
    check_interval(interval_s)
    check_window(window_s)
    table = read_table(os.fspath(source))
    with np.errstate(over="ignore", invalid="ignore"):  # a value of 1e308 is refused where it stands, not warned of
        return record_from_table(table, columns=columns, interval_s=interval_s, window_s=window_s)


def record_from_arrays(
    *,
    time: ArrayLike | None,
    measurement: ArrayLike,
    setpoint: ArrayLike | None = None,
    output: ArrayLike | None = None,
    interval_s: float | None = None,
    window_s: Window | None = None,
) -> Record:
    """Return the record in arrays of one length (n,), under the same checks as a file.

    Parameters
    ----------
    time : (n,) array_like or None
        Rising times, s; None with `interval_s`.
    measurement, setpoint, output : (n,) array_like
        Signals; the last two may be absent.

    Raises
    ------
    RecordError
        If lengths differ, a value is not finite, or the time does not rise.
    UsageError
        If neither or both of `time` and `interval_s` are given.
    """
    check_interval(interval_s, time_given=time is not None, arrays=True)
    check_window(window_s)
    given = {"time": time, "measurement": measurement, "setpoint": setpoint, "output": output}
    signals: dict[str, Array] = {}
    for role, values in given.items():
        if values is not None:
            signals[role] = _one_array(role, values)
    count = len(signals["measurement"])
    for role, values in signals.items():
        if len(values) != count:
            raise RecordError(
                "arrays", f"the {role} has {len(values)} values, the measurement {count}; give arrays of one length"
            )
        bad = np.flatnonzero(~np.isfinite(values))
        if len(bad):
            raise RecordError(
                "arrays", f"the {role} is {values[bad[0]]} there; leave out such rows", row=int(bad[0]) + 1
            )
    if "time" not in signals:
        signals["time"] = np.arange(count, dtype=np.float64) * float(interval_s or np.nan)
    back = np.flatnonzero(np.diff(signals["time"]) <= 0)
    if len(back):
        raise RecordError(
            "arrays", "the time does not rise there; sort the rows and leave out repeated times", row=int(back[0]) + 2
        )
    columns = {
        role: Column(number=0, name=role, unit=None, values=values, cells=None) for role, values in signals.items()
    }
    findings = spacing("time", signals["time"], np.arange(1, count + 1), word="row")
    return _record("arrays", count, signals["time"], None, columns, [], findings, np.arange(count), window_s)


def record_from_table(
    table: Table, *, columns: Mapping[str, str | int] | None, interval_s: float | None, window_s: Window | None
) -> Record:
    """Return the record in a table: find the roles, then the rows that can be used."""
    source = table.source
    check_count(source, len(table.lines))
    tag = str(columns["measurement"]) if columns and "measurement" in columns else None
    table, good = without_flagged(wide_from_long(table, clock_of, tag))
    given = {role: _find(table, role, wanted) for role, wanted in (columns or {}).items()}
    taken = frozenset(column.number for role, column in given.items() if role != "time")
    base = time_base(table, given.get("time"), interval_s, taken)
    beside = base.used | base.set_aside
    numeric = [c for c in table.columns if c.values is not None and (c.number not in beside or c.number in taken)]
    numeric = [c for c in numeric if c.number not in base.used]
    roles, others, role_findings = assign_roles(
        source, numeric, {role: c for role, c in given.items() if role != "time"}
    )
    findings = [*table.findings, *base.findings, *role_findings, *_unread(table, base)]
    rows, roles = usable_rows(table, base.clock.seconds, base.name, roles, findings, good)
    signals = [column.values for column in (*roles.values(), *others) if column.values is not None]

    def same_as_before(places: NDArray[np.int64]) -> NDArray[np.bool_]:
        here, before = rows[places], rows[places - 1]
        same = np.ones(len(places), dtype=bool)
        for values in signals:
            same &= values[here] == values[before]
        return same

    restarts = [int(np.searchsorted(rows, restart)) for restart in table.restarts]
    clock = base.clock if len(rows) == len(table.lines) else base.clock.part(rows)
    line = rising(source, base.name or "row", clock, table.lines[rows], restarts, same_as_before)
    findings += line.findings
    total = len(table.lines) + table.set_aside
    return _record(source, total, line.seconds, base.name, roles, others, findings, rows[line.rows], window_s)


def _unread(table: Table, base: TimeBase) -> list[Finding]:
    """Return a note of the columns that hold texts, which no figure uses."""
    texts = [
        c
        for c in table.columns
        if c.values is None and c.number not in base.used and not is_stamped(c) and any(c.cells or ())
    ]
    if not texts:
        return []
    text = f"not read, since they hold no numbers: {names_text([column.name for column in texts])}"
    return [Finding(code="text_columns", severity="note", text=text)]


def _record(
    source: str,
    total: int,
    seconds: Array,
    time_name: str | None,
    roles: Mapping[str, Column],
    others: list[Column],
    findings: list[Finding],
    rows: NDArray[np.int64],
    window_s: Window | None,
) -> Record:
    low, high = (None, None) if window_s is None else window_s
    inside = np.ones(len(seconds), dtype=bool)
    if low is not None:
        inside &= seconds >= low
    if high is not None:
        inside &= seconds <= high
    if int(inside.sum()) < 5:
        if inside.all():
            raise RecordError(source, f"only {len(seconds)} usable rows; a step test needs at least 5")
        span = f"the record runs from {seconds[0]:.6g} to {seconds[-1]:.6g} s"
        raise RecordError(source, f"only {int(inside.sum())} rows between --from and --to; {span}")
    kept = rows if inside.all() else rows[inside]

    def signal(column: Column | None) -> Signal | None:
        if column is None or column.values is None:
            return None
        values = column.values if len(kept) == len(column.values) and kept[0] < kept[-1] else column.values[kept]
        return Signal(name=column.name, unit=column.unit, values=read_only(values))

    measurement = signal(roles["measurement"])
    assert measurement is not None
    return Record(
        source=source,
        rows=total,
        time=read_only(seconds if inside.all() else seconds[inside]),
        time_name=time_name,
        measurement=measurement,
        setpoint=signal(roles.get("setpoint")),
        output=signal(roles.get("output")),
        others=tuple(found for found in (signal(column) for column in others) if found is not None),
        findings=tuple(findings),
    )


def _one_array(role: str, values: ArrayLike) -> Array:
    if np.iscomplexobj(values):
        raise RecordError("arrays", f"the {role} holds complex numbers; give real ones")
    try:
        array: Array = np.asarray(values, dtype=np.float64)
    except (TypeError, ValueError):
        raise RecordError("arrays", f"the {role} is not an array of numbers") from None
    if array.ndim != 1:
        raise RecordError("arrays", f"the {role} has {array.ndim} dimensions; give one value per row")
    return array


def _find(table: Table, role: str, wanted: str | int) -> Column:
    """Return the column of that name (exact, then without regard to case or unit) or number."""
    names = [column.name for column in table.columns]
    if isinstance(wanted, str):
        for matches in _by_name(table.columns, wanted.strip()):
            if len(matches) == 1:
                return _numeric_or_time(table, role, matches[0])
            if matches:
                numbers = " or ".join(str(column.number) for column in matches)
                raise RecordError(
                    table.source,
                    f"{len(matches)} columns are called {wanted!r}; give the number instead, --{role} {numbers}",
                )
    number = int(wanted) if isinstance(wanted, int) or wanted.strip().isdigit() else 0
    found = next((column for column in table.columns if column.number == number), None)
    if found is None:
        what = f"no column {number}" if number else f"no column {wanted!r}"
        raise RecordError(table.source, f"{what}; there are {names_text(names)} (numbers 1 to {len(names)})")
    return _numeric_or_time(table, role, found)


def _by_name(columns: Sequence[Column], wanted: str) -> Iterator[list[Column]]:
    """Yield the columns of that name, then those without regard to case, then those that only have a unit more."""
    folded = wanted.casefold()
    yield [c for c in columns if c.name == wanted]
    yield [c for c in columns if c.name.casefold() == folded]
    yield [c for c in columns if split_unit(c.name)[0].casefold() == folded]


def _numeric_or_time(table: Table, role: str, column: Column) -> Column:
    if role != "time" and column.values is None:
        raise RecordError(table.source, f"the column named as the {role} holds no numbers", column=column.name)
    return column
