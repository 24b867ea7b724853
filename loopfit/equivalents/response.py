"""Figures of the step response of the exact system: read from fine samples, then refined between them."""

from __future__ import annotations

import numpy as np
from numpy.polynomial import chebyshev
from numpy.typing import NDArray

from loopfit.core.arrays import Array
from loopfit.core.quantity import Quantity
from loopfit.equivalents.course import Course
from loopfit.equivalents.result import ExactFigures
from loopfit.equivalents.system import System

_NODES = 16  # of a polynomial through a third of a radian of the response: exact to rounding
_SMALLEST_SWING = 1e-9  # of the final value; below, a peak is not told from rounding
_NEARLY = 0.05  # samples show a peak lower than it is, by less than this share
_MOST_PEAKS = 12


def figures_of(system: System, course: Course, band_percent: float) -> ExactFigures:
    """Return the exact figures of a response that comes to rest at a value that is not 0.

    Rise is 10-90 %, delay 50 %, settling the last entry into the band (percent of the final value), times from the
    step, dead time included; a decay ratio exists when there are two overshoot peaks.
    """
    piece = _Between(system, course)
    deviation, time = course.deviation, course.time
    begin = int(np.searchsorted(time, system.dead_time_s))
    peaks = [piece.peak(k) for k in _tops(deviation, begin, course.time.size)]
    reasons = []
    highest = max((height for _, height in peaks), default=0.0)
    for k in _tops_near(deviation, begin, highest):  # the highest need not be among the first
        highest = max(highest, piece.peak(k)[1])
    decay = None
    if len(peaks) > 1:
        decay = peaks[1][1] / peaks[0][1]
    else:
        reasons.append("no decay ratio: the response has fewer than two overshoot peaks that rounding does not hide")
    if not peaks:
        reasons.append("no peak time: the response does not go beyond its final value")
    crossings = [piece.first(level - 1.0, begin) for level in (0.1, 0.5, 0.9)]
    return ExactFigures(
        final_value=_exact(course.final),
        peak_value=_exact(course.final * (1.0 + highest)),
        overshoot_percent=_exact(100.0 * highest),
        peak_time_s=_exact(peaks[0][0]) if peaks else None,
        rise_time_s=_exact(crossings[2] - crossings[0]),
        settling_time_s=_exact(_settling(piece, deviation, begin, band_percent / 100.0)),
        delay_time_s=_exact(crossings[1]),
        decay_ratio=None if decay is None else _exact(decay),
        reasons=tuple(reasons),
    )


def _exact(value: float) -> Quantity:
    return Quantity(float(value), float(value), float(value))


def _is_top(values: Array, begin: int) -> NDArray[np.intp]:
    """Return the indices of the local maxima from `begin` on; a start above all that follows is one."""
    inner: NDArray[np.intp] = np.flatnonzero((values[1:-1] >= values[:-2]) & (values[1:-1] > values[2:])) + 1
    inner = inner[inner > begin]
    if begin + 1 < values.size and values[begin] > values[begin + 1]:
        inner = np.append(begin, inner)
    return inner


def _tops(deviation: Array, begin: int, count: int) -> list[int]:
    """Return the first two overshoot peaks; between two the response falls by more than rounding."""
    out: list[int] = []
    for top in _is_top(deviation[:count], begin):
        k = int(top)
        if not deviation[k] > _SMALLEST_SWING:
            continue
        fall = float(min(deviation[out[-1]], deviation[k]) - deviation[out[-1] : k].min()) if out else 1.0
        if fall > _SMALLEST_SWING:
            if len(out) == 2:
                break
            out.append(k)
        elif deviation[k] > deviation[out[-1]]:
            out[-1] = k
    return out


def _tops_near(deviation: Array, begin: int, highest: float) -> list[int]:
    tops = _is_top(deviation, begin)
    tops = tops[deviation[tops] > max(highest * (1.0 - _NEARLY), _SMALLEST_SWING)]
    return [int(k) for k in tops[np.argsort(-deviation[tops], kind="stable")][:_MOST_PEAKS]]


def _settling(piece: _Between, deviation: Array, begin: int, band: float) -> float:
    outside = np.flatnonzero(np.abs(deviation[begin:]) > band) + begin
    last = int(outside[-1]) if outside.size else begin - 1
    between = []
    for sign in (1.0, -1.0):  # a swing may leave the band between two samples
        tops = _is_top(sign * deviation, max(last, begin))
        for k in np.sort(tops[sign * deviation[tops] > band * (1.0 - _NEARLY)])[::-1][:_MOST_PEAKS]:
            when, height = piece.peak(int(k), sign)
            if height > band and when > piece.time[last + 1]:
                between.append(piece.crossing(sign * band, when, float(piece.time[min(k + 1, piece.time.size - 1)])))
                break
    if between:
        return max(between)
    if last < begin:
        return float(piece.time[begin])
    return piece.crossing(float(np.sign(deviation[last])) * band, float(piece.time[last]), float(piece.time[last + 1]))


class _Between:
    """The response between samples, as polynomials through exact values at Chebyshev points."""

    def __init__(self, system: System, course: Course) -> None:
        self.system, self.final = system, course.final
        self.time, self.deviation = course.time, course.deviation
        self.nodes = np.cos(np.pi * np.arange(_NODES) / (_NODES - 1))

    def _polynomial(self, low: float, high: float) -> Array:
        time = np.clip(0.5 * (low + high) + 0.5 * (high - low) * self.nodes, low, high)
        values = self.system.step(time) / self.final - 1.0
        return np.asarray(chebyshev.chebfit(self.nodes, values, _NODES - 1))

    def peak(self, k: int, sign: float = 1.0) -> tuple[float, float]:
        """Return time and height of the extreme about sample k."""
        low = float(self.time[max(k - 1, int(np.searchsorted(self.time, self.system.dead_time_s)))])
        high = float(self.time[min(k + 1, self.time.size - 1)])
        series = sign * self._polynomial(low, high)
        at = chebyshev.chebroots(chebyshev.chebtrim(chebyshev.chebder(series), 1e-13 * np.abs(series).max()))
        at = np.real(at[(np.abs(np.imag(at)) < 1e-6) & (np.abs(np.real(at)) <= 1.0)])
        at = np.concatenate([at, [-1.0, 1.0]])
        heights = chebyshev.chebval(at, series)
        best = int(np.argmax(heights))
        return 0.5 * (low + high) + 0.5 * (high - low) * float(at[best]), float(heights[best])

    def crossing(self, level: float, low: float, high: float) -> float:
        """Return when the deviation passes the level between two times on either side of it."""
        series = self._polynomial(low, high)
        series[0] -= level
        left, right = -1.0, 1.0
        rising = chebyshev.chebval(right, series) > chebyshev.chebval(left, series)
        for _ in range(60):
            middle = 0.5 * (left + right)
            if (chebyshev.chebval(middle, series) > 0) == rising:
                right = middle
            else:
                left = middle
        return 0.5 * (low + high) + 0.25 * (high - low) * (left + right)

    def first(self, level: float, begin: int) -> float:
        """Return when the deviation first reaches the level; the end of the dead time when it jumps there."""
        k = int(np.argmax(self.deviation[begin:] >= level)) + begin
        if k == begin:
            return float(self.time[begin])
        return self.crossing(level, float(self.time[k - 1]), float(self.time[k]))
