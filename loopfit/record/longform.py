"""Exports with one value a row (tag, time, value, quality), turned into one column a tag; quality flags."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from loopfit.core.arrays import Array
from loopfit.core.errors import RecordError
from loopfit.core.finding import Finding
from loopfit.record.clock import Clock
from loopfit.record.content import is_constant, is_stepped
from loopfit.record.layout import STAMP
from loopfit.record.number import is_bad_word
from loopfit.record.table import Column, Table
from loopfit.record.wording import count_of, lines_text, names_text, word_set
from loopfit.record.words import weight, words_of

_TAG_WORDS = word_set(
    "tag tagname tags variable point signal channel kanal parameter item name messstelle bezeichnung etiqueta "
    "senal variablen "
    "measurement series sensor object id key canal nom nombre"
)
_QUALITY_WORDS = word_set(
    "quality status qualitaet qualite calidad estado qual flag flags zustand statut validity valid"
)
_GOOD = word_set("good ok gut bon bonne bueno buena valid true 192 0xc0 g good(192) normal")
_MOST_TAGS = 60


def wide_from_long(
    table: Table, clock_of: Callable[[str, Column], Clock | None], measurement: str | None = None
) -> Table:
    """Return a table with a column for each tag, or the table as it is when it has no column of tags.

    The rows are those of the measurement: the tag of that name if one is given, else by the words of its name, by
    not being stepped, or by being written most often. Other tags keep their last value until the next; where they
    have none yet the cell is empty.
    """
    found = _tags_times_values(table)
    if found is None:
        return table
    tags, when, value = found
    clock = clock_of(table.source, when)
    if clock is None or value.values is None or tags.cells is None:
        return table
    good = good_rows(table)
    names = np.array(tags.cells)
    order = [name for name in dict.fromkeys(tags.cells) if name]
    places = {name: np.flatnonzero((names == name) & np.isfinite(clock.seconds) & good) for name in order}
    base = _base(order, places, value.values, measurement)
    at = clock.seconds[places[base]]
    columns = [Column(number=1, name=when.name, unit="s", values=at, cells=None)]
    held = []
    for name in order:
        rows = places[name]
        times, values = clock.seconds[rows], value.values[rows]
        back = np.flatnonzero(np.diff(times) < 0)
        if len(back) and name != base:
            raise RecordError(
                table.source, f"the clock of {name!r} runs back here", row=int(table.lines[rows[back[0] + 1]])
            )
        if not np.array_equal(times, at):
            held.append(name)
            values = _last_known(times, values, at)
        columns.append(Column(number=len(columns) + 1, name=name, unit=None, values=values, cells=None))
    findings = [
        Finding(
            code="long_form",
            severity="note",
            text=f"one value a row: read as the columns {names_text(order)}, at the times of {base!r}",
        )
    ]
    if held:
        text = f"{names_text(held)} written at other times than {base!r}; between them the last value is held"
        findings.append(Finding(code="held_values", severity="note", text=text))
    if not good.all():
        findings.append(_flag_finding(table, ~good))
    return replace(
        table,
        lines=table.lines[places[base]],
        columns=tuple(columns),
        restarts=(),
        set_aside=table.set_aside + len(table.lines) - len(at),
        findings=(*table.findings, *clock.findings, *findings),
    )


def flag_columns(table: Table) -> list[Column]:
    """Return the columns of quality flags: named so, and good in more than three rows of ten."""
    found = []
    for column in table.columns:
        good = _is_good(column) if set(words_of(column.name)) & _QUALITY_WORDS else None
        if good is not None and float(good.mean()) > 0.3:
            found.append(column)
    return found


def _is_good(column: Column) -> NDArray[np.bool_] | None:
    """Return where a flag is good; None when the column cannot hold flags. 192 is good on OPC, common practice."""
    if column.values is not None:
        whole = bool(np.all((column.values == np.round(column.values)) & (column.values >= 0) & (column.values < 256)))
        return column.values == 192 if whole else None
    return None if column.cells is None else np.array([cell.lower() in _GOOD for cell in column.cells])


def good_rows(table: Table) -> NDArray[np.bool_]:
    """Return the rows (n,) that no quality flag calls bad."""
    good = np.ones(len(table.lines), dtype=bool)
    for column in flag_columns(table):
        flags = _is_good(column)
        if flags is not None:
            good &= flags
    return good


def without_flagged(table: Table) -> tuple[Table, NDArray[np.bool_]]:
    """Return the table without its columns of flags and with a finding about flagged rows, and the good rows (n,)."""
    flags = {column.number for column in flag_columns(table)}
    if not flags:
        return table, np.ones(len(table.lines), dtype=bool)
    good = good_rows(table)
    columns = tuple(column for column in table.columns if column.number not in flags)
    findings = table.findings if good.all() else (*table.findings, _flag_finding(table, ~good))
    return replace(table, columns=columns, findings=findings), good


def _flag_finding(table: Table, bad: NDArray[np.bool_]) -> Finding:
    places = np.flatnonzero(bad)
    text = (
        f"{count_of(len(places), 'row')} with a quality flag other than good left out "
        f"({lines_text([int(x) for x in table.lines[places]])})"
    )
    return Finding(code="bad_quality", severity="warning", text=text)


def _base(order: list[str], places: dict[str, NDArray[np.int64]], values: Array, measurement: str | None) -> str:
    """Return the tag whose rows are kept: a measurement must never be held over a missing value."""
    if measurement in places:
        return str(measurement)

    def rank(name: str) -> tuple[int, bool, int, int]:
        other = max(weight(name, "setpoint"), weight(name, "output"))
        word = -other if other == 2 else weight(name, "measurement") - other
        return word, not is_stepped(values[places[name]]), len(places[name]), -order.index(name)

    return max(order, key=rank)


def _last_known(times: Array, values: Array, at: Array) -> Array:
    before = np.searchsorted(times, at, side="right") - 1
    result: Array = np.where(before >= 0, values[np.maximum(before, 0)], np.nan)
    return result


def _tags_times_values(table: Table) -> tuple[Column, Column, Column] | None:
    """Return the columns of tags, times and values of a long form, None when the table is none."""
    texts = [c for c in table.columns if c.values is None and c.cells is not None]
    stamps = [c for c in texts if _holds_stamps(c)]
    numbers = [c for c in table.columns if c.values is not None and not set(words_of(c.name)) & _QUALITY_WORDS]
    times = stamps or [c for c in numbers if weight(c.name, "time") == 2]
    values = [
        c for c in numbers if c not in times and not is_constant(c.values if c.values is not None else np.zeros(0))
    ]
    if len(times) != 1 or len(values) != 1:
        return None
    for column in texts:
        if column in stamps or set(words_of(column.name)) & _QUALITY_WORDS:
            continue
        counts = Counter(cell for cell in column.cells or () if not is_bad_word(cell))
        if not 2 <= len(counts) <= _MOST_TAGS or max(counts.values()) < 5:
            continue
        if set(words_of(column.name)) & _TAG_WORDS or _repeats(times[0], len(counts)):
            return column, times[0], values[0]
    return None


def _holds_stamps(column: Column) -> bool:
    full = [cell for cell in column.cells or () if cell][:20]
    return bool(full) and all(STAMP.fullmatch(cell) for cell in full)


def _repeats(times: Column, tags: int) -> bool:
    """Return whether each time stands about once for every tag."""
    cells = times.cells if times.values is None else times.values.tolist()
    return cells is not None and len(set(cells)) <= 1.2 * len(cells) / tags
