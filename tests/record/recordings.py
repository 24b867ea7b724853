"""A small recording and the many ways in which loggers write it down."""

from __future__ import annotations

import io
import zipfile
from collections.abc import Sequence
from pathlib import Path

import numpy as np

ROWS = 40
OFFICE = "http://schemas.openxmlformats.org/officeDocument/2006/relationships"
TIME = np.arange(ROWS) * 0.5
SETPOINT = np.where(TIME < 5, 20.0, 25.0)
MEASUREMENT = np.round(np.where(TIME < 5, 20.0, 25 - 5 * np.exp(-(TIME - 5) / 3)), 3)
OUTPUT = np.round(np.where(TIME < 5, 30.0, 50 - 10 * np.exp(-(TIME - 5) / 2)), 3)
NAMES = ("Time (s)", "PV", "SP", "OP")
SIGNALS = (TIME, MEASUREMENT, SETPOINT, OUTPUT)


def rows(columns: Sequence[Sequence[object]] = SIGNALS, decimal: str = ".") -> list[list[str]]:
    """Return the cells of each row, numbers with three decimals."""
    return [
        [f"{cell:.3f}".replace(".", decimal) if isinstance(cell, float) else str(cell) for cell in row]
        for row in zip(*columns, strict=True)
    ]


def text(delimiter: str = ",", decimal: str = ".", names: Sequence[str] | None = NAMES, end: str = "\n") -> str:
    """Return the recording as delimited text."""
    lines = [] if names is None else [delimiter.join(names)]
    lines += [delimiter.join(row) for row in rows(decimal=decimal)]
    return "".join(line + end for line in lines)


def table(header: str, *columns: Sequence[object], delimiter: str = ",") -> str:
    """Return columns under a header line."""
    return header + "\n" + "".join(delimiter.join(row) + "\n" for row in rows(columns))


def write(folder: Path, contents: str | bytes, name: str = "test.csv") -> Path:
    """Write a file and return its path."""
    path = folder / name
    path.write_bytes(contents.encode() if isinstance(contents, str) else contents)
    return path


def zipped(members: dict[str, str | bytes]) -> bytes:
    """Return a zip archive of these members."""
    stream = io.BytesIO()
    with zipfile.ZipFile(stream, "w", zipfile.ZIP_DEFLATED) as archive:
        for name, contents in members.items():
            archive.writestr(name, contents)
    return stream.getvalue()


def workbook(sheets: dict[str, Sequence[Sequence[object]]]) -> bytes:
    """Return a minimal .xlsx (ECMA-376 parts written out by hand); a tuple of a number is a date."""
    names = list(sheets)
    parts: dict[str, str | bytes] = {
        "[Content_Types].xml": '<Types xmlns="http://schemas.openxmlformats.org/package/2006/content-types">'
        '<Default Extension="rels" ContentType="application/vnd.openxmlformats-package.relationships+xml"/>'
        '<Default Extension="xml" ContentType="application/xml"/><Override PartName="/xl/workbook.xml" '
        'ContentType="application/vnd.openxmlformats-officedocument.spreadsheetml.sheet.main+xml"/></Types>',
        "_rels/.rels": '<Relationships xmlns="http://schemas.openxmlformats.org/package/2006/relationships">'
        f'<Relationship Id="r1" Type="{OFFICE}/officeDocument" Target="xl/workbook.xml"/>'
        "</Relationships>",
        "xl/workbook.xml": '<workbook xmlns="http://schemas.openxmlformats.org/spreadsheetml/2006/main" '
        'xmlns:r="http://schemas.openxmlformats.org/officeDocument/2006/relationships"><sheets>'
        + "".join(f'<sheet name="{name}" sheetId="{i + 1}" r:id="s{i + 1}"/>' for i, name in enumerate(names))
        + "</sheets></workbook>",
        "xl/_rels/workbook.xml.rels": '<Relationships xmlns="http://schemas.openxmlformats.org/package/2006/relationships">'
        + "".join(
            f'<Relationship Id="s{i + 1}" Type="{OFFICE}/worksheet" Target="worksheets/sheet{i + 1}.xml"/>'
            for i in range(len(names))
        )
        + f'<Relationship Id="st" Type="{OFFICE}/styles" '
        'Target="styles.xml"/></Relationships>',
        "xl/styles.xml": '<styleSheet xmlns="http://schemas.openxmlformats.org/spreadsheetml/2006/main">'
        '<cellXfs count="2"><xf numFmtId="0"/><xf numFmtId="22"/></cellXfs></styleSheet>',
    }
    for index, name in enumerate(names):
        body = "".join(
            f'<row r="{r + 1}">'
            + "".join(_cell(f"{chr(65 + c)}{r + 1}", cell) for c, cell in enumerate(row))
            + "</row>"
            for r, row in enumerate(sheets[name])
        )
        parts[f"xl/worksheets/sheet{index + 1}.xml"] = (
            f'<worksheet xmlns="http://schemas.openxmlformats.org/spreadsheetml/2006/main"><sheetData>{body}</sheetData></worksheet>'
        )
    return zipped(parts)


def _cell(place: str, value: object) -> str:
    if value is None:
        return ""
    if isinstance(value, tuple):
        return f'<c r="{place}" s="1"><v>{float(value[0])!r}</v></c>'
    if isinstance(value, str):
        return f'<c r="{place}" t="inlineStr"><is><t>{value}</t></is></c>'
    return f'<c r="{place}"><v>{float(value)!r}</v></c>'  # type: ignore[arg-type]
