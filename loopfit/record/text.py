"""Delimited text: from bytes to a table, by rows for short files and by whole columns for long ones."""

from __future__ import annotations

from loopfit.core.errors import RecordError
from loopfit.core.finding import Finding
from loopfit.record.encoding import decode
from loopfit.record.header import find_header, is_comment
from loopfit.record.layout import Layout, find_layout, numeric_columns, rows_of
from loopfit.record.table import Table, table_from_rows

LONG = 1_000_000  # characters from which whole columns pay
_SAMPLE = 150
_LONGEST_LINE = 200_000


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
    text = text.replace("\x1a", "") if text[-10:].find("\x1a") >= 0 else text
    closed = text.endswith(("\n", "\r"))
    if "\r" in text:
        text = text.replace("\r\n", "\n").replace("\r", "\n")
    lines = text.split("\n")
    if closed:
        lines.pop()
    table = _by_rows(source, lines, closed)
    if not findings:
        return table
    return _with_findings(table, findings)


def _by_rows(source: str, lines: list[str], closed: bool) -> Table:
    layout, numeric = layout_of(source, lines)
    rows = list(rows_of(lines, layout.delimiter))
    header = find_header(rows, layout, numeric, lines)
    return table_from_rows(source, rows, header, layout, numeric, closed=closed)


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
    longest = max(range(len(lines)), key=lambda place: len(lines[place]))
    if len(lines[longest]) > _LONGEST_LINE:
        reason = f"the line is {len(lines[longest])} characters long; this does not look like rows of a recording"
        raise RecordError(source, reason, row=longest + 1)
    plain = [line for line in full if not is_comment(line)]
    stride = max(1, len(plain) // _SAMPLE)
    sample = plain[:20] + plain[20::stride] if stride > 1 else plain
    layout = find_layout(sample)
    if layout is None:
        raise RecordError(source, "no rows of numbers found; a recording has one row per time, with a column for each signal")
    rows = [cells for _, cells in rows_of(sample, layout.delimiter)]
    return layout, numeric_columns(rows, layout)


def _with_findings(table: Table, findings: list[Finding]) -> Table:
    return Table(
        source=table.source,
        lines=table.lines,
        columns=table.columns,
        named=table.named,
        preamble=table.preamble,
        restarts=table.restarts,
        set_aside=table.set_aside,
        findings=(*findings, *table.findings),
    )
