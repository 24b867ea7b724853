"""Coordinates for the family of second-order models with dead time.

Two charts cover the family. Both have three coordinates, the last of which is the dead time in s:

- `LAGS`: (log T, log(r + 0.03)), T the sum of the time constants, r = 1 / (4 zeta^2). Linear in r near
  the first-order limit r = 0, logarithmic above: the curvature of the likelihood stays mild.
- `SWING`: (log omega_n, zeta), for light damping, where T goes through 0 with zeta.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from loopfit.core.arrays import Array
from loopfit.model.shape import Shape, lag_shape, swing_shape

R_SHIFT = 0.03
SMALLEST_R = 1e-6
_LARGEST_LOG = 40.0


@dataclass(frozen=True, slots=True)
class Chart:
    """One way to write a model as (time scale, shape, dead time)."""

    name: str
    by_lags: bool

    def scale(self, theta: Array) -> Array:
        """Return the unit of time (B,), s: T, or 1 / omega_n."""
        log = np.minimum(np.maximum(theta[:, 0], -_LARGEST_LOG), _LARGEST_LOG)
        return np.exp(log if self.by_lags else -log)

    @property
    def scale_sign(self) -> float:
        """Derivative of log(scale) in the first coordinate."""
        return 1.0 if self.by_lags else -1.0

    def shape(self, theta: Array) -> Array:
        """Return r or zeta (B,)."""
        if self.by_lags:
            return np.maximum(np.exp(np.minimum(theta[:, 1], _LARGEST_LOG)) - R_SHIFT, SMALLEST_R)
        return theta[:, 1]

    def shape_slope(self, shape: Array) -> Array:
        """Return the derivative of r or zeta in the second coordinate (B,)."""
        return shape + R_SHIFT if self.by_lags else np.ones_like(shape)

    def respond(self, x: Array, shape: Array, *, derivatives: bool = True) -> Shape:
        """Return the unit step response and its slope at x, in units of the scale."""
        return lag_shape(x, shape, derivatives=derivatives) if self.by_lags else swing_shape(x, shape)

    def coefficients(self, shape: Array) -> tuple[Array, Array, float, float]:
        """Return a, b of `a F0' + b F0 + F1 = 1` as (B, 1), and their derivatives in the shape."""
        column = shape[:, None]
        if self.by_lags:
            return column, np.ones_like(column), 1.0, 0.0
        return np.ones_like(column), 2.0 * column, 0.0, 2.0

    @property
    def lowest(self) -> Array:
        """Lower bounds of the coordinates (3,): r >= 0 where there is an r, dead time >= 0."""
        shape = np.log(R_SHIFT + SMALLEST_R) if self.by_lags else -np.inf
        return np.array([-np.inf, shape, 0.0])

    def lags(self, theta: Array) -> tuple[Array, Array]:
        """Return T, s, and r, each (B,). At zeta <= 0 there is no T: it is given as a tiny one."""
        if self.by_lags:
            return self.scale(theta), self.shape(theta)
        zeta = np.maximum(theta[:, 1], 1e-6)
        return 2.0 * zeta * self.scale(theta), 0.25 / zeta**2

    def damping(self, theta: Array) -> Array:
        """Return zeta (B,)."""
        return 0.5 / np.sqrt(self.shape(theta)) if self.by_lags else theta[:, 1].copy()

    def frequency(self, theta: Array) -> Array:
        """Return omega_n (B,), rad/s."""
        if self.by_lags:
            return 1.0 / (self.scale(theta) * np.sqrt(self.shape(theta)))
        return 1.0 / self.scale(theta)

    def locate(self, damping: Array, frequency: Array, dead_time: Array) -> Array:
        """Return the coordinates (B, 3) of models given by zeta > 0, omega_n and dead time."""
        if self.by_lags:
            r = 0.25 / damping**2
            return np.stack([np.log(2.0 * damping / frequency), np.log(r + R_SHIFT), dead_time], axis=1)
        return np.stack([np.log(frequency), damping, dead_time], axis=1)


LAGS = Chart("lags", by_lags=True)
SWING = Chart("swing", by_lags=False)
