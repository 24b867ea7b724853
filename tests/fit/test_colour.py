"""The autoregression of the residuals, and the filter that undoes it."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.linalg import solve_toeplitz, toeplitz
from scipy.signal import lfilter

from loopfit.fit.colour import Whitener, whitener_of

LEVEL = np.stack([np.ones(300), np.linspace(-1.0, 1.0, 300)])


def coloured(phi: list[float], seed: int, rows: int = 300) -> np.ndarray:
    """A stationary autoregression by scipy's lfilter, its start thrown away."""
    noise = np.random.default_rng(seed).standard_normal(rows + 1000)
    return np.asarray(lfilter([1.0], np.r_[1.0, -np.array(phi)], noise)[1000:])


def detrended(values: np.ndarray) -> np.ndarray:
    return np.asarray(values - LEVEL.T @ np.linalg.lstsq(LEVEL.T, values, rcond=None)[0])


def test_whitening_is_the_inverse_of_the_covariance() -> None:
    """x' S^-1 x by the filter, and by scipy's Toeplitz solver with the Yule-Walker covariances (AR(1): phi^k / (1 - phi^2))."""
    phi = 0.8
    gamma = phi ** np.arange(40) / (1.0 - phi**2)
    filter_ = Whitener(phi=np.array([phi]), start=np.array([[1.0 / np.sqrt(gamma[0])]]), rows=40)
    x = np.random.default_rng(7).standard_normal(40)
    white = filter_(x)
    assert white @ white == pytest.approx(x @ solve_toeplitz(gamma, x), rel=1e-12)
    assert filter_.correlation == pytest.approx(phi, rel=1e-12)
    # n gamma_0 (1 - phi)^2 = n (1 - phi) / (1 + phi)
    assert filter_.effective_rows == pytest.approx(max(40 * 0.2 / 1.8, 4.0), rel=1e-12)
    assert np.linalg.cond(toeplitz(gamma)) < 1e3


def test_white_residuals_are_left_alone_as_often_as_akaike_promises() -> None:
    """Akaike's criterion takes a needless order in 16 % of large samples (chi-squared of 1 beyond 2), a few more with six to choose from."""
    taken = sum(whitener_of(detrended(coloured([], seed)), LEVEL) is not None for seed in range(60))
    assert taken <= 24  # 29 % of 60 expected at most, and three standard deviations


@pytest.mark.parametrize("phi", [0.5, 0.9])
def test_the_correlation_of_coloured_residuals_is_found(phi: float) -> None:
    found = [whitener_of(detrended(coloured([phi], seed)), LEVEL) for seed in range(20)]
    values = [filter_.correlation for filter_ in found if filter_ is not None]
    assert len(values) == 20
    # standard error sqrt((1 - phi^2) / 300) of one, four of the mean of 20
    assert np.mean(values) == pytest.approx(phi, abs=4 * np.sqrt((1 - phi**2) / 300 / 20) + 0.01)
