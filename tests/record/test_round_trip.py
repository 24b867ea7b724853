"""Numbers come back bit for bit from any dialect; damaged files end in a record or in one line."""

from __future__ import annotations

import gzip
import tempfile
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from recordings import text

from loopfit.core.errors import RecordError
from loopfit.record import read as reading
from loopfit.record import text as long_text
from loopfit.record.read import read_record
from loopfit.record.record import Record
from loopfit.record.source import table_from_bytes

NUMBERS = st.lists(st.floats(-1e12, 1e12, allow_nan=False), min_size=8, max_size=40).filter(lambda v: len(set(v)) > 3)
DELIMITERS = st.sampled_from(
    [(",", "."), (";", "."), (";", ","), ("\t", "."), ("\t", ","), ("|", "."), (" ", "."), ("   ", ",")]
)
ENCODINGS = st.sampled_from(["utf-8", "utf-8-sig", "utf-16", "utf-16-le", "utf-16-be", "cp1252", "utf-32"])
FORMS = st.sampled_from(["{!r}", "{:.17e}", "{:.17E}", "{:+.17g}"])


def read_bytes(data: bytes) -> Record:
    table = table_from_bytes("bytes", data)
    with np.errstate(over="ignore", invalid="ignore"):
        return reading.record_from_table(table, columns=None, interval_s=None, window_s=None)


@settings(max_examples=150, deadline=None)
@given(
    values=NUMBERS,
    marks=DELIMITERS,
    form=FORMS,
    encoding=ENCODINGS,
    end=st.sampled_from(["\n", "\r\n", "\r"]),
    packed=st.booleans(),
)
def test_bit_for_bit(
    values: list[float], marks: tuple[str, str], form: str, encoding: str, end: str, packed: bool
) -> None:
    delimiter, decimal = marks
    times = [0.1 * i for i in range(len(values))]
    lines = [delimiter.join(("Zeit", "Istwert"))]
    lines += [
        delimiter.join(form.format(x).replace(".", decimal) for x in row) for row in zip(times, values, strict=True)
    ]
    data = (end.join(lines) + end).encode(encoding)
    record = read_bytes(gzip.compress(data) if packed else data)
    np.testing.assert_array_equal(record.time, times)
    np.testing.assert_array_equal(record.measurement.values.view(np.int64), np.array(values).view(np.int64))


@settings(max_examples=60, deadline=None)
@given(values=NUMBERS, marks=DELIMITERS, form=FORMS)
def test_whole_columns_and_single_rows_agree(values: list[float], marks: tuple[str, str], form: str) -> None:
    delimiter, decimal = marks
    rows = [(0.1 * i, value) for i, value in enumerate(values * 4)]
    lines = ["Zeit" + delimiter + "Istwert"]
    lines += [delimiter.join(form.format(x).replace(".", decimal) for x in row) for row in rows]
    body = "\n".join(lines) + "\n"
    by_rows = long_text._by_rows("x", body)
    by_columns = long_text._by_columns("x", body)
    assert by_columns is not None or delimiter.strip(" ") == ""
    if by_columns is not None:
        np.testing.assert_array_equal(by_columns.lines, by_rows.lines)
        for one, other in zip(by_columns.columns, by_rows.columns, strict=True):
            assert one.values is not None
            assert other.values is not None
            np.testing.assert_array_equal(one.values.view(np.int64), other.values.view(np.int64))


MUTATIONS = st.lists(
    st.tuples(
        st.integers(0, 1500),
        st.sampled_from(["cut", "insert", "swap", "double", "flip"]),
        st.binary(min_size=1, max_size=6),
    ),
    min_size=1,
    max_size=4,
)


def damaged(data: bytes, mutations: list[tuple[int, str, bytes]]) -> bytes:
    for place, kind, junk in mutations:
        place = place % max(len(data), 1)
        if kind == "cut":
            data = data[:place] + data[place + len(junk) * 3 :]
        elif kind == "insert":
            data = data[:place] + junk + data[place:]
        elif kind == "swap":
            data = data[place:] + data[:place]
        elif kind == "double":
            data = data[:place] + data[max(0, place - 60) :]
        else:
            data = data[:place] + bytes([data[place] ^ junk[0]]) + data[place + 1 :] if data else data
    return data


def check_damaged(data: bytes) -> None:
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "x.csv"
        path.write_bytes(data)
        try:
            record = read_record(path)
        except RecordError as problem:
            if "\n" in str(problem):
                raise AssertionError("more than one line") from problem
            return
    assert len(record.time) >= 5
    assert np.all(np.diff(record.time) > 0)
    for signal in (record.measurement, record.setpoint, record.output):
        if signal is not None:
            assert np.all(np.isfinite(signal.values))
            assert len(signal.values) == len(record.time)


@settings(max_examples=200, deadline=None)
@given(mutations=MUTATIONS, dialect=st.sampled_from([(",", "."), (";", ","), ("\t", "."), ("  ", ".")]))
def test_damaged_files_never_end_in_a_traceback(
    mutations: list[tuple[int, str, bytes]], dialect: tuple[str, str]
) -> None:
    check_damaged(damaged(text(*dialect).encode(), mutations))


@pytest.mark.study
@settings(max_examples=3000, deadline=None)
@given(mutations=MUTATIONS, dialect=st.sampled_from([(",", "."), (";", ","), ("\t", "."), ("  ", "."), ("|", ".")]))
def test_many_damaged_files(mutations: list[tuple[int, str, bytes]], dialect: tuple[str, str]) -> None:
    check_damaged(damaged(text(*dialect).encode(), mutations))


@settings(max_examples=200, deadline=None)
@given(junk=st.binary(max_size=400))
def test_any_bytes(junk: bytes) -> None:
    check_damaged(junk)


@settings(max_examples=200, deadline=None)
@given(junk=st.text(alphabet="0123456789.,;:- \t\n\"'eE+/abTZ|#%°", max_size=400))
def test_any_text(junk: str) -> None:
    check_damaged(junk.encode())
