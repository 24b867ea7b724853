"""A third lag and a zero on top of the second order: the columns of a model that doubts it.

Transfer function (1 + kappa T s) / ((r T^2 s^2 + T s + 1)(1 + beta T s)) with dead time. In partial fractions every
rung of its step response is y_k = B F_k + A F_(k-1) + C e_k, F the ladder of the second order, e that of the third lag
alone, C = beta^2 / (r - beta + beta^2), A = -C r / beta, B = 1 - C; kappa is a linear parameter.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from loopfit.core.arrays import Array
from loopfit.fit.colour import Whitener
from loopfit.fit.columns import Columns
from loopfit.model.chart import LAGS, R_SHIFT
from loopfit.model.shape import ladder, ladder_by_shape

_POLE = 1e-3
_LARGEST_EXPONENT = 600.0
LEAST_LAG, LARGEST_LAG, LARGEST_SHAPE = 0.02, 50.0, np.exp(10.0)
LOWEST = np.append(LAGS.lowest, np.log(LEAST_LAG))


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class ThirdLag:
    """The family on the samples of a fit.

    Four coordinates: those of the lags' chart, and the logarithm of the third lag over T sqrt(r + 0.03), which is near
    1 / omega_n. Linear parameters: gain, gain times kappa, then offset and drift.
    """

    columns: Columns
    whitener: Whitener | None = None

    @property
    def highest(self) -> Array:
        """Upper bounds of the coordinates (4,)."""
        return np.array([self.columns.highest[0], np.log(LARGEST_SHAPE), np.inf, np.log(LARGEST_LAG)])

    @property
    def target(self) -> Array:
        """Measurement (n,) as weighed (and whitened)."""
        return self._seen(self.columns.target)

    def evaluate(self, theta: Array, *, derivatives: bool = True) -> tuple[Array, Array]:
        """Return columns (B, q, n) and the derivatives (B, 4, 2, n) of the first two of them.

        Parameters
        ----------
        theta : (B, 4) array
        """
        samples, source = self.columns.samples, self.columns.input
        assert source is not None
        lift = 1 if samples.binned else 0
        scale, shape = LAGS.scale(theta), LAGS.shape(theta)
        moving = np.zeros((theta.shape[0], 5 if derivatives else 1, 2, samples.nodes.size))
        for at, size in zip(source.times, source.sizes, strict=True):
            x = (samples.nodes - at - theta[:, 2:3]) / scale[:, None]
            rungs = third_order(
                x,
                shape,
                np.exp(theta[:, 3]),
                1 + lift,
                lowest=-1 if derivatives or lift else 0,
                derivatives=derivatives,
            )
            for i, k in enumerate((1 + lift, lift)):
                y = rungs[k]
                value = y[0]
                if (
                    samples.binned and samples.row_interval > 0
                ):  # rows are points: the average of few is not the integral
                    value = value - (samples.row_interval / scale[:, None]) ** 2 / 24.0 * rungs[k - 2][0]
                moving[:, 0, i] += size * value
                if derivatives:
                    slope = rungs[k - 1][0]
                    moving[:, 1, i] += size * (lift * y[0] - np.maximum(x, 0.0) * slope)
                    moving[:, 2, i] += size * y[1]
                    moving[:, 3, i] -= size / scale[:, None] * slope
                    moving[:, 4, i] += size * y[2]
        if samples.binned:
            moving = samples.differences(moving) * scale[:, None, None, None] / samples.widths
        moving *= samples.root_count
        fixed = np.broadcast_to(self.columns.fixed, (theta.shape[0], *self.columns.fixed.shape))
        columns = self._seen(np.concatenate([moving[:, 0], fixed], axis=1))
        return columns, self._seen(moving[:, 1:]) if derivatives else columns[:, :0]

    def _seen(self, rows: Array) -> Array:
        return rows if self.whitener is None else self.whitener(rows)


def third_order(
    x: Array, shape: Array, lag: Array, highest: int, *, lowest: int = -1, derivatives: bool = True
) -> dict[int, tuple[Array, Array, Array]]:
    """Return the rungs of the third-order unit step response at x (B, m) in units of T.

    Rung 1 is the response, 0 its slope, -1 the slope's slope, 2 the integral; for each the value and its derivatives
    in the second and the fourth coordinate (the value again without `derivatives`, and below rung highest - 1).

    Parameters
    ----------
    x : (B, m) array
        Time since the response began, in units of T; negative times count as 0.
    shape, lag : (B,) arrays
        r, and the third lag over T sqrt(r + 0.03).
    highest : int
        1 or 2.
    lowest : int
        Down to -1.
    """
    begun = x > 0
    x = np.maximum(x, 0.0)
    r = shape[:, None]
    beta = lag[:, None] * np.sqrt(r + R_SHIFT)
    q = r - beta + beta**2
    beta = np.where(np.abs(q) < _POLE * beta, beta * (1.0 + 3.0 * _POLE), beta)  # beside a double pole
    q = r - beta + beta**2
    basic = LAGS.respond(x, shape, derivatives=derivatives)
    one = np.ones_like(r)
    F = ladder(x, basic, r, one, -1, highest)
    if lowest < 0:
        F[-2] = np.where(begun, -(F[0] + F[-1]) / r, 0.0)
    C = beta**2 / q
    A, B = -C * r / beta, 1.0 - C
    fall = np.exp(-np.minimum(x / beta, _LARGEST_EXPONENT)) * begun
    e = {1: np.where(begun, 1.0 - fall, 0.0), 0: fall / beta, -1: -fall / beta**2, -2: fall / beta**3}
    e[2] = x - beta * e[1]
    values = {k: B * F[k] + A * F[k - 1] + C * e[k] for k in range(lowest, highest + 1)}
    if not derivatives:
        return {k: (y, y, y) for k, y in values.items()}
    G = ladder_by_shape(basic, F, r, one, 1.0, 0.0, highest)
    if highest == 1:
        G[-1] = np.where(begun, -(G[1] + G[0] + F[-1]) / r, 0.0)
    C_r, C_b = -C / q, C * (2.0 / beta - (2.0 * beta - 1.0) / q)
    A_r, A_b = -(C_r * r + C) / beta, -r * (C_b - C / beta) / beta
    b_r = beta / (2.0 * (r + R_SHIFT))
    by_u = r + R_SHIFT
    out = {}
    for k, y in values.items():
        if k < highest - 1:
            out[k] = (y, y, y)
            continue
        # e_k depends on beta through beta^-k exp(-x / beta)
        e_b = {2: -e[1] + x / beta * fall, 1: -x / beta**2 * fall, 0: (x / beta - 1.0) / beta**2 * fall}[k]
        by_beta = -C_b * F[k] + A_b * F[k - 1] + C_b * e[k] + C * e_b
        by_r = -C_r * F[k] + B * G[k] + A_r * F[k - 1] + A * G[k - 1] + C_r * e[k] + by_beta * b_r
        out[k] = (y, by_u * by_r, beta * by_beta)
    return out
