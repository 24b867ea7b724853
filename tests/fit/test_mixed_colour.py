"""A first-order wander under white noise against statsmodels' exact likelihood and against full covariance matrices."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.linalg import toeplitz
from scipy.signal import lfilter
from statsmodels.tsa.arima.model import ARIMA
from statsmodels.tsa.arima_process import arma_acovf

from loopfit.core.arrays import Array
from loopfit.fit.colour import Whitener, whitener_of
from loopfit.fit.mixed_colour import SLOW, best_mixed, mixed_filter, twice_negative_log

ROWS = 120
COLOURS = [(0.9, -0.6), (0.99, -0.95), (0.8, 0.25), (0.5, -0.5), (-0.4, 0.7)]
T = np.arange(ROWS) / 25.0
SHAPES = np.stack([np.ones(ROWS), np.exp(-T), T * np.exp(-T), np.exp(-T) * np.sin(3.0 * T)])


def covariance(phi: float, theta: float, rows: int = ROWS) -> Array:
    """Of unit innovations, by statsmodels."""
    V: Array = toeplitz(arma_acovf([1.0, -phi], [1.0, theta], rows))
    return V


def wander_and_white(seed: int, rows: int, phi: float = 0.9) -> Array:
    """A wander and white noise of equal power, by scipy's lfilter, its start thrown away."""
    rng = np.random.default_rng(seed)
    slow: Array = lfilter([np.sqrt(1.0 - phi**2)], [1.0, -phi], rng.standard_normal(rows + 500))[500:]
    return slow + rng.standard_normal(rows)


def without(shapes: Array, values: Array) -> Array:
    rest: Array = values - np.linalg.lstsq(shapes.T, values, rcond=None)[0] @ shapes
    return rest


@pytest.mark.parametrize(("phi", "theta"), COLOURS)
def test_the_filtered_covariance_is_white(phi: float, theta: float) -> None:
    """W V W' = I, the first rows like the last; rounding of the 120 sums, eps times the condition of V (up to 4e4)."""
    W = mixed_filter(np.eye(ROWS), phi, theta).T
    V = covariance(phi, theta)
    assert np.max(np.abs(W @ V @ W.T - np.eye(ROWS))) < np.finfo(float).eps * 10.0 * np.linalg.cond(V)


@pytest.mark.parametrize(("phi", "theta"), COLOURS)
def test_likelihood_by_statsmodels(phi: float, theta: float) -> None:
    """The exact likelihood of a series without shapes, its scale profiled: n log(2 pi / n) + n more than ours."""
    values = wander_and_white(3, ROWS)
    power = float(values @ np.linalg.solve(covariance(phi, theta), values)) / ROWS
    theirs = -2.0 * ARIMA(values, order=(1, 0, 1), trend="n").loglike([phi, theta, power])
    ours = twice_negative_log(values[None], np.array([phi]), np.array([theta]))[0, 0]
    # the Kalman filter of statsmodels takes its steady state once the variance changes by less than 1e-9
    assert ours + ROWS * (np.log(2.0 * np.pi / ROWS) + 1.0) == pytest.approx(theirs, abs=1e-5)


@pytest.mark.parametrize(("phi", "theta"), COLOURS)
def test_restricted_likelihood_with_full_matrices(phi: float, theta: float) -> None:
    """log|V| + log|X' V^-1 X| + (n - q) log(r' V^-1 r) (Patterson & Thompson 1971), all matrices written out."""
    values = wander_and_white(4, ROWS)
    V = covariance(phi, theta)
    solved = np.linalg.solve(V, SHAPES.T)
    middle = SHAPES @ solved
    rest = values - np.linalg.solve(middle, solved.T @ values) @ SHAPES
    whole = np.linalg.slogdet(V)[1] + np.linalg.slogdet(middle)[1]
    whole += (ROWS - len(SHAPES)) * np.log(rest @ np.linalg.solve(V, rest))
    rows = np.vstack([SHAPES, without(SHAPES, values)])  # what the shapes hold of the values does not matter
    assert twice_negative_log(rows, np.array([phi]), np.array([theta]))[0, 0] == pytest.approx(whole, abs=1e-7)


def test_a_wander_under_white_noise_by_statsmodels() -> None:
    """The estimate of 3,000 rows about their mean.

    The climb ends where it gains less than 0.03 of -2 log, sqrt(0.03) standard errors; what is added for slow noise and the
    restriction to the rows beyond the mean move -2 log by less than 0.1 there: a quarter of a standard error allows for all.
    """
    values = wander_and_white(5, 3000)
    found = whitener_of(values - values.mean(), np.ones((1, 3000)))
    assert found is not None
    theirs = ARIMA(values, order=(1, 0, 1), trend="c").fit()
    phi, theta = theirs.params[1:3]
    assert abs(found.phi[0] - phi) < 0.25 * theirs.bse[1]
    assert abs(found.theta - theta) < 0.25 * theirs.bse[2]
    assert abs(found.phi[0] - 0.9) < 4.0 * theirs.bse[1]  # sampling error: 1 in 16,000


def test_effective_rows_are_those_of_the_mean() -> None:
    """Variance of a mean of n rows, from the autocovariances by statsmodels: gamma_0 / rows, for n large."""
    phi, theta = 0.9, -0.6
    gamma = arma_acovf([1.0, -phi], [1.0, theta], 1000)  # 0.9^1000 is nothing
    filter_ = Whitener(phi=np.array([phi]), start=np.ones((1, 1)), rows=500, theta=theta)
    assert filter_.effective_rows == pytest.approx(500 * gamma[0] / (gamma[0] + 2.0 * gamma[1:].sum()), rel=1e-9)
    assert filter_.correlation == pytest.approx(gamma[1] / gamma[0], rel=1e-12)


def test_noise_of_short_memory_keeps_its_long_records_likelihood() -> None:
    """White noise: what is added for slow noise is 6 / n, the same everywhere near it, and no colour is worth it."""
    values = np.random.default_rng(8).standard_normal(400)
    rows = (values - values.mean())[None] / 20.0
    white = float(twice_negative_log(rows, np.array([0.0]), np.array([0.0]))[0, 0]) + SLOW / 400
    found = best_mixed(rows, white)
    assert found is None or white - found[0] < 12.0  # chi-squared of 2 beyond 12: 1 in 400


def test_derivatives_that_repeat_each_other_count_once() -> None:
    """The restricted likelihood depends on the span of the shapes alone; 1e-6 covers the rounding of either basis."""
    values = without(SHAPES, wander_and_white(9, ROWS, phi=0.97))
    once = whitener_of(values, SHAPES)
    twice = whitener_of(values, np.vstack([SHAPES, 3.0 * SHAPES[1] - SHAPES[2], np.zeros(ROWS)]))
    assert once is not None
    assert twice is not None
    assert twice.phi == pytest.approx(once.phi, abs=1e-6)
    assert twice.theta == pytest.approx(once.theta, abs=1e-6)
