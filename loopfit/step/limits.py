"""Limits in a signal: a flat top, a clamp, a slope that cannot be exceeded."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from loopfit.core.arrays import Array

_IN_A_ROW = 5
_USUALLY_REPEATS = 0.3  # share of equal neighbours that makes repeats mean nothing
_ABRUPT = 1e-3
_SAME_SLOPE = 0.02
_SLOPE_RUNS = 5

Rows = NDArray[np.intp]


def rows_at_limit(values: Array) -> Rows:
    """Return the rows at which a signal lies flat at its highest or lowest value; none, as a rule.

    A run of equal values at the very end of the range is a limit only in a signal whose neighbours
    otherwise differ: a constant or coarse signal repeats everywhere.

    Parameters
    ----------
    values : (n,) array
        The signal.
    """
    out: list[Rows] = []
    equal = np.diff(values) == 0
    for extreme in (values.max(), values.min()):
        abrupt = _ABRUPT * (values.max() - values.min())  # a smooth approach to rest ends flat too
        runs = [
            (begin, end)
            for begin, end in _runs(values == extreme, _IN_A_ROW)
            if begin > 0 and abs(values[begin] - values[begin - 1]) > abrupt
        ]
        if not runs:
            continue
        inside = np.zeros(values.size, dtype=bool)
        for begin, end in runs:
            inside[begin:end] = True
        elsewhere = equal[~(inside[1:] & inside[:-1])]
        if elsewhere.size >= _IN_A_ROW and np.mean(elsewhere) < _USUALLY_REPEATS:
            out.append(np.flatnonzero(inside))
    return np.sort(np.concatenate(out)) if out else np.zeros(0, dtype=np.intp)


def steepest_runs(time: Array, values: Array) -> list[tuple[int, int]]:
    """Return the runs of rows over which a signal moves at its one greatest slope: a rate limit.

    Parameters
    ----------
    time, values : (n,) arrays
        Times in s and the signal.
    """
    slopes = np.diff(values) / np.diff(time)
    greatest = float(np.max(np.abs(slopes))) if slopes.size else 0.0
    if greatest == 0:
        return []
    runs = _runs(np.abs(np.abs(slopes) - greatest) <= _SAME_SLOPE * greatest, _SLOPE_RUNS)
    return [(begin, end) for begin, end in runs if np.all(slopes[begin:end] > 0) or np.all(slopes[begin:end] < 0)]


def _runs(flags: NDArray[np.bool_], at_least: int) -> list[tuple[int, int]]:
    """Return (begin, end) of the runs of at least so many true flags."""
    edges = np.flatnonzero(np.diff(np.concatenate([[False], flags, [False]])))
    return [(int(a), int(b)) for a, b in zip(edges[::2], edges[1::2], strict=True) if b - a >= at_least]
