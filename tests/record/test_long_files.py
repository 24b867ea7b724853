"""Long files are read by whole columns, with the values, lines and findings that reading row by row gives."""

from __future__ import annotations

import dataclasses
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from recordings import write

from loopfit.record import text as long_text
from loopfit.record.read import read_record
from loopfit.record.record import Record

COUNT = 36_000  # over a megabyte of text
RNG = np.random.default_rng(7)
NOISE = RNG.normal(0, 0.1, COUNT)
ROWS = [
    [f"{0.01 * i:.2f}", f"{float(20 + (i > 5000) * 30 + NOISE[i])!r}", "10.0" if i < 5000 else "40.0"]
    for i in range(COUNT)
]


def lines(delimiter: str = ",", decimal: str = ".", rows: list[list[str]] = ROWS) -> list[str]:
    return [
        delimiter.join(("Time (s)", "PV", "OP")),
        *[delimiter.join(c.replace(".", decimal) for c in row) for row in rows],
    ]


def edited(place: int, line: str) -> list[str]:
    changed = lines()
    changed[place] = line
    return changed


CASES: dict[str, tuple[Callable[[], list[str]], bool]] = {
    "comma": (lines, True),
    "semicolon, decimal comma": (lambda: lines(";", ","), True),
    "tab": (lambda: lines("\t"), True),
    "comma and blank": (lambda: lines(", "), True),
    "preamble": (lambda: ["Logger 7", "", *lines()], True),
    "bad cell": (lambda: edited(20000, "199.99,Bad,40.0"), True),
    "empty cell": (lambda: edited(20000, "199.99,,40.0"), True),
    "infinite": (lambda: edited(20000, "199.99,inf,40.0"), True),
    "odd numbers": (lambda: edited(20000, "199.99,+5.e1,4_0.0"), True),
    "stamps": (
        lambda: lines(
            rows=[[f"2026-03-01T12:{i // 6000:02d}:{i / 100 % 60:06.3f}", *row[1:]] for i, row in enumerate(ROWS)]
        ),
        True,
    ),
    "text column": (lambda: [line + (",mode" if i == 0 else ",AUTO") for i, line in enumerate(lines())], True),
    "short row": (lambda: edited(20000, "199.99,5.0"), False),
    "long row": (lambda: edited(20000, "199.99,5.0,4.0,3.0"), False),
    "blank line": (lambda: [*lines()[:20000], "", *lines()[20000:]], False),
    "comment": (lambda: [*lines()[:20000], "# pause", *lines()[20000:]], False),
    "text line": (lambda: [*lines()[:20000], "a,b,c", *lines()[20000:]], False),
    "header again": (lambda: [*lines()[:20000], lines()[0], *lines()[20000:]], False),
    "one number in quotes": (lambda: edited(20000, '199.99,"5.0",40.0'), True),
    "thousands in one row": (lambda: edited(20000, '199.99,"1,005.0",40.0'), False),
    "unit in a cell": (lambda: edited(20000, "199.99,5.0 V,40.0"), False),
    "blanks": (lambda: lines("  "), False),
}


def plain(record: Record) -> list[object]:
    signals = [record.measurement, record.setpoint, record.output, *record.others]
    return [record.rows, record.time_name, record.findings, record.time.view(np.int64).tolist()] + [
        None if s is None else (s.name, s.unit, s.values.view(np.int64).tolist()) for s in signals
    ]


@pytest.mark.parametrize("case", CASES)
def test_same_as_row_by_row(case: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    make, quick = CASES[case]
    body = "\n".join(make()) + "\n"
    assert len(body) > long_text.LONG
    assert (long_text._by_columns("x", body) is not None) is quick
    path = write(tmp_path, body)
    record = read_record(path)
    monkeypatch.setattr(long_text, "LONG", len(body) + 1)
    assert plain(record) == plain(read_record(path))
    assert dataclasses.is_dataclass(record)


def test_bad_cell_is_placed_by_its_line(tmp_path: Path) -> None:
    record = read_record(write(tmp_path, "\n".join(edited(20000, "199.99,Bad,40.0")) + "\n"))
    assert "line 20001" in next(f.text for f in record.findings if f.code == "bad_cells")


@pytest.mark.parametrize("cut", [1, 3, 12])
def test_end_without_a_line_break(cut: int, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    body = ("\n".join(lines()) + "\n")[:-cut]
    path = write(tmp_path, body)
    record = read_record(path)
    monkeypatch.setattr(long_text, "LONG", len(body) + 1)
    assert plain(record) == plain(read_record(path))
    assert {f.code for f in record.findings} & {"no_final_line_break", "last_line_cut"}


def test_short_files_need_no_heavy_imports(tmp_path: Path) -> None:
    path = write(tmp_path, "\n".join(lines()[:1000]) + "\n")
    code = (
        "import sys; from loopfit.record.read import read_record; read_record(sys.argv[1]); "
        "print(sorted({'polars', 'scipy', 'pandas', 'python_calamine', 'matplotlib'} & set(sys.modules)))"
    )
    done = subprocess.run([sys.executable, "-c", code, str(path)], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"
