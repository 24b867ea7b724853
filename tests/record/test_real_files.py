"""Ten recordings made by other people (tests/data/real): roles, numbers and counts as a person reads them."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest

from loopfit.core.errors import RecordError
from loopfit.record.read import read_record

REAL = Path(__file__).parents[1] / "data" / "real"

# file, options, rows, time column, measurement, setpoint, output; read off the files by eye
READINGS: list[tuple[str, dict[str, Any], int, str | None, str, str | None, str | None]] = [
    ("r03.csv", {}, 300, "Tiempo (s)", "Velocidad (rad/s)", None, "Voltaje (V)"),
    ("r04.txt", {}, 527, "Time ( s )", "Voltage ( V )", None, None),
    ("r06.txt", {}, 203, "Time ( s )", "Voltage ( V )", None, None),
    ("r07.csv", {}, 1001, "time", "angular_velocity", None, None),
    ("r12.txt", {}, 599, "Time (sec)", "Temperature 1 (degC)", None, "Heater 1 (%)"),
    ("r13.csv", {}, 1001, "Time", "T1", None, "Q1"),
    ("r15.txt", {}, 9197, "Time ( s )", "Voltage ( V )", None, None),
    ("r17.csv", {"interval_s": 0.1}, 2000, None, "Channel 2", "Channel 1", "Channel 3"),
    ("r18.csv", {"interval_s": 0.1}, 2000, None, "Channel 2", "Channel 1", "Channel 3"),
    ("r20.csv", {}, 2500, "column 4", "column 5", None, None),
]


@pytest.mark.parametrize(("name", "options", "rows", "time", "measurement", "setpoint", "output"), READINGS)
def test_roles(
    name: str,
    options: dict[str, Any],
    rows: int,
    time: str | None,
    measurement: str,
    setpoint: str | None,
    output: str | None,
) -> None:
    record = read_record(REAL / name, **options)
    assert (record.rows, len(record.time)) == (rows, rows)
    assert record.time_name == time
    assert record.measurement.name == measurement
    assert (record.setpoint and record.setpoint.name) == setpoint
    assert (record.output and record.output.name) == output
    assert all(finding.severity == "note" for finding in record.findings)


# file, first and last time, first and last measurement; read off the files by eye
ENDS = [
    ("r03.csv", (0.02, 6.0), (0.0, 11.6355)),
    ("r04.txt", (0.0, 52.6), (-0.077, 7.324e-4)),
    ("r07.csv", (0.0, 2.0000000000000004), (3.236790061330015, -0.030127249708722107)),
    ("r12.txt", (0.0, 598.9001860618591309), (20.83, 53.48)),
    ("r13.csv", (0.0, 999.62), (22.51, 65.05)),
    ("r15.txt", (0.0, 919.6), (0.002, -0.002)),
    ("r20.csv", (-0.0054, 0.004596), (-6.0, -0.8)),
]


@pytest.mark.parametrize(("name", "times", "values"), ENDS)
def test_first_and_last_row(name: str, times: tuple[float, float], values: tuple[float, float]) -> None:
    record = read_record(REAL / name)
    assert (record.time[0], record.time[-1]) == times
    assert (record.measurement.values[0], record.measurement.values[-1]) == values


@pytest.mark.parametrize("name", ["r17.csv", "r18.csv"])
def test_no_time_column_asks_for_the_interval(name: str) -> None:
    with pytest.raises(RecordError, match="--interval SECONDS"):
        read_record(REAL / name)


def codes(name: str, **options: Any) -> set[str]:
    return {finding.code for finding in read_record(REAL / name, **options).findings}


def test_choices_are_named() -> None:
    assert "same_signal_twice" in codes("r03.csv")  # counts and volts step together
    assert codes("r12.txt") >= {"paired_by_name", "setpoint_unused", "columns_set_aside"}
    assert codes("r13.csv") >= {"paired_by_name", "columns_set_aside"}
    assert codes("r17.csv", interval_s=0.1) >= {"interval_given", "measurement_by_content", "stepped_is_setpoint"}
    assert codes("r20.csv") >= {"no_header", "time_by_content", "text_columns"}


def test_columns_as_a_user_names_them() -> None:
    record = read_record(REAL / "r12.txt", columns={"measurement": "temperature 2", "output": 3})
    assert record.measurement.name == "Temperature 2 (degC)"
    assert record.output is not None
    assert record.output.name == "Heater 2 (%)"
    with pytest.raises(RecordError, match=r"no column 'T9'.*'T1', 'T2'"):
        read_record(REAL / "r13.csv", columns={"measurement": "T9"})


def test_window_is_on_the_clock_of_the_file() -> None:
    record = read_record(REAL / "r04.txt", window_s=(8.0, None))
    assert (record.time[0], record.time[-1]) == (8.0, 52.6)
    assert record.rows == 527
    record = read_record(REAL / "r18.csv", interval_s=0.1, window_s=(61, 90))
    assert record.time[0] == pytest.approx(61, abs=1e-9)  # 610 times 0.1, rounded
    with pytest.raises(RecordError, match=r"rows between --from and --to; the record runs from 0 to 52\.6 s"):
        read_record(REAL / "r04.txt", window_s=(100, 200))
