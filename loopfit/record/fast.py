"""Long delimited text by whole columns: the same values as row by row, or nothing."""

from __future__ import annotations

import numpy as np

from loopfit.record.header import Header
from loopfit.record.layout import Layout, split_line
from loopfit.record.table import Column, Table, column_of, opening_findings, unclosed


def table_by_columns(source: str, text: str, header: Header, layout: Layout, numeric: list[bool], start: int, first_line: int) -> Table | None:
    """Return the table of a long text whose rows are all alike, None when any row is not.

    Parameters
    ----------
    text : str
        The text with line feeds only.
    start : int
        Place of the first data row in the text.
    first_line : int
        Its line number.

    Notes
    -----
    polars reads correctly rounded floats, as Python does (tested bit for bit). Whatever it passes over or
    takes in another way (an empty cell, a short row, a blank line, a word) makes this function return None, and
    the text is read again row by row.
    """
    if layout.delimiter == " " or layout.marks.thousands:
        return None
    closed = text.endswith("\n")
    if not closed and _tail_is_doubtful(text, layout):
        return None
    body = text[start:].encode()
    if b'"' not in body:
        padded = (layout.delimiter + " ").encode()
        if padded in body[:10000]:
            body = body.replace(padded, layout.delimiter.encode())
    elif body.count(b'"') % 2:
        return None
    import polars as pl

    kinds = {f"c{place}": pl.Float64 if flag else pl.String for place, flag in enumerate(numeric)}
    stamped = _stamp_columns(text[start : start + 20000], layout, numeric)
    for place in stamped:
        kinds[f"c{place}"] = pl.String
    try:
        frame = pl.read_csv(
            body,
            has_header=False,
            separator=layout.delimiter,
            schema=kinds,
            decimal_comma=layout.marks.decimal == ",",
        )
    except (pl.exceptions.PolarsError, ValueError):
        return None
    if frame.height != body.count(b"\n") + (not closed):
        return None
    columns: list[Column] = []
    for place, series in enumerate(frame.get_columns()):
        if series.dtype == pl.Float64:
            if series.null_count():
                return None
            values = series.to_numpy()
            if not np.isfinite(values).all():
                return None
            columns.append(Column(number=place + 1, name=header.names[place], unit=header.units[place], values=values, cells=None))
        else:
            columns.append(column_of(place, header, [cell.strip() for cell in series.fill_null("").to_list()], layout))
    lines = np.arange(first_line, first_line + frame.height)
    findings = opening_findings(header, layout, len(lines))
    if not closed:
        findings.append(unclosed(int(lines[-1])))
    return Table(
        source=source,
        lines=lines,
        columns=tuple(columns),
        named=header.named,
        preamble=header.preamble,
        restarts=(),
        set_aside=0,
        findings=tuple(findings),
    )


def _tail_is_doubtful(text: str, layout: Layout) -> bool:
    """Return whether the last cell is shorter than its neighbours above, so that the slow way must judge it."""
    lines = text[-20000:].split("\n")[1:]
    cells = [split_line(line, layout.delimiter)[-1] for line in lines]
    return len(cells) < 3 or len(cells[-1]) < min(map(len, cells[:-1])) or cells[-1].endswith((".", ","))


def _stamp_columns(head: str, layout: Layout, numeric: list[bool]) -> list[int]:
    """Return the columns among the numeric ones that hold times written out."""
    for line in head.split("\n"):
        cells = split_line(line, layout.delimiter)
        if len(cells) >= len(numeric):
            return [place for place, flag in enumerate(numeric) if flag and any(mark in cells[place] for mark in ":/T")]
    return []
