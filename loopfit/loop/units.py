"""Times and rates as a controller shows them, and what a person types for them."""

from __future__ import annotations

import math
import re
from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np

from loopfit.core.errors import UsageError

SECONDS = {"ms": 1e-3, "s": 1.0, "min": 60.0, "h": 3600.0}
PER_SECOND = tuple(f"/{unit}" for unit in SECONDS if unit != "ms")
OFF = "off"

_SPELLINGS = {
    "msec": "ms", "sec": "s", "secs": "s", "second": "s", "seconds": "s", "mins": "min", "minute": "min",
    "minutes": "min", "hr": "h", "hrs": "h", "hour": "h", "hours": "h",
}  # fmt: skip
_NUMBER = re.compile(r"([+-]?(?:[0-9]+\.?[0-9]*|\.[0-9]+)(?:e[+-]?[0-9]+)?)\s*(.*)", re.IGNORECASE)
_RATE = re.compile(r"(?:1|rep|reps|repeat|repeats)?\s*(?:/|per\b)\s*(.+)")


@dataclass(frozen=True, slots=True)
class Entry:
    """A number as typed with its unit: one of `SECONDS`, or one of `PER_SECOND` for a rate."""

    number: float
    unit: str

    @property
    def is_rate(self) -> bool:
        """Whether this is per time: repeats, or an integral gain."""
        return self.unit in PER_SECOND

    @property
    def amount(self) -> float:
        """Seconds, or per second for a rate."""
        return from_unit(self.number, self.unit)


def from_unit(number: float, unit: str) -> float:
    """Return a number of that unit in seconds, or per second for a rate."""
    return number / SECONDS[unit[1:]] if unit in PER_SECOND else number * SECONDS[unit]


def in_unit(amount: float, unit: str) -> float:
    """Return seconds, or per second for a rate, as a number of that unit."""
    return amount * SECONDS[unit[1:]] if unit in PER_SECOND else amount / SECONDS[unit]


def time_of(text: str, name: str = "a time") -> Entry | None:
    """Return the time that a text gives: "2.5min", "0.5 s", a plain number for seconds; None for "off".

    Raises
    ------
    UsageError
        If the text is no time above 0, or its unit is not known.
    """
    entry = _entry(text, name, "s")
    if entry is not None and entry.is_rate:
        raise UsageError(f"{name} is a time, not a rate such as {text.strip()!r}; its unit is one of {_known(SECONDS)}")
    return entry


def integral_of(text: str, name: str = "integral", *, form: str = "ideal") -> Entry | None:
    """Return the integral setting that a text gives; None for "off".

    A time ("2.5min"; a plain number is in s) or repeats per time ("0.8/min"). In the parallel form it is a gain per
    time: a plain number is per s, and a time is refused, since it does not say whether the gain divides by it.

    Raises
    ------
    UsageError
        If the text is neither, is not above 0 (parallel: is 0), or its unit is not known.
    """
    entry = _entry(text, name, "/s" if form == "parallel" else "s", signed=form == "parallel")
    if entry is not None and form == "parallel" and not entry.is_rate:
        raise UsageError(
            f"{name} of the parallel form is a gain per time such as {entry.number:g}/{entry.unit}, not a time; "
            "a time belongs to the ideal and series forms"
        )
    return entry


def derivative_of(text: str, name: str = "derivative", *, form: str = "ideal") -> Entry | None:
    """Return the derivative setting that a text gives; None for "off".

    A time, a plain number in s; in the parallel form gain times time, "0.5min" being 30 gain s, which may be negative.
    """
    if form != "parallel":
        return time_of(text, name)
    entry = _entry(text, name, "s", signed=True)
    if entry is not None and entry.is_rate:
        raise UsageError(f"{name} of the parallel form is gain times time, not a rate such as {text.strip()!r}")
    return entry


def number(
    name: str, value: object, *, above: float | None = None, least: float | None = None, hint: str = ""
) -> float:
    """Return the value as a float.

    Raises
    ------
    UsageError
        If it is not a finite number, or not above or at least what is asked.
    """
    end = f": {hint}" if hint else ""
    if isinstance(value, bool) or not isinstance(value, int | float | np.integer | np.floating):
        raise UsageError(f"{name} is a number, not {value!r}")
    try:
        out = float(value)
    except OverflowError:
        out = math.inf
    if not math.isfinite(out):
        raise UsageError(f"{name} is a finite number, not {out}")
    if above is not None and not out > above:
        raise UsageError(f"{name} is above {above:g}, not {out:g}{end}")
    if least is not None and not out >= least:
        raise UsageError(f"{name} is at least {least:g}, not {out:g}{end}")
    return out


def known_unit(name: str, unit: object, *, rates: bool, times: bool = True) -> str:
    """Return the unit when it is one of the table, in words if it is not."""
    known = [*(SECONDS if times else ()), *(PER_SECOND if rates else ())]
    if not isinstance(unit, str) or unit not in known:
        raise UsageError(f"{name} is one of {', '.join(known)}, not {unit!r}")
    return unit


def _entry(text: str, name: str, plain_unit: str, *, signed: bool = False) -> Entry | None:
    if not isinstance(text, str):
        raise UsageError(f"{name} is a text such as 2.5min or off, not {text!r}")
    bare = text.strip()
    if bare.casefold() == OFF:
        return None
    match = _NUMBER.fullmatch(bare)
    if match is None or match[2].startswith((",", ".")):
        raise UsageError(f"{name} is a number with or without a unit, such as 2.5min, or off, not {text!r}")
    unit = _unit(match[2], text, name) if match[2] else plain_unit
    value = number(name, float(match[1]), hint="off means without")
    if value == 0.0 or not (signed or value > 0.0):
        raise UsageError(f"{name} is {'not 0' if signed else f'above 0, not {value:g}'}: write off for none")
    entry = Entry(value, unit)
    number(name, entry.amount)
    return entry


def _unit(text: str, whole: str, name: str) -> str:
    bare = " ".join(text.casefold().split())
    rate = _RATE.fullmatch(bare)
    word = rate[1] if rate else bare
    unit = f"/{_SPELLINGS.get(word, word)}" if rate else _SPELLINGS.get(word, word)
    if unit not in SECONDS and unit not in PER_SECOND:
        raise UsageError(
            f"{name} {whole.strip()!r}: the unit {text!r} is not known; known are {_known(SECONDS)} for a time and "
            f"{_known(PER_SECOND)} for a rate"
        )
    return unit


def _known(units: Iterable[str]) -> str:
    return ", ".join(units)
