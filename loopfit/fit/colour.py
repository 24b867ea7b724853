"""The colour of the noise: an autoregression of the residuals, and the filter that undoes it.

The order and the coefficients come from the exact restricted likelihood (Patterson & Thompson 1971; the exact
quadratic form of a stationary autoregression: Box & Jenkins, Time Series Analysis, ch. 7) of the linearised model,
so that what the fit has already taken out of the residuals is allowed for. Written in partial autocorrelations,
every point is stationary (Barndorff-Nielsen & Schou 1973).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from loopfit.core.arrays import Array

_ORDERS = 6
_LARGEST = 0.999
_STEP = 0.02
_ROUNDS = 8
_PENALTY = 2.0  # Akaike's; Schwarz's missed slow drift under white noise (coverage .89 against .93)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Whitener:
    """Makes noise of one colour white: `phi` (p,) and the inverse Cholesky factor (p, p) of the start block."""

    phi: Array
    start: Array
    rows: int

    def __call__(self, values: Array) -> Array:
        """Return the values filtered along their last axis, the start block exact."""
        out = values.copy()
        p = self.phi.size
        for lag, weight in enumerate(self.phi, start=1):
            out[..., lag:] -= weight * values[..., :-lag]
        out[..., :p] = values[..., :p] @ self.start.T
        return out

    @property
    def effective_rows(self) -> float:
        """Rows of white noise that would tell a mean as well: n gamma_0 (1 - sum phi)^2, at least 4."""
        gamma = float(_autocovariances(self.phi, 1)[0])
        return max(self.rows * gamma * float(1.0 - np.sum(self.phi)) ** 2, 4.0)

    @property
    def correlation(self) -> float:
        """Correlation of neighbouring samples."""
        gamma = _autocovariances(self.phi, 2)
        return float(gamma[1] / gamma[0])


def whitener_of(residual: Array, jacobian: Array) -> Whitener | None:
    """Return the filter for the residuals of a fit; None when they are white.

    Parameters
    ----------
    residual : (n,) array
        Of evenly spaced samples.
    jacobian : (q, n) array
        Derivatives of the prediction in all parameters.
    """
    n, q = residual.size, jacobian.shape[0]
    if n < 3 * (q + 2):
        return None
    lags = _LagProducts(residual, jacobian)
    z = np.zeros(0)
    best, best_score, chosen = z, lags.twice_negative_log(z), z
    tried_in_vain = 0
    for order in range(1, min(_ORDERS, n // 8) + 1):
        z = _climb(lags, np.append(chosen if order == 1 else z, lags.neighbours if order == 1 else 0.0))
        score = lags.twice_negative_log(z) + order * _PENALTY
        if score < best_score:
            best, best_score, tried_in_vain = z, score, 0
        else:
            tried_in_vain += 1
            if tried_in_vain == 2:
                break
    if best.size == 0:
        return None
    phi = _coefficients(np.tanh(best))
    gamma = _autocovariances(phi, phi.size)
    block = gamma[np.abs(np.subtract.outer(np.arange(phi.size), np.arange(phi.size)))]
    return Whitener(phi=phi, start=np.linalg.inv(np.linalg.cholesky(block)), rows=n)


class _LagProducts:
    """Sums of lagged products of [J e], from which any likelihood is a few small matrices."""

    def __init__(self, residual: Array, jacobian: Array) -> None:
        scale = np.linalg.norm(jacobian, axis=1)
        alive = scale > 1e-12 * scale.max()
        rows = np.vstack([jacobian[alive] / scale[alive, None], residual / np.linalg.norm(residual)])
        self.n, self.size = residual.size, rows.shape[0]
        # the first guess: the lag-one correlation, its bias mended (Kendall 1954, from memory)
        first = float(rows[-1, 1:] @ rows[-1, :-1])
        self.neighbours = math.atanh(min(max(first + (1.0 + 3.0 * first) / self.n, -0.9), 0.98))
        top = _ORDERS + 1
        self.products = np.zeros((top, top, self.size, self.size))
        for i in range(top):
            for j in range(i, top):
                last = self.n - i - j
                if last > 0:
                    self.products[i, j] = rows[:, i : i + last] @ rows[:, j : j + last].T
                    self.products[j, i] = self.products[i, j].T

    def twice_negative_log(self, z: Array) -> float:
        """Return -2 log of the restricted likelihood at atanh of the partial autocorrelations."""
        pi = np.clip(np.tanh(z), -_LARGEST, _LARGEST)
        weights = np.append(1.0, -_coefficients(pi))
        p = z.size
        M = np.einsum("i,j,ijab->ab", weights, weights, self.products[: p + 1, : p + 1])
        M = 0.5 * (M + M.T)
        J, cross = M[:-1, :-1], M[:-1, -1]
        sign, logdet = np.linalg.slogdet(J)
        if sign <= 0:
            return math.inf
        squares = float(M[-1, -1] - cross @ np.linalg.solve(J, cross))
        if squares <= 0:
            return math.inf
        start = float(np.sum(np.arange(1, p + 1) * np.log1p(-(pi**2))))
        total: float = (self.n - self.size + 1) * math.log(squares) + float(logdet) - start
        return total


def _climb(lags: _LagProducts, z: Array) -> Array:
    """Newton steps with derivatives from differences, kept only while they help."""
    value = lags.twice_negative_log(z)
    p = z.size
    unit = _STEP * np.eye(p)
    for _ in range(_ROUNDS):
        with np.errstate(invalid="ignore"):  # an infinite neighbour ends the climb below
            plus = np.array([lags.twice_negative_log(z + unit[i]) for i in range(p)])
            minus = np.array([lags.twice_negative_log(z - unit[i]) for i in range(p)])
            slope = (plus - minus) / (2.0 * _STEP)
            H = np.diag((plus - 2.0 * value + minus) / _STEP**2)
            for i in range(p):
                for j in range(i):
                    both = lags.twice_negative_log(z + unit[i] + unit[j])
                    H[i, j] = H[j, i] = (both - plus[i] - plus[j] + value) / _STEP**2
        if not (np.all(np.isfinite(H)) and np.all(np.isfinite(slope))):
            break
        eigenvalues, vectors = np.linalg.eigh(H)
        step = -vectors @ ((vectors.T @ slope) / np.maximum(np.abs(eigenvalues), 1.0))
        step = np.clip(step, -0.7, 0.7)
        for shorter in (1.0, 0.3, 0.1):
            trial = np.clip(z + shorter * step, -3.8, 3.8)
            found = lags.twice_negative_log(trial)
            if found < value:
                break
        else:
            break
        gained, z, value = value - found, trial, found
        if gained < 1e-2:
            break
    return z


def _coefficients(pi: Array) -> Array:
    """Return the coefficients of an autoregression from its partial autocorrelations (Durbin-Levinson)."""
    phi = np.zeros(0)
    for last in pi:
        phi = np.append(phi - last * phi[::-1], last)
    return phi


def _autocovariances(phi: Array, count: int) -> Array:
    """Return gamma_0 .. gamma_(count - 1) for innovations of unit variance, by the Yule-Walker equations."""
    p = phi.size
    A = np.eye(p + 1)
    for k in range(p + 1):
        for lag, weight in enumerate(phi, start=1):
            A[k, abs(k - lag)] -= weight
    gamma = np.linalg.solve(A, np.append(1.0, np.zeros(p)))
    out = list(gamma[: max(count, 1)])
    while len(out) < count:
        out.append(float(sum(weight * out[-lag] for lag, weight in enumerate(phi, start=1))))
    return np.array(out)
