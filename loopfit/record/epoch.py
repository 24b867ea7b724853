"""Clocks written as numbers: seconds and other units, times since 1970, days of a spreadsheet."""

from __future__ import annotations

import re
from collections.abc import Sequence

import numpy as np

from loopfit.core.arrays import Array
from loopfit.core.finding import Finding
from loopfit.record.clock import Clock, stamp_clock
from loopfit.record.content import known_of
from loopfit.record.units import seconds_per

# size of a time since 1970 (or 1601, 0001 for ticks of 100 ns), and its units in a second
_EPOCHS = (
    (9e8, 1e10, 1),
    (9e11, 1e13, 10**3),
    (9e14, 1e16, 10**6),
    (1.1e17, 1.7e17, 10**7),
    (6e17, 7e17, 10**7),
    (9e17, 1e19, 10**9),
)


def numeric_clock(values: Array, name: str, unit: str | None, cells: Sequence[str] | None = None) -> Clock:
    """Return seconds from numbers, by the unit in the header or the words of the name, else by their size."""
    known = known_of(values)
    factor = seconds_per(unit)
    if factor is None and unit is None:
        factor = _factor_in(name)
    middle = float(np.median(known[:: max(1, len(known) // 1000)])) if len(known) else 0.0
    if 1.9e13 < middle < 2.2e13 and bool(np.all(known == np.floor(known))):  # 20260301115950
        compact = stamp_clock(
            [f"{int(v):014d}"[:8] + "T" + f"{int(v):014d}"[8:] if np.isfinite(v) else "" for v in values], name
        )
        if compact is not None:
            return compact
    per_second = next((count for low, high, count in _EPOCHS if low <= middle < high), None)
    if per_second is not None and (factor is None or abs(factor * per_second - 1) < 1e-9):
        return _epoch(values, name, per_second, cells)
    if factor is not None and not (factor == 86400.0 and middle > 20000):
        seconds = values if factor == 1 else values * factor if factor > 1 else values / round(1 / factor)
        return Clock(seconds=seconds, kind="seconds", of_day_s=None, weekday=None, findings=())
    if _are_days(known, name, factor):
        text = f"{name!r} is read as days of a spreadsheet's calendar: one day is 86400 s"
        finding = Finding(code="time_in_days", severity="note", text=text)
        first = float(known[0])
        # days with nine decimals tell 0.1 ms: rounding to 1 µs takes out the error of multiplying
        seconds = np.round((values - np.floor(first)) * 86400.0, 6)
        seconds = np.round(seconds - np.round((first - np.floor(first)) * 86400.0, 6), 6)
        return Clock(seconds=seconds, kind="date", of_day_s=None, weekday=None, findings=(finding,))
    text = f"no unit of time is stated for {name!r}: it is read as seconds"
    finding = Finding(code="time_unit_assumed", severity="note", text=text)
    return Clock(seconds=values, kind="seconds", of_day_s=None, weekday=None, findings=(finding,))


def _factor_in(name: str) -> float | None:
    """Return the seconds in the unit that ends a name, "time_s", or stands in it, "millis"; None for neither."""
    words = re.split(r"[\W_]+", name.lower())
    known = [word for word in words if len(word) > 1] + (words[-1:] if len(words) > 1 else [])
    return next((seconds_per(word) for word in reversed(known) if seconds_per(word) is not None), None)


def _epoch(values: Array, name: str, per_second: int, cells: Sequence[str] | None) -> Clock:
    first = float(values[np.isfinite(values)][0])
    seconds = (values - first) / per_second
    if abs(first) > 2**53 and cells is not None:  # whole numbers beyond what a float holds
        whole = [int(cell) if re.fullmatch(r"\d+", cell) else None for cell in cells]
        start = next((value for value in whole if value is not None), 0)
        seconds = np.array([np.nan if value is None else (value - start) / per_second for value in whole])
    names = {1: "seconds", 10**3: "milliseconds", 10**6: "microseconds", 10**7: "ticks of 100 ns", 10**9: "nanoseconds"}
    text = f"{name!r} is read, by its size, as {names[per_second]} of a calendar clock; time 0 is the first row"
    return Clock(
        seconds=seconds,
        kind="date",
        of_day_s=None,
        weekday=None,
        findings=(Finding(code="time_epoch", severity="note", text=text),),
    )


def _are_days(known: Array, name: str, factor: float | None) -> bool:
    """Return whether numbers are days since 1900 or since year 0, between the years 2000 and 2100."""
    if len(known) < 3:
        return False
    first, last = float(known[0]), float(known[-1])
    if not ((36526 <= first <= last <= 73415) or (730486 <= first <= last <= 767376)):
        return False
    step = float(np.median(np.diff(known))) * 86400.0
    named = factor == 86400.0 or re.search(r"date|datum|fecha|day|tag|serial", name, re.IGNORECASE) is not None
    return 0 < step < 43200 and (
        named or (last - first < 40 and step > 0.005 and bool(np.any(known != np.round(known, 3))))
    )
