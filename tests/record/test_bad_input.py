"""What cannot be used gets one line: what, where, what to do."""

from __future__ import annotations

import gzip
import json
import os
import pickle
import tracemalloc
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from recordings import text, workbook, write, zipped

from loopfit.core.errors import RecordError, UsageError
from loopfit.record import packed
from loopfit.record.read import read_record, record_from_arrays

RNG = np.random.default_rng(7)
WIDE = (
    "t,"
    + ",".join(f"c{i}" for i in range(499))
    + "\n"
    + "".join(f"{k}," + ",".join(f"{v:.3f}" for v in RNG.normal(size=499)) + "\n" for k in range(20))
)

BAD: list[tuple[str, str | bytes, str]] = [
    ("empty", b"", "the file is empty"),
    ("blank", " \n\n \n", "empty but for blanks"),
    ("header only", "Time,PV\n", "no rows of numbers"),
    ("words", "hello world\nthis is\na text, really\n", "no rows of numbers"),
    ("four rows", "t,y\n0,1\n1,2\n2,3\n3,4\n", "only 4 rows"),
    ("one row", "t,y\n0,1\n", "only 1 row of data"),
    ("no numbers", "t,y\n" + "".join(f"{i},nan\n" for i in range(20)), "no column of numbers beside the time"),
    ("few numbers", "t,y\n" + "".join(f"{i},{i if i < 3 else 'Bad'}\n" for i in range(20)), "only 3 of 20 rows"),
    ("clock runs back", "t,y\n0,1\n1,2\n2,3\n1.5,4\n4,4\n5,5\n6,6\n", "row 5: the clock 't' runs back"),
    ("random bytes", RNG.bytes(5000), "binary file"),
    ("PNG", b"\x89PNG\r\n\x1a\n" + RNG.bytes(3000), "a PNG image"),
    ("JPEG", b"\xff\xd8\xff\xe0" + RNG.bytes(3000), "a JPEG image"),
    ("PDF", b"%PDF-1.7\n" + RNG.bytes(3000), "a PDF document"),
    ("HTML", "<!DOCTYPE html>\n<html><body>502 bad gateway</body></html>\n", "an HTML page"),
    ("XML", "<?xml version='1.0'?>\n<a/>\n", "XML"),
    ("JSON objects", json.dumps([{"t": i, "y": i} for i in range(20)]), "JSON"),
    ("JSON object", json.dumps({"t": [1, 2, 3]}, indent=1), "JSON"),
    ("JSON array", json.dumps(list(range(20))), "JSON"),
    ("long line", "a" * 1_000_000, "row 1: the line is 1000000 characters long"),
    ("long line inside", "t,y\n0,1\n1," + "9" * 1_000_000 + "\n2,3\n3,4\n4,5\n5,6\n", "row 3: the line is"),
    ("long line of cells", "1," * 500_000, "characters long"),
    (
        "1e308",
        "t,y\n0,1\n1,1e308\n2,-1e308\n3,4\n4,5\n5,6\n6,7\n",
        "row 3, column 'y': 1e+308 is beyond any measurement",
    ),
    ("500 columns", WIDE, "and 491 more is the measurement; say it with --measurement COL"),
    ("damaged zip", b"PK\x03\x04" + b"junk" * 100, "damaged"),
    (
        "two files in a zip",
        zipped({"a.csv": text(), "b.csv": text()}),
        "holds 2 files (a.csv, b.csv); unpack it and name one",
    ),
    ("damaged gzip", b"\x1f\x8b" + b"junk" * 100, "damaged"),
    ("cut gzip", gzip.compress(text().encode())[:-30], "end too early"),
    ("damaged Parquet", b"PAR1" + b"junk" * 100, "Parquet"),
    ("damaged workbook", b"\xd0\xcf\x11\xe0\xa1\xb1\x1a\xe1" + b"x" * 3000, "workbook cannot be read"),
    ("workbook of words", workbook({"a": [["hello"], ["world"]]}), "no sheet of the workbook holds rows of numbers"),
    (
        "decimal comma with comma between",
        "t,y\n" + "".join(f"{i},{20 + i // 3},{i}\n" for i in range(20)),
        "the names are 2, the cells of a row 3",
    ),
]


@pytest.mark.parametrize(("contents", "message"), [bad[1:] for bad in BAD], ids=[bad[0] for bad in BAD])
def test_one_clear_line(contents: str | bytes, message: str, tmp_path: Path) -> None:
    path = write(tmp_path, contents)
    with pytest.raises(RecordError) as caught:
        read_record(path)
    line = str(caught.value)
    assert line.startswith(str(path))
    assert message in line
    assert "\n" not in line
    assert len(line) < len(str(path)) + 300
    assert str(pickle.loads(pickle.dumps(caught.value))) == line


def test_missing_and_folder(tmp_path: Path) -> None:
    with pytest.raises(RecordError, match="no such file"):
        read_record(tmp_path / "none.csv")
    with pytest.raises(RecordError, match="this is a folder"):
        read_record(tmp_path)
    with pytest.raises(RecordError, match="cannot be read"):
        read_record("a\0b")


def test_no_permission(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = write(tmp_path, text())
    if os.geteuid() == 0:  # root may read everything

        def refuse(_: Path) -> bytes:
            raise PermissionError(13, "Permission denied")

        monkeypatch.setattr(Path, "read_bytes", refuse)
    else:
        path.chmod(0)
    with pytest.raises(RecordError, match="no permission"):
        read_record(path)


@pytest.mark.parametrize("kind", ["gzip", "zip"])
def test_bombs_stay_within_memory(kind: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(packed, "LARGEST", 4_000_000)
    zeros = b"0" * 40_000_000
    path = write(tmp_path, gzip.compress(zeros, 1) if kind == "gzip" else zipped({"a.csv": zeros}))
    tracemalloc.start()
    with pytest.raises(RecordError, match="unpacks to more than"):
        read_record(path)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert peak < 20_000_000


def test_workbook_with_one_cell_far_away(tmp_path: Path) -> None:
    data = workbook({"a": [["t", "y"], *[[float(i), float(i)] for i in range(9)]]})
    far = zipped(
        {"[Content_Types].xml": "", "xl/workbook.xml": "", "xl/worksheets/sheet1.xml": '<c r="A1"/><c r="XFD1048576"/>'}
    )
    assert read_record(write(tmp_path, data), columns={"measurement": "y", "time": "t"}).rows == 9
    with pytest.raises(RecordError, match="1048576 rows and 16384 columns"):
        read_record(write(tmp_path, far))


USAGE: list[dict[str, Any]] = [
    {"interval_s": 0}, {"interval_s": -1}, {"interval_s": float("nan")}, {"interval_s": float("inf")},
    {"window_s": (5, 5)}, {"window_s": (5, 1)}, {"window_s": (float("nan"), 1)},
    {"columns": {"input": 1}}, {"columns": {"time": 0}}, {"columns": {"time": 1.5}}, {"columns": {"time": True}},
]  # fmt: skip


@pytest.mark.parametrize("options", USAGE)
def test_arguments_without_sense(options: dict[str, Any], tmp_path: Path) -> None:
    with pytest.raises(UsageError):
        read_record(write(tmp_path, text()), **options)


def test_arrays() -> None:
    time = np.arange(10.0)
    record = record_from_arrays(time=time, measurement=time**2, setpoint=list(range(10)), output=None)
    assert record.measurement.values.tolist() == (time**2).tolist()
    assert not record.time.flags.writeable
    assert time.flags.writeable
    assert record.source == "arrays"
    assert record_from_arrays(time=None, measurement=time, interval_s=0.5, window_s=(1, None)).time[0] == 1.0
    with pytest.raises(RecordError, match="the setpoint has 9 values, the measurement 10"):
        record_from_arrays(time=time, measurement=time, setpoint=time[1:])
    with pytest.raises(RecordError, match="row 4: the measurement is nan"):
        record_from_arrays(time=time, measurement=np.where(time == 3, np.nan, time))
    with pytest.raises(RecordError, match="row 3: the time does not rise"):
        record_from_arrays(time=np.array([0, 1, 1, 2, 3, 4.0]), measurement=np.arange(6))
    with pytest.raises(RecordError, match="not an array of numbers"):
        record_from_arrays(time=time, measurement=["a"] * 10)
    with pytest.raises(RecordError, match="2 dimensions"):
        record_from_arrays(time=time, measurement=np.zeros((10, 2)))
    with pytest.raises(RecordError, match="only 4 usable rows"):
        record_from_arrays(time=time[:4], measurement=time[:4])
    for wrong in ({"time": None}, {"time": time, "interval_s": 1.0}):
        with pytest.raises(UsageError, match="either time or interval_s"):
            record_from_arrays(measurement=time, **wrong)
