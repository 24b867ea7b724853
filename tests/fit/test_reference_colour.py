"""The colour of the noise against statsmodels, and against the restricted likelihood with full matrices."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.linalg import toeplitz
from scipy.optimize import minimize
from scipy.signal import lfilter
from statsmodels.tsa.ar_model import ar_select_order
from statsmodels.tsa.arima.model import ARIMA
from statsmodels.tsa.arima_process import arma_acovf

from loopfit.core.arrays import Array
from loopfit.fit.colour import whitener_of

ROWS = 500
SERIES = [("one lag", (0.7,)), ("two lags", (1.2, -0.5)), ("three lags", (0.5, 0.2, -0.4))]
# the climb ends where -2 log likelihood gains less than 1e-3, within sqrt(1e-3) standard errors of its least
OF_STANDARD_ERROR = 0.04


def series(phi: tuple[float, ...]) -> Array:
    drawn: Array = lfilter(
        [1.0], [1.0, *(-weight for weight in phi)], np.random.default_rng(21).standard_normal(ROWS + 300)
    )
    return drawn[300:]


@pytest.mark.parametrize("phi", [phi for _, phi in SERIES], ids=[name for name, _ in SERIES])
def test_autoregression_by_statsmodels(phi: tuple[float, ...]) -> None:
    """The order by Akaike's criterion, and the coefficients by exact likelihood, of a series about its mean.

    The likelihood of statsmodels is not restricted: with a mean its estimate lies lower, by the order of p / n of a
    coefficient (Cheang & Reinsel 2000, from memory), so that (p + 1) / n is allowed besides; it is below a quarter standard error.
    """
    values = series(phi)
    found = whitener_of(values - values.mean(), np.ones((1, ROWS)))
    assert found is not None
    lags = ar_select_order(values, 6, ic="aic").ar_lags
    assert found.phi.size == len(lags) == len(phi)
    theirs = ARIMA(values, order=(len(phi), 0, 0), trend="c").fit()
    errors = theirs.bse[1:-1]  # without the mean and the variance
    allowed = OF_STANDARD_ERROR * errors + (len(phi) + 1) / ROWS
    assert np.all(np.abs(found.phi - theirs.params[1:-1]) <= allowed)
    assert np.all(np.abs(found.phi - phi) < 4.0 * errors)  # sampling error: 1 in 16,000


@pytest.mark.parametrize("phi", [phi for _, phi in SERIES], ids=[name for name, _ in SERIES])
def test_restricted_likelihood_with_full_matrices(phi: tuple[float, ...]) -> None:
    """-2 log l = log|V| + log|X' V^-1 X| + (n - q) log(r' V^-1 r) (Patterson & Thompson 1971), minimised by scipy.

    X has the shapes that a fit takes out of its residuals: a constant, and slow curves that die out.
    """
    rows = 200
    t = np.arange(rows) / 40.0
    X = np.stack([np.ones(rows), np.exp(-t), t * np.exp(-t), np.exp(-t) * np.sin(3.0 * t)])
    values = series(phi)[:rows]
    residual = values - np.linalg.lstsq(X.T, values, rcond=None)[0] @ X

    def twice_negative_log(at: Array) -> float:
        if np.any(np.abs(np.roots([1.0, *-at])) >= 0.999):
            return 1e6
        V = toeplitz(arma_acovf([1.0, *-at], [1.0], rows))
        solved = np.linalg.solve(V, X.T)
        middle = X @ solved
        rest = residual - np.linalg.solve(middle, solved.T @ residual) @ X
        determinants = np.linalg.slogdet(V)[1] + np.linalg.slogdet(middle)[1]
        return float(determinants + (rows - 4) * np.log(rest @ np.linalg.solve(V, rest)))

    found = whitener_of(residual, X)
    assert found is not None
    start = np.zeros(found.phi.size)
    best = minimize(twice_negative_log, start, method="Nelder-Mead", options={"xatol": 1e-4, "fatol": 1e-5}).x
    assert twice_negative_log(found.phi) - twice_negative_log(best) < 2e-3  # 1e-3 to go, and scipy's own 1e-5
    assert found.phi == pytest.approx(best, abs=OF_STANDARD_ERROR / np.sqrt(rows))
    V = toeplitz(arma_acovf([1.0, *-found.phi], [1.0], rows))
    power = found(values) @ found(values)  # the whitened series has the same quadratic form, start block and all
    assert power == pytest.approx(values @ np.linalg.solve(V, values), rel=1e-9)
