"""Numbers of a retuning as page and picture print them: a figure alike wherever it stands."""

from __future__ import annotations

import math
from typing import Final

from loopfit.core.quantity import Quantity
from loopfit.core.rounding import number

NOT_SEEN = "does not settle in the time simulated"
NOT_SEEN_SHORT = "not in the time simulated"  # in a row that is named settling time
_FIGURES = 3  # significant ones: 0.5 % at most is rounded away
_MOVED = 0.02  # of the value: what a limit of the decimals may round away
_MOST_PERCENT = 1000.0  # beyond it a percentage tells nothing
_ENDLESS = 1e12  # no loop is worth a number beyond
_PLAIN = (1e-5, 1e7)  # magnitudes that are written without a power of ten

DECIMALS: Final = {
    "damping_ratio": 2, "swing_percent": 1, "overshoot_percent": 1, "gain_margin": 2, "phase_margin_deg": 1,
    "max_sensitivity": 2,
}  # fmt: skip
_PERCENT: Final = ("swing_percent", "overshoot_percent")


def figure_words(quantity: Quantity | None, field: str, *, interval: bool = True, short: bool = False) -> str:
    """Return a figure of a loop without its unit, by the name of its field; `short`: for a cell of the table."""
    endless = "no limit"
    if field == "settling_time_s":
        endless = NOT_SEEN_SHORT if short else NOT_SEEN
    if field == "settling_time_s" and quantity is not None and not quantity.value < _ENDLESS:
        return endless
    return quantity_words(
        quantity, most_decimals=DECIMALS.get(field, 9), interval=interval, endless=endless, percent=field in _PERCENT
    )


def with_unit(words: str, unit: str) -> str:
    """Return the words of a figure with its unit, where they are a number."""
    return words if words == "-" or words in (NOT_SEEN, NOT_SEEN_SHORT, "no limit") else f"{words}{unit}"


def quantity_words(
    quantity: Quantity | None,
    *,
    most_decimals: int = 9,
    interval: bool = True,
    endless: str = "no limit",
    percent: bool = False,
) -> str:
    """Return "0.312 (0.290 to 0.334)"; "-" for a figure that does not exist, `endless` for one that is infinite.

    Three significant digits whatever the width of the interval, so that a figure is printed alike with and without
    it; fewer where `most_decimals` says so, one decimal more than that where it would move the value by more than 2 %. A percentage is one
    of a change: there decimals count, not digits, and nothing is told beyond 1000.
    """
    if quantity is None:
        return "-"
    value, low, high = quantity.value, quantity.low, quantity.high
    if percent and value > _MOST_PERCENT:
        return f"more than {_MOST_PERCENT:.0f}"
    if abs(value) >= _ENDLESS:
        places = _places(low, most_decimals, percent) if abs(low) < _ENDLESS else 0
        return f"{endless} ({_written(low, places)} or more)" if interval and abs(low) < _ENDLESS else endless
    places = _places(value or (high if high < _ENDLESS else 0.0), most_decimals, percent)
    powers = value != 0.0 and not _PLAIN[0] <= abs(value) < _PLAIN[1]
    words = _written(value, places, powers)
    if not interval or low == high:
        return words
    least, most = (_written(bound, places, powers) for bound in (low, high))
    if percent and high > _MOST_PERCENT:
        most = f"more than {_MOST_PERCENT:.0f}"
    elif high >= _ENDLESS:
        return f"{words} (no bound)" if low <= -_ENDLESS else f"{words} ({least} or more)"
    return f"{words} ({least} to {most})"


def _places(value: float, most: int, percent: bool) -> int:
    if value == 0.0:
        return min(_FIGURES - 1, most)
    wanted = _FIGURES - 1 - math.floor(math.log10(abs(value)))
    places = min(wanted, most)
    while not percent and places < min(wanted, most + 1) and abs(round(value, places) - value) > _MOVED * abs(value):
        places += 1
    return max(places, 0)


def _written(value: float, places: int, powers: bool = False) -> str:
    if powers or (math.isfinite(value) and abs(value) >= _PLAIN[1]):
        return f"{value:.{_FIGURES}g}"
    return number(value, places)
