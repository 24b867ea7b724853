"""The response to an input that changes at nearly every row: a convolution on the grid of the rows.

A controller's recorded output changes once a scan. The direct sum costs rows times changes; on a common grid the fast
Fourier transform gives the same values (Cooley & Tukey 1965). The response is still evaluated at t - L, so that the dead
time need not be a whole number of rows.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from loopfit.core.arrays import Array
from loopfit.fit.samples import Samples

_MANY = 16  # changes from which the transform is quicker
_OFF_GRID = 0.05  # of a row interval: clocks that jitter less are taken for even
_AT_ONCE = 400_000  # numbers in one transform: beyond, memory costs more than it saves


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Recorded:
    """An input on the grid of the rows.

    `since` (M,): distances from a change at which the response is needed, s. `spectrum`: of the changes, `length` points.
    `lead`: grid points before the first row.
    """

    since: Array
    spectrum: NDArray[np.complex128]
    length: int
    lead: int

    def response(self, each: Array) -> Array:
        """Return the answer (..., n) at the rows, from the answer (..., M) to a single change of size 1."""
        transformed = np.fft.rfft(each, self.length, axis=-1)
        transformed *= self.spectrum
        rows: Array = np.fft.irfft(transformed, self.length, axis=-1)[..., self.lead : self.since.size]
        return rows

    def parts(self, series: int, members: int) -> Iterator[slice]:
        """Yield the members in parts that are transformed together."""
        each = max(1, _AT_ONCE * members // max(series * self.length, 1))
        for first in range(0, members, each):
            yield slice(first, first + each)


def recorded_on(samples: Samples, times: Array, sizes: Array) -> Recorded | None:
    """Return an input on the grid of evenly spaced rows; None where it changes seldom, or off the grid.

    Parameters
    ----------
    samples : Samples
    times, sizes : (J,) arrays
        Changes of the input, s.
    """
    if times.size < _MANY:
        return None
    if samples.binned:
        if not (samples.touching and samples.row_interval > 0):
            return None
        interval, count = samples.row_interval, samples.rows
        first = float(samples.nodes[0]) + 0.5 * interval
    else:
        on_grid = even_grid(samples.nodes)
        if on_grid is None:
            return None
        (first, interval), places = on_grid
        count = places.size
        if int(places[-1]) + 1 != count:
            return None
    at = (times - first) / interval
    rows = np.rint(at)
    if not np.all(np.abs(at - rows) <= _OFF_GRID):
        return None
    inside = rows < count
    lead = int(max(0.0, -rows.min()))
    changes = np.zeros(count + lead)
    np.add.at(changes, rows[inside].astype(np.intp) + lead, sizes[inside])
    length = _smooth(2 * changes.size - 1)
    return Recorded(
        since=interval * np.arange(changes.size, dtype=np.float64),
        spectrum=np.fft.rfft(changes, length),
        length=length,
        lead=lead,
    )


def even_grid(time: Array) -> tuple[tuple[float, float], NDArray[np.intp]] | None:
    """Return first instant and interval, s, of the grid that rows lie on, and their places on it; None without one.

    Rows may be missing. A clock that jitters by less than 5 % of the interval counts as even.
    """
    steps = np.diff(time)
    if steps.size == 0:
        return None
    places = np.concatenate([[0], np.cumsum(np.rint(steps / np.median(steps)))]).astype(np.intp)
    if not np.all(np.diff(places) > 0):
        return None
    first, interval = float(time[0]), float(time[-1] - time[0]) / float(places[-1])
    if not np.all(np.abs(time - first - interval * places) <= _OFF_GRID * interval):
        return None
    return (first, interval), places


def _smooth(least: int) -> int:
    """Return the least 2^a times 1, 3, 5, 9 or 15 that is not below a number: a transform of that length is quick."""
    return min(factor << max(0, (-(-least // factor) - 1).bit_length()) for factor in (1, 3, 5, 9, 15))
