"""From stamps to seconds: ISO 8601, dates in both orders, times of day, epochs, days of a spreadsheet."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import date, datetime, time, timedelta
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from loopfit.core.arrays import Array
from loopfit.core.finding import Finding

_MONTHS = {
    "jan": 1, "ene": 1, "feb": 2, "fev": 2, "fév": 2, "mar": 3, "mär": 3, "mrz": 3, "apr": 4, "avr": 4, "abr": 4,
    "may": 5, "mai": 5, "jun": 6, "jui": 6, "jul": 7, "aug": 8, "aou": 8, "aoû": 8, "ago": 8, "sep": 9, "oct": 10,
    "okt": 10, "nov": 11, "dec": 12, "dez": 12, "déc": 12, "dic": 12,
}  # fmt: skip
_STAMP = re.compile(
    r"\s*(?:(\d{1,4})([-/. ]) ?([^\W\d_]{3,10}\.?|\d{1,2})[-/. ]+(\d{1,4}))?[T ,_]*"
    r"(?:([+-]?\d{1,4}):(\d{2})(?::(\d{2}))?(?:[.,:](\d{1,9}))?\s*([aApP]\.?[mM]\.?)?)?\s*(Z|UTC|GMT|[+-]\d{2}:?\d{2})?\s*",
    re.ASCII | re.IGNORECASE,
)
_DAY_NS = 86400 * 10**9
_MICROSECOND = timedelta(microseconds=1)
_STAMP_WORDS = re.compile(_STAMP.pattern, re.IGNORECASE)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Clock:
    """Seconds (n,), NaN where a stamp is bad; `kind` is "seconds", "date" or "time of day".

    `of_day_s` (n,) is the time of day for dates without a zone, by which a change to summer time is known.
    """

    seconds: Array
    kind: str
    of_day_s: Array | None
    weekday: Array | None
    findings: tuple[Finding, ...]

    def part(self, rows: NDArray[np.int64]) -> Clock:
        """Return the clock of some rows, without its findings."""
        of_day, weekday = (None if values is None else values[rows] for values in (self.of_day_s, self.weekday))
        return Clock(seconds=self.seconds[rows], kind=self.kind, of_day_s=of_day, weekday=weekday, findings=())


class UndecidedStampsError(ValueError):
    """Two readings of the stamps give different elapsed times; the text says which."""


def stamp_clock(cells: Sequence[str], name: str) -> Clock | None:
    """Return seconds from stamps, NaN where a cell is no stamp; None when fewer than nine in ten are.

    Raises
    ------
    UndecidedStampsError
        If two readings fit every row and give different elapsed times.
    """
    quick = _iso(cells)
    if quick is not None:
        return quick
    pattern = _STAMP if "".join(cells[:50]).isascii() else _STAMP_WORDS
    parts = [_STAMP_WORDS.fullmatch(cell) if not cell.isascii() else pattern.fullmatch(cell) for cell in cells]
    groups = [found.groups() if found is not None and (found.group(1) or found.group(5)) else None for found in parts]
    good = [group for group in groups if group is not None]
    if len(good) < 0.9 * max(1, sum(bool(cell) for cell in cells)) or not good:
        return None
    if good[0][0] is None:
        return _time_of_day(groups, name)
    return _dates(groups, name)


def _iso(cells: Sequence[str]) -> Clock | None:
    """Return the clock of stamps that are all ISO 8601 with at most microseconds, None when any is not."""
    if (
        not cells
        or len(cells[0]) < 10
        or not cells[0][:4].isdigit()
        or ("-" not in cells[0][:8] and cells[0][8:9] != "T")
    ):
        return None
    if any(len(cell) > 26 and re.search(r"[.,]\d{7}", cell) for cell in (cells[0], cells[-1])):
        return None
    try:
        stamps = [datetime.fromisoformat(cell) for cell in cells]
    except ValueError:
        return None
    first = stamps[0]
    try:
        ticks = np.array([(stamp - first) // _MICROSECOND for stamp in stamps], dtype=np.int64)
    except TypeError:  # some with a zone and some without
        return None
    if first.tzinfo is not None:
        return Clock(seconds=ticks / 1e6, kind="date", of_day_s=None, weekday=None, findings=())
    of_day = ticks + (first - datetime.combine(first.date(), time())) // _MICROSECOND
    days = of_day // 86_400_000_000
    weekday = ((days + first.weekday()) % 7).astype(np.float64)
    return Clock(
        seconds=ticks / 1e6, kind="date", of_day_s=(of_day % 86_400_000_000) / 1e6, weekday=weekday, findings=()
    )


_Groups = Sequence["tuple[str | None, ...] | None"]


def _of_day_ns(group: tuple[str | None, ...], two_parts_are_minutes: bool = False) -> int | None:
    hour, minute, second, fraction, half = group[4:9]
    if hour is None or minute is None:
        return 0
    hours, minutes, seconds = int(hour), int(minute), int(second or 0)
    if two_parts_are_minutes and second is None:
        hours, minutes, seconds = 0, int(hour), int(minute)
    elif minutes > 59 or seconds > 60:
        return None
    if half:
        if not 1 <= hours <= 12:
            return None
        hours = hours % 12 + (12 if half[0] in "pP" else 0)
    nanos = int((fraction or "0").ljust(9, "0"))
    return ((hours * 60 + minutes) * 60 + seconds) * 10**9 + nanos


def _time_of_day(groups: _Groups, name: str) -> Clock | None:
    two = [group for group in groups if group is not None and group[6] is None]
    minutes = False
    if two:
        hint = name.lower().replace(" ", "")
        if any(group[7] for group in two) or "mm:ss" in hint or "min:s" in hint:
            minutes = True
        elif not ("hh:mm" in hint or any(group[8] for group in two)):
            sixty = "whether they are hours and minutes or minutes and seconds is not told; write hh:mm:ss"
            raise UndecidedStampsError(f"times such as {two[0][4]}:{two[0][5]} can be read in two ways, {sixty}")
    ticks = [None if group is None else _of_day_ns(group, minutes) for group in groups]
    seconds = np.array([np.nan if tick is None else tick / 1e9 for tick in ticks])
    start = next(tick for tick in ticks if tick is not None) if any(t is not None for t in ticks) else 0
    relative = np.array([np.nan if tick is None else (tick - start) / 1e9 for tick in ticks])
    return Clock(seconds=relative, kind="time of day", of_day_s=seconds, weekday=None, findings=())


_ORDERS = {"year first": (0, 1, 2), "day first": (2, 1, 0), "month first": (2, 0, 1)}


def _dates(groups: _Groups, name: str) -> Clock | None:
    sample = next(group for group in groups if group is not None)
    orders = ["year first"] if len(str(sample[0])) == 4 else ["day first", "month first"]
    if len(str(sample[0])) <= 2 and len(str(sample[3])) <= 2:
        orders.append("year first")
    if sample[1] == "." and len(str(sample[0])) < 4:
        orders = ["day first"]  # no country writes 03.01.2026 month first
    readings: dict[str, list[int | None]] = {}
    for order in orders:
        ticks = _ticks(groups, _ORDERS[order])
        if ticks is not None:
            readings[order] = ticks
    if not readings:
        return None
    order, ticks = next(iter(readings.items()))
    start = next(tick for tick in ticks if tick is not None)
    findings: list[Finding] = []
    elapsed = {key: [None if t is None else t - _first(value) for t in value] for key, value in readings.items()}
    if len({tuple(value) for value in elapsed.values()}) > 1:
        rising = {key: value for key, value in elapsed.items() if _rises(value)}
        within = {key: value for key, value in rising.items() if _longest_wait(value) < _DAY_NS}
        one = rising if len({tuple(value) for value in rising.values()}) == 1 else within
        if len({tuple(value) for value in one.values()}) == 1:
            order = next(iter(one))
            ticks = readings[order]
            start = _first(ticks)
            why = "make the clock run back" if one is rising else "leave days without a row"
            text = f"the dates of {name!r} are read {order}: the other order would {why}"
            findings.append(Finding(code="date_order", severity="note", text=text))
        else:
            both = " or ".join(elapsed)
            raise UndecidedStampsError(
                f"dates such as {''.join(str(part) for part in sample[:3])}{sample[1]}{sample[3]} can be read "
                f"{both}, with different elapsed times; write them as 2026-03-01"
            )
    elif len(readings) > 1:
        # the change of summer time is known by its Sunday: of two readings take the one on which there may be one
        ticks = next((value for value in readings.values() if _weekday(value[-1]) == 6), ticks)
        start = _first(ticks)
        text = (
            f"whether the dates of {name!r} are {' or '.join(readings)} cannot be told; the times between rows do "
            f"not depend on it"
        )
        findings.append(Finding(code="date_order", severity="note", text=text))
    seconds = np.array([np.nan if tick is None else (tick - start) / 1e9 for tick in ticks])
    zoned = any(group is not None and group[9] is not None for group in groups)
    of_day = None if zoned else np.array([np.nan if tick is None else (tick % _DAY_NS) / 1e9 for tick in ticks])
    weekday = None
    if not zoned:
        weekday = np.array([_weekday(tick) for tick in ticks])
    return Clock(seconds=seconds, kind="date", of_day_s=of_day, weekday=weekday, findings=tuple(findings))


def _first(ticks: Sequence[int | None]) -> int:
    return next(tick for tick in ticks if tick is not None)


def _rises(ticks: Sequence[int | None]) -> bool:
    known = [tick for tick in ticks if tick is not None]
    pairs = list(pairwise(known))
    return all(b >= a for a, b in pairs) or all(b <= a for a, b in pairs)


def _weekday(tick: int | None) -> float:
    """Return 0 for a Monday to 6 for a Sunday; day 1 was a Monday."""
    return float("nan") if tick is None else float((tick // _DAY_NS + 6) % 7)


def _longest_wait(ticks: Sequence[int | None]) -> int:
    return max((abs(b - a) for a, b in pairwise(tick for tick in ticks if tick is not None)), default=0)


def _ticks(groups: _Groups, order: tuple[int, int, int]) -> list[int | None] | None:
    """Return nanoseconds of the calendar, None when a date does not exist in this order."""
    days: dict[tuple[str | None, ...], int] = {}
    ticks: list[int | None] = []
    for group in groups:
        if group is None or group[0] is None:
            ticks.append(None)
            continue
        key = (group[0], group[2], group[3])
        if key not in days:
            year, month, day = (key[place] or "" for place in order)
            number = int(month) if month.isdigit() else _MONTHS.get(month[:3].lower(), 0)
            if not (year.isdigit() and day.isdigit()):
                return None
            full = int(year) + (0 if len(year) > 2 else 2000 if int(year) < 70 else 1900)
            try:
                days[key] = date(full, number, int(day)).toordinal()
            except ValueError:
                return None
        of_day = _of_day_ns(group)
        if of_day is None:
            ticks.append(None)
            continue
        zone = group[9] or ""
        shift = 0
        if zone[:1] in ("+", "-") and zone:
            shift = (int(zone[1:3]) * 60 + int(zone[-2:])) * 60 * 10**9 * (-1 if zone[0] == "-" else 1)
        ticks.append(days[key] * _DAY_NS + of_day - shift)
    return ticks
