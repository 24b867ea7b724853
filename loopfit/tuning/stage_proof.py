"""Proof that no settings between two stages bring a root of the loop to the imaginary axis."""

from __future__ import annotations

import math

import numpy as np

from loopfit.core.arrays import Array
from loopfit.loop.gains import Gains
from loopfit.loop.open_loop import OpenLoop, gain_crossovers, grid_of, open_loop
from loopfit.loop.plant import Plant
from loopfit.loop.roots import Complex
from loopfit.loop.sampled import with_scan

_ASKEW = 0.9 * math.pi  # rad; the proof fails at pi, the rest is more than half a turn between grid points
_FINE = 0.25  # rad, largest turn between grid points


def proven_between(
    plant: Plant, before: Gains, after: Gains, *, scan_s: float | None = None, late: bool = False,
    near: Complex | None = None,
) -> bool:  # fmt: skip
    """Tell whether no settings on the straight line between two bring a root to the imaginary axis.

    Notes
    -----
    1 + L between the two is never 0 where it turns by less than 180 degrees from one to the other, at every frequency
    (Rouche's theorem in the symmetric form of Estermann, Complex Numbers and Functions, 1962, from memory); |dL| <
    |1 + L| at either end is enough for that. The form holds also where an integral term appears and dL is without bound
    at rest. Poles at rest are passed on the right; where both |L| are below 1 there is nothing to show.

    `near` are roots, rad/s, that the frequencies are to be dense at.
    """
    first, second = (
        open_loop(*((plant, gains) if scan_s is None else with_scan(plant, gains, scan_s, late=late)))
        for gains in (before, after)
    )
    crossovers = [gain_crossovers(loop) for loop in (first, second)]
    end = 1.01 * max([*crossovers[0], *crossovers[1]], default=0.0)
    grid = np.concatenate([grid_of(loop, at, 0.9) for loop, at in zip((first, second), crossovers, strict=True)])
    if near is not None:
        grid = np.append(grid, np.abs(near.imag[:, None]) + np.abs(near.real[:, None]) * np.linspace(-3.0, 3.0, 13))
    if max(first.dead_time_s, second.dead_time_s) > 0.0:
        count = min(int(end * first.dead_time_s / _FINE) + 2, 20_000)
        grid = np.append(grid, np.linspace(0.0, end, count))
    grid = np.unique(np.append(grid[(grid > 0.0) & (grid < end)], end))
    if end == 0.0:
        # |L| < 1 at every frequency, and on the real axis too
        return True
    around = 0.1 * grid[0] * np.exp(1j * np.linspace(0.0, 0.5 * math.pi, 9))
    turn, certain = _turn(first, second, around)
    if not np.all(np.abs(turn) < _ASKEW):
        return False
    for _ in range(30):
        turn, certain = _turn(first, second, 1j * grid)
        if not np.all((np.abs(turn) < _ASKEW) | certain):
            return False
        coarse = np.flatnonzero(np.abs(np.diff(turn)) > _FINE)
        if coarse.size == 0:
            return True
        grid = np.insert(grid, coarse + 1, 0.5 * (grid[coarse] + grid[coarse + 1]))
    return False


def _turn(first: OpenLoop, second: OpenLoop, s: Complex) -> tuple[Array, np.ndarray]:
    """Return by how much 1 + L turns from one loop to the other at s, rad, and where both |L| are below 1."""
    with np.errstate(all="ignore"):
        one, two = (
            np.polyval(loop.numerator, s) / np.polyval(loop.denominator, s) * np.exp(-loop.dead_time_s * s)
            for loop in (first, second)
        )
        return np.angle((1.0 + two) / (1.0 + one)), (np.abs(one) < 1.0) & (np.abs(two) < 1.0)
