"""Records of second-order plants made without loopfit's formulas: by integration, and by poles and residues."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy.integrate import solve_ivp

from loopfit.core.arrays import Array

_DENSE = 40_000


@dataclass(frozen=True, slots=True, kw_only=True)
class Truth:
    """gain omega^2 exp(-dead_time s) / (s^2 + 2 zeta omega s + omega^2)."""

    gain: float = 1.0
    zeta: float
    omega: float
    dead_time: float = 0.0

    @property
    def slowest(self) -> float:
        """Slowest time constant, s: -1 / the rightmost real part of the poles."""
        return float(-1.0 / np.max(self.poles.real))

    @property
    def poles(self) -> np.ndarray:
        return np.roots([1.0, 2.0 * self.zeta * self.omega, self.omega**2]).astype(complex)


def integrated(slope: Callable[[float, Array], list[float]], begin: float, start: list[float], time: Array) -> Array:
    """Return the states (k, n) of an ordinary differential equation from `begin` on; the start before that."""
    states = np.repeat(np.array(start)[:, None], time.size, axis=1)
    after = time > begin
    if after.any():
        found = solve_ivp(
            slope, (begin, float(time[-1])), start, method="DOP853", rtol=1e-12, atol=1e-14, t_eval=time[after]
        )
        assert found.success, found.message
        states[:, after] = found.y
    return states


def unit_response(truth: Truth, since: Array) -> Array:
    """Return the unit step response from poles and residues, `since` the step; not for equal poles."""
    x = np.maximum(since - truth.dead_time, 0.0)
    first, second = truth.poles
    # residues of omega^2 / (s (s - p1) (s - p2))
    residues = truth.omega**2 / np.array([first * (first - second), second * (second - first)])
    terms = residues[:, None] * np.exp(np.array([first, second])[:, None] * x)
    out: Array = truth.gain * (1.0 + terms.sum(axis=0).real)
    return out


def true_figures(truth: Truth, band: float) -> dict[str, float]:
    """Return the figures of the step response, read from 40,000 points of it (error below 1e-6 of the span)."""
    span = 1.5 * truth.slowest * np.log(1.0 / band) + 4.0 / truth.omega
    t = np.linspace(0.0, span, _DENSE)
    y = unit_response(Truth(zeta=truth.zeta, omega=truth.omega), t)

    def first(level: float) -> float:
        i = int(np.argmax(y >= level))
        return float(np.interp(level, y[i - 1 : i + 1], t[i - 1 : i + 1]))

    outside = int(np.flatnonzero(np.abs(y - 1.0) > band)[-1])
    edge = 1.0 + np.sign(y[outside] - 1.0) * band
    share = (edge - y[outside]) / (y[outside + 1] - y[outside])
    return {
        "gain": truth.gain,
        "damping_ratio": truth.zeta,
        "natural_frequency_rad_s": truth.omega,
        "dead_time_s": truth.dead_time,
        "overshoot_percent": 100.0 * max(float(np.max(y)) - 1.0, 0.0) if truth.zeta < 1 else 0.0,
        "rise_time_s": first(0.9) - first(0.1),
        "delay_time_s": truth.dead_time + first(0.5),
        "settling_time_s": truth.dead_time + float(t[outside] + share * (t[1] - t[0])),
    }


def bound_of(truth: Truth, size: float, since: Array, noise: float) -> dict[str, float]:
    """Return Cramer-Rao standard deviations (Cramer 1946; Rao 1945), with a free offset.

    The sensitivities are central differences of the response, relative step 1e-6 (error about 1e-9).
    """
    names = ["gain", "zeta", "omega"] + (["dead_time"] if truth.dead_time > 0 else [])
    values = {name: getattr(truth, name) for name in ("gain", "zeta", "omega", "dead_time")}
    rows = [np.ones_like(since)]
    for name in names:
        h = 1e-6 * abs(values[name])
        up, down = (Truth(**(values | {name: values[name] + side * h})) for side in (1, -1))
        rows.append(size * (unit_response(up, since) - unit_response(down, since)) / (2 * h))
    S = np.array(rows)
    spread = noise * np.sqrt(np.diagonal(np.linalg.inv(S @ S.T)))
    return dict(zip(["offset", *names], spread.tolist(), strict=True))
