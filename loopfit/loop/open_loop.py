"""The open loop of plant and controller along the imaginary axis: gain, continuous phase, slopes, crossovers."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from loopfit.core.arrays import Array
from loopfit.loop.gains import Gains
from loopfit.loop.plant import Plant
from loopfit.model.transfer import Complex

_SHARP = 0.5  # a root this lightly damped gets grid points of its own
_OFFSETS = np.array([-8.0, -4.0, -2.0, -1.2, -0.7, -0.3, 0.0, 0.3, 0.7, 1.2, 2.0, 4.0, 8.0])
_STEP = 0.25  # rad of dead time between grid points
_MOST_POINTS = 20_000


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class OpenLoop:
    """numerator(s) / denominator(s) exp(-dead_time_s s), highest power first; `roots` (m,) zeros, then poles.

    `powers` (m,): 1 for a zero, -1 for a pole. `factor`: ratio of the leading coefficients. `integrations`: poles at 0.
    """

    numerator: tuple[float, ...]
    denominator: tuple[float, ...]
    dead_time_s: float
    roots: Complex
    powers: Array
    factor: float
    integrations: int

    @property
    def at_rest(self) -> float:
        """Value at s = 0 without the poles there: the loop's static gain, or the factor of its integration."""
        return self.numerator[-1] / self.denominator[len(self.denominator) - 1 - self.integrations]

    @property
    def at_infinity(self) -> float:
        """Rational part at s = infinity; 0 when strictly proper."""
        return self.factor if len(self.numerator) == len(self.denominator) else 0.0

    @property
    def unstable_poles(self) -> int:
        """Number of open-loop poles right of the imaginary axis."""
        return int(np.sum((self.powers < 0) & (self.roots.real > 0)))

    def at(self, frequency: float) -> tuple[complex, complex]:
        """Return L(jw) and d log L(jw) / dw."""
        s = 1j * frequency
        top, top_slope = _horner(self.numerator, s)
        bottom, bottom_slope = _horner(self.denominator, s)
        if top == 0.0 or bottom == 0.0:
            return (0j if top == 0.0 else complex(math.inf)), 0j
        turn = complex(math.cos(frequency * self.dead_time_s), -math.sin(frequency * self.dead_time_s))
        return top / bottom * turn, 1j * (top_slope / top - bottom_slope / bottom - self.dead_time_s)

    def along(self, frequency: Array) -> tuple[Array, Array, Array, Array]:
        """Return log |L|, the continuous phase (rad) and the slopes of both over w; w > 0, (n,) each.

        The phase is a sum of arc tangents, one for each root, so it needs no unwrapping: at w = 0+ it is the phase of
        `at_rest`, a whole multiple of pi, less pi/2 for each pole at 0.
        """
        a, b = np.abs(self.roots.real), self.roots.imag
        right = self.roots.real > 0
        turns = np.where(right, -self.powers, self.powers)
        across = frequency[:, None] - b
        square = np.maximum(across * across + a * a, 1e-300)
        start = np.pi * (float(self.powers[right].sum()) + (1.0 if self.factor < 0 else 0.0))
        gain = math.log(abs(self.factor)) + 0.5 * np.log(square) @ self.powers
        phase = start + np.arctan2(across, a) @ turns - self.dead_time_s * frequency
        return gain, phase, (across / square) @ self.powers, (a / square) @ turns - self.dead_time_s

    def phase_at_rest(self) -> float:
        """Return the continuous phase just right of s = 0 on the real axis, a whole multiple of pi."""
        just = self.along(np.array([np.finfo(float).tiny]))[1][0] + 0.5 * np.pi * self.integrations
        return float(np.pi * np.round(just / np.pi))


def open_loop(plant: Plant, gains: Gains) -> OpenLoop:
    """Return plant times controller; the controller's integral and filter only where it has them."""
    top, bottom = np.array([gains.kp]), np.array([1.0])
    if gains.kd != 0.0:
        # kp + kd s / (Tf s + 1)
        top = np.array([gains.kp * gains.filter_s + gains.kd, gains.kp])
        bottom = np.array([gains.filter_s, 1.0])
    if gains.ki != 0.0:
        top = np.polyadd(np.append(top, 0.0), gains.ki * bottom)
        bottom = np.append(bottom, 0.0)
    top = np.trim_zeros(np.convolve(top, plant.numerator), "f")
    bottom = np.convolve(bottom, plant.denominator)
    while top[-1] == 0.0 and bottom[-1] == 0.0:  # a derivative alone takes one integration away
        top, bottom = top[:-1], bottom[:-1]
    zeros, poles = np.roots(top), np.roots(bottom)
    return OpenLoop(
        numerator=tuple(top.tolist()),
        denominator=tuple(bottom.tolist()),
        dead_time_s=plant.dead_time_s,
        roots=np.concatenate([zeros, poles]).astype(complex),
        powers=np.concatenate([np.ones(zeros.size), -np.ones(poles.size)]),
        factor=float(top[0] / bottom[0]),
        integrations=len(bottom) - len(np.trim_zeros(bottom, "b")),
    )


def gain_crossovers(loop: OpenLoop) -> list[float]:
    """Return all frequencies at which |L| = 1, rising.

    |L(jw)|^2 does not know the dead time: they are the positive roots of a polynomial in w^2, polished by Newton.
    """
    sizes = np.abs(loop.roots[loop.roots != 0])
    unit = math.exp(float(np.log(sizes).mean())) if sizes.size else 1.0
    top, bottom = (
        np.array(p) * unit ** np.arange(len(p) - 1.0, -1.0, -1.0) for p in (loop.numerator, loop.denominator)
    )
    difference = np.polysub(_squared(top), _squared(bottom))
    lead = np.abs(difference).max()
    if lead == 0.0:
        return []
    found: list[float] = []
    for square in np.roots(difference / lead):
        if square.real <= 0 or abs(square.imag) > 1e-5 * abs(square):
            continue
        w = unit * math.sqrt(square.real)
        value = slope = 0.0
        for _ in range(6):
            level, rate = loop.at(w)
            if level == 0 or not math.isfinite(abs(level)) or rate.real == 0.0:
                break
            value, slope = math.log(abs(level)), rate.real
            w = max(w - value / slope, 0.5 * w)
        level = abs(loop.at(w)[0])
        if abs(level - 1.0) < 1e-9 and all(abs(w - other) > 1e-9 * w for other in found):
            found.append(w)
    return sorted(found)


def phase_crossovers(loop: OpenLoop, grid: Array, phase: Array) -> list[tuple[float, int]]:
    """Return where L is real and negative within the grid, rising, with the turn: 1 where the phase rises through it.

    Between neighbours of the grid the phase is taken as monotone; `grid_of` sees to that.
    """
    sheet = np.floor((phase + np.pi) / (2 * np.pi)).astype(np.int64)
    left: list[int] = []
    levels: list[float] = []
    turns: list[int] = []
    for i in np.flatnonzero(np.diff(sheet)).tolist():
        before, after = int(sheet[i]), int(sheet[i + 1])
        counts = range(before + 1, after + 1) if after > before else range(before, after, -1)
        for count in counts:
            left.append(i)
            levels.append((2 * count - 1) * math.pi)
            turns.append(1 if after > before else -1)
    if not left:
        return []
    turn, level, index = np.array(turns), np.array(levels), np.array(left)
    low, high = grid[index], grid[index + 1]
    w = low + (high - low) * (level - phase[index]) / (phase[index + 1] - phase[index])
    for _ in range(60):
        _, value, _, slope = loop.along(w)
        past = (value - level) * turn > 0
        low, high = np.where(past, low, w), np.where(past, w, high)
        newton = w - (value - level) / np.where(slope == 0.0, np.nan, slope)
        new = np.where((newton > low) & (newton < high), newton, np.where(value == level, w, 0.5 * (low + high)))
        moved, w = np.abs(new - w), new
        if np.all(moved <= 4e-16 * w):
            break
    return list(zip(w.tolist(), turns, strict=True))


def grid_of(loop: OpenLoop, crossovers: list[float], floor: float) -> Array:
    """Return frequencies dense enough to see every turn of L, as far as |L| stays above `floor`, and coarse beyond.

    With dead time the dense part ends, at the latest, two turns after |L| has begun to fall for good: every later turn
    is inside an earlier one.
    """
    sizes = np.abs(loop.roots)
    corners = np.concatenate([sizes[sizes > 0], crossovers, [1.0 / loop.dead_time_s] if loop.dead_time_s > 0 else []])
    if corners.size == 0:
        corners = np.ones(1)
    low, high = math.log10(float(corners.min())), math.log10(float(corners.max()))
    dense = np.linspace(low - 1.5, high + 1.5, math.ceil(24 * (high - low + 3.0)))
    grid = 10.0 ** np.concatenate([np.linspace(low - 4, low - 1.6, 12), dense, np.linspace(high + 1.6, high + 4, 12)])
    sharp = (loop.roots.imag > 0) & (np.abs(loop.roots.real) < _SHARP * sizes)
    parts = [grid, *(one.imag + max(abs(one.real), 1e-9 * one.imag) * _OFFSETS for one in loop.roots[sharp])]
    if loop.dead_time_s > 0:
        gain, _, slope, _ = loop.along(grid)
        above = np.flatnonzero(gain > math.log(floor))
        rising = np.flatnonzero(slope * grid > 1e-9)
        last = grid[min(above[-1] + 1, grid.size - 1)] if above.size else 0.0
        monotone = grid[min(rising[-1] + 1, grid.size - 1)] if rising.size else 0.0
        end = max(min(last, monotone + 4 * np.pi / loop.dead_time_s), *crossovers, 0.0)
        count = min(math.ceil(end * loop.dead_time_s / _STEP), _MOST_POINTS)
        parts.append(np.linspace(0.0, end, count + 1)[1:])
    out = np.unique(np.concatenate(parts))
    return out[out > 0]


def root_between(function: Callable[[float], float], low: float, high: float, at_low: float, at_high: float) -> float:
    """Return a root in a bracket: the false position of Illinois, with bisection where that is slow.

    Dowell and Jarratt, A modified regula falsi method for computing the root of an equation, BIT 11, 1971.
    """
    if at_low == 0.0 or at_high == 0.0:
        return low if at_low == 0.0 else high
    for turn in range(80):
        middle = 0.5 * (low + high) if turn % 4 == 3 else (low * at_high - high * at_low) / (at_high - at_low)
        if not low < middle < high:
            middle = 0.5 * (low + high)
        value = function(middle)
        if value == 0.0:
            return middle
        if (value > 0) == (at_high > 0):
            high, at_high = middle, value
            if turn % 4 != 3:
                at_low *= 0.5
        else:
            low, at_low = middle, value
            if turn % 4 != 3:
                at_high *= 0.5
        if high - low <= 1e-13 * high:
            break
    return 0.5 * (low + high)


def _squared(polynomial: Array) -> Array:
    """Return |p(jw)|^2 as a polynomial in w^2, highest power first."""
    degree = len(polynomial) - 1
    product: Array = np.convolve(polynomial, polynomial * (-1.0) ** np.arange(degree, -1, -1))[::2]
    signed: Array = product * (-1.0) ** np.arange(degree, -1, -1)
    return signed


def _horner(coefficients: tuple[float, ...], s: complex) -> tuple[complex, complex]:
    value, slope = 0j, 0j
    for coefficient in coefficients:
        slope = slope * s + value
        value = value * s + coefficient
    return value, slope
