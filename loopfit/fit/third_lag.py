"""A third lag and a zero on top of the second order: the columns of a model that doubts it.

Transfer function (1 + kappa T s) / ((r T^2 s^2 + T s + 1)(1 + beta T s)) with dead time. In partial fractions the
step response is B g + A h + C (1 - exp(-x / beta)), C = beta^2 / (r - beta + beta^2), A = -C r / beta, B = 1 - C,
with g and h of the second order; kappa is a linear parameter.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from loopfit.core.arrays import Array
from loopfit.fit.columns import Columns
from loopfit.model.chart import LAGS, R_SHIFT
from loopfit.model.shape import ladder

_NUDGE = 1e-4
_POLE = 1e-3


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ThirdLag:
    """The family on the samples of a fit.

    Four coordinates: those of the lags' chart, and the logarithm of the third lag over T sqrt(r + 0.03), which is near
    1 / omega_n.
    """

    columns: Columns

    def evaluate(self, theta: Array) -> tuple[Array, Array]:
        """Return columns (B, q, n) and derivatives (B, 4, 2, n) for `minimise`; derivatives by differences."""
        here = self.values(theta)
        slopes = np.empty((theta.shape[0], 4, 2, here.shape[2]))
        for k in range(4):
            step = np.zeros(4)
            step[k] = _NUDGE if k != 2 else _NUDGE * float(np.min(LAGS.scale(theta)))
            slopes[:, k] = (self.values(theta + step)[:, :2] - here[:, :2]) / step[k]
        return here, slopes

    def values(self, theta: Array) -> Array:
        """Return the columns (B, q, n): response, its slope, then offset and drift."""
        samples, source = self.columns.samples, self.columns.input
        assert source is not None
        scale, shape = LAGS.scale(theta), LAGS.shape(theta)
        total = np.zeros((theta.shape[0], 2, samples.values.size))
        for at, size in zip(source.times, source.sizes, strict=True):
            x = (samples.nodes[None, :] - at - theta[:, 2:3]) / scale[:, None]
            integral, response, slope = third_order(x, shape, np.exp(theta[:, 3]))
            if samples.binned:
                over = scale[:, None] / samples.widths
                total[:, 0] += size * over * samples.differences(integral)
                total[:, 1] += size * over * samples.differences(response)
            else:
                total[:, 0] += size * response
                total[:, 1] += size * slope
        fixed = np.broadcast_to(self.columns.fixed, (theta.shape[0], *self.columns.fixed.shape))
        return np.concatenate([total * samples.root_count, fixed], axis=1)


def third_order(x: Array, shape: Array, lag: Array) -> tuple[Array, Array, Array]:
    """Return integral, response and slope of the third-order unit step at x (B, m) in units of T."""
    x = np.maximum(x, 0.0)
    r = shape[:, None]
    beta = lag[:, None] * np.sqrt(r + R_SHIFT)
    q = r - beta + beta**2
    beta = np.where(np.abs(q) < _POLE * beta, beta * (1.0 + 3.0 * _POLE), beta)  # beside a double pole
    q = r - beta + beta**2
    basic = LAGS.respond(x, shape, derivatives=False)
    rungs = ladder(x, basic, r, np.ones_like(r), 0, 2)
    C = beta**2 / q
    A, B = -C * r / beta, 1.0 - C
    fall = np.exp(-np.minimum(x / beta, 600.0))
    integral = B * rungs[2] + A * rungs[1] + C * (x - beta * (1.0 - fall))
    response = B * rungs[1] + A * rungs[0] + C * (1.0 - fall)
    # h' = (1 - g - h) / r closes the ladder downwards
    bend = np.where(x > 0, (1.0 - rungs[1] - rungs[0]) / r, 0.0)
    slope = B * rungs[0] + A * bend + C / beta * fall * (x > 0)
    return integral, response, slope
