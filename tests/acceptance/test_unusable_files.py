"""A file that cannot be used gets one clear line at the terminal, soon, and leaves nothing behind."""

from __future__ import annotations

import gzip
import io
import json
import os
import struct
import subprocess
import sys
import threading
import time
import tracemalloc
import zipfile
import zlib
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from click.testing import Result
from dialects import EXACT, by_pandas, frame, workbook
from record_kinds import automatic
from typer.testing import CliRunner

from loopfit.cli.main import app
from loopfit.record import packed
from loopfit.record import workbook as workbooks

RNG = np.random.default_rng(7)
SLOWEST_S = 3.0  # for any refusal; issue's wish is a line at once
COMMA = EXACT["comma, polars"](automatic())
LINES = COMMA.decode().splitlines()


def png() -> bytes:
    """A grey image of one pixel, by the PNG specification (ISO/IEC 15948): signature, IHDR, IDAT, IEND."""

    def chunk(kind: bytes, body: bytes) -> bytes:
        return struct.pack(">I", len(body)) + kind + body + struct.pack(">I", zlib.crc32(kind + body))

    head = chunk(b"IHDR", struct.pack(">IIBBBBB", 1, 1, 8, 0, 0, 0, 0))
    return b"\x89PNG\r\n\x1a\n" + head + chunk(b"IDAT", zlib.compress(b"\0\x80")) + chunk(b"IEND", b"")


def zipped(**members: bytes) -> bytes:
    stream = io.BytesIO()
    with zipfile.ZipFile(stream, "w", zipfile.ZIP_DEFLATED) as archive:
        for name, contents in members.items():
            archive.writestr(name, contents)
    return stream.getvalue()


def wide() -> bytes:
    names = ["t", *[f"c{i}" for i in range(499)]]
    rows = [[f"{k}", *[f"{v:.3f}" for v in RNG.normal(size=499)]] for k in range(100)]
    return ("\n".join(",".join(row) for row in [names, *rows]) + "\n").encode()


def with_line(place: int, line: str) -> bytes:
    return "\n".join([*LINES[:place], line, *LINES[place + 1 :]]).encode() + b"\n"


FILES: dict[str, tuple[Callable[[], bytes], str]] = {
    "empty": (lambda: b"", "empty"),
    "blanks": (lambda: b" \r\n\n\t\n", "empty but for blanks"),
    "header only": (lambda: LINES[0].encode() + b"\n", "no rows of numbers"),
    "three rows": (lambda: "\n".join(LINES[:4]).encode(), "only 3 rows"),
    "binary": (lambda: RNG.bytes(20_000), "binary file"),
    "program": (lambda: Path(sys.executable).resolve().read_bytes()[:50_000], "a program"),
    "image": (png, "a PNG image"),
    "HTML error page": (
        lambda: b"<!DOCTYPE html>\r\n<html><head><title>404</title></head><body>Not found</body></html>",
        "an HTML page",
    ),
    "JSON of records": (lambda: frame(automatic()).to_json(orient="records").encode(), "JSON"),
    "JSON of columns": (lambda: json.dumps({"t": [1, 2, 3], "y": [4, 5, 6]}, indent=2).encode(), "JSON"),
    "line of a million characters": (lambda: b"9" * 1_000_000, "1000000 characters long"),
    "line of a million characters among rows": (lambda: with_line(50, "4.9," + "1" * 1_000_000), "row 51"),
    "line of half a million cells": (lambda: b"1," * 500_000, "characters long"),
    "1e308 among the values": (lambda: with_line(50, "4.9,1e308,58.0,33.2"), "1e+308 is beyond any measurement"),
    "1e308 throughout": (
        lambda: by_pandas(frame(automatic()).assign(PV=[1e308, -1e308] * 100)),
        "is beyond any measurement",
    ),
    "500 columns": (wide, "491 more is the measurement; say it with --measurement COL"),
    "clock runs back": (lambda: with_line(50, LINES[30]), "row 51: the clock 'Time (s)' runs back"),
    "damaged gzip": (lambda: gzip.compress(COMMA)[:60], "gzip data"),
    "damaged zip": (lambda: zipped(a=COMMA)[:-40], "zip archive is damaged"),
    "empty archive": (lambda: zipped(), "archive is empty"),
    "archive of two": (lambda: zipped(a=COMMA, b=COMMA), "holds 2 files"),
    "damaged workbook": (lambda: workbook(automatic())[:-500], "damaged"),
    "damaged Parquet": (lambda: EXACT["Parquet, polars"](automatic())[:-200], "Parquet"),
}


def run(*arguments: str | Path) -> Result:
    begin = time.perf_counter()
    result = CliRunner().invoke(app, ["analyze", *map(str, arguments)])
    assert time.perf_counter() - begin < SLOWEST_S
    return result


def assert_refused(result: Result, words: str) -> None:
    assert result.exit_code == 3
    assert result.stdout == ""
    assert result.stderr.count("\n") == 1
    assert result.stderr.endswith("\n")
    assert words in result.stderr
    assert "Traceback" not in result.stderr
    assert len(result.stderr) < 500


@pytest.mark.parametrize("name", FILES)
def test_one_line_and_exit_3(name: str, tmp_path: Path) -> None:
    make, words = FILES[name]
    path = tmp_path / "record.csv"
    path.write_bytes(make())
    assert_refused(run(path, "--plot", tmp_path / "a.svg"), words)
    assert_refused(run(path, "--json"), words)
    assert list(tmp_path.iterdir()) == [path]


@pytest.mark.parametrize("name", ["image", "empty", "1e308 among the values"])
def test_the_same_in_a_process_of_its_own(name: str, tmp_path: Path) -> None:
    make, words = FILES[name]
    path = tmp_path / "record.csv"
    path.write_bytes(make())
    command = [sys.executable, "-m", "loopfit", "analyze", str(path)]
    done = subprocess.run(command, capture_output=True, text=True, check=False, timeout=30)
    assert (done.returncode, done.stdout, done.stderr.count("\n")) == (3, "", 1)
    assert words in done.stderr


def test_folder_and_missing_file(tmp_path: Path) -> None:
    assert_refused(run(tmp_path), "this is a folder")
    assert_refused(run(tmp_path / "none.csv"), "no such file")


@pytest.mark.skipif(os.geteuid() == 0, reason="the super-user may read everything")
def test_no_permission(tmp_path: Path) -> None:
    path = tmp_path / "record.csv"
    path.write_bytes(COMMA)
    path.chmod(0)
    assert_refused(run(path), "no permission")


def test_unknown_column_lists_those_there_are(tmp_path: Path) -> None:
    path = tmp_path / "record.csv"
    path.write_bytes(COMMA)
    assert_refused(
        run(path, "--measurement", "pressure"), "no column 'pressure'; there are 'Time (s)', 'PV', 'SP', 'OP'"
    )
    assert_refused(run(path, "--output", "7"), "no column 7")
    assert_refused(run(path, "--time", "-1"), "no column '-1'")


@pytest.mark.parametrize("kind", ["gzip", "zip", "workbook"])
def test_bombs_stay_within_bounds(kind: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(packed, "LARGEST", 4_000_000)
    monkeypatch.setattr(workbooks, "_LARGEST_PART", 4_000_000)
    zeros = b"0" * 40_000_000
    path = tmp_path / "record.csv"
    if kind == "workbook":
        sheet = b"<worksheet>" + b" " * 40_000_000
        path.write_bytes(
            zipped(**{"[Content_Types].xml": b"", "xl/workbook.xml": b"", "xl/worksheets/sheet1.xml": sheet})
        )
    else:
        path.write_bytes(gzip.compress(zeros, 1) if kind == "gzip" else zipped(a=zeros))
    assert_refused(run(path), "unpacks to")
    tracemalloc.start()
    run(path)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert peak < 20_000_000


def test_a_file_that_grows_while_it_is_read(tmp_path: Path) -> None:
    """Each reading is of a file cut somewhere: a page with fewer rows, or one line; never more."""
    path = tmp_path / "record.csv"
    path.write_bytes(COMMA[:200])
    stop = threading.Event()

    def grow() -> None:
        with path.open("ab", buffering=0) as file:
            for start in range(200, len(COMMA), 97):
                file.write(COMMA[start : start + 97])
                if stop.wait(0.01):
                    return

    writer = threading.Thread(target=grow)
    writer.start()
    statuses = []
    try:
        while writer.is_alive():
            result = run(path)
            statuses.append(result.exit_code)
            assert result.exit_code in (0, 3)
            assert result.stderr.count("\n") == (result.exit_code == 3)
            assert "Traceback" not in result.output
    finally:
        stop.set()
        writer.join()
    assert statuses[0] == 3  # five rows hold no step
    assert statuses[-1] == 0
    final = run(path)
    assert final.exit_code == 0
    assert "200 rows" in final.stdout


@pytest.mark.parametrize("cut", [1, 2, 3, 4, 5, 6, 9, 14])
def test_a_half_written_last_row_is_never_used_unsaid(cut: int, tmp_path: Path) -> None:
    path = tmp_path / "record.csv"
    path.write_bytes(COMMA[:-cut])
    result = run(path)
    assert result.exit_code == 0
    assert "cut short" in result.stdout or "does not end with a line break" in result.stdout
