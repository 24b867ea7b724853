"""A second-order model with dead time while methods work on it, and how a reduced rational function becomes one."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from loopfit.core.arrays import Array
from loopfit.model.shape import lag_shape


@dataclass(frozen=True, slots=True, kw_only=True)
class Form:
    """gain (zero s + 1) exp(-dead_time s) / (a2 s^2 + a1 s + 1), stable; a2 = 0 is first order, a1 = 0 too none."""

    gain: float
    a1: float
    a2: float
    dead_time: float
    zero: float = 0.0
    note: str | None = None

    @property
    def lags(self) -> tuple[float, ...] | None:
        """Time constants, slowest first; None for an oscillating pair."""
        if self.a2 == 0.0:
            return (self.a1,) if self.a1 != 0.0 else ()
        root = self.a1 * self.a1 - 4.0 * self.a2
        if root < 0.0:
            if root < -1e-13 * self.a1 * self.a1:
                return None
            root = 0.0
        slow = 0.5 * (self.a1 + root**0.5)
        return (slow, self.a2 / slow)

    def step(self, time: Array) -> Array:
        """Return the unit step response at `time` (n,), s."""
        since = time - self.dead_time
        begun = since >= 0.0
        since = np.maximum(since, 0.0)
        if self.a1 == 0.0:
            return np.where(begun, self.gain, 0.0)
        if self.a2 <= 1e-9 * self.a1 * self.a1:
            left = (1.0 - self.zero / self.a1) * np.exp(-since / self.a1)
            return np.where(begun, self.gain * (1.0 - left), 0.0)
        shape = lag_shape(since[None] / self.a1, np.array([self.a2 / self.a1**2]), derivatives=False)
        return np.where(begun, self.gain * (shape.step[0] + self.zero / self.a1 * shape.slope[0]), 0.0)


def forms_of(
    top: tuple[float, float, float], bottom: tuple[float, float, float], note: str | None = None
) -> list[Form]:
    """Return what (b2 s^2 + b1 s + b0) / (a2 s^2 + a1 s + a0) may become, coefficients highest power first; none if unstable.

    A zero in the right half plane is kept, or becomes dead time of its time constant (exp(-T s) = 1 - T s to the first
    order). A numerator of second order becomes dead time and a zero that agree with it to s^2, where there are such,
    or loses its s^2.
    """
    (b2, b1, b0), (a2, a1, a0) = top, bottom
    a1, a2 = (a1 / a0, a2 / a0) if a0 != 0.0 else (0.0, 0.0)
    if b0 == 0.0 or not (a1 > 0.0 and a2 >= 0.0):
        return []
    gain, first, second = b0 / a0, b1 / b0, b2 / b0
    if abs(second) <= 1e-12 * (a2 + first * first):
        second = 0.0

    def form(dead_time: float, zero: float, *words: str | None) -> Form:
        zero = 0.0 if abs(zero) <= 1e-12 * a1 else zero
        text = "; ".join(word for word in (note, *words) if word) or None
        return Form(gain=gain, a1=a1, a2=a2, dead_time=dead_time, zero=zero, note=text)

    dropped = None if second == 0.0 else "the direct term of the reduced model was dropped"
    out = [form(0.0, first, dropped)]
    if first < 0.0:
        out.append(form(-first, 0.0, dropped, "the zero in the right half plane became dead time"))
    inner = first * first - 2.0 * second
    if second != 0.0 and inner >= 0.0:
        for dead_time in (-first - math.sqrt(inner), -first + math.sqrt(inner)):
            if dead_time > 0.0:
                word = "the numerator of second order became dead time and a zero"
                out.append(form(dead_time, first + dead_time, word))
    return out
