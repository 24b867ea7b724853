"""Damaged files end in one line or in an analysis, and no damping ratio changes without a word."""

from __future__ import annotations

import os
import tempfile
import warnings
from functools import cache
from pathlib import Path
from random import Random

import polars as pl
import pytest
from dialects import EXACT
from hypothesis import given, note, settings
from hypothesis import strategies as st
from record_kinds import KINDS

import loopfit

TEXTS = [
    "comma, polars",
    "semicolon and decimal comma in cp1252, pandas",
    "runs of blanks, pandas",
    "every cell in quotes, pandas",
    "preamble and footer",
    "names on two rows and units",
    "ISO 8601",
    "day first",
    "points and decimal comma",
    "date and time in two columns",
    "time of day",
    "one value a row, stamps",
]
WORDS = [b"Bad", b"---", b"", b"NaN", b"1e308", b"-0", b"9" * 30, b"#REF!", b"0", b"12:99", b"\xff\xfe", b"null"]


def drop_rows(data: bytes, random: Random) -> bytes:
    lines = data.split(b"\n")
    at = random.randrange(len(lines))
    return b"\n".join(lines[:at] + lines[at + random.choice([1, 2, 30]) :])


def double_rows(data: bytes, random: Random) -> bytes:
    lines = data.split(b"\n")
    at = random.randrange(len(lines))
    return b"\n".join(lines[: at + random.choice([1, 5])] + lines[at:])


def cut_row(data: bytes, random: Random) -> bytes:
    lines = data.split(b"\n")
    at = random.randrange(len(lines))
    lines[at] = lines[at][: random.randrange(len(lines[at]) + 1)]
    return b"\n".join(lines)


def cut_file(data: bytes, random: Random) -> bytes:
    return data[: random.randrange(len(data) // 3, len(data))]


def swap_rows(data: bytes, random: Random) -> bytes:
    lines = data.split(b"\n")
    one, other = random.randrange(len(lines)), random.randrange(len(lines))
    lines[one], lines[other] = lines[other], lines[one]
    return b"\n".join(lines)


def swap_delimiter(data: bytes, random: Random) -> bytes:
    lines = data.split(b"\n")
    at, old, new = random.randrange(len(lines)), random.choice(b",;\t| "), random.choice(b",;\t| ")
    lines[at] = lines[at].replace(bytes([old]), bytes([new]))
    return b"\n".join(lines)


def insert_text(data: bytes, random: Random) -> bytes:
    lines = data.split(b"\n")
    line = random.choice([b"logger restarted", b"# note", b"alarm;high;1", lines[0], b"", b"===", b"{}", b"Rows,3"])
    lines.insert(random.randrange(len(lines)), line)
    return b"\n".join(lines)


def corrupt_cell(data: bytes, random: Random) -> bytes:
    lines = data.split(b"\n")
    at = random.randrange(len(lines))
    mark = next((m for m in (b";", b"\t", b"|", b",", b"  ") if m in lines[at]), b",")
    cells = lines[at].split(mark)
    cells[random.randrange(len(cells))] = random.choice(WORDS)
    lines[at] = mark.join(cells)
    return b"\n".join(lines)


def change_decimal_mark(data: bytes, random: Random) -> bytes:
    places = [place for place, byte in enumerate(data) if byte in b".,"]
    at = random.choice(places) if places else 0
    return data[:at] + random.choice([b".", b",", b"", b"'", b" "]) + data[at + 1 :]


def change_digit(data: bytes, random: Random) -> bytes:
    places = [place for place, byte in enumerate(data) if 48 <= byte <= 57]
    at = random.choice(places) if places else 0
    return data[:at] + random.choice(b"0123456789-eO").to_bytes() + data[at + 1 :]


def cut_bytes(data: bytes, random: Random) -> bytes:
    at = random.randrange(max(1, len(data)))
    return data[:at] + data[at + random.choice([1, 2, 7, 80]) :]


def insert_zeros(data: bytes, random: Random) -> bytes:
    at = random.randrange(max(1, len(data)))
    return data[:at] + b"\0" * random.choice([1, 5, 200]) + data[at:]


def flip_encoding(data: bytes, random: Random) -> bytes:
    text = data.decode("utf-8", errors="replace")
    return random.choice([text.encode("utf-16"), text.encode("utf-16-be"), b"\xff\xfe" + data, text.encode("utf-32")])


def flip_bit(data: bytes, random: Random) -> bytes:
    at = random.randrange(max(1, len(data)))
    return data[:at] + bytes([data[at] ^ 1 << random.randrange(8)]) + data[at + 1 :] if data else data


DAMAGES = [
    drop_rows, double_rows, cut_row, cut_file, swap_rows, swap_delimiter, insert_text, corrupt_cell,
    change_decimal_mark, change_digit, cut_bytes, insert_zeros, flip_encoding, flip_bit,
]  # fmt: skip


@cache
def good(dialect: str, kind: str) -> tuple[bytes, loopfit.Analysis]:
    data = EXACT[dialect](KINDS[kind]())
    return data, analysis_of(data)


def analysis_of(data: bytes) -> loopfit.Analysis:
    """Analyse the bytes of a file; any warning is an error."""
    with tempfile.TemporaryDirectory() as folder, warnings.catch_warnings():
        warnings.simplefilter("error")
        path = Path(folder) / "record.csv"
        path.write_bytes(data)
        return loopfit.analyze(path)


def damping(analysis: loopfit.Analysis) -> loopfit.Quantity | None:
    return None if analysis.model is None else analysis.model.damping_ratio


def codes(analysis: loopfit.Analysis) -> set[str]:
    return {finding.code for finding in analysis.findings}


def check(dialect: str, kind: str, damages: list[int], seed: int) -> None:
    data, sound = good(dialect, kind)
    random = Random(seed)
    for number in damages:
        data = DAMAGES[number](data, random)
        note(DAMAGES[number].__name__)
    check_bytes(data, sound)


def check_bytes(data: bytes, sound: loopfit.Analysis) -> None:
    try:
        analysis = analysis_of(data)
    except loopfit.LoopfitError as problem:
        line = str(problem)
    else:
        line = ""
        compare(sound, analysis)
    assert "\n" not in line
    assert len(line) < 400


def compare(sound: loopfit.Analysis, analysis: loopfit.Analysis) -> None:
    """Fail when the damping ratio is another one and neither a finding nor a count of rows tells why."""
    before, after = damping(sound), damping(analysis)
    assert before is not None
    if after is None or (after.low <= before.high and before.low <= after.high):
        return  # refused with a finding of severity error, or a damping ratio that both intervals allow
    rows = [(a.record.rows, len(a.record.time)) for a in (sound, analysis)]
    if rows[0] == rows[1] and not codes(analysis) - codes(sound):
        raise AssertionError(f"damping {after} instead of {before} without a finding")


PACKED = ["gzip, pandas", "zip, pandas", "xlsx, openpyxl", "xlsx with dates, openpyxl", "Parquet, polars"]


@pytest.mark.parametrize("dialect", PACKED)
def test_one_byte_of_a_packed_file(dialect: str, capfd: pytest.CaptureFixture[str]) -> None:
    """Checksums and the readers of others find it, or nothing changes. (Byte 210 made polars 2.1 panic.)"""
    data, sound = good(dialect, "release")
    random = Random(7)
    for place in range(0, len(data), max(7, len(data) // 350 * 7)):
        damaged = data[:place] + bytes([data[place] ^ 1 << random.randrange(8)]) + data[place + 1 :]
        check_bytes(damaged, sound)
    assert capfd.readouterr().err == ""


def test_a_reader_that_panics_is_one_line(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capfd: pytest.CaptureFixture[str]
) -> None:
    """A damaged length in a Parquet file can end in a panic of its reader's threads, which write of it themselves."""
    path = tmp_path / "record.parquet"
    path.write_bytes(good("Parquet, polars", "release")[0])

    def panic(_: object) -> pl.DataFrame:
        os.write(2, b"thread panicked\nstack backtrace:\n")
        raise pl.exceptions.PanicException("assertion failed")

    monkeypatch.setattr(pl, "read_parquet", panic)
    with pytest.raises(loopfit.RecordError, match="the Parquet file cannot be read"):
        loopfit.analyze(path)
    assert capfd.readouterr().err == ""
    os.write(2, b"heard again\n")
    assert capfd.readouterr().err == "heard again\n"


CASES = {
    "dialect": st.sampled_from(TEXTS),
    "kind": st.sampled_from(list(KINDS)),
    "damages": st.lists(st.integers(0, len(DAMAGES) - 1), min_size=1, max_size=3),
    "seed": st.integers(0, 2**32),
}


@settings(max_examples=60, deadline=None, derandomize=True)  # chance is for the study
@given(**CASES)
def test_no_traceback_and_no_silent_change(dialect: str, kind: str, damages: list[int], seed: int) -> None:
    check(dialect, kind, damages, seed)


@pytest.mark.study
@settings(max_examples=3000, deadline=None)
@given(**CASES)
def test_many_damaged_files(dialect: str, kind: str, damages: list[int], seed: int) -> None:
    check(dialect, kind, damages, seed)
