"""A rational transfer function with dead time."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from loopfit.core.errors import UsageError

Complex = np.ndarray[tuple[int, ...], np.dtype[np.complex128]]


@dataclass(frozen=True, slots=True, kw_only=True)
class Transfer:
    """numerator(s) / denominator(s) exp(-dead_time_s s); coefficients, highest power first. Made by `transfer_of`."""

    numerator: tuple[float, ...]
    denominator: tuple[float, ...]
    dead_time_s: float = 0.0

    @property
    def poles(self) -> Complex:
        """Poles of the rational part, rad/s."""
        return np.roots(self.denominator).astype(complex)

    @property
    def zeros(self) -> Complex:
        """Zeros of the rational part, rad/s."""
        return np.roots(self.numerator).astype(complex)

    def __call__(self, s: Complex) -> Complex:
        """Return the value at s, any shape."""
        rational = np.polyval(self.numerator, s) / np.polyval(self.denominator, s)
        return np.asarray(rational * np.exp(-self.dead_time_s * np.asarray(s)), dtype=complex)


def transfer_of(numerator: Sequence[float], denominator: Sequence[float], dead_time_s: float = 0.0) -> Transfer:
    """Return the transfer function of coefficients, highest power first.

    Leading zeros are dropped, common factors of s cancelled, and the last nonzero coefficient of the denominator made 1.

    Raises
    ------
    UsageError
        If a coefficient is not a finite number, the numerator or denominator is zero, the degree of the numerator is
        above that of the denominator, or the dead time is negative.
    """
    top, bottom = _coefficients(numerator, "numerator"), _coefficients(denominator, "denominator")
    if len(top) > len(bottom):
        raise UsageError(
            f"the numerator is of degree {len(top) - 1} and the denominator of degree {len(bottom) - 1}: "
            "the system would differentiate its input; no such system exists"
        )
    if not math.isfinite(dead_time_s) or dead_time_s < 0:
        raise UsageError(
            f"a dead time is a number of at least 0 s, not {dead_time_s!r}: no system answers before its input"
        )
    while len(top) > 1 and top[-1] == 0.0 and bottom[-1] == 0.0:
        top, bottom = top[:-1], bottom[:-1]
    last = next(value for value in reversed(bottom) if value != 0.0)
    return Transfer(
        numerator=tuple(value / last for value in top),
        denominator=tuple(value / last for value in bottom),
        dead_time_s=float(dead_time_s),
    )


def _coefficients(values: Sequence[float], name: str) -> list[float]:
    try:
        out = [float(value) for value in np.atleast_1d(np.asarray(values, dtype=float)).ravel()]
    except (TypeError, ValueError):
        raise UsageError(f"the {name} is a list of real coefficients, highest power first, not {values!r}") from None
    for value in out:
        if not math.isfinite(value):
            raise UsageError(f"the {name} has a coefficient that is {value}: all must be finite numbers")
    while out and out[0] == 0.0:
        del out[0]
    if not out:
        raise UsageError(f"the {name} is zero")
    return out
