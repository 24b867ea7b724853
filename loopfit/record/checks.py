"""Checks of arguments, and of the cells that a record needs."""

from __future__ import annotations

import math
from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from loopfit.core.arrays import Array
from loopfit.core.errors import RecordError, UsageError
from loopfit.core.finding import Finding
from loopfit.record.table import Column, Table
from loopfit.record.wording import count_of, lines_text, names_text

ROLES = ("time", "measurement", "setpoint", "output")
_LARGEST = 1e100  # beyond it squares overflow, and nothing measured is that large


def check_roles(columns: Mapping[str, str | int] | None) -> None:
    """Raise UsageError for a role that does not exist or two roles for one column."""
    for role, wanted in (columns or {}).items():
        if role not in ROLES:
            raise UsageError(f"no role {role!r}; the roles are {', '.join(ROLES)}")
        if isinstance(wanted, bool) or not isinstance(wanted, str | int):
            raise UsageError(f"the column for {role} must be a name or a number")
        if isinstance(wanted, int) and wanted < 1:
            raise UsageError(f"columns count from 1, so {role} cannot be column {wanted}")


def check_interval(interval_s: float | None, *, time_given: bool = False, arrays: bool = False) -> None:
    """Raise UsageError unless the interval is absent or a finite number above 0."""
    if interval_s is not None and not (math.isfinite(interval_s) and interval_s > 0):
        raise UsageError(f"the interval must be a number of seconds above 0, not {interval_s!r}")
    if arrays and (interval_s is None) != time_given:
        raise UsageError("give either time or interval_s")


def check_window(window_s: tuple[float | None, float | None] | None) -> None:
    """Raise UsageError unless the window's ends are finite and in order."""
    if window_s is None:
        return
    low, high = window_s
    if any(end is not None and not math.isfinite(end) for end in (low, high)):
        raise UsageError("the ends of the window must be finite")
    if low is not None and high is not None and not low < high:
        raise UsageError(f"the window must begin before it ends, not from {low:g} to {high:g}")


def check_count(source: str, rows: int) -> None:
    """Raise RecordError for a table of fewer than five rows."""
    if rows < 5:
        raise RecordError(source, f"only {count_of(rows, 'row')} of data; a step test needs at least 5")


def usable_rows(
    table: Table,
    seconds: Array,
    time_name: str | None,
    roles: Mapping[str, Column],
    findings: list[Finding],
    unflagged: NDArray[np.bool_],
) -> tuple[NDArray[np.int64], dict[str, Column]]:
    """Return the rows whose time and signals are all numbers, and the roles with sparse inputs held.

    Every row left out is named in a finding.

    Raises
    ------
    RecordError
        If a value is beyond any measurement, or fewer than five rows are left.
    """
    roles = {role: _held(column, role, findings) for role, column in roles.items()}
    good = np.isfinite(seconds)
    if not good.all():
        findings.append(_bad(table, np.flatnonzero(~good), time_name or "time"))
    good &= unflagged
    for column in roles.values():
        values = column.values
        assert values is not None
        huge = np.flatnonzero(np.abs(values) > _LARGEST)
        if len(huge):
            reason = f"{values[huge[0]]:g} is beyond any measurement; mend or remove the row"
            raise RecordError(table.source, reason, row=int(table.lines[huge[0]]), column=column.name)
        bad = ~np.isfinite(values)
        if bad.any():
            findings.append(_bad(table, np.flatnonzero(bad), column.name))
            good &= ~bad
    rows = np.flatnonzero(good)
    if len(rows) < 5:
        total = len(table.lines)
        names = names_text([column.name for column in roles.values()])
        raise RecordError(
            table.source,
            f"only {len(rows)} of {count_of(total, 'row')} have a time and a number in {names}; at least 5 are needed",
        )
    return rows, roles


def _bad(table: Table, places: NDArray[np.int64], name: str) -> Finding:
    lines = [int(table.lines[place]) for place in places[:4]] + [0] * (len(places) - 4)
    share = len(places) / max(1, len(table.lines))
    text = f"{count_of(len(places), 'row')} without a number in {name!r} left out ({lines_text(lines)})" + (
        "; with so many gone the figures may be wrong" if share > 0.05 else ""
    )
    return Finding(code="bad_cells", severity="warning", text=text)


def _held(column: Column, role: str, findings: list[Finding]) -> Column:
    """Return an input that is written only when it changes, held between; other columns as they are."""
    if role == "measurement" or column.values is None or column.cells is None:
        return column
    empty = np.array([not cell for cell in column.cells])
    if not empty.any() or float(empty.mean()) < 0.3:
        return column
    values = column.values.copy()
    known = np.flatnonzero(~empty)
    before = np.searchsorted(known, np.arange(len(values)), side="right") - 1
    values = values[known[np.maximum(before, 0)]]
    text = f"{column.name!r} is written in {len(known)} of {len(values)} rows only; between them its last value is held"
    findings.append(Finding(code="held_values", severity="note", text=text))
    return Column(number=column.number, name=column.name, unit=column.unit, values=values, cells=None)
