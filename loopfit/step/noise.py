"""Noise and resolution of a column, without a model."""

from __future__ import annotations

import math

import numpy as np

from loopfit.core.arrays import Array


def noise_rms(values: Array) -> float:
    """Return the rms of the fast noise on a smooth signal, from its second differences.

    White noise of variance s^2 has second differences of variance 6 s^2 (von Neumann et al. 1941, for
    first differences); the median absolute value is blind to a few jumps. Slow coloured noise is not
    seen here.

    Parameters
    ----------
    values : (n,) array, n >= 3
    """
    second = np.abs(np.diff(values, 2))
    middle = float(np.median(second)) / 0.6745
    if middle == 0:  # coarse resolution: most rows repeat
        middle = float(np.sqrt(np.mean(np.sort(second)[: max(1, int(0.9 * second.size))] ** 2)))
    return middle / math.sqrt(6.0)


def resolution(values: Array) -> float:
    """Return the smallest step between neighbouring distinct values when they lie on a grid, else 0.

    Parameters
    ----------
    values : (n,) array
    """
    distinct = np.unique(values)
    if distinct.size < 2:
        return 0.0
    gaps = np.diff(distinct)
    span = float(distinct[-1] - distinct[0])
    gaps = gaps[gaps > 1e-9 * span]
    if gaps.size == 0:
        return 0.0
    least = float(gaps.min())
    multiples = gaps / least
    on_grid = bool(np.all(np.abs(multiples - np.round(multiples)) < 0.02 * np.maximum(1.0, multiples)))
    coarse = distinct.size <= max(4, 0.5 * values.size)
    return least if on_grid and coarse else 0.0
