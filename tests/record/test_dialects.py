"""The same recording in every dialect gives the same numbers, bit for bit."""

from __future__ import annotations

import gzip
import io
from pathlib import Path

import numpy as np
import pytest
from recordings import MEASUREMENT, NAMES, OUTPUT, SETPOINT, TIME, rows, text, workbook, write, zipped

from loopfit.record.read import read_record
from loopfit.record.record import Record

LINES = text().splitlines()
GERMAN = ("Zeit (s)", "Istwert (°C)", "Sollwert (°C)", "Stellgröße (%)")


def _quoted(decimal: str) -> str:
    lines = [NAMES, *rows(decimal=decimal)]
    return "".join(",".join(f'"{cell}"' for cell in line) + "\n" for line in lines)


DIALECTS: dict[str, str | bytes] = {
    "comma": text(),
    "semicolon": text(";"),
    "semicolon, decimal comma": text(";", ","),
    "tab": text("\t"),
    "tab, decimal comma": text("\t", ","),
    "pipe": text("|"),
    "blanks": text("   ", names=("Time", "PV", "SP", "OP")),
    "blanks, decimal comma": text("  ", ",", names=("Time", "PV", "SP", "OP")),
    "blanks, names with blanks": text("  "),
    "comma and blank": text(", "),
    "blank, semicolon, blank": text(" ; ", ","),
    "quotes": _quoted("."),
    "quotes, decimal comma": _quoted(","),
    "carriage returns only": text(end="\r"),
    "both line ends": text(end="\r\n"),
    "UTF-8 with mark": text(names=GERMAN).encode("utf-8-sig"),
    "UTF-16 with mark": text(names=GERMAN).encode("utf-16"),
    "UTF-16 little end first, no mark": text(names=GERMAN).encode("utf-16-le"),
    "UTF-16 big end first, no mark": text(names=GERMAN).encode("utf-16-be"),
    "UTF-32": text(names=GERMAN).encode("utf-32"),
    "cp1252": text(names=GERMAN).encode("cp1252"),
    "Latin-1": text(names=GERMAN).encode("latin-1"),
    "preamble": "Logger ABC;;;\nSerial;123;;\nDate;2026-03-01;;\n\n" + text(";", ","),
    "preamble of settings": "[Header]\nRate=2\nChannels=4\n" + text(),
    "title": "Test 5 of unit 7\n" + text("\t"),
    "header on two rows": ",Loop 1,,\n" + text(),
    "units row": text().replace("OP\n", "OP\ns,degC,degC,%\n", 1),
    "units row in brackets": text().replace("OP\n", "OP\n[s],[degC],[degC],[%]\n", 1),
    "closing delimiters": text().replace("\n", ",\n"),
    "closing delimiters, not in the header": "\n".join([LINES[0], *[line + "," for line in LINES[1:]], ""]),
    "comment lines": "# made by x\n# on 2026-03-01\n" + text(),
    "header in a comment": "# " + text(),
    "blank lines": text().replace("\n", "\n\n"),
    "footer": text() + "End of file\nTotal rows: 40\n",
    "counter without a name": "".join((f"{i - 1}," if i else ",") + line + "\n" for i, line in enumerate(LINES)),
    "name over two lines": text(names=("Time (s)", '"PV\n(degC)"', "SP", "OP")),
    "units in the cells": "Time;PV;SP;OP\n" + "".join(f"{a} s;{b} °C;{c} °C;{d} %\n" for a, b, c, d in rows()),
    "end-of-file mark": text() + "\x1a",
    "gzip": gzip.compress(text().encode()),
    "zip": zipped({"a.csv": text()}),
    "gzip in two members": gzip.compress(text()[:200].encode()) + gzip.compress(text()[200:].encode()),
    "spreadsheet": workbook({"Sheet1": [NAMES, *zip(TIME, MEASUREMENT, SETPOINT, OUTPUT, strict=True)]}),
    "spreadsheet with titles and a second sheet": workbook(
        {
            "notes": [["made by", "x"]],
            "data": [
                ["Run 5"],
                [None],
                [None, *NAMES],
                *([None, *r] for r in zip(TIME, MEASUREMENT, SETPOINT, OUTPUT, strict=True)),
            ],
        }
    ),
    "spreadsheet of texts with decimal comma": workbook({"a": [NAMES, *rows(decimal=",")]}),
}


def same(record: Record) -> None:
    assert record.rows == len(TIME)
    np.testing.assert_array_equal(record.time, TIME)
    np.testing.assert_array_equal(record.measurement.values, MEASUREMENT)
    assert record.setpoint is not None
    np.testing.assert_array_equal(record.setpoint.values, SETPOINT)
    assert record.output is not None
    np.testing.assert_array_equal(record.output.values, OUTPUT)
    assert record.others == ()
    assert [f for f in record.findings if f.severity != "note"] == []


@pytest.mark.parametrize("dialect", DIALECTS)
def test_same_numbers_in_every_dialect(dialect: str, tmp_path: Path) -> None:
    same(read_record(write(tmp_path, DIALECTS[dialect])))


def test_contents_decide_not_the_name(tmp_path: Path) -> None:
    same(read_record(write(tmp_path, text(), "test.xlsx")))
    same(read_record(write(tmp_path, DIALECTS["spreadsheet"], "test.txt")))


def test_parquet(tmp_path: Path) -> None:
    pl = pytest.importorskip("polars")
    frame = pl.DataFrame(dict(zip(NAMES, (TIME, MEASUREMENT, SETPOINT, OUTPUT), strict=True)))
    frame.write_parquet(tmp_path / "test.csv")
    same(read_record(tmp_path / "test.csv"))


def test_standard_input(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("sys.stdin", io.TextIOWrapper(io.BytesIO(text().encode())))
    record = read_record("-")
    same(record)
    assert record.source == "-"


def test_units_and_names(tmp_path: Path) -> None:
    record = read_record(write(tmp_path, text(names=GERMAN).encode("cp1252")))
    assert record.measurement.name == "Istwert (°C)"
    assert record.measurement.unit == "°C"
    assert record.output is not None
    assert record.output.name == "Stellgröße (%)"
    assert record.output.unit == "%"
    record = read_record(write(tmp_path, DIALECTS["units row"]))
    assert (record.measurement.name, record.measurement.unit) == ("PV", "degC")


def test_no_header(tmp_path: Path) -> None:
    record = read_record(write(tmp_path, text(names=None)))
    same(record)
    assert record.measurement.name == "column 2"
    assert {f.code for f in record.findings} >= {"no_header", "time_by_content", "stepped_is_setpoint"}


THOUSANDS = [
    (";", "0,0;998;1.000", "0,5;1.002;1.000", [998.0, 1002.0]),
    (";", "0.0;998.5;1,000.0", "0.5;1,002.5;1,000.0", [998.5, 1002.5]),
    ("\t", "0,0\t998,5\t1 000,0", "0,5\t1 002,5\t1 000,0", [998.5, 1002.5]),
    ("\t", "0.0\t998.5\t1'000.0", "0.5\t1'002.5\t1'000.0", [998.5, 1002.5]),
]


@pytest.mark.parametrize(("delimiter", "first", "second", "values"), THOUSANDS)
def test_marks_between_thousands(delimiter: str, first: str, second: str, values: list[float], tmp_path: Path) -> None:
    lines = []
    for i in range(20):
        cells = (first if i % 2 == 0 else second).split(delimiter)
        comma = "," in cells[0]
        cells[0] = f"{i * 0.5:.1f}".replace(".", "," if comma else ".")
        lines.append(delimiter.join(cells))
    record = read_record(write(tmp_path, delimiter.join(("Time (s)", "PV", "SP")) + "\n" + "\n".join(lines) + "\n"))
    assert record.measurement.values.tolist() == values * 10
    assert record.time.tolist() == [i * 0.5 for i in range(20)]


def test_marks_between_thousands_in_a_few_rows_only(tmp_path: Path) -> None:
    values = [998.0 + 4.5 * (i in (71, 72)) for i in range(400)]
    for form, delimiter, mark in (("{:,.2f}", "\t", ","), ('"{:,.2f}"', ",", ","), ("{:,.2f}", ";", "'")):
        cells = [form.format(value).replace(",", mark) for value in values]
        lines = "".join(f"{i}{delimiter}{cell}{delimiter}1000.5\n" for i, cell in enumerate(cells))
        record = read_record(write(tmp_path, delimiter.join(("Time (s)", "PV", "SP")) + "\n" + lines))
        assert record.measurement.values.tolist() == values
    lines = "".join(f"{i}\t{'12,345' if i == 50 else 12.345}\t1\n" for i in range(400))
    record = read_record(write(tmp_path, "Time (s)\tPV\tSP\n" + lines))  # one wrong decimal mark is no thousand
    assert len(record.time) == 399


def test_three_decimals_are_not_thousands(tmp_path: Path) -> None:
    lines = "".join(f"{i};1.{i:03d};{'0' if i < 5 else '1.250'}\n" for i in range(20))
    record = read_record(write(tmp_path, "Time (s);PV;SP\n" + lines))
    assert record.measurement.values.tolist() == [1 + i / 1000 for i in range(20)]
    assert record.setpoint is not None
    assert record.setpoint.values[-1] == 1.25


def test_one_column_with_decimal_comma(tmp_path: Path) -> None:
    path = write(tmp_path, "12,5\n13,5\n14,2\n15,1\n14,9\n15,1\n")
    assert read_record(path, interval_s=1).measurement.values.tolist() == [12.5, 13.5, 14.2, 15.1, 14.9, 15.1]
