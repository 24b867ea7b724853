"""The columns of the linear part of a model, and their derivatives in the coordinates.

A prediction is a sum of columns times linear parameters: responses to the recorded input (dead time
inside), the free response from the state at the start, an offset, a drift. Golub & Pereyra (1973):
only the coordinates need a search.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from loopfit.core.arrays import Array
from loopfit.fit.colour import Whitener
from loopfit.fit.samples import Samples
from loopfit.model.chart import Chart
from loopfit.model.shape import ladder, ladder_by_shape

_LONGEST_RELEASE = 3.0  # spans: beyond, a slow decay is a drift to the record
_LONGEST = 100.0
_REMEMBERED = 4


@dataclass(frozen=True, kw_only=True, eq=False)
class Input:
    """A piecewise-constant input: changes of `sizes` (J,) at `times` (J,), s."""

    times: Array
    sizes: Array


@dataclass(frozen=True, kw_only=True, eq=False)
class Columns:
    """What a model is made of, on given samples.

    `rungs`: which responses to the input: 1 the step response, 0 its slope (a zero in the transfer
    function), 2 its integral (an integrating plant; the column carries the time scale, so that its
    linear parameter is a rate). `free_from`: where the free response begins, s, or None.
    Linear parameters come in the order: rungs, displacement and push of the free response, offset, drift.
    """

    samples: Samples
    chart: Chart
    input: Input | None
    rungs: tuple[int, ...]
    free_from: float | None = None
    drift: bool = False
    whitener: Whitener | None = None

    @cached_property
    def target(self) -> Array:
        """Measurement (n,) as weighed (and whitened)."""
        weighed = self.samples.values * self.samples.root_count
        return weighed if self.whitener is None else self.whitener(weighed)

    @cached_property
    def fixed(self) -> Array:
        """Columns without coordinates (1 or 2, n): offset and drift."""
        rows = [np.ones_like(self.samples.centres)]
        if self.drift:
            rows.append(self.samples.centres - self.samples.centres.mean())
        return np.stack(rows) * self.samples.root_count

    @cached_property
    def highest(self) -> Array:
        """Upper bounds of the coordinates (3,): no sum of lags so long that the record cannot hold it."""
        out = np.full(3, np.inf)
        if self.chart.by_lags:
            out[0] = np.log((_LONGEST_RELEASE if self.input is None else _LONGEST) * np.ptp(self.samples.centres))
        return out

    @property
    def moving_count(self) -> int:
        """Number of columns that depend on the coordinates."""
        return len(self.rungs) + (2 if self.free_from is not None else 0)

    def evaluate(self, theta: Array, *, derivatives: bool = True) -> tuple[Array, Array]:
        """Return the columns (B, q, n) and the derivatives (B, 3, m, n) of the first m of them.

        Parameters
        ----------
        theta : (B, 3) array
            Coordinates of B models in this chart.
        """
        if theta.shape[0] > 1:
            return self._evaluated(theta, derivatives)
        # the same optimum is asked for by the search, the walk, the verdict and the findings in turn
        for with_derivatives in (True, False) if not derivatives else (True,):
            known = self._recent.get((theta.tobytes(), with_derivatives))
            if known is not None:
                return known if derivatives else (known[0], known[0][:, :0])
        found = self._evaluated(theta, derivatives)
        for array in found:
            array.flags.writeable = False
        while len(self._recent) >= _REMEMBERED:
            del self._recent[next(iter(self._recent))]
        self._recent[theta.tobytes(), derivatives] = found
        return found

    @cached_property
    def _recent(self) -> dict[tuple[bytes, bool], tuple[Array, Array]]:
        """What was last evaluated at single models."""
        return {}

    def _evaluated(self, theta: Array, derivatives: bool) -> tuple[Array, Array]:
        shape = self.chart.shape(theta)
        scale = self.chart.scale(theta)
        blocks: list[Array] = []
        if self.input is not None and self.rungs:
            blocks.append(self._driven(theta, scale, shape, derivatives))
        if self.free_from is not None:
            blocks.append(self._free(scale, shape, derivatives))
        moving = blocks[0] if len(blocks) == 1 else np.concatenate(blocks, axis=2)
        m = moving.shape[2]
        columns = np.empty((theta.shape[0], m + self.fixed.shape[0], moving.shape[3]))
        columns[:, :m], columns[:, m:] = moving[:, 0], self.fixed
        slopes = moving[:, 1:] if derivatives else columns[:, :0]
        if self.whitener is None:
            return columns, slopes
        return self.whitener(columns), self.whitener(slopes) if derivatives else slopes

    def _driven(self, theta: Array, scale: Array, shape: Array, derivatives: bool) -> Array:
        """Return the responses to the input and their derivatives (B, 4 or 1, rungs, n), weighed."""
        assert self.input is not None
        times, sizes = self.input.times, self.input.sizes
        B, J = theta.shape[0], times.size
        if J == 1:
            x = (self.samples.nodes - (times[0] + theta[:, 2:])) * (1.0 / scale[:, None])
            return self._weighed(self._rungs(x, scale, shape, self.rungs, derivatives), scale, self.rungs, sizes[0])
        since = self.samples.nodes - (times[None, :, None] + theta[:, 2, None, None])
        x = (since / scale[:, None, None]).reshape(B * J, -1)
        each = self._rungs(x, np.repeat(scale, J), np.repeat(shape, J), self.rungs, derivatives)
        together = np.einsum("bjpqn,j->bpqn", each.reshape(B, J, *each.shape[1:]), sizes)
        return self._weighed(together, scale, self.rungs, 1.0)

    def _free(self, scale: Array, shape: Array, derivatives: bool) -> Array:
        """Return the free response and its derivatives (B, 4 or 1, 2, n), weighed."""
        assert self.free_from is not None
        x = (self.samples.nodes - self.free_from) / scale[:, None]
        out = self._weighed(self._rungs(x, scale, shape, (1, 0), derivatives), scale, (1, 0), 1.0)
        out[:, 0, 0] = self.samples.root_count - out[:, 0, 0]
        out[:, 1:, 0] *= -1.0
        out[:, 3:] = 0.0  # the free response knows no dead time
        return out

    def _rungs(self, x: Array, scale: Array, shape: Array, rungs: tuple[int, ...], derivatives: bool) -> Array:
        """Return columns and derivatives (B, 4 or 1, len(rungs), n) from nodes x (B, M), in units of the scale.

        Values at rows, or rises of the integral over bins.
        """
        samples, chart = self.samples, self.chart
        lift = 1 if samples.binned else 0  # an average is a difference of the next integral
        lowest, highest = min(rungs) + lift - 1, max(rungs) + lift
        correct = samples.binned and samples.row_interval > 0
        a, b, a_by, b_by = chart.coefficients(shape)
        np.maximum(x, 0.0, out=x)
        response = chart.respond(x, shape, derivatives=derivatives)
        F = ladder(x, response, a, b, lowest - 1 if correct else lowest, highest)
        G = ladder_by_shape(response, F, a, b, a_by, b_by, highest) if derivatives else {}
        out = np.empty((x.shape[0], 4 if derivatives else 1, len(rungs), x.shape[1]))
        for i, rung in enumerate(rungs):
            k = rung + lift
            if correct:
                np.multiply((samples.row_interval / scale[:, None]) ** 2 / -24.0, F[k - 2], out=out[:, 0, i])
                out[:, 0, i] += F[k]
            else:
                out[:, 0, i] = F[k]
            if derivatives:
                power = lift + (1 if rung == 2 else 0)  # of the scale, in the column
                stretch = np.multiply(x, F[k - 1], out=out[:, 1, i])
                np.subtract(F[k] if power == 1 else power * F[k], stretch, out=stretch)
                if chart.scale_sign < 0:
                    np.negative(stretch, out=stretch)
                np.multiply(G[k], chart.shape_slope(shape)[:, None], out=out[:, 2, i])
                np.multiply(F[k - 1], -1.0 / scale[:, None], out=out[:, 3, i])
        return samples.differences(out) if samples.binned else out

    def _weighed(self, rises: Array, scale: Array, rungs: tuple[int, ...], size: float) -> Array:
        """Return the rises (B, p, len(rungs), n) in units of the measurement, weighed; in place."""
        powers = np.array([(1 if rung == 2 else 0) + (1 if self.samples.binned else 0) for rung in rungs])
        factor = size * scale[:, None] ** powers
        rises *= factor[:, None, :, None] * self._weight
        return rises

    @cached_property
    def _weight(self) -> Array:
        """Weight of a sample (n,): the root of its rows; over the width, where it is an average."""
        root = self.samples.root_count
        return root / self.samples.widths if self.samples.binned else root
