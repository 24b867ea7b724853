"""The time between rows stated above the data is used where no column tells the time, and said."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from recordings import MEASUREMENT, SETPOINT, TIME, table, workbook, write

from loopfit.core.errors import RecordError
from loopfit.record.read import read_record, record_from_arrays
from loopfit.record.record import Record

BODY = table("PV,SP", MEASUREMENT, SETPOINT)
STATED = [  # lines as loggers write them (common practice), and seconds by their plain meaning
    ("Sample Interval,4.0e-06", 4e-6),
    ("Sample Interval,4.0e-06,s", 4e-6),
    ("Interval: 0.1 s", 0.1),
    ("interval = 250 ms", 0.25),
    ("Sampling rate: 10 Hz", 0.1),
    ("Sample rate (Hz): 20", 0.05),
    ("Sampling frequency\t2 kHz", 5e-4),
    ("Scan rate: 100 ms", 0.1),
    ("Scan Interval;00;5", None),
    ("dt: 0.5", 0.5),
    ("# dt=0.5", 0.5),
    ('"Log interval","2","min"', 120.0),
    ("Abtastrate 100 Hz", 0.01),
    ("Abtastintervall [ms];5", 0.005),
    ("Abtastzeit: 0,02 s", 0.02),
    ("Pas de temps : 0,5 s", 0.5),
    ("Fréquence d'échantillonnage: 4 Hz", 0.25),
    ("Période d'échantillonnage (ms) : 20", 0.02),
    ("Intervalo de muestreo: 1 s", 1.0),
    ("Frecuencia de muestreo: 50 Hz", 0.02),
    ("Sampling rate: 1,000 Hz", None),  # one or a thousand
    ("Interval: 0 s", None),
    ("Interval: 3 bar", None),
    ("Sample Interval: none", None),
    ("Rate=2", None),
]


@pytest.mark.parametrize(("line", "seconds"), STATED, ids=[line for line, _ in STATED])
@pytest.mark.parametrize("body", [BODY, table("PV", MEASUREMENT), BODY.split("\n", 1)[1]], ids=["two", "one", "bare"])
def test_stated_interval(line: str, seconds: float | None, body: str, tmp_path: Path) -> None:
    path = write(tmp_path, "Logger 4\n" + line + "\n\n" + body)
    if seconds is None:
        with pytest.raises(RecordError, match="--interval SECONDS"):
            read_record(path)
        return
    record = read_record(path)
    np.testing.assert_array_equal(record.time, np.arange(len(TIME)) * seconds)
    np.testing.assert_array_equal(record.measurement.values, MEASUREMENT)
    text = next(found.text for found in record.findings if found.code == "interval_stated")
    assert f"{seconds:g} s" in text
    assert " ".join(line.split())[:20] in text


def test_a_column_of_times_and_the_option_go_first(tmp_path: Path) -> None:
    record = read_record(write(tmp_path, "Interval: 7 s\n" + table("Time (s),PV", TIME, MEASUREMENT)))
    np.testing.assert_array_equal(record.time, TIME)
    record = read_record(write(tmp_path, "Interval: 7 s\n" + BODY), interval_s=0.5)
    np.testing.assert_array_equal(record.time, TIME)


def test_a_counter_knows_of_lost_samples(tmp_path: Path) -> None:
    count = [i + 3 * (i > 20) for i in range(len(TIME))]
    record = read_record(write(tmp_path, "Interval: 0.5 s\n" + table("Sample,PV", count, MEASUREMENT)))
    np.testing.assert_array_equal(record.time, 0.5 * np.array(count))


def test_two_intervals_are_asked_about(tmp_path: Path) -> None:
    with pytest.raises(RecordError, match=r"state 0\.1 and 0\.2 s between rows; give --interval SECONDS"):
        read_record(write(tmp_path, "Interval: 0.1 s\nScan interval: 0.2 s\n" + BODY))
    record = read_record(write(tmp_path, "Interval: 0.5 s\nSample rate: 2 Hz\n" + BODY))  # the same twice
    np.testing.assert_array_equal(record.time, TIME)


def test_in_a_workbook(tmp_path: Path) -> None:
    cells = [["Sample interval", 0.5], [None], ["PV", "SP"], *zip(MEASUREMENT, SETPOINT, strict=True)]
    np.testing.assert_array_equal(read_record(write(tmp_path, workbook({"a": cells}))).time, TIME)


def gaps(record: Record) -> list[tuple[str, tuple[float, float] | None]]:
    return [(found.text, found.at_s) for found in record.findings if found.code in ("gaps", "uneven_sampling")]


@pytest.mark.parametrize("name", ["gaps", "uneven", "even"])
def test_arrays_have_the_findings_of_files(name: str, tmp_path: Path) -> None:
    time = {"gaps": TIME + 7 * (TIME > 12), "even": TIME, "uneven": np.cumsum([1.0, 1.0, 5.0, 1.0] * 10)}[name]
    of_file = gaps(read_record(write(tmp_path, table("time (s),PV", time, MEASUREMENT))))
    of_arrays = gaps(record_from_arrays(time=time, measurement=MEASUREMENT))
    assert len(of_file) == len(of_arrays) == (name != "even")
    for (one, place), (other, same_place) in zip(of_file, of_arrays, strict=True):
        assert place == same_place
        words = other.replace("before row 26", "before line 27").replace("'time'", "'time (s)'")  # line 1 has the names
        assert words == one
