"""The colour of the noise: an autoregression of the residuals, or one under white noise, and the filter that undoes it.

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
from loopfit.fit.mixed_colour import SLOW, best_mixed, mixed_filter

_ORDERS = 6
_LARGEST = 0.999
_STEP = 0.02
_ROUNDS = 8
_APART = 1e-10  # share of a derivative that the others must leave
_MIXED = 1.4  # coefficients that a mixed colour counts for: at 2 too many slow wanders were left to one lag (nat. freq. .910)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Whitener:
    """Makes noise of one colour white: `phi` (p,) and the inverse Cholesky factor (p, p) of the start block.

    `theta` is the weight of the moving average that goes with one `phi`; the start block is then not used.
    """

    phi: Array
    start: Array
    rows: int
    theta: float = 0.0

    def __call__(self, values: Array) -> Array:
        """Return the values filtered along their last axis, the start block exact."""
        if self.theta != 0.0:
            return mixed_filter(values, float(self.phi[0]), self.theta)
        out = values.copy()
        p = self.phi.size
        for lag, weight in enumerate(self.phi, start=1):
            out[..., lag:] -= weight * values[..., :-lag]
        out[..., :p] = values[..., :p] @ self.start.T
        return out

    @property
    def effective_rows(self) -> float:
        """Rows of white noise that would tell a mean as well: n gamma_0 (1 - sum phi)^2 / (1 + theta)^2, at least 4."""
        at_rest = float(1.0 - np.sum(self.phi)) / (1.0 + self.theta)
        return max(self.rows * float(self._autocovariances[0]) * at_rest**2, 4.0)

    @property
    def correlation(self) -> float:
        """Correlation of neighbouring samples."""
        gamma = self._autocovariances
        return float(gamma[1] / gamma[0])

    @property
    def _autocovariances(self) -> Array:
        """Those of lags 0 and 1 for innovations of unit variance."""
        if self.theta == 0.0:
            return _autocovariances(self.phi, 2)
        phi = float(self.phi[0])
        power = 1.0 + (phi + self.theta) ** 2 / (1.0 - phi**2)
        return np.array([power, phi * power + self.theta])


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
        score = lags.twice_negative_log(z) + _penalty(order, n - q)
        if score < best_score:
            best, best_score, tried_in_vain = z, score, 0
        else:
            tried_in_vain += 1
            if tried_in_vain == 2:
                break
    if best.size == 0:
        return None
    mixed = best_mixed(lags.rows, best_score - _penalty(_MIXED, n - q))
    if mixed is not None:
        _, slow, theta = mixed
        return Whitener(phi=np.array([slow]), start=np.array([[math.sqrt(1.0 - slow**2)]]), rows=n, theta=theta)
    phi = _coefficients(np.tanh(best))
    gamma = _autocovariances(phi, phi.size)
    block = gamma[np.abs(np.subtract.outer(np.arange(phi.size), np.arange(phi.size)))]
    return Whitener(phi=phi, start=np.linalg.inv(np.linalg.cholesky(block)), rows=n)


def _penalty(order: float, degrees: int) -> float:
    """Return Akaike's penalty beyond that of white noise, with the correction for few rows (Hurvich & Tsai 1989).

    Schwarz's missed slow drift under white noise (coverage .89 against .93).
    """
    few = [2.0 * k * degrees / max(degrees - k - 1, 1) for k in (1, order + 1)]
    return few[1] - few[0]


class _LagProducts:
    """Sums of lagged products of [J e], from which any likelihood is a few small matrices."""

    def __init__(self, residual: Array, jacobian: Array) -> None:
        basis, triangle = np.linalg.qr(jacobian.T)  # as good as the derivatives, and without those that repeat others
        apart = np.abs(np.diagonal(triangle)) > _APART * np.linalg.norm(triangle, axis=0)
        rows = np.vstack([basis.T[apart], residual / np.linalg.norm(residual)])
        self.rows = rows
        self.n, self.size = residual.size, rows.shape[0]
        # the first guess: the lag-one correlation, its bias mended (Kendall 1954, from memory)
        first = float(rows[-1, 1:] @ rows[-1, :-1])
        self.neighbours = math.atanh(min(max(first + (1.0 + 3.0 * first) / self.n, -0.9), 0.98))
        top = _ORDERS + 1
        products = np.zeros((top, top, self.size, self.size))
        for i in range(top):
            for j in range(i, top):
                last = self.n - i - j
                if last > 0:
                    products[i, j] = rows[:, i : i + last] @ rows[:, j : j + last].T
                    products[j, i] = products[i, j].T
        self.products = products.reshape(top * top, -1)

    def twice_negative_log(self, z: Array) -> float:
        """Return -2 log of the restricted likelihood, and the doubt of slow noise, at atanh of the partial autocorrelations."""
        return float(self.of_many(z[None])[0])

    def of_many(self, z: Array) -> Array:
        """Return the same (K,) at K points (K, p)."""
        pi = np.minimum(np.maximum(np.tanh(z), -_LARGEST), _LARGEST)
        K, p = pi.shape
        weights = np.zeros((K, _ORDERS + 1))
        weights[:, 0], weights[:, 1 : p + 1] = 1.0, -_coefficients(pi)
        pairs = (weights[:, :, None] * weights[:, None, :]).reshape(K, -1)
        try:
            factor = np.linalg.cholesky((pairs @ self.products).reshape(K, self.size, self.size))
        except np.linalg.LinAlgError:  # one of the points; the rest are told apart one by one
            return np.array([math.inf]) if K == 1 else np.concatenate([self.of_many(row[None]) for row in z])
        # of [J e]: the last pivot is what J leaves of e, the others make the determinant of J'J
        logs = np.log(factor.diagonal(axis1=1, axis2=2))
        start = np.log1p(-(pi**2))
        effective = self.n * weights.sum(axis=1) ** 2 * np.exp(-start.sum(axis=1))
        squares = (self.n - self.size + 1) * logs[:, -1] + logs[:, :-1].sum(axis=1)
        total: Array = 2.0 * squares - start @ np.arange(1.0, p + 1.0) + SLOW / effective
        return total


def _climb(lags: _LagProducts, z: Array) -> Array:
    """Newton steps with derivatives from differences, kept only while they help."""
    value = lags.twice_negative_log(z)
    p = z.size
    unit = _STEP * np.eye(p)
    first, second = np.tril_indices(p, -1)
    around = np.concatenate([unit, -unit, unit[first] + unit[second]])
    for _ in range(_ROUNDS):
        near = lags.of_many(z + around)
        if not np.all(np.isfinite(near)):
            break
        plus, minus, both = near[:p], near[p : 2 * p], near[2 * p :]
        slope = (plus - minus) / (2.0 * _STEP)
        H = np.diag((plus - 2.0 * value + minus) / _STEP**2)
        H[first, second] = H[second, first] = (both - plus[first] - plus[second] + value) / _STEP**2
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
    """Return the coefficients of autoregressions (..., p) from their partial autocorrelations (Durbin-Levinson)."""
    phi = pi[..., :0]
    for k in range(pi.shape[-1]):
        last = pi[..., k : k + 1]
        phi = np.concatenate([phi - last * phi[..., ::-1], last], axis=-1)
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
