"""Spreadsheets: the sheet with the most rows of numbers, as rows of cells."""

from __future__ import annotations

import datetime as dt
import io
import re
import zipfile
import zlib
from collections.abc import Sequence
from dataclasses import replace

from loopfit.core.errors import RecordError
from loopfit.core.finding import Finding
from loopfit.record.header import find_header
from loopfit.record.layout import Row, layout_of_cells, numeric_columns, with_thousands
from loopfit.record.table import Table, table_from_rows
from loopfit.record.wording import names_text

_LARGEST_PART = 256 * 1024 * 1024  # bytes of one unpacked part
_MOST_CELLS = 30_000_000  # of the rectangle that holds a sheet, empty cells included
_BLOCK = 1 << 20
_PLACE = re.compile(rb'\br="([A-Z]{1,3})(\d{1,7})"')


def table_from_workbook(source: str, data: bytes) -> Table:
    """Return the table on the sheet that holds most rows of numbers.

    Raises
    ------
    RecordError
        If the workbook is damaged, locked or larger than memory should hold, or has no such sheet.
    """
    from python_calamine import CalamineError, PasswordError, load_workbook

    _check_size(source, data)
    try:
        book = load_workbook(io.BytesIO(data))
        sheets = {
            name: _cells(book.get_sheet_by_name(name).to_python(skip_empty_area=False)) for name in book.sheet_names
        }
    except PasswordError:
        raise RecordError(source, "the workbook is locked with a password; save it without one") from None
    except (CalamineError, OSError, ValueError) as problem:
        reason = " ".join(str(problem).split())[:80]
        raise RecordError(source, f"the workbook cannot be read ({reason}); save it again, or as .csv") from None
    sizes = {
        name: sum(sum(_looks_numeric(cell) for cell in cells) > 0 for _, cells in rows) for name, rows in sheets.items()
    }
    filled = [name for name, size in sizes.items() if size >= 5]
    if not sizes or max(sizes.values()) == 0:
        raise RecordError(source, "no sheet of the workbook holds rows of numbers")
    best = max(sizes, key=lambda name: sizes[name])
    table = _table(source, sheets[best])
    if len(filled) > 1:
        rest = names_text([name for name in filled if name != best])
        text = f"the sheet {best!r} is read, which has most rows of numbers; not read: {rest}"
        finding = Finding(code="sheet_chosen", severity="note", text=text)
        return replace(table, findings=(finding, *table.findings))
    return table


def _table(source: str, rows: Sequence[Row]) -> Table:
    filled = [cells for _, cells in rows if any(cells)]
    stride = max(1, len(filled) // 150)
    sample = filled[:20] + filled[20::stride] if stride > 1 else filled
    layout = layout_of_cells(sample)
    if layout is None:
        raise RecordError(
            source, "no rows of numbers found; a recording has one row per time, with a column for each signal"
        )
    numeric = numeric_columns(sample, layout)
    layout = with_thousands(layout, rows, numeric)
    header = find_header(rows, layout, numeric, ())
    return table_from_rows(source, rows, header, layout, numeric)


def _cells(rows: Sequence[Sequence[object]]) -> list[Row]:
    return [(line + 1, [_text(cell) for cell in row]) for line, row in enumerate(rows)]


def _text(cell: object) -> str:
    """Return a cell as text that reads back to the same value."""
    if isinstance(cell, str):
        return " ".join(cell.split())
    if isinstance(cell, bool):
        return "TRUE" if cell else "FALSE"
    if isinstance(cell, float):
        return str(int(cell)) if cell.is_integer() and abs(cell) < 1e15 else repr(cell)
    if isinstance(cell, dt.datetime):
        # a calendar day in double precision tells about 1 µs: rounding to 0.1 ms takes that error out
        micro = round(cell.microsecond / 100) * 100
        return (cell.replace(microsecond=0) + dt.timedelta(microseconds=micro)).isoformat(sep=" ")
    if isinstance(cell, dt.timedelta):
        total = round(cell.total_seconds(), 4)
        hours, rest = divmod(total, 3600)
        minutes, seconds = divmod(rest, 60)
        return f"{int(hours)}:{int(minutes):02d}:{seconds:07.4f}"
    if isinstance(cell, dt.time):
        micro = min(round(cell.microsecond / 100) * 100, 999_900)
        return cell.replace(microsecond=micro).isoformat()
    return "" if cell is None else str(cell)


def _looks_numeric(cell: str) -> bool:
    return bool(cell) and cell[0] in "+-.0123456789"


def _check_size(source: str, data: bytes) -> None:
    """Raise RecordError for a workbook that would fill the memory, before the reader unpacks it."""
    if data[:2] != b"PK":
        return
    try:
        with zipfile.ZipFile(io.BytesIO(data)) as archive:
            for part in archive.infolist():
                if part.file_size > _LARGEST_PART:
                    raise RecordError(
                        source,
                        f"a part of the workbook unpacks to {part.file_size // 2**20} MB; keep only the part with "
                        f"the step test",
                    )
                if part.filename.startswith("xl/worksheets/") and part.filename.endswith(".xml"):
                    with archive.open(part) as stream:
                        _check_extent(source, stream.read(_LARGEST_PART + 1))
    except (
        zipfile.BadZipFile,
        zlib.error,
        OSError,
        EOFError,
        NotImplementedError,
        RuntimeError,
        ValueError,
    ) as problem:
        if isinstance(problem, RecordError):
            raise
        raise RecordError(source, "the workbook is damaged; save it again, or as .csv") from None


def _check_extent(source: str, xml: bytes) -> None:
    """Raise RecordError if the rectangle of filled cells is larger than memory should hold."""
    width = height = 0
    for found in _PLACE.finditer(xml):
        letters = found.group(1)
        column = 0
        for letter in letters:
            column = column * 26 + letter - 64
        width, height = max(width, column), max(height, int(found.group(2)))
    if width * height > _MOST_CELLS:
        raise RecordError(
            source, f"a sheet reaches over {height} rows and {width} columns; clear the cells outside the recording"
        )
