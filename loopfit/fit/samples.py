"""The rows of a record as the estimator sees them: single rows, or averages over bins."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from loopfit.core.arrays import Array

_POINTS_AT_MOST = 260
_UNEVEN_POINTS_AT_MOST = 4000
BINS_AT_LEAST = 150
_BINS_AT_MOST = 8000
_EVEN_WITHIN = 0.02


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Samples:
    """Averages of the measurement over bins of rows, or the rows themselves.

    `nodes` are the n times of the rows, or, when `binned`, the edges of n bins: n + 1 of them where the
    bins touch, else all left edges followed by all right edges. `root_count` is the square root of the
    number of rows in each; `row_interval` the time between rows inside a bin.
    """

    nodes: Array
    centres: Array
    values: Array
    root_count: Array
    binned: bool
    touching: bool
    row_interval: float
    rows: int

    def differences(self, at_nodes: Array) -> Array:
        """Return right edge minus left edge along the last axis."""
        if self.touching:
            return at_nodes[..., 1:] - at_nodes[..., :-1]
        n = self.values.size
        return at_nodes[..., n:] - at_nodes[..., :n]

    @property
    def widths(self) -> Array:
        """Width of each bin, s."""
        return self.differences(self.nodes)

    @property
    def interval(self) -> float:
        """Mean time between rows, s."""
        return float(self.nodes.max() - self.nodes.min()) / max(self.rows - (0 if self.binned else 1), 1)


def is_even(time: Array) -> bool:
    """Tell whether the rows are evenly spaced, within 2 % of the interval."""
    steps = np.diff(time)
    middle = float(np.median(steps))
    return bool(np.all(np.abs(steps - middle) <= _EVEN_WITHIN * middle))


def rows_as_samples(time: Array, values: Array) -> Samples:
    """Return each row as a sample of its own."""
    return Samples(
        nodes=time,
        centres=time,
        values=values,
        root_count=np.ones(time.size),
        binned=False,
        touching=False,
        row_interval=0.0,
        rows=time.size,
    )


def gather(
    time: Array, values: Array, width: float, step_row: int, *, even: bool, fewest: int = BINS_AT_LEAST
) -> Samples:
    """Return the record in bins no wider than `width`, with an edge at the step.

    Short records, and bins that would hold a single row, stay as rows: an average over one row is the
    row, not an integral. The loss of information is (width / time constant)^2 / 24 of the part
    (quantisation of time, e.g. Sheppard's correction).

    Parameters
    ----------
    time, values : (n,) arrays
        Rows in rising order of time, s.
    width : float
        Widest bin, s; infinite for the fewest bins.
    step_row : int
        Row at which an edge is put (0 for none).
    even : bool
        Whether the rows are evenly spaced.
    fewest : int
        Fewest bins.
    """
    n = time.size
    span = float(time[-1] - time[0])
    bins = min(max(span / width, fewest), _BINS_AT_MOST)
    per_bin = int(n / bins)
    few = n <= (_POINTS_AT_MOST if even else _UNEVEN_POINTS_AT_MOST) and fewest == BINS_AT_LEAST
    if few or per_bin < 2:
        return rows_as_samples(time, values)
    if even:
        starts = np.concatenate([np.arange(step_row % per_bin, n, per_bin)])
        if starts[0] != 0:
            starts = np.concatenate([[0], starts])
    else:
        edges = time[0] + span * np.arange(int(bins)) / int(bins)
        starts = np.unique(np.concatenate([np.searchsorted(time, edges), [step_row]]))
        starts = starts[starts < n]
    ends = np.append(starts[1:], n)
    count = (ends - starts).astype(np.float64)
    means = np.add.reduceat(values, starts) / count
    centres = np.add.reduceat(time, starts) / count
    if even:
        interval = span / (n - 1)
        nodes = np.append(time[0] + (starts - 0.5) * interval, time[-1] + 0.5 * interval)
    else:
        # unevenly spaced rows: the interval with the same mean time and the same spread of times
        interval = 0.0
        spread = np.add.reduceat((time - np.repeat(centres, ends - starts)) ** 2, starts) / count
        half = np.sqrt(3.0 * spread) + 1e-6 * span / n
        nodes = np.concatenate([centres - half, centres + half])
    return Samples(
        nodes=nodes,
        centres=centres,
        values=means,
        root_count=np.sqrt(count),
        binned=True,
        touching=even,
        row_interval=interval,
        rows=n,
    )
