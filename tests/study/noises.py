"""Noise of the study: each colour as a way to draw it and as its autocovariances, rms 1."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.signal import lfilter

Array = NDArray[np.float64]

_LONG = 4000


@dataclass(frozen=True, kw_only=True)
class Noise:
    """White noise through a filter of two polynomials in the delay, plus a share of more white noise; rms 1.

    `white` is the share of the power that is white.
    """

    name: str
    forward: tuple[float, ...] = (1.0,)
    back: tuple[float, ...] = (1.0,)
    white: float = 0.0

    @property
    def _weights(self) -> Array:
        pulse = np.zeros(_LONG)
        pulse[0] = 1.0
        weights: Array = lfilter(self.forward, self.back, pulse)
        return weights / np.sqrt(float(weights @ weights))

    def draw(self, rng: np.random.Generator, count: int) -> Array:
        """Return `count` samples from the stationary process (the filter has forgotten its start)."""
        weights = self._weights
        kept = int(np.flatnonzero(np.abs(weights) > 1e-6 * np.abs(weights).max())[-1])
        source = rng.standard_normal(count + kept)
        shaped: Array = lfilter(self.forward, self.back, source)[kept:]
        gain = weights[0] / self.forward[0]
        mixed: Array = np.sqrt(1.0 - self.white) * gain * shaped + np.sqrt(self.white) * rng.standard_normal(count)
        return mixed

    def autocovariances(self, count: int) -> Array:
        """Return those of lags 0 .. count - 1."""
        weights = self._weights
        lags = np.array([float(weights[: _LONG - k] @ weights[k:]) if k < _LONG else 0.0 for k in range(count)])
        lags *= 1.0 - self.white
        lags[0] += self.white
        return lags


def autoregressive(phi: float, white: float = 0.0) -> Noise:
    """Return first-order autoregressive noise."""
    mixed = "" if white == 0.0 else " + white"
    return Noise(name=f"AR(1) {phi:g}{mixed}", back=(1.0, -phi), white=white)


WHITE = Noise(name="white")
TWO_FILTERS = Noise(name="low-pass twice", back=(1.0, -1.4, 0.49))
FIVE_POINT_MEAN = Noise(name="five-point mean", forward=(0.2,) * 5)
