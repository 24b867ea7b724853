"""What a case file may hold: its keys, and what each must be.

A number has its unit in its key, as in the documents: `settling_s`, `band_percent`. What is read off a controller's
screen is a text with its unit: "2.5 min", "0.8/min", "off".
"""

from __future__ import annotations

import math
import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any, TypeAlias

from loopfit.case.words import found, nearest
from loopfit.core.errors import UsageError

Reader: TypeAlias = Callable[[object], Any]
Schema: TypeAlias = Mapping[str, "Reader | Schema"]

_MOST_DIGITS = 15
_PLAIN = re.compile(r"\s*[+-]?(\d+[.,]?\d*|[.,]\d+)(e[+-]?\d+)?\s*", re.IGNORECASE)


@dataclass(frozen=True, slots=True, kw_only=True)
class Case:
    """One commissioning job: what was recorded, the controller, what is wanted, and what will be accepted.

    `records` are paths, `reading` how to read them, `controller` its settings as typed, `target` what is wanted of new
    ones, `limits` what a record must meet afterwards; all by the keys of the file.
    """

    file: str
    records: tuple[str, ...]
    reading: Mapping[str, Any]
    controller: Mapping[str, Any]
    target: Mapping[str, Any]
    limits: Mapping[str, float]


def number(*, above: float = -math.inf, least: float = -math.inf, below: float = math.inf) -> Reader:
    """Return a reader of a finite number within bounds."""

    def read(value: object) -> float:
        if isinstance(value, bool) or not isinstance(value, int | float):
            text = value.strip() if isinstance(value, str) else ""
            mend = f": write {text.replace(',', '.')}, without quotes" if _PLAIN.fullmatch(text) else ""
            raise UsageError(f"a number is wanted, not {found(value)}{mend}")
        if not abs(value) < 1e300:
            raise UsageError(f"a finite number is wanted, not {found(value)}")
        for bound, holds, word in ((above, value > above, "above"), (least, value >= least, "at least"),
                                   (below, value < below, "below")):  # fmt: skip
            if not holds:
                raise UsageError(f"a number {word} {bound:g} is wanted, not {found(value)}")
        return float(value)

    return read


def count(most: int | None = None) -> Reader:
    """Return a reader of a whole number from 1."""

    def read(value: object) -> int:
        if isinstance(value, bool) or not isinstance(value, int) or value < 1 or (most is not None and value > most):
            up_to = "" if most is None else f" to {most}"
            raise UsageError(f"a whole number from 1{up_to} is wanted, not {found(value)}")
        return value

    return read


def word(*known: str) -> Reader:
    """Return a reader of one of some words."""

    def read(value: object) -> str:
        if isinstance(value, str) and value.strip() in known:
            return value.strip()
        close = nearest(value, known) if isinstance(value, str) else None
        end = "" if close is None else f"; did you mean {close}?"
        raise UsageError(f"one of {', '.join(known)} is wanted, not {found(value)}{end}")

    return read


def text(what: str) -> Reader:
    """Return a reader of a text that is not empty."""

    def read(value: object) -> str:
        if not isinstance(value, str) or not value.strip():
            raise UsageError(f"{what} is wanted, in quotes, not {found(value)}")
        return value

    return read


def with_unit(*examples: str) -> Reader:
    """Return a reader of a text with its unit, or "off": its contents are checked with the form of the controller."""

    def read(value: object) -> str:
        say = " or ".join(f'"{example}"' for example in examples)
        is_number = isinstance(value, int | float) and not isinstance(value, bool)
        if value == 0 and is_number:
            raise UsageError('0 is none: write "off" where the controller has none')
        if is_number or (isinstance(value, str) and _PLAIN.fullmatch(value)):
            raise UsageError(f"{found(value)} has no unit: write it with one, in quotes, such as {say}")
        if not isinstance(value, str):
            raise UsageError(f'a text such as {say} or "off" is wanted, not {found(value)}')
        return value

    return read


def several(one: Reader) -> Reader:
    """Return a reader of a list that is not empty, or of one alone."""

    def read(value: object) -> tuple[Any, ...]:
        values = value if isinstance(value, list) else [value]
        if not values:
            raise UsageError("the list is empty: name at least one, or leave the key out")
        return tuple(one(item) for item in values)

    return read


def pair(value: object) -> tuple[float, float]:
    """Read two numbers, low and high."""
    if not isinstance(value, list) or len(value) != 2:
        raise UsageError(f"two numbers are wanted, [low, high], not {found(value)}")
    low, high = (number()(item) for item in value)
    if not low < high:
        raise UsageError(f"it goes from low to high, not from {low:g} to {high:g}")
    return low, high


def yes_or_no(value: object) -> bool:
    """Read true or false."""
    if not isinstance(value, bool):
        raise UsageError(f"true or false is wanted, without quotes, not {found(value)}")
    return value


def column(value: object) -> str | int:
    """Read the name of a column or its number from 1."""
    if isinstance(value, str) and value.strip():
        return value
    if isinstance(value, bool) or not isinstance(value, int) or value < 1:
        raise UsageError(f"the name of a column in quotes, or its number from 1, is wanted, not {found(value)}")
    return value


_TIME = with_unit("2.5 s", "2.5 min")
_BOUNDS: Schema = {"gain": number(least=0.0), "integral_time_s": number(least=0.0),
                   "derivative_time_s": number(least=0.0)}  # fmt: skip
LIMITS: Schema = {
    name: number(least=0.0)
    for name in (
        "damping_ratio_min", "damping_ratio_max", "overshoot_percent_max", "settling_time_s_max", "rise_time_s_max",
        "peak_time_s_max", "steady_state_deviation_max",
    )
}  # fmt: skip
READING: Schema = {
    "columns": {"time": column, "measurement": column, "setpoint": column, "output": column},
    "interval_s": number(above=0.0),
    "from_s": number(),
    "to_s": number(),
    "step": count(),
    "step_at_s": number(),
    "step_from": number(),
    "step_to": number(),
    "band_percent": number(above=0.0, below=50.0),
    "confidence_percent": number(least=50.0, below=100.0),
}
CONTROLLER: Schema = {
    "form": word("ideal", "parallel", "series"),
    "gain": number(),
    "proportional_band_percent": number(above=0.0),
    "integral": with_unit("2.5 s", "2.5 min", "2.5/min"),
    "derivative": _TIME,
    "filter": _TIME,
    "setpoint_weight": number(least=0.0),
    "scan": with_unit("0.5 s", "500 ms"),
    "action": word("reverse", "direct"),
    "derivative_on": word("measurement", "error"),
    "measurement_range": pair,
    "output_range": pair,
    "output_limits": pair,
}
TARGET: Schema = {
    "damping_ratio": number(),
    "overshoot_percent": number(),
    "settling_s": number(),
    "max_sensitivity": number(),
    "noise_gain": number(),
    "controller": word("P", "PI", "PD", "PID"),
    "move": several(word("gain", "integral", "derivative")),
    "at_least": _BOUNDS,
    "at_most": _BOUNDS,
    "digits": count(_MOST_DIGITS),
    "confidence_of_target_percent": number(),
    "nominal": yes_or_no,
}
_FILE = text("the name of a file")
CASE: Schema = {
    "record": _FILE,
    "records": several(_FILE),
    **READING,
    "controller": CONTROLLER,
    "target": TARGET,
    "limits": LIMITS,
}
