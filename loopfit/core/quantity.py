"""A value with the interval around it."""

from __future__ import annotations

import math
from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Quantity:
    """A value and the two bounds around it; an open bound is infinite.

    Raises
    ------
    ValueError
        If the value is not a number or the bounds do not enclose it.
    """

    value: float
    low: float
    high: float

    def __post_init__(self) -> None:
        if math.isnan(self.value) or not self.low <= self.value <= self.high:
            raise ValueError(f"bounds out of order: {self.low}, {self.value}, {self.high}")

    @classmethod
    def spanning(cls, value: float, low: float, high: float) -> Quantity:
        """Return the quantity whose interval is stretched, if need be, to hold its value."""
        return cls(float(value), float(min(low, value)), float(max(high, value)))

    def scaled(self, factor: float) -> Quantity:
        """Return the quantity in another unit; a negative factor swaps the bounds."""
        ends = (self.low * factor, self.high * factor)
        return Quantity(self.value * factor, min(ends), max(ends))

    def shifted(self, amount: float) -> Quantity:
        """Return the quantity with a constant added."""
        return Quantity(self.value + amount, self.low + amount, self.high + amount)
