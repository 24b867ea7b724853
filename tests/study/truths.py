"""Systems that the study simulates, made without loopfit: poles and residues, incomplete gamma functions, a sampled loop.

Every system gives its unit step response (final value 1) at any time since the step, and the figures of that response.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import expm
from scipy.signal import lfilter
from scipy.special import gammainc

Array = NDArray[np.float64]

BAND = 0.02
_FINE = 200_000
_SPANS = 2.0
_ROUNDING = 1e-10


@dataclass(frozen=True, kw_only=True)
class Rational:
    """Product of (1 + zero s) / product of (1 - s / pole), exp(-dead_time s); distinct poles."""

    poles: tuple[complex, ...]
    zeros: tuple[float, ...] = ()
    dead_time: float = 0.0

    @property
    def slowest(self) -> float:
        """Slowest time constant, s."""
        return -1.0 / max(pole.real for pole in self.poles)

    def response(self, since: Array) -> Array:
        """Return the unit step response by partial fractions, `since` the step."""
        x = np.maximum(since - self.dead_time, 0.0)
        total = np.ones(x.shape, dtype=complex)
        for i, pole in enumerate(self.poles):
            residue: complex = -1.0
            for zero in self.zeros:
                residue *= 1.0 + zero * pole
            for j, other in enumerate(self.poles):
                residue /= 1.0 if i == j else 1.0 - pole / other
            total += residue * np.exp(pole * x)
        return np.where(since > self.dead_time, total.real, 0.0)

    @cached_property
    def figures(self) -> dict[str, float]:
        """Figures of the response."""
        return figures_of(self, _SPANS)


@dataclass(frozen=True, kw_only=True)
class EqualLags:
    """`count` equal lags in a row: the response is the incomplete gamma function."""

    count: int
    lag: float
    dead_time: float = 0.0

    @property
    def slowest(self) -> float:
        """Time after which the response has come about as near as one lag of that length would."""
        return self.lag * (1.0 + 0.45 * (self.count - 1))

    def response(self, since: Array) -> Array:
        """Return the unit step response."""
        out: Array = gammainc(self.count, np.maximum(since - self.dead_time, 0.0) / self.lag)
        return out

    @cached_property
    def figures(self) -> dict[str, float]:
        """Figures of the response."""
        return figures_of(self, _SPANS)


@dataclass(frozen=True, kw_only=True)
class SampledLoop:
    """A PI controller, scanned every `scan` s, on two lags with dead time; the zero-order hold makes it exact.

    The controller acts on the measurement, noise and all, so that the noise goes round the loop.
    """

    lags: tuple[float, float]
    proportional: float
    integral_time: float
    delay_scans: int
    scan: float
    slowest: float

    @cached_property
    def _round(self) -> tuple[Array, Array]:
        """Numerator and denominator of the open loop in powers of the delay."""
        a, b = (1.0 / lag for lag in self.lags)
        A = np.array([[-a, 0.0, a], [b, -b, 0.0], [0.0, 0.0, 0.0]])
        step = expm(A * self.scan)  # states, then the held input
        F, G = step[:2, :2], step[:2, 2]
        # c (z - F)^-1 G with c = (0, 1), in powers of 1 / z
        plant = np.array([0.0, G[1], F[1, 0] * G[0] - F[0, 0] * G[1]])
        poles = np.array([1.0, -np.trace(F), np.linalg.det(F)])
        integral = self.proportional * self.scan / self.integral_time
        controller = np.array([self.proportional + integral, -self.proportional])
        numerator = np.convolve(np.convolve(controller, plant), np.eye(1, self.delay_scans + 1, self.delay_scans)[0])
        return numerator, np.convolve(poles, [1.0, -1.0])

    @cached_property
    def _closed(self) -> Array:
        numerator, denominator = self._round
        out = numerator.copy()
        out[: denominator.size] += denominator
        return out

    def follow(self, setpoint: Array) -> Array:
        """Return the measurement at every scan without noise."""
        out: Array = lfilter(self._round[0], self._closed, setpoint)
        return out

    def disturbed(self, noise: Array) -> Array:
        """Return what noise of the sensor does to the measurement, at every scan (along the last axis)."""
        out: Array = lfilter(self._round[1], self._closed, noise)
        return out

    @cached_property
    def figures(self) -> dict[str, float]:
        """Figures of the response, read between scans by straight lines."""
        return figures_of(self, 5.0)

    def response(self, since: Array) -> Array:
        """Return the unit step response; straight lines between scans."""
        last = int(np.ceil(float(np.max(since)) / self.scan)) + 2
        after = self.follow(np.ones(last))
        out: Array = np.interp(since, self.scan * np.arange(last), after)
        return out


System = Rational | EqualLags | SampledLoop


def second_order(zeta: float, omega: float, dead_time: float) -> Rational | EqualLags:
    """Return omega^2 exp(-dead_time s) / (s^2 + 2 zeta omega s + omega^2)."""
    if zeta == 1.0:
        return EqualLags(count=2, lag=1.0 / omega, dead_time=dead_time)
    root = np.sqrt(complex(zeta**2 - 1.0))
    return Rational(poles=(complex(omega * (-zeta + root)), complex(omega * (-zeta - root))), dead_time=dead_time)


def figures_of(system: System, spans: float) -> dict[str, float]:
    """Return overshoot (%), rise, settling and delay time (s) from 200,000 points of the unit step response."""
    dead = 0.0 if isinstance(system, SampledLoop) else system.dead_time
    t = np.linspace(0.0, dead + spans * 5.0 * system.slowest, _FINE)
    y = system.response(t)

    def first(level: float) -> float:
        i = int(np.argmax(y >= level))
        return float(np.interp(level, y[i - 1 : i + 1], t[i - 1 : i + 1])) if i > 0 else dead

    outside = int(np.flatnonzero(np.abs(y - 1.0) > BAND)[-1])
    edge = 1.0 + np.sign(y[outside] - 1.0) * BAND
    share = (edge - y[outside]) / (y[outside + 1] - y[outside])
    over = float(np.max(y)) - 1.0
    return {
        "overshoot_percent": 100.0 * over if over > _ROUNDING else 0.0,
        "rise_time_s": first(0.9) - first(0.1),
        "settling_time_s": float(t[outside] + share * (t[1] - t[0])),
        "delay_time_s": first(0.5),
    }
