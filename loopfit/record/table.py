"""From rows of cells to columns of numbers, with every row that is not plain data accounted for."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from loopfit.core.arrays import Array
from loopfit.core.finding import Finding
from loopfit.record.header import Header, is_comment
from loopfit.record.layout import STAMP, Layout, Row, cell_kind
from loopfit.record.number import column_of_numbers, is_bad_word
from loopfit.record.wording import count_of, lines_text

Rows = NDArray[np.int64]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Column:
    """One column: `number` counts from 1; `values` (n,) is None unless most filled cells are numbers.

    `cells` are kept where they are needed again: for stamps, texts and blanks.
    """

    number: int
    name: str
    unit: str | None
    values: Array | None
    cells: Sequence[str] | None


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Table:
    """The data rows of a file.

    `lines` (n,) are their places in the file, `restarts` the rows behind a repeated header; `set_aside` counts
    rows left out.
    """

    source: str
    lines: Rows
    columns: tuple[Column, ...]
    named: bool
    preamble: tuple[str, ...]
    restarts: tuple[int, ...]
    set_aside: int
    findings: tuple[Finding, ...]


def table_from_rows(
    source: str, rows: Sequence[Row], header: Header, layout: Layout, numeric: Sequence[bool], *, closed: bool = True
) -> Table:
    """Return the table below a header; `closed` tells that the last line ends in a line break.

    Rows with too few or too many cells, texts between the data, comments and repeated headers are left
    out, each with a finding; a cut last row likewise.
    """
    findings: list[Finding] = []
    width = layout.width
    lines: list[int] = []
    cells: list[list[str]] = []
    ragged: list[int] = []
    texts: list[int] = []
    restarts: list[int] = []
    repeats: list[int] = []
    wanted = [place for place, flag in enumerate(numeric) if flag]
    for line, row in rows[header.first :]:
        if row[:1] and row[0].startswith("#"):
            texts.append(line)
            continue
        if len(row) != width:
            while len(row) > width and not row[-1]:
                row = row[:-1]
            if not any(row):
                continue
            if len(row) < width and not any(numeric[len(row) :]):
                row = row + [""] * (width - len(row))
            if len(row) != width:
                (texts if _is_text(row, wanted, layout) else ragged).append(line)
                continue
        lines.append(line)
        cells.append(row)
    if cells and not closed and lines[-1] == rows[-1][0] and _looks_cut(cells, wanted):
        findings.append(_cut(lines[-1]))
        lines.pop()
        cells.pop()
        ragged_tail = 1
    elif ragged and not closed and ragged[-1] == rows[-1][0]:
        findings.append(_cut(ragged.pop()))
        ragged_tail = 1
    else:
        ragged_tail = 0
        if cells and not closed:
            findings.append(unclosed(lines[-1]))
    while cells and wanted and cell_kind(cells[-1][wanted[0]], layout.marks) == "text":
        texts.append(lines.pop())  # "Average,21.3" below the data
        cells.pop()
    columns = [column_of(place, header, column, layout) for place, column in enumerate(zip(*cells, strict=True))]
    keep = np.ones(len(cells), dtype=bool)
    for index in _rows_without_values(columns, wanted, len(cells)):
        row = cells[index]
        if not any(row):
            keep[index] = False
        elif header.named and [c.casefold() for c in row] == [c.casefold() for c in header.cells[:width]]:
            keep[index] = False
            repeats.append(lines[index])
            restarts.append(index)
        elif not any(STAMP.fullmatch(row[place]) for place in wanted) and not all(is_bad_word(cell) for cell in row):
            keep[index] = False
            texts.append(lines[index])
    if not keep.all():
        columns = [_kept(column, keep) for column in columns]
        kept_before = np.cumsum(keep)
        restarts = [int(kept_before[index]) for index in restarts]
    placed = np.array(lines, dtype=np.int64)[keep]
    texts.sort()
    findings += _row_findings(ragged, texts, repeats, width, placed)
    findings += opening_findings(header, layout, len(placed))
    return Table(
        source=source,
        lines=placed,
        columns=tuple(columns),
        named=header.named,
        preamble=header.preamble,
        restarts=tuple(restarts),
        set_aside=len(ragged) + ragged_tail,
        findings=tuple(findings),
    )


def _is_text(row: list[str], wanted: Sequence[int], layout: Layout) -> bool:
    """Return whether a row of another width is a line of text: a comment, no number in it, or a word for its time."""
    begins = row[wanted[0]] if wanted and wanted[0] < len(row) else row[0]
    if is_comment(row[0]) or (begins[:1].isalpha() and cell_kind(begins, layout.marks) == "text"):
        return True
    return all(cell_kind(cell, layout.marks) not in ("number", "stamp") for cell in row)


def opening_findings(header: Header, layout: Layout, rows: int) -> list[Finding]:
    """Return what there is to say of the header and the marks."""
    findings = []
    if header.unfit is not None:
        line, names = header.unfit
        text = (
            f"line {line} holds {names} names for {layout.width} columns and is not used; the columns are called "
            f"by their numbers"
        )
        findings.append(Finding(code="header_not_used", severity="warning", text=text))
    elif not header.named and rows:
        text = "the file has no line of column names; its columns are called by their numbers"
        findings.append(Finding(code="no_header", severity="note", text=text))
    if layout.thousands_guessed:
        text = (
            f"a {layout.marks.thousands!r} before three digits is read as a mark between thousands, since smaller "
            f"numbers have none"
        )
        findings.append(Finding(code="thousands_mark", severity="warning", text=text))
    return findings


def unclosed(line: int) -> Finding:
    """Return the finding that the last line has no line break."""
    text = (
        f"the file does not end with a line break, so its last row ({line}) may be incomplete; it is used as it stands"
    )
    return Finding(code="no_final_line_break", severity="note", text=text)


def column_of(place: int, header: Header, cells: Sequence[str], layout: Layout, numbers: Array | None = None) -> Column:
    """Return a column of cells: numbers when at least six filled cells in ten are, else text.

    `numbers` (n,) are its values where they are known already, NaN where a cell is no number.
    """
    values, unit = (numbers, None) if numbers is not None else column_of_numbers(cells, layout.marks)
    good = np.isfinite(values)
    usable = bool(good.any())
    if usable and not good.all():
        full = sum(not is_bad_word(cell) for cell in cells)
        usable = int(good.sum()) >= 0.6 * full
    keep = not usable or not good.all()
    return Column(
        number=place + 1,
        name=header.names[place],
        unit=header.units[place] or unit,
        values=values if usable else None,
        cells=cells if keep else None,
    )


def _kept(column: Column, keep: NDArray[np.bool_]) -> Column:
    values = None if column.values is None else column.values[keep]
    cells = None if column.cells is None else [cell for cell, flag in zip(column.cells, keep, strict=True) if flag]
    return Column(number=column.number, name=column.name, unit=column.unit, values=values, cells=cells)


def _rows_without_values(columns: Sequence[Column], wanted: Sequence[int], count: int) -> list[int]:
    """Return the rows in which no numeric column has a number."""
    empty = np.ones(count, dtype=bool)
    for place in wanted:
        values = columns[place].values
        if values is not None:
            empty &= ~np.isfinite(values)
    if not any(columns[place].values is not None for place in wanted):
        return []
    return [int(index) for index in np.flatnonzero(empty)]


def _looks_cut(cells: Sequence[list[str]], wanted: Sequence[int]) -> bool:
    """Return whether the last cell of the last row is shorter than any other in its column."""
    if len(cells) < 6 or not wanted or wanted[-1] != len(cells[-1]) - 1:
        return False
    last = cells[-1][-1]
    others = [len(row[-1]) for row in cells[:-1]]
    return len(last) < min(others) or last.endswith((".", ","))


def _cut(line: int) -> Finding:
    text = f"the last line ({line}) is cut short, as if the file was still being written; that row is left out"
    return Finding(code="last_line_cut", severity="warning", text=text)


def _row_findings(ragged: list[int], texts: list[int], repeats: list[int], width: int, placed: Rows) -> list[Finding]:
    findings = []
    if ragged:
        text = f"{count_of(len(ragged), 'row')} without exactly {width} cells left out ({lines_text(ragged)})"
        findings.append(Finding(code="ragged_rows", severity="warning", text=text))
    last = int(placed[-1]) if len(placed) else 0
    footer = [line for line in texts if line > last]
    inside = [line for line in texts if line <= last]
    if footer:
        text = f"{count_of(len(footer), 'line')} of text below the data not read ({lines_text(footer)})"
        findings.append(Finding(code="footer", severity="note", text=text))
    if inside:
        text = f"{count_of(len(inside), 'line')} of text between the data rows left out ({lines_text(inside)})"
        findings.append(Finding(code="text_between_rows", severity="note", text=text))
    if repeats:
        text = (
            f"the line of names comes again {count_of(len(repeats), 'time')} ({lines_text(repeats)}): the logger "
            f"was restarted there"
        )
        findings.append(Finding(code="repeated_header", severity="note", text=text))
    return findings
