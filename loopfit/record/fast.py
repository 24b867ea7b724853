"""Long delimited text by whole columns: the same values as row by row, or nothing."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from loopfit.core.arrays import Array
from loopfit.record.header import Header
from loopfit.record.layout import Layout, cell_kind, split_line
from loopfit.record.number import Marks, parse_number, thousands_in
from loopfit.record.table import Column, Table, column_of, opening_findings, unclosed

if TYPE_CHECKING:
    import polars as pl


def table_by_columns(
    source: str, body: bytes, header: Header, layout: Layout, numeric: list[bool], first_line: int
) -> Table | None:
    """Return the table of a long text whose rows are all alike, None when a row needs a closer look.

    Parameters
    ----------
    body : bytes
        The data rows in UTF-8, with line feeds only.
    first_line : int
        Line number of the first one.

    Notes
    -----
    polars rounds decimal numbers correctly, as Python does (tested bit for bit), and cells that it does not take
    are parsed by our own grammar. Short and long rows, blank lines, quotes over several lines, comments, lines of
    text, and cells with units make this function return None; the text is then read again row by row.
    """
    closed = body.endswith(b"\n")
    quotes = body.count(b'"') if b'"' in body else 0
    if layout.delimiter == " " or layout.marks.thousands or quotes % 2 or (not closed and _is_doubtful(body, layout)):
        return None
    padded = (layout.delimiter + " ").encode()
    if not quotes and padded in body[:10000]:
        body = body.replace(padded, layout.delimiter.encode())
    rows = body.count(b"\n") + (not closed)
    stamps = _stamp_columns(body, layout, numeric)
    plain = [flag and place not in stamps for place, flag in enumerate(numeric)]
    frame = _frame(body, layout, plain)
    if frame is None or frame.height != rows or not _all_finite(frame, plain):
        frame = _frame(body, layout, [False] * len(plain))
    if frame is None or frame.height != rows or frame.to_series(-1).null_count() or _has_comments(frame):
        return None
    columns = []
    empty = np.ones(rows, dtype=bool)
    for place, series in enumerate(frame):
        column = _column(place, series, header, layout, plain[place])
        if column is None:
            return None
        columns.append(column)
        if numeric[place]:
            whole = column.values is None or column.cells is None
            empty &= False if whole or column.values is None else ~np.isfinite(column.values)
    first = next((column for column, flag in zip(columns, numeric, strict=True) if flag), None)
    if first is None or bool(empty.any()):
        return None
    if first.cells is not None and cell_kind(first.cells[-1], layout.marks) == "text":
        return None
    lines = np.arange(first_line, first_line + rows)
    findings = [] if closed else [unclosed(int(lines[-1]))]
    return Table(
        source=source,
        lines=lines,
        columns=tuple(columns),
        named=header.named,
        preamble=header.preamble,
        restarts=(),
        set_aside=0,
        findings=(*findings, *opening_findings(header, layout, rows)),
    )


def _frame(body: bytes, layout: Layout, numbers: list[bool]) -> pl.DataFrame | None:
    """Return the columns as numbers or text, None when polars does not take the text."""
    import polars as pl

    schema = {f"c{place}": pl.Float64 if flag else pl.String for place, flag in enumerate(numbers)}
    mark = layout.marks.decimal == ","
    try:
        return pl.read_csv(body, has_header=False, separator=layout.delimiter, schema=schema, decimal_comma=mark)
    except (pl.exceptions.PolarsError, ValueError):
        return None


def _all_finite(frame: pl.DataFrame, numbers: list[bool]) -> bool:
    """Return whether every cell of the columns of numbers is a finite number."""
    columns = [series for series, flag in zip(frame, numbers, strict=True) if flag]
    return all(not series.null_count() and bool(np.isfinite(series.to_numpy()).all()) for series in columns)


def _column(place: int, series: pl.Series, header: Header, layout: Layout, number: bool) -> Column | None:
    """Return one column, None when its cells need a closer look."""
    import polars as pl

    if series.dtype == pl.Float64:
        values = series.to_numpy()  # all finite, or the frame would have been read as text
        return Column(number=place + 1, name=header.names[place], unit=header.units[place], values=values, cells=None)
    if series.null_count() == len(series):
        cells: list[str] = [""] * len(series)
        return column_of(place, header, cells, layout)
    text = series.fill_null("").str.strip_chars()
    if not number:
        return column_of(place, header, text.to_list(), layout)
    parsed = _numbers(text, layout.marks)
    return None if parsed is None else column_of(place, header, text.to_list(), layout, parsed)


def _numbers(text: pl.Series, marks: Marks) -> Array | None:
    """Return the numbers of a column of text, NaN where a cell is none; None when one has a unit or thousands."""
    import polars as pl

    plain = text
    if marks.decimal == ",":
        plain = text.set(text.str.contains(".", literal=True), None).str.replace(",", ".", literal=True)
    values = np.array(plain.cast(pl.Float64, strict=False).to_numpy())
    for place in np.flatnonzero(~np.isfinite(values)):
        parsed = parse_number(text[int(place)], marks)
        if (parsed is not None and parsed[1]) or thousands_in(text[int(place)], marks.decimal):
            return None
        values[place] = np.nan if parsed is None or not np.isfinite(parsed[0]) else parsed[0]
    return values


def _has_comments(frame: pl.DataFrame) -> bool:
    """Return whether a row begins with a comment mark."""
    import polars as pl

    first = frame.to_series(0)
    return first.dtype == pl.String and bool(first.str.starts_with("#").any())


def _is_doubtful(body: bytes, layout: Layout) -> bool:
    """Return whether the last cell is shorter than its neighbours above, so that the slow way must judge it."""
    lines = body[-20000:].decode(errors="replace").split("\n")[1:]
    cells = [split_line(line, layout.delimiter)[-1] for line in lines]
    return len(cells) < 3 or len(cells[-1]) < min(map(len, cells[:-1])) or cells[-1].endswith((".", ","))


def _stamp_columns(body: bytes, layout: Layout, numeric: list[bool]) -> list[int]:
    """Return the columns among the numeric ones that hold times written out."""
    for line in body[:20000].decode(errors="replace").split("\n"):
        cells = split_line(line, layout.delimiter)
        if len(cells) >= len(numeric):
            return [
                place
                for place, flag in enumerate(numeric)
                if flag and any(m in cells[place][1:] for m in ":/T-") and "e-" not in cells[place].lower()
            ]
    return []
