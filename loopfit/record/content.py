"""What the values of a column show: constant, stepped, following another column."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from loopfit.core.arrays import Array


def known_of(values: Array) -> Array:
    """Return the numbers among the values, without a copy when all are."""
    finite = np.isfinite(values)
    return values if finite.all() else values[finite]


def is_constant(values: Array) -> bool:
    """Return whether all numbers of a column are equal."""
    if len(values) and np.isfinite(values[0]) and bool(np.any(values[:: max(1, len(values) // 1000)] > values[0])):
        return False
    known = known_of(values)
    return len(known) == 0 or bool(np.all(known == known[0]))


def changes_of(values: Array) -> NDArray[np.int64]:
    """Return the rows (k,) at which the value differs from the row before."""
    return np.flatnonzero(np.diff(values) != 0) + 1


def is_stepped(values: Array) -> bool:
    """Return whether a column stands still but for a few changes: at most one row in twenty, or three rows."""
    known = known_of(values)
    if len(known) < 3 or is_constant(known):
        return False
    return len(changes_of(known)) <= max(3, 0.05 * len(known)) and len(changes_of(known)) < 0.5 * len(known)


def jump_share(values: Array) -> float:
    """Return the largest change from one row to the next as a share of the range."""
    known = known_of(values)
    span = float(np.ptp(known)) if len(known) else 0.0
    return float(np.max(np.abs(np.diff(known)))) / span if span > 0 and len(known) > 1 else 0.0


def noise_of(values: Array) -> float:
    """Return the noise (standard deviation) from second differences, at least the resolution over root twelve.

    The median of absolute second differences is 0.6745 sqrt(6) sigma for white noise (from memory); it does not
    see slow motion.
    """
    known = known_of(values)
    if len(known) < 4:
        return 0.0
    sigma = float(np.median(np.abs(np.diff(known, 2)))) / (0.6745 * 6**0.5)
    step = np.abs(np.diff(np.unique(known[:20000])))
    resolution = float(np.min(step)) if len(step) and len(step) < 0.5 * min(len(known), 20000) else 0.0
    return max(sigma, resolution / 12**0.5)


def follows(measurement: Array, stepped: Array) -> bool:
    """Return whether the measurement equals a stepped column, within noise, before and after its changes.

    Each stretch between changes is judged by the median of its last quarter; a stretch too short to settle
    (under eight rows, or under a fifth of the longest) is not judged. Equal means within four times the noise,
    or 3 % of the largest step, at the start; 10 % of it after a change, which the measurement may not have ended.
    """
    known = np.isfinite(measurement) & np.isfinite(stepped)
    y, r = measurement[known], stepped[known]
    edges = [0, *changes_of(r).tolist(), len(r)]
    stretches = [(a, b) for a, b in pairwise(edges)]
    longest = max(b - a for a, b in stretches)
    judged = [(a, b) for a, b in stretches if b - a >= max(8, longest / 5)] or stretches
    step = float(np.ptp(r))
    noise = 4 * noise_of(y)
    for a, b in judged:
        tail = y[b - max(1, (b - a) // 4) : b]
        allowed = max(noise, (0.03 if a == 0 else 0.10) * step)
        if not abs(float(np.median(tail)) - float(r[a])) <= allowed:
            return False
    return True


def distance(measurement: Array, reference: Array) -> float:
    """Return how far a column is from a reference: rms difference over the rms of the reference about its mean."""
    known = np.isfinite(measurement) & np.isfinite(reference)
    spread = float(np.std(reference[known]))
    return (
        float(np.sqrt(np.mean((measurement[known] - reference[known]) ** 2))) / spread if spread > 0 else float("inf")
    )


def same_shape(one: Array, other: Array) -> bool:
    """Return whether one column is the other in another unit: a straight line, to a thousandth of the range."""
    known = np.isfinite(one) & np.isfinite(other)
    a, b = one[known], other[known]
    if len(a) < 3 or is_constant(a) or is_constant(b):
        return False
    a, b = (a - a.mean()) / np.ptp(a), (b - b.mean()) / np.ptp(b)
    slope = float(a @ b) / float(a @ a)
    return abs(abs(slope) - 1) < 1e-3 and bool(np.max(np.abs(b - slope * a)) < 1e-3)
