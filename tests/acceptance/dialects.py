"""How loggers, spreadsheets and programs write one record down; by polars, pandas and openpyxl where they can."""

from __future__ import annotations

import datetime as dt
import io
from collections.abc import Callable

import numpy as np
import openpyxl
import pandas as pd
import polars as pl
from record_kinds import Made

NAMES = {"time": "Time (s)", "measurement": "PV", "setpoint": "SP", "output": "OP"}
GERMAN = {
    "time": "Zeit (s)",
    "measurement": "Istwert (°C)",
    "setpoint": "Sollwert (°C)",
    "output": "Stellgröße (%)",
}
SPANISH = {"time": "Tiempo (s)", "measurement": "Valor medido", "setpoint": "Consigna", "output": "Salida (%)"}
FRENCH = {"time": "Temps (s)", "measurement": "Mesure (°C)", "setpoint": "Consigne (°C)", "output": "Commande (%)"}
START = dt.datetime(2026, 3, 13, 11, 59, 50)  # a record passes noon; the 13th settles day and month


def frame(made: Made, names: dict[str, str] = NAMES) -> pd.DataFrame:
    """The record as a pandas table."""
    return pd.DataFrame({names[role]: values for role, values in made.columns.items()})


def stamped(made: Made, form: Callable[[dt.datetime], str], name: str = "Timestamp") -> pd.DataFrame:
    """The record as a pandas table with the times written out."""
    table = frame(made)
    return pd.concat([pd.Series(list(map(form, stamps(made))), name=name), table.iloc[:, 1:]], axis=1)


def stamps(made: Made) -> list[dt.datetime]:
    """The times as instants of the calendar, to the millisecond."""
    return [START + dt.timedelta(milliseconds=round(1000 * t)) for t in made.time]


def milliseconds(form: str) -> Callable[[dt.datetime], str]:
    """Return a writer of stamps that ends in milliseconds."""
    return lambda stamp: stamp.strftime(form)[:-3]


def by_pandas(table: pd.DataFrame, encoding: str = "utf-8", **options: object) -> bytes:
    text: str = table.to_csv(index=False, **options)  # type: ignore[call-overload]
    return text.encode(encoding)


def by_polars(made: Made, separator: str) -> bytes:
    return pl.DataFrame({NAMES[role]: values for role, values in made.columns.items()}).write_csv(
        separator=separator
    ).encode()  # fmt: skip


def compressed(made: Made, method: str) -> bytes:
    stream = io.BytesIO()
    compression = {"method": method, "archive_name": "a.csv"} if method == "zip" else {"method": method}
    frame(made).to_csv(stream, index=False, compression=compression)
    return stream.getvalue()


def workbook(made: Made, *, dates: bool = False, titles: bool = False) -> bytes:
    """An .xlsx by openpyxl: numbers, or dates of the spreadsheet in the first column."""
    book = openpyxl.Workbook()
    sheet = book.active
    assert sheet is not None
    if titles:
        sheet.append(["Trend export"])
        sheet.append([])
    sheet.append([NAMES[role] for role in made.columns])
    first = stamps(made) if dates else made.time.tolist()
    others = [values.tolist() for role, values in made.columns.items() if role != "time"]
    for row in zip(first, *others, strict=True):
        sheet.append(row)
    if dates:
        sheet.cell(row=sheet.min_row, column=1).value = "Time"
    stream = io.BytesIO()
    book.save(stream)
    return stream.getvalue()


def parquet(made: Made, *, dates: bool = False) -> bytes:
    table = pl.DataFrame({NAMES[role]: values for role, values in made.columns.items()})
    if dates:
        table = table.with_columns(pl.Series("Time (s)", stamps(made))).rename({"Time (s)": "Time"})
    stream = io.BytesIO()
    table.write_parquet(stream)
    return stream.getvalue()


def decorated(made: Made) -> bytes:
    """Title lines of another width above, a line of text below."""
    head = 'Station 7;"Trend export"\nOperator;A. Miller;;\nCreated;2026-03-13 18:00\n\n'
    return (
        head + by_pandas(frame(made), sep=";").decode() + "End of export\nRows;" + str(len(made.time)) + "\n"
    ).encode()


def long_names(made: Made) -> bytes:
    """A row of groups above the names and a row of units below them."""
    roles = list(made.columns)
    body = by_pandas(frame(made)).decode().split("\n", 1)[1]
    units = {"time": "s", "measurement": "bar", "setpoint": "bar", "output": "%"}
    head = [
        ["", *["Loop 1"] * (len(roles) - 1)],
        ["Time", *[NAMES[role] for role in roles[1:]]],
        [units[r] for r in roles],
    ]
    return ("".join(",".join(row) + "\n" for row in head) + body).encode()


def one_value_a_row(made: Made, *, stamped_times: bool) -> bytes:
    """A historian's export: tag, time, value, quality."""
    table = frame(made, {"time": "time", "measurement": "TIC1.PV", "setpoint": "TIC1.SP", "output": "TIC1.OP"})
    if stamped_times:
        table["time"] = [stamp.isoformat(timespec="milliseconds") for stamp in stamps(made)]
    long = table.melt(id_vars="time", var_name="tag", value_name="value")[["tag", "time", "value"]]
    long["quality"] = "Good"
    return by_pandas(long)


def blanks(made: Made) -> bytes:
    """Columns lined up by blanks."""
    table = frame(made, {"time": "Time", "measurement": "PV", "setpoint": "SP", "output": "OP"})
    return (table.astype(str).to_string(index=False) + "\n").encode()


def thousands(made: Made) -> bytes:
    """1,034.5 in quotes, as spreadsheets export a formatted column."""
    table = frame(made)
    values = [f"{value:,.3f}" for value in made.measurement]
    return by_pandas(table.assign(PV=values))


def commented(made: Made) -> bytes:
    return b"# logger 4\n# " + by_pandas(frame(made), sep="\t")


# Numbers that the dialect carries exactly, in seconds from 0: the same analysis bit for bit.
EXACT: dict[str, Callable[[Made], bytes]] = {
    "comma, polars": lambda m: by_polars(m, ","),
    "tab, polars": lambda m: by_polars(m, "\t"),
    "pipe, polars": lambda m: by_polars(m, "|"),
    "semicolon and decimal comma in cp1252, pandas": lambda m: by_pandas(frame(m, GERMAN), "cp1252", sep=";", decimal=","),
    "UTF-16, pandas": lambda m: by_pandas(frame(m, GERMAN), "utf-16", sep="\t", decimal=","),
    "UTF-8 with mark and Spanish names": lambda m: by_pandas(frame(m, SPANISH), "utf-8-sig"),
    "Latin-1 and French names": lambda m: by_pandas(frame(m, FRENCH), "latin-1", sep=";", decimal=","),
    "runs of blanks, pandas": blanks,
    "every cell in quotes, pandas": lambda m: by_pandas(frame(m), quoting=1, lineterminator="\r\n"),
    "carriage returns": lambda m: by_pandas(frame(m)).replace(b"\n", b"\r"),
    "row numbers without a name, pandas": lambda m: frame(m).to_csv().encode(),
    "milliseconds": lambda m: by_pandas(frame(m).assign(**{"Time (s)": np.round(1000 * m.time).astype(int)})).replace(b"(s)", b"(ms)"),
    "preamble and footer": decorated,
    "names on two rows and units": long_names,
    "comment lines": commented,
    "closing delimiters": lambda m: by_pandas(frame(m)).replace(b"\n", b",\n"),
    "thousands marks": thousands,
    "ISO 8601": lambda m: by_pandas(stamped(m, lambda t: t.isoformat(timespec="milliseconds"))),
    "ISO 8601 with a zone": lambda m: by_pandas(stamped(m, lambda t: t.isoformat(sep=" ") + "+05:30")),
    "day first": lambda m: by_pandas(stamped(m, milliseconds("%d/%m/%Y %H:%M:%S.%f")), sep=";", decimal=","),
    "month first": lambda m: by_pandas(stamped(m, milliseconds("%m/%d/%Y %H:%M:%S.%f"))),
    "month first, half days": lambda m: by_pandas(stamped(m, lambda t: t.strftime("%m/%d/%Y %I:%M:%S.%f %p"))),
    "points and decimal comma": lambda m: by_pandas(stamped(m, milliseconds("%d.%m.%Y %H:%M:%S,%f")), sep=";", decimal=","),
    "date and time in two columns": lambda m: by_pandas(
        stamped(m, milliseconds("%d.%m.%Y;%H:%M:%S.%f"), "Datum;Uhrzeit"), sep=";").replace(b'"', b""),
    "time of day": lambda m: by_pandas(stamped(m, milliseconds("%H:%M:%S.%f"), "Time")),
    "milliseconds since 1970": lambda m: by_pandas(
        frame(m).assign(**{"Time (s)": [1773403190000 + round(1000 * t) for t in m.time]})).replace(b"Time (s)", b"epoch"),
    "one value a row, times in seconds": lambda m: one_value_a_row(m, stamped_times=False),
    "one value a row, stamps": lambda m: one_value_a_row(m, stamped_times=True),
    "gzip, pandas": lambda m: compressed(m, "gzip"),
    "zip, pandas": lambda m: compressed(m, "zip"),
    "xlsx, openpyxl": workbook,
    "xlsx with titles, openpyxl": lambda m: workbook(m, titles=True),
    "xlsx with dates, openpyxl": lambda m: workbook(m, dates=True),
    "Parquet, polars": parquet,
    "Parquet with dates, polars": lambda m: parquet(m, dates=True),
}  # fmt: skip

# Dialects that round the times: the file and the largest error of a time, s.
_DAYS = 46094.4998842593  # START as days of a spreadsheet, rounded to ten decimals
ROUNDED: dict[str, tuple[Callable[[Made], bytes], float]] = {
    "days of a spreadsheet": (
        lambda m: by_pandas(frame(m).assign(**{"Time (s)": [f"{_DAYS + t / 86400:.9f}" for t in m.time]})).replace(b"Time (s)", b"Date"),
        86400e-9,
    ),
    "hundredths of a second": (lambda m: by_pandas(frame(m).assign(**{"Time (s)": np.round(m.time, 2)})), 0.005),
    "seconds since 1970 with decimals": (
        lambda m: by_pandas(frame(m).assign(**{"Time (s)": [f"{1773403190 + t:.3f}" for t in m.time]})).replace(b"Time (s)", b"epoch"),
        2.0**-22,  # a double near 1.8e9 s has steps of 2^-22 s, so half of one twice
    ),
    "minutes": (lambda m: by_pandas(frame(m).assign(**{"Time (s)": [f"{t / 60:.6f}" for t in m.time]})).replace(b"(s)", b"(min)"), 60e-6),
}  # fmt: skip
