"""Clocks: every spelling of the same times gives the same seconds."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from datetime import datetime, timedelta
from pathlib import Path

import numpy as np
import pytest
from recordings import workbook, write

from loopfit.core.errors import RecordError
from loopfit.record.read import read_record
from loopfit.record.record import Record

COUNT = 60
VALUES = [20.0 if i < 10 else 25 - 5 * 0.9 ** (i - 10) for i in range(COUNT)]
START = datetime(2026, 3, 1, 11, 59, 50)  # passes noon
HALVES = [START + timedelta(seconds=0.5 * i) for i in range(COUNT)]
SECONDS = np.arange(COUNT) * 0.5


def read(
    folder: Path, stamps: Sequence[object], header: str = "Time", delimiter: str = ";", **options: object
) -> Record:
    body = "".join(f"{stamp}{delimiter}{value:.3f}\n" for stamp, value in zip(stamps, VALUES, strict=False))
    return read_record(write(folder, f"{header}{delimiter}PV\n{body}"), **options)  # type: ignore[arg-type]


def codes(record: Record) -> set[str]:
    return {finding.code for finding in record.findings}


SPELLINGS: dict[str, Callable[[datetime], str]] = {
    "ISO": datetime.isoformat,
    "ISO, Z": lambda t: t.isoformat() + "Z",
    "ISO, zone": lambda t: t.isoformat() + "+01:00",
    "ISO, blank, microseconds": lambda t: t.strftime("%Y-%m-%d %H:%M:%S.%f"),
    "ISO, nanoseconds": lambda t: t.strftime("%Y-%m-%dT%H:%M:%S.%f000Z"),
    "ISO, comma": lambda t: t.strftime("%Y-%m-%d %H:%M:%S,%f")[:-3],
    "ISO, compact": lambda t: t.strftime("%Y%m%dT%H%M%S.%f"),
    "slashes, year first": lambda t: t.strftime("%Y/%m/%d %H:%M:%S.%f"),
    "points": lambda t: t.strftime("%d.%m.%Y %H:%M:%S.%f")[:-3],
    "points, comma": lambda t: t.strftime("%d.%m.%Y %H:%M:%S,%f")[:-3],
    "points, short year": lambda t: t.strftime("%d.%m.%y %H:%M:%S.%f"),
    "day first": lambda t: t.strftime("%d/%m/%Y %H:%M:%S.%f"),
    "month first, half days": lambda t: t.strftime("%m/%d/%Y %I:%M:%S.%f %p"),
    "month in words": lambda t: t.strftime("%d-Mar-%Y %H:%M:%S.%f"),
    "month in German words": lambda t: t.strftime("%d. März %Y %H:%M:%S.%f"),
    "month in French words": lambda t: t.strftime("%d mars %Y %H:%M:%S.%f"),
    "time of day": lambda t: t.strftime("%H:%M:%S.%f"),
    "time of day, half days": lambda t: t.strftime("%I:%M:%S.%f %p"),
    "epoch": lambda t: f"{1772366390 + (t - START).total_seconds():.1f}",
    "epoch in ms": lambda t: str(1772366390000 + (t - START) // timedelta(milliseconds=1)),
    "epoch in µs": lambda t: str(1772366390000000 + (t - START) // timedelta(microseconds=1)),
    "epoch in ns": lambda t: str(1772366390000000001 + (t - START) // timedelta(microseconds=1) * 1000),
}


@pytest.mark.parametrize("spelling", SPELLINGS)
def test_same_seconds_in_every_spelling(spelling: str, tmp_path: Path) -> None:
    record = read(tmp_path, [SPELLINGS[spelling](stamp) for stamp in HALVES])
    np.testing.assert_array_equal(record.time, SECONDS)


UNITS = [
    ("Time (ms)", 500, "{}"), ("time_ms", 500, "{}"), ("millis", 500, "{}"), ("t [µs]", 500_000, "{}"),
    ("Time / ns", 500_000_000, "{}"), ("Zeit in s", 0.5, "{:.1f}"), ("Tiempo (s)", 0.5, "{:.1f}"),
    ("Temps [s]", 0.5, "{:.1f}"),
]  # fmt: skip


@pytest.mark.parametrize(("header", "step", "form"), UNITS)
def test_unit_in_the_header(header: str, step: float, form: str, tmp_path: Path) -> None:
    record = read(tmp_path, [form.format(step * i) for i in range(COUNT)], header)
    np.testing.assert_array_equal(record.time, SECONDS)
    assert record.findings == ()


def test_minutes_and_hours(tmp_path: Path) -> None:
    record = read(tmp_path, [f"{i * 0.25}" for i in range(COUNT)], "Time (min)")
    np.testing.assert_array_equal(record.time, np.arange(COUNT) * 15.0)
    record = read(tmp_path, [f"{i * 0.25}" for i in range(COUNT)], "Zeit / h")
    np.testing.assert_array_equal(record.time, np.arange(COUNT) * 900.0)


def test_days_of_a_spreadsheet(tmp_path: Path) -> None:
    record = read(tmp_path, [f"{46082.5 + i / 86400:.9f}" for i in range(COUNT)], "Date")
    np.testing.assert_allclose(
        record.time, np.arange(COUNT), rtol=0, atol=1e-9 * 86400
    )  # nine decimals of a day, twice half a digit
    assert "time_in_days" in codes(record)


def test_dates_of_a_workbook(tmp_path: Path) -> None:
    cells = [["Time", "PV"], *([(46082.5 + 0.5 * i / 86400, "date"), value] for i, value in enumerate(VALUES))]
    record = read_record(write(tmp_path, workbook({"a": cells}), "a.xlsx"))
    np.testing.assert_array_equal(record.time, SECONDS)  # rounded to 0.1 ms


def test_date_and_time_in_two_columns(tmp_path: Path) -> None:
    record = read(tmp_path, [t.strftime("%d.%m.%Y;%H:%M:%S.%f") for t in HALVES], "Datum;Uhrzeit")
    np.testing.assert_array_equal(record.time, SECONDS)
    assert record.time_name == "Datum Uhrzeit"


@pytest.mark.parametrize("form", ["%H:%M:%S.%f", "%I:%M:%S.%f %p"])
def test_past_midnight(form: str, tmp_path: Path) -> None:
    late = datetime(2026, 1, 1, 23, 59, 50)
    record = read(tmp_path, [(late + timedelta(seconds=0.5 * i)).strftime(form) for i in range(COUNT)])
    np.testing.assert_array_equal(record.time, SECONDS)
    assert "past_midnight" in codes(record)


@pytest.mark.parametrize("form", ["%d/%m/%Y %H:%M:%S.%f", "%m/%d/%Y %H:%M:%S.%f"])
def test_dates_past_midnight_tell_day_from_month(form: str, tmp_path: Path) -> None:
    """3 to 4 April, or 4 March to 4 April with a month between two rows."""
    late = datetime(2026, 4, 3, 23, 59, 50)
    record = read(tmp_path, [(late + timedelta(seconds=0.5 * i)).strftime(form) for i in range(COUNT)])
    np.testing.assert_array_equal(record.time, SECONDS)
    assert "date_order" in codes(record)


def test_order_of_day_and_month(tmp_path: Path) -> None:
    assert "date_order" in codes(read(tmp_path, [t.strftime("%d/%m/%Y %H:%M:%S.%f") for t in HALVES]))
    thirteenth = [t.replace(day=13).strftime("%m/%d/%Y %H:%M:%S.%f") for t in HALVES]
    assert "date_order" not in codes(read(tmp_path, thirteenth))
    with pytest.raises(RecordError, match="day first or month first"):
        read(tmp_path, [(datetime(2026, 1, 1) + timedelta(days=i)).strftime("%d/%m/%Y") for i in range(10)])
    backwards = [f"0{1 + i // 3}/0{1 + i % 3 * 2}/2026 12:00:00" for i in range(9)]  # day first would run back
    record = read(tmp_path, backwards)
    assert record.time[1] == 2 * 86400
    # over a month's end the thirteenth to the thirty-first decide for the whole column
    days = [(datetime(2026, 1, 5) + timedelta(days=i)).strftime("%d/%m/%Y") for i in range(20)]
    np.testing.assert_array_equal(read(tmp_path, days).time, np.arange(20) * 86400.0)


def test_hours_and_minutes_or_minutes_and_seconds(tmp_path: Path) -> None:
    stamps = [(START + timedelta(minutes=i)).strftime("%H:%M") for i in range(COUNT)]
    with pytest.raises(RecordError, match="hh:mm:ss"):
        read(tmp_path, stamps)
    np.testing.assert_array_equal(read(tmp_path, stamps, "Time (hh:mm)").time, np.arange(COUNT) * 60.0)
    np.testing.assert_array_equal(read(tmp_path, stamps, "Time (mm:ss)").time, np.arange(COUNT) * 1.0)


CHANGES = [  # local time jumps in the night to Sunday: dates and hours of the laws of 2026, common knowledge
    ("Berlin, autumn", datetime(2026, 10, 25, 3), -1),
    ("Berlin, spring", datetime(2026, 3, 29, 2), 1),
    ("London, autumn", datetime(2026, 10, 25, 2), -1),
    ("London, spring", datetime(2026, 3, 29, 1), 1),
    ("New York, autumn", datetime(2026, 11, 1, 2), -1),
    ("New York, spring", datetime(2026, 3, 8, 2), 1),
]


@pytest.mark.parametrize(("instant", "hours"), [change[1:] for change in CHANGES], ids=[c[0] for c in CHANGES])
@pytest.mark.parametrize("form", ["%Y-%m-%d %H:%M:%S.%f", "%d.%m.%Y %H:%M:%S.%f", "%m/%d/%Y %I:%M:%S.%f %p"])
def test_summer_time(instant: datetime, hours: int, form: str, tmp_path: Path) -> None:
    begin = instant - timedelta(seconds=10)
    walls = [begin + timedelta(seconds=0.5 * i + (3600 * hours if i >= 20 else 0)) for i in range(COUNT)]
    record = read(tmp_path, [wall.strftime(form) for wall in walls])
    np.testing.assert_array_equal(record.time, SECONDS)
    assert "summer_time" in codes(record)
    assert "line 22" in next(f.text for f in record.findings if f.code == "summer_time")


def test_an_hour_back_in_the_week_is_refused(tmp_path: Path) -> None:
    midweek = datetime(2026, 10, 28, 2, 59, 50)
    walls = [midweek + timedelta(seconds=0.5 * i - (3600 if i >= 20 else 0)) for i in range(COUNT)]
    with pytest.raises(RecordError, match=r"row 22.*runs back"):
        read(tmp_path, [wall.isoformat() for wall in walls])


def test_stamps_with_a_zone_need_no_correction(tmp_path: Path) -> None:
    begin = datetime(2026, 10, 25, 2, 59, 50)
    walls = [begin + timedelta(seconds=0.5 * i - (3600 if i >= 20 else 0)) for i in range(COUNT)]
    stamps = [wall.isoformat() + ("+01:00" if i >= 20 else "+02:00") for i, wall in enumerate(walls)]
    record = read(tmp_path, stamps)
    np.testing.assert_array_equal(record.time, SECONDS)
    assert record.findings == ()


def test_newest_first(tmp_path: Path) -> None:
    body = "".join(
        f"{stamp.isoformat()};{value:.3f}\n" for stamp, value in zip(HALVES[::-1], VALUES[::-1], strict=True)
    )
    record = read_record(write(tmp_path, "Time;PV\n" + body))
    np.testing.assert_array_equal(record.time, SECONDS)
    assert record.measurement.values[0] == 20.0
    assert "newest_first" in codes(record)


@pytest.mark.parametrize("rate", [2, 3, 10])
def test_stamps_coarser_than_the_rows(rate: int, tmp_path: Path) -> None:
    stamps = [(START + timedelta(seconds=i // rate)).isoformat() for i in range(COUNT)]
    record = read(tmp_path, stamps)
    assert len(record.time) == COUNT
    np.testing.assert_allclose(np.diff(record.time), 1 / rate, rtol=1e-9)
    assert "coarse_stamps" in codes(record)


def test_stamps_in_bursts(tmp_path: Path) -> None:
    rng = np.random.default_rng(7)
    stamps: list[str] = []
    while len(stamps) < COUNT:
        size = int(rng.choice([1, 2, 3, 5]))
        stamps += [f"{0.1 * (len(stamps) + size):.1f}"] * size
    record = read(tmp_path, stamps[:COUNT], "Time (s)")
    # the device sampled every 0.1 s; the largest burst is 0.5 s, shared out over the record
    np.testing.assert_allclose(record.time - record.time[0], 0.1 * np.arange(COUNT), atol=0.5)
    assert [f.severity for f in record.findings if f.code == "stamps_in_bursts"] == ["warning"]


def test_clock_of_the_device_is_preferred_to_coarse_stamps(tmp_path: Path) -> None:
    stamps = [f"{(START + timedelta(seconds=i // 20)).isoformat()};{50 * i + 123}" for i in range(COUNT)]
    record = read(tmp_path, stamps, "host;device_ms")
    assert record.time_name == "device_ms"
    np.testing.assert_array_equal(record.time, (50 * np.arange(COUNT) + 123) / 1000)


def test_gaps_and_jitter(tmp_path: Path) -> None:
    record = read(tmp_path, [f"{0.5 * i + (7 if i > 30 else 0):.1f}" for i in range(COUNT)], "Time (s)")
    gap = next(f for f in record.findings if f.code == "gaps")
    assert gap.at_s == (15.0, 22.5)
    assert "line 33" in gap.text
    rng = np.random.default_rng(7)
    record = read(tmp_path, [f"{0.5 * i + rng.uniform(-0.1, 0.1):.3f}" for i in range(COUNT)], "Time (s)")
    assert record.findings == ()
    times = np.cumsum(rng.exponential(1, COUNT))
    assert "uneven_sampling" in codes(read(tmp_path, [f"{t:.3f}" for t in times], "Time (s)"))


def test_single_missing_rows_of_an_even_clock(tmp_path: Path) -> None:
    stamps = [f"{0.5 * i + 0.5 * (i > 30):.1f}" for i in range(COUNT)]
    record = read(tmp_path, stamps, "Time (s)")
    (finding,) = record.findings
    assert (finding.code, finding.severity) == ("missing_rows", "note")
    assert "before line 33" in finding.text
    bad = [f"{0.5 * i:.1f}" if i != 30 else "---" for i in range(COUNT)]  # left out, and said so already
    assert codes(read(tmp_path, bad, "Time (s)")) == {"bad_cells"}


def test_counters(tmp_path: Path) -> None:
    with pytest.raises(RecordError, match=r"'Sample' only counts the rows; give --interval SECONDS"):
        read(tmp_path, range(COUNT), "Sample")
    record = read(tmp_path, range(COUNT), "Sample", interval_s=0.5)
    np.testing.assert_array_equal(record.time, SECONDS)
    assert record.measurement.name == "PV"
    assert record.others == ()
    gappy = [i + (10 if i > 30 else 0) for i in range(COUNT)]  # the counter knows of ten lost samples
    record = read(tmp_path, gappy, "Sample", interval_s=0.5, columns={"time": "Sample"})
    np.testing.assert_array_equal(record.time, 0.5 * np.array(gappy))


@pytest.mark.parametrize("place", [5, 30, COUNT - 1])
def test_clock_that_runs_back_is_refused(place: int, tmp_path: Path) -> None:
    times = [f"{0.5 * i - (1.2 if i == place else 0):.1f}" for i in range(COUNT)]
    with pytest.raises(RecordError, match=f"row {place + 2}: the clock 'Time' runs back"):
        read(tmp_path, times)


def test_bad_stamps_are_counted(tmp_path: Path) -> None:
    record = read(tmp_path, ["---" if i == 7 else t.isoformat() for i, t in enumerate(HALVES)])
    assert len(record.time) == COUNT - 1
    assert "line 9" in next(f.text for f in record.findings if f.code == "bad_cells")
