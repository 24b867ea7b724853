"""Digits that a person should see."""

from __future__ import annotations

import math

from loopfit.core.quantity import Quantity

_MOST_DIGITS = 6


def decimals_for(spread: float, value: float) -> int:
    """Return the decimals that show the spread to one figure, or to two when it begins with 1.

    Without a spread, four figures of the value.
    """
    if spread > 0 and math.isfinite(spread):
        places = -math.floor(math.log10(spread))
        return places + 1 if spread * 10.0**places < 2.0 else places
    if value != 0 and math.isfinite(value):
        return 3 - math.floor(math.log10(abs(value)))
    return 2


def number(value: float, decimals: int) -> str:
    """Return the number with that many decimals; negative decimals round to tens, hundreds."""
    if not math.isfinite(value):
        return "no bound"
    rounded = round(value, decimals)
    return f"{rounded + 0.0:.{max(decimals, 0)}f}"


def decimals_of(quantity: Quantity) -> int:
    """Return the decimals that suit a quantity's interval."""
    ends = [bound for bound in (quantity.low, quantity.high) if math.isfinite(bound)]
    spread = max((abs(quantity.value - bound) for bound in ends), default=0.0)
    places = decimals_for(spread, quantity.value)
    if len(ends) == 1 and ends[0] != 0:  # a bound that is the value itself shows two figures, any other three
        figures = 1 if spread == 0 else 2
        places = min(places, figures - math.floor(math.log10(abs(ends[0]))))
    if quantity.value != 0 and math.isfinite(quantity.value):
        places = min(places, _MOST_DIGITS - 1 - math.floor(math.log10(abs(quantity.value))))
    return min(places, 9)
