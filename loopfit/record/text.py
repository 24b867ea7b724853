"""Delimited text: from bytes to a table, by rows for short files and by whole columns for long ones."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import replace

from loopfit.core.errors import RecordError
from loopfit.core.finding import Finding
from loopfit.record.encoding import decode
from loopfit.record.fast import table_by_columns
from loopfit.record.header import Header, find_header, is_comment
from loopfit.record.layout import Layout, Row, find_layout, numeric_columns, rows_of, with_thousands
from loopfit.record.table import Table, table_from_rows
from loopfit.record.wording import count_of

LONG = 1_000_000  # characters from which whole columns pay
_HEAD = 60_000  # characters in which the header must end
_SAMPLE = 150
_LONGEST_LINE = 200_000
_MOST_LINES = 20_000_000
_MOST_CELLS = 40_000_000


def table_from_text(source: str, data: bytes) -> Table:
    """Return the table in delimited text.

    Raises
    ------
    RecordError
        If no reading of the text gives rows of numbers.
    """
    text, encoding, unread = decode(data)
    findings: list[Finding] = []
    if encoding in ("cp1252", "latin-1"):
        note = f"the file is not UTF-8; it is read as {encoding}, which touches names only"
        findings.append(Finding(code="encoding_guessed", severity="note", text=note))
    if unread:
        note = f"{unread} characters could not be read as {encoding}"
        findings.append(Finding(code="unreadable_characters", severity="warning", text=note))
    if "\0" in text:
        count = text.count("\0")
        text = text.replace("\0", "")
        note = f"{count} zero bytes left out, as a logger writes them when its power fails; rows may be missing there"
        findings.append(Finding(code="zero_bytes", severity="warning", text=note))
    if "\x1a" in text[-10:]:
        data = b""
        text = text.replace("\x1a", "")
    if "\r" in text:
        data = b""
        text = text.replace("\r\n", "\n").replace("\r", "\n")
    table = _by_columns(source, text, None if findings else data) if len(text) > LONG else None
    if table is None:
        table = _by_rows(source, text)
    return replace(table, findings=(*findings, *table.findings))


def _by_rows(source: str, text: str) -> Table:
    closed = text.endswith("\n")
    if text.count("\n") > _MOST_LINES:
        raise RecordError(
            source, f"more than {_MOST_LINES // 10**6} million lines; keep only the part with the step test"
        )
    lines = text.split("\n")
    if closed:
        lines.pop()
    full = [line for line in lines if line.strip()]
    longest = max(range(len(lines)), key=lambda place: len(lines[place]))
    if len(lines[longest]) > _LONGEST_LINE:
        reason = f"the line is {len(lines[longest])} characters long; this does not look like rows of a recording"
        raise RecordError(source, reason, row=longest + 1)
    layout, numeric = layout_of(source, full)
    if len(lines) * layout.width > _MOST_CELLS:
        raise RecordError(
            source, f"{len(lines)} rows of {layout.width} columns are too many; keep only the part with the step test"
        )
    rows = list(rows_of(lines, layout.delimiter))
    layout = with_thousands(layout, rows, numeric)
    header = find_header(rows, layout, numeric, lines)
    _check_marks(source, header, layout, rows)
    return table_from_rows(source, rows, header, layout, numeric, closed=closed)


def _check_marks(source: str, header: Header, layout: Layout, rows: Sequence[Row]) -> None:
    """Raise RecordError when a comma seems to be delimiter and decimal mark at once: 0,20,5 under time,value."""
    if header.unfit is None or layout.delimiter != "," or header.unfit[1] >= layout.width:
        return
    if not any("." in cell for _, cells in rows[header.first : header.first + 200] for cell in cells):
        reason = (
            f"the names are {header.unfit[1]}, the cells of a row {layout.width}: a comma seems to be both "
            f"delimiter and decimal mark; "
            "export with semicolons or with decimal points"
        )
        raise RecordError(source, reason, row=header.unfit[0])


def _by_columns(source: str, text: str, data: bytes | None = None) -> Table | None:
    """Return the table of a long text by the quick way, None when a row needs a closer look.

    `data` are the bytes it came from; if they are the same text, they need not be made again.
    """
    found = recognised(source, text)
    if found is None:
        return None
    layout, numeric, header, first_line, start = found
    body = data[start:] if data is not None and text.isascii() and len(data) == len(text) else text[start:].encode()
    return table_by_columns(source, body, header, layout, numeric, first_line)


def recognised(source: str, text: str) -> tuple[Layout, list[bool], Header, int, int] | None:
    """Return layout, numeric columns, header, first line and first character of the data, from parts of a long text.

    None when the parts do not tell, so that every line must have its say.
    """
    head = text[:_HEAD].split("\n")[:-1]
    places = [len(text) // 12 * part for part in range(1, 12)]
    inside = [line for place in places for line in text[place : place + 2000].split("\n")[1:-1][:4]]
    full = [line for line in [*head[:50], *inside] if line.strip()]
    if not head or not inside:
        return None
    try:
        layout, numeric = layout_of(source, full)
    except RecordError:
        return None
    rows = list(rows_of(head[:400], layout.delimiter))
    header = find_header(rows, layout, numeric, head)
    if header.first >= len(rows) or header.unfit is not None:
        return None
    first_line = rows[header.first][0]
    return layout, numeric, header, first_line, sum(len(line) + 1 for line in head[: first_line - 1])


def layout_of(source: str, lines: list[str]) -> tuple[Layout, list[bool]]:
    """Return the layout of the lines and which columns are numeric, from a sample over the whole file.

    Raises
    ------
    RecordError
        If no reading gives rows of numbers.
    """
    full = [line for line in lines if line.strip()]
    if not full:
        raise RecordError(source, "the file is empty but for blanks")
    plain = [line for line in full if not is_comment(line)]
    stride = max(1, len(plain) // _SAMPLE)
    sample = plain[:20] + plain[20::stride] if stride > 1 else plain
    layout = find_layout(sample)
    if layout is None:
        begun = sum(re.match(r"\s*[+-]?\d", line) is not None for line in plain)
        if 0 < begun < 5:
            raise RecordError(source, f"only {count_of(begun, 'row')} of data; a step test needs at least 5")
        raise RecordError(
            source, "no rows of numbers found; a recording has one row per time, with a column for each signal"
        )
    rows = [cells for _, cells in rows_of(sample, layout.delimiter)]
    return layout, numeric_columns(rows, layout)
