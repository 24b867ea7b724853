"""No row is dropped, mended or misread without a word."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from recordings import MEASUREMENT, ROWS, TIME, rows, text, write

from loopfit.record.read import read_record
from loopfit.record.record import Record

LINES = text().splitlines()


def joined(lines: list[str]) -> str:
    return "\n".join(lines) + "\n"


def finding(record: Record, code: str) -> str:
    texts = [found.text for found in record.findings if found.code == code]
    assert len(texts) == 1, [found.code for found in record.findings]
    return texts[0]


BAD_WORDS = ["Bad", "---", "No Data", "", "NaN", "#N/A", "Err", "inf", "1.#QNAN", "1e400", "??", "12.3.4"]


@pytest.mark.parametrize("word", BAD_WORDS)
def test_bad_cells_are_counted_and_placed(word: str, tmp_path: Path) -> None:
    cells = rows()
    for place in (3, 17, 18):
        cells[place][1] = word
    record = read_record(write(tmp_path, joined([LINES[0], *[",".join(row) for row in cells]])))
    keep = np.isin(np.arange(ROWS), [3, 17, 18], invert=True)
    np.testing.assert_array_equal(record.time, TIME[keep])
    np.testing.assert_array_equal(record.measurement.values, MEASUREMENT[keep])
    assert record.rows == ROWS
    assert finding(record, "bad_cells").startswith("3 rows without a number in 'PV' left out (lines 5, 19, 20)")


def test_first_row_bad_is_not_taken_for_a_header(tmp_path: Path) -> None:
    cells = rows()
    cells[0][1] = "Init"
    record = read_record(write(tmp_path, joined([LINES[0], *[",".join(row) for row in cells]])))
    assert record.measurement.name == "PV"
    assert record.time[0] == 0.5
    assert "line 2" in finding(record, "bad_cells")


def test_ragged_rows(tmp_path: Path) -> None:
    lines = list(LINES)
    lines[10] = "4.5,22"
    lines[12] += ",7"
    record = read_record(write(tmp_path, joined(lines)))
    assert len(record.time) == ROWS - 2
    assert record.rows == ROWS
    assert "2 rows without exactly 4 cells left out (lines 11, 13)" in finding(record, "ragged_rows")


def test_duplicate_rows_and_repeated_stamps(tmp_path: Path) -> None:
    other = LINES[20].split(",")
    other[1] = "99.000"
    record = read_record(write(tmp_path, joined([*LINES[:8], LINES[7], *LINES[8:21], ",".join(other), *LINES[21:]])))
    np.testing.assert_array_equal(record.measurement.values, MEASUREMENT)
    assert "line 9" in finding(record, "duplicate_rows")
    assert "line 23" in finding(record, "repeated_stamps")


@pytest.mark.parametrize("cut", [2, 3, 9, 15])
def test_cut_last_line(cut: int, tmp_path: Path) -> None:
    record = read_record(write(tmp_path, text()[:-cut]))
    np.testing.assert_array_equal(record.time, TIME[:-1])
    assert "(41)" in finding(record, "last_line_cut")


def test_last_line_without_a_break_is_kept_and_named(tmp_path: Path) -> None:
    record = read_record(write(tmp_path, text()[:-1]))
    np.testing.assert_array_equal(record.time, TIME)
    assert "(41)" in finding(record, "no_final_line_break")


def test_text_below_and_between(tmp_path: Path) -> None:
    body = joined([*LINES[:20], "# pump started", *LINES[20:], "End", "Rows: 40", "Rows,40"])
    record = read_record(write(tmp_path, body))
    np.testing.assert_array_equal(record.time, TIME)
    assert record.rows == ROWS
    assert "line 21" in finding(record, "text_between_rows")
    assert "lines 43, 44, 45" in finding(record, "footer")
    assert "ragged_rows" not in {found.code for found in record.findings}


def test_repeated_header_with_the_clock_going_on(tmp_path: Path) -> None:
    record = read_record(write(tmp_path, joined([*LINES[:21], LINES[0], *LINES[21:]])))
    np.testing.assert_array_equal(record.time, TIME)
    assert "line 22" in finding(record, "repeated_header")


def test_restart_keeps_the_longest_part(tmp_path: Path) -> None:
    for again in (LINES, LINES[1:]):  # with and without the line of names
        record = read_record(write(tmp_path, joined([*LINES[:21], *again])))
        np.testing.assert_array_equal(record.measurement.values, MEASUREMENT)
        assert record.rows == ROWS + 20
        assert "2 recordings" in finding(record, "restarted")


def test_zero_bytes(tmp_path: Path) -> None:
    body = joined([*LINES[:20], "\0" * 300, *LINES[20:]])
    record = read_record(write(tmp_path, body))
    np.testing.assert_array_equal(record.time, TIME)
    assert finding(record, "zero_bytes").startswith("300 zero bytes")


def test_input_written_only_when_it_changes_is_held(tmp_path: Path) -> None:
    cells = rows()
    for place, row in enumerate(cells):
        if place not in (0, 10):
            row[2] = ""
    record = read_record(write(tmp_path, joined([LINES[0], *[",".join(row) for row in cells]])))
    assert record.setpoint is not None
    np.testing.assert_array_equal(record.setpoint.values, np.where(TIME < 5, 20.0, 25.0))
    assert "2 of 40 rows" in finding(record, "held_values")


def test_quality_flags(tmp_path: Path) -> None:
    lines = [LINES[0] + ",Quality", *[f"{line},{'Bad' if i == 6 else 'Good'}" for i, line in enumerate(LINES[1:])]]
    record = read_record(write(tmp_path, joined(lines)))
    assert len(record.time) == ROWS - 1
    assert "line 8" in finding(record, "bad_quality")


@pytest.mark.parametrize("by_tag", [False, True])
def test_one_value_a_row(by_tag: bool, tmp_path: Path) -> None:
    lines = []
    for time, pv, sp, _ in rows():
        flag = "Bad" if float(time) == 7 else "Good"
        lines += [
            f"TIC1.PV,2026-03-01T12:00:{float(time):06.3f},{pv},{flag}",
            f"TIC1.SP,2026-03-01T12:00:{float(time):06.3f},{sp},Good",
        ]
    record = read_record(write(tmp_path, joined(["tag,time,value,quality", *(sorted(lines) if by_tag else lines)])))
    np.testing.assert_array_equal(record.time, TIME[TIME != 7])
    np.testing.assert_array_equal(record.measurement.values, MEASUREMENT[TIME != 7])
    assert record.setpoint is not None
    assert record.setpoint.name == "TIC1.SP"
    np.testing.assert_array_equal(record.setpoint.values, np.where(TIME < 5, 20.0, 25.0)[TIME != 7])
    assert "'TIC1.PV', 'TIC1.SP'" in finding(record, "long_form")
    assert "1 row" in finding(record, "bad_quality")


def test_one_value_a_row_with_the_setpoint_at_its_own_times(tmp_path: Path) -> None:
    lines = [f"PV,{time},{pv}" for time, pv, _, _ in rows()] + ["SP,0.000,20.0", "SP,5.000,25.0"]
    record = read_record(write(tmp_path, joined(["variable,time,value", *lines])))
    np.testing.assert_array_equal(record.time, TIME)
    assert record.setpoint is not None
    np.testing.assert_array_equal(record.setpoint.values, np.where(TIME < 5, 20.0, 25.0))
    assert "'SP'" in finding(record, "held_values")


def test_mode_column_is_no_tag(tmp_path: Path) -> None:
    lines = ["time,PV,mode", *[f"{time},{pv},{'AUTO' if float(time) > 3 else 'MAN'}" for time, pv, _, _ in rows()]]
    record = read_record(write(tmp_path, joined(lines)))
    np.testing.assert_array_equal(record.measurement.values, MEASUREMENT)
    assert "'mode'" in finding(record, "text_columns")
