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
        shape = self.chart.shape(theta)
        scale = self.chart.scale(theta)
        blocks: list[tuple[Array, Array]] = []
        if self.input is not None and self.rungs:
            blocks.append(self._driven(theta, scale, shape, derivatives))
        if self.free_from is not None:
            blocks.append(self._free(scale, shape, derivatives))
        fixed = np.broadcast_to(self.fixed, (theta.shape[0], *self.fixed.shape))
        weight = self.samples.root_count
        columns = np.concatenate([*(block[0] * weight for block in blocks), fixed], axis=1)
        if self.whitener is not None:
            columns = self.whitener(columns)
        if not derivatives:
            return columns, columns[:, :0]
        parts = [block[1] for block in blocks]
        slopes = (parts[0] if len(parts) == 1 else np.concatenate(parts, axis=2)) * weight
        return columns, slopes if self.whitener is None else self.whitener(slopes)

    def _driven(self, theta: Array, scale: Array, shape: Array, derivatives: bool) -> tuple[Array, Array]:
        assert self.input is not None
        B, J = theta.shape[0], self.input.times.size
        since = self.samples.nodes[None, None, :] - self.input.times[None, :, None] - theta[:, 2, None, None]
        x = (since / scale[:, None, None]).reshape(B * J, -1)
        many = np.repeat(shape, J) if J > 1 else shape
        wide = np.repeat(scale, J) if J > 1 else scale
        values, slopes = self._rungs(x, wide, many, self.rungs, derivatives)
        if J > 1:
            sizes = self.input.sizes
            values = np.einsum("bjqn,j->bqn", values.reshape(B, J, *values.shape[1:]), sizes)
            if derivatives:
                slopes = np.einsum("bjpqn,j->bpqn", slopes.reshape(B, J, *slopes.shape[1:]), sizes)
        else:
            values, slopes = values * self.input.sizes[0], slopes * self.input.sizes[0]
        return values, slopes

    def _free(self, scale: Array, shape: Array, derivatives: bool) -> tuple[Array, Array]:
        assert self.free_from is not None
        x = (self.samples.nodes[None, :] - self.free_from) / scale[:, None]
        values, slopes = self._rungs(x, scale, shape, (1, 0), derivatives)
        values[:, 0] = 1.0 - values[:, 0]
        if derivatives:
            slopes[:, :, 0] *= -1.0
            slopes[:, 2] = 0.0  # the free response knows no dead time
        return values, slopes

    def _rungs(
        self, x: Array, scale: Array, shape: Array, rungs: tuple[int, ...], derivatives: bool
    ) -> tuple[Array, Array]:
        """Return columns (B, len(rungs), n) and derivatives (B, 3, len(rungs), n) at nodes x (B, M)."""
        samples, chart = self.samples, self.chart
        lift = 1 if samples.binned else 0  # an average is a difference of the next integral
        lowest, highest = min(rungs) + lift - 1, max(rungs) + lift
        a, b, a_by, b_by = chart.coefficients(shape)
        response = chart.respond(x, shape, derivatives=derivatives)
        correct = samples.binned and samples.row_interval > 0
        F = ladder(x, response, a, b, min(lowest, min(rungs) - 1) if correct else lowest, highest)
        tau = scale[:, None]
        n = samples.values.size
        values = np.empty((x.shape[0], len(rungs), n))
        slopes = np.empty((x.shape[0], 3, len(rungs), n)) if derivatives else values[:, :0]
        G = ladder_by_shape(response, F, a, b, a_by, b_by, highest) if derivatives else {}
        shape_slope = chart.shape_slope(shape)[:, None]
        xs = np.maximum(x, 0.0)
        for i, k in enumerate(rungs):
            power = tau if k == 2 else 1.0
            extra = 1.0 if k == 2 else 0.0
            if not samples.binned:
                values[:, i] = power * F[k]
                if derivatives:
                    slopes[:, 0, i] = chart.scale_sign * power * (extra * F[k] - xs * F[k - 1])
                    slopes[:, 1, i] = power * G[k] * shape_slope
                    slopes[:, 2, i] = -power * F[k - 1] / tau
                continue
            over = power * tau / samples.widths
            rise = F[k + 1] - (samples.row_interval / tau) ** 2 / 24.0 * F[k - 1] if correct else F[k + 1]
            values[:, i] = over * samples.differences(rise)
            if derivatives:
                stretch = (1.0 + extra) * F[k + 1] - xs * F[k]
                slopes[:, 0, i] = chart.scale_sign * over * samples.differences(stretch)
                slopes[:, 1, i] = over * samples.differences(G[k + 1]) * shape_slope
                slopes[:, 2, i] = -power / samples.widths * samples.differences(F[k])
        return values, slopes
