"""The intervals against independent computations of the same thing: scipy's profile likelihood, emcee's posterior.

Three records with white noise: underdamped, near critical, overdamped. Model and sum of squares are written here anew.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from functools import cache

import emcee
import numpy as np
import pytest
from scipy.optimize import brentq, least_squares
from scipy.stats import f as f_distribution

import loopfit
from loopfit.core.arrays import Array
from loopfit.core.quantity import Quantity
from loopfit.fit.estimate import Fit
from loopfit.fit.intervals import quantities, surface_of

ROWS = 160
GAIN, OMEGA, DEAD, REST = 1.4, 0.8, 0.6, 5.0
# The walk ends within 4 % of the threshold, 2 % of the distance from the optimum; as much again where the last
# chord to it is bent.
OF_HALF_WIDTH = 0.04
WALKERS, STEPS, BURN = 36, 1800, 300
STANDARD_ERRORS = 4.0  # 1 in 16,000 by chance


def unit_response(zeta: Array, omega: Array, dead: Array, time: Array) -> Array:
    """Return the step response (..., n) of second-order systems from their poles; equal ones are drawn apart by 1e-4."""
    zeta = np.where(np.abs(zeta - 1.0) < 1e-8, 1.0 + 1e-8, zeta)
    root = np.sqrt((zeta**2 - 1.0).astype(complex))
    x = np.maximum(time - np.asarray(dead)[..., None], 0.0)
    out = np.ones(x.shape, dtype=complex)
    for one, other in ((-zeta + root, -zeta - root), (-zeta - root, -zeta + root)):
        out += (other / (one - other))[..., None] * np.exp((one * omega)[..., None] * x)
    return out.real


def rise_of(zeta: float) -> float:
    """Return omega times the rise time from 10 to 90 %, by root finding on the response."""

    def level(target: float) -> float:
        def miss(x: float) -> float:
            return float(unit_response(np.array(zeta), np.array(1.0), np.array(0.0), np.array([x]))[0]) - target

        peak = math.pi / math.sqrt(1.0 - zeta**2) if zeta < 1.0 else math.inf
        return float(brentq(miss, 1e-6, min(peak, 20.0 * zeta + 20.0), xtol=1e-10))

    return level(0.9) - level(0.1)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Recorded:
    """A simulated record with its step at 0."""

    zeta: float
    time: Array
    output: Array
    measurement: Array

    def squares(self, zeta: Array, omega: Array, dead: Array) -> tuple[Array, Array, Array]:
        """Return sum of squares, gain and half the log determinant (...,), gain and offset solved for."""
        response = unit_response(zeta, omega, dead, self.time)
        about = response - response.mean(axis=-1, keepdims=True)
        power = np.sum(about**2, axis=-1)
        gain = about @ self.measurement / power
        rest = self.measurement - self.measurement.mean() - gain[..., None] * about
        return np.sum(rest**2, axis=-1), gain, 0.5 * np.log(power)

    def misses(self, zeta: float, omega: float, dead: float, gain: float | None = None) -> Array:
        """Return the residuals (n,), offset (and gain, where none is given) solved for."""
        response = unit_response(np.array(zeta), np.array(omega), np.array(dead), self.time)
        about, centred = response - response.mean(), self.measurement - self.measurement.mean()
        return centred - (float(about @ centred / (about @ about)) if gain is None else gain) * about


@cache
def recorded(zeta: float) -> tuple[Recorded, Fit]:
    span = 7.0 * max(1.0 / zeta, zeta + math.sqrt(max(zeta**2 - 1.0, 0.0))) / OMEGA + DEAD
    time = np.linspace(-0.15 * span, span, ROWS)
    time = time - time[int(np.argmax(time >= 0))]
    clean = unit_response(np.array(zeta), np.array(OMEGA), np.array(DEAD), time)
    noise = np.random.default_rng(11).standard_normal(ROWS) * GAIN / {0.35: 20.0, 1.0: 40.0, 1.6: 300.0}[zeta]
    record = Recorded(zeta=zeta, time=time, output=(time >= 0).astype(float), measurement=REST + GAIN * clean + noise)
    fit = loopfit.analyze(time=time, measurement=record.measurement, output=record.output).fit
    assert fit.whitener is None  # a seed whose noise is taken for what it is
    return record, fit


def intervals(fit: Fit) -> dict[str, Quantity | None]:
    """Return what the likelihood-ratio surface says, before any doubt about the model is added."""
    return quantities(fit, surface_of(fit, confidence=0.95, band=0.02), 0.02)


# each figure fixed at a value: zeta, omega, dead time and gain from it and from what stays free
Fixed = Callable[[float, Array], tuple[float, float, float, float | None]]
FIXED: dict[str, Fixed] = {
    "damping_ratio": lambda value, x: (value, math.exp(x[0]), x[1], None),
    "natural_frequency_rad_s": lambda value, x: (math.exp(x[0]), value, x[1], None),
    "dead_time_s": lambda value, x: (math.exp(x[0]), math.exp(x[1]), value, None),
    "gain": lambda value, x: (math.exp(x[0]), math.exp(x[1]), x[2], value),
    "rise_time_s": lambda value, x: (math.exp(x[0]), rise_of(math.exp(x[0])) / value, x[1], None),
}
FREE = {
    "damping_ratio": ("omega", "dead"),
    "natural_frequency_rad_s": ("zeta", "dead"),
    "dead_time_s": ("zeta", "omega"),
    "gain": ("zeta", "omega", "dead"),
    "rise_time_s": ("zeta", "dead"),
}


@pytest.mark.parametrize("name", list(FIXED))
@pytest.mark.parametrize("zeta", [0.35, 1.0, 1.6], ids=["underdamped", "near critical", "overdamped"])
def test_profile_likelihood_by_scipy(zeta: float, name: str) -> None:
    """The figure is fixed, all else refitted; its ends are where the squares have risen by F(1, n - 5) s^2."""
    record, fit = recorded(zeta)
    start = {"zeta": math.log(zeta), "omega": math.log(OMEGA), "dead": DEAD}
    best = least_squares(
        lambda x: record.misses(math.exp(x[0]), math.exp(x[1]), x[2]), list(start.values()), xtol=1e-12, ftol=1e-12
    )
    least, degrees = 2.0 * best.cost, ROWS - 5
    threshold = float(f_distribution.ppf(0.95, 1, degrees)) * least / degrees
    at = dict(zip(start, best.x.tolist(), strict=True))
    lowest = {"zeta": -5.0, "omega": -5.0, "dead": 0.0}

    def excess(value: float) -> float:
        fitted = least_squares(
            lambda x: record.misses(*FIXED[name](value, x)),
            [at[free] for free in FREE[name]],
            bounds=([lowest[free] for free in FREE[name]], np.inf),
            x_scale=0.05,
            xtol=1e-10,
            ftol=1e-12,
        )
        return 2.0 * float(fitted.cost) - least - threshold

    ours = intervals(fit)[name]
    assert ours is not None
    for end in (ours.low, ours.high):
        half = end - ours.value
        exact = brentq(excess, ours.value + 0.5 * half, ours.value + 1.6 * half, xtol=1e-3 * abs(half))
        assert end == pytest.approx(exact, abs=OF_HALF_WIDTH * abs(exact - ours.value))


@cache
def sampled(zeta: float) -> tuple[Array, Array]:
    """Return the posterior of zeta, omega and dead time, (steps, walkers, 3), and the log of the other prior there.

    Flat priors on the three (zeta below 11, dead time above 0), gain, offset and the log of the noise: the last three integrated out
    (for a linear parameter with a flat prior and 1 / sigma, e.g. Gelman et al., Bayesian Data Analysis, ch. 14). The
    other prior is the square root of the determinant of the information (Jeffreys 1946) in all but the noise.
    """
    record, fit = recorded(zeta)
    power = 0.5 * (ROWS - 2)

    def log_posterior(x: Array) -> Array:
        there = (x[:, 0] > 0.0) & (x[:, 0] < 11.0) & (x[:, 1] > 0.0) & (x[:, 2] >= 0.0)
        safe = np.where(there[:, None], x, np.array([zeta, OMEGA, DEAD]))
        squares, _, log_root = record.squares(*safe.T)
        return np.where(there, -power * np.log(squares) - log_root, -np.inf)

    ours = intervals(fit)
    rng = np.random.default_rng(6)
    names = ("damping_ratio", "natural_frequency_rad_s", "dead_time_s")
    centre = np.array([ours[name].value for name in names])
    widths = np.array([0.25 * (ours[name].high - ours[name].low) for name in names])
    # near the optimum, along the ridge of the three: the burn-in does the rest
    begin = np.abs(centre + 0.2 * widths * rng.standard_normal((WALKERS, 3)))
    sampler = emcee.EnsembleSampler(WALKERS, 3, log_posterior, vectorize=True)
    sampler.random_state = np.random.RandomState(6).get_state()  # emcee takes no generator
    sampler.run_mcmc(begin, STEPS)
    chain = sampler.get_chain(discard=BURN)
    return chain, _log_jeffreys(record, chain)


def _log_jeffreys(record: Recorded, chain: Array) -> Array:
    """Return half the log determinant of the information in zeta, omega, dead time, gain and offset at each sample."""
    out = np.empty(chain.shape[:2])
    for k, x in enumerate(chain):
        response = unit_response(*x.T, record.time)
        gain = record.squares(*x.T)[1]
        S = [response, np.ones_like(response)]
        for j in range(3):
            moved = x.copy()
            moved[:, j] += 1e-5
            S.append(gain[:, None] * (unit_response(*moved.T, record.time) - response) / 1e-5)
        columns = np.stack(S, axis=1)
        out[k] = 0.5 * np.linalg.slogdet(columns @ np.swapaxes(columns, 1, 2))[1]
    return out


def weighted_quantiles(values: Array, weights: Array) -> Array:
    """Return the values below which 2.5 and 97.5 % of the weight lies."""
    order = np.argsort(values, axis=None)
    total = np.cumsum(weights.ravel()[order])
    return np.interp([0.025, 0.975], total / total[-1], values.ravel()[order])


@pytest.mark.parametrize("name", ["damping_ratio", "natural_frequency_rad_s", "dead_time_s"])
@pytest.mark.parametrize("zeta", [0.35, 1.0, 1.6], ids=["underdamped", "near critical", "overdamped"])
def test_posterior_by_emcee(zeta: float, name: str) -> None:
    """The 2.5 and 97.5 % points under Jeffreys' prior, with which a credible interval is one of confidence (from memory: Welch &
    Peers 1963: to second order, for one parameter), within the sampling error, found from ten parts of the chain.

    A flat prior moves the ends by up to 0.19 half widths, which is the prior and not the method; no bound is near.
    """
    _, fit = recorded(zeta)
    chain, log_prior = sampled(zeta)
    values = chain[:, :, ["damping_ratio", "natural_frequency_rad_s", "dead_time_s"].index(name)]
    weights = np.exp(log_prior - log_prior.max())
    exact = weighted_quantiles(values, weights)
    parts = zip(np.array_split(values, 10), np.array_split(weights, 10), strict=True)
    sampling = np.array([weighted_quantiles(*part) for part in parts]).std(axis=0, ddof=1) / math.sqrt(10)
    ours = intervals(fit)[name]
    assert ours is not None
    half = 0.5 * (ours.high - ours.low)
    assert np.all(sampling < 0.06 * half)  # else the comparison would say little
    assert ours.low == pytest.approx(exact[0], abs=STANDARD_ERRORS * sampling[0] + OF_HALF_WIDTH * half)
    assert ours.high == pytest.approx(exact[1], abs=STANDARD_ERRORS * sampling[1] + OF_HALF_WIDTH * half)
