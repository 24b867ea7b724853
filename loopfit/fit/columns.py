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
from loopfit.fit.convolution import Recorded, recorded_on
from loopfit.fit.samples import Samples
from loopfit.model.chart import Chart
from loopfit.model.shape import ladder, ladder_by_shape

_LONGEST_RELEASE = 3.0  # spans: beyond, a slow decay is a drift to the record
_LONGEST = 100.0
_REMEMBERED = 4


@dataclass(frozen=True, kw_only=True, eq=False)
class Input:
    """A piecewise-constant input: changes of `sizes` (J,) at `times` (J,), s.

    `unknown_from`: instant, s, before which the level of the input is unknown: a step of unknown size there.
    """

    times: Array
    sizes: Array
    unknown_from: float | None = None


@dataclass(frozen=True, kw_only=True, eq=False)
class Columns:
    """What a model is made of, on given samples.

    `rungs`: which responses to the input: 1 the step response, 0 its slope (a zero in the transfer
    function), 2 its integral (an integrating plant; the column carries the time scale, so that its
    linear parameter is a rate). `free_from`: where the free response begins, s, or None. `load`: a step of unknown size
    is felt at an unknown instant, s, which is then a fourth coordinate.
    Linear parameters come in the order: rungs, unknown level of the input, load, displacement and push of the free
    response, offset, drift.
    """

    samples: Samples
    chart: Chart
    input: Input | None
    rungs: tuple[int, ...]
    free_from: float | None = None
    drift: bool = False
    whitener: Whitener | None = None
    load: bool = False

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
        level = self.input is not None and self.input.unknown_from is not None
        return len(self.rungs) + level + self.load + (2 if self.free_from is not None else 0)

    def evaluate(self, theta: Array, *, derivatives: bool = True) -> tuple[Array, Array]:
        """Return the columns (B, q, n) and the derivatives (B, p, m, n) of the first m of them.

        Parameters
        ----------
        theta : (B, p) array
            Coordinates of B models in this chart; p is 3, with a load 4.
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
            begin = self.input.unknown_from
            if begin is not None:
                blocks.append(self._stepped(begin + theta[:, 2], scale, shape, derivatives))
        if self.load:
            blocks.append(self._stepped(theta[:, 3], scale, shape, derivatives))
        if self.free_from is not None:
            blocks.append(self._free(scale, shape, derivatives))
        if self.load and derivatives:
            blocks = [np.concatenate([block, np.zeros_like(block[:, :1])], axis=1) for block in blocks]
            felt = len(blocks) - (2 if self.free_from is not None else 1)
            blocks[felt][:, [3, 4]] = blocks[felt][:, [4, 3]]  # a load is felt when it is, whatever the dead time
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
        if self._recorded is not None:
            return self._convolved(self._recorded, theta, scale, shape, derivatives)
        since = self.samples.nodes - (times[None, :, None] + theta[:, 2, None, None])
        x = (since / scale[:, None, None]).reshape(B * J, -1)
        each = self._rungs(x, np.repeat(scale, J), np.repeat(shape, J), self.rungs, derivatives)
        together = np.einsum("bjpqn,j->bpqn", each.reshape(B, J, *each.shape[1:]), sizes)
        return self._weighed(together, scale, self.rungs, 1.0)

    @cached_property
    def _recorded(self) -> Recorded | None:
        """The input on the grid of the rows, where it changes there often."""
        assert self.input is not None
        return recorded_on(self.samples, self.input.times, self.input.sizes)

    def _convolved(self, recorded: Recorded, theta: Array, scale: Array, shape: Array, derivatives: bool) -> Array:
        """Return the same as a convolution of the input's changes with the response at every row's distance."""
        samples = self.samples
        out = np.empty((theta.shape[0], 4 if derivatives else 1, len(self.rungs), samples.values.size))
        powers = np.array([1 if rung == 2 else 0 for rung in self.rungs])
        for part in recorded.parts(theta.shape[0] * out.shape[1] * out.shape[2], theta.shape[0]):
            x = (recorded.since - theta[part, 2:3]) * (1.0 / scale[part, None])
            each = self._responses(x, scale[part], shape[part], self.rungs, derivatives, lift=0, correct=False)
            rows = recorded.response(each)
            factor = (scale[part, None] ** powers)[:, None, :, None]
            if samples.binned:
                first = np.rint(np.cumsum(samples.root_count**2) - samples.root_count**2).astype(np.intp)
                out[part] = np.add.reduceat(rows, first, axis=-1) * (factor / samples.root_count)
            else:
                out[part] = rows * (factor * samples.root_count)
        return out

    def _stepped(self, begins: Array, scale: Array, shape: Array, derivatives: bool) -> Array:
        """Return the response to a unit step at an instant (B,), and its derivatives (B, 4 or 1, 1, n), weighed."""
        rung = self.rungs[:1]
        x = (self.samples.nodes - begins[:, None]) * (1.0 / scale[:, None])
        return self._weighed(self._rungs(x, scale, shape, rung, derivatives), scale, rung, 1.0)

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
        samples = self.samples
        lift = 1 if samples.binned else 0  # an average is a difference of the next integral
        correct = samples.binned and samples.row_interval > 0
        out = self._responses(x, scale, shape, rungs, derivatives, lift=lift, correct=correct)
        return samples.differences(out) if samples.binned else out

    def _responses(
        self,
        x: Array,
        scale: Array,
        shape: Array,
        rungs: tuple[int, ...],
        derivatives: bool,
        *,
        lift: int,
        correct: bool,
    ) -> Array:
        """Return the rungs, `lift` integrals further, at nodes x (B, M); x is changed."""
        samples, chart = self.samples, self.chart
        lowest, highest = min(rungs) + lift - 1, max(rungs) + lift
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
        return out

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
