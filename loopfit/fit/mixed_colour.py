"""Slow noise under white noise: an autoregression of first order with a moving average of first order.

x_t = phi x_(t-1) + e_t + theta e_(t-1). A first-order wander plus white noise is such a process, and so are averages
of either over bins (Granger & Morris 1976, from memory); an autoregression alone needs many orders for it.
In state form x_t = s_t + e_t, s_(t+1) = phi s_t + (phi + theta) e_t, so that the whole past is one number, s_1, of
variance P = (phi + theta)^2 / (1 - phi^2). With s_1 = 0 the filter (1 - phi B) / (1 + theta B) gives e; s_1 adds
-s_1 (-theta)^(t-1). Hence the inverse covariance is A' (I - c g g') A, with A that filter, g_t = (-theta)^(t-1) and
c = P / (1 + P g'g), and its determinant 1 / (1 + P g'g) (the formula of Sherman & Morrison 1950): exact from the first row on.
"""

from __future__ import annotations

import math

import numpy as np

from loopfit.core.arrays import Array

# SLOW / effective rows is added to -2 log of the likelihood. Near phi = 1 that is flat, and least often where the wander is
# longer than the record: under such noise the levels before and after a step tell nothing of the gain (its variance / bound
# in AR(1) 0.9: 1.6 without, 1.07 with it).
SLOW = 6.0
_THETAS = np.array([-0.92, -0.8, -0.6, -0.35, 0.2])
_PHIS = np.tanh(np.linspace(0.6, 3.3, 10))
_MOST = 3.8  # of atanh(phi) and atanh(theta)
_STEP = 0.05
_STENCIL = _STEP * np.array([-1.0, 0.0, 1.0])
_ROUNDS = 6
_ENOUGH = 0.03  # gain of -2 log at which the climb ends
_GAIN_OF_CLIMB = 3.0  # what the climb may add to the best point of the grid


def without_moving_average(values: Array, theta: Array) -> Array:
    """Return u with u_t + theta u_(t-1) = x_t, u_0 = 0, along the last axis, by doubling the reach of the sum.

    Parameters
    ----------
    values : (..., n) array
    theta : array that broadcasts against `values`
    """
    u = values.copy()
    power, reach, n = -theta, 1, values.shape[-1]
    while reach < n and np.any(np.abs(power) > 1e-18):
        u[..., reach:] += power * u[..., :-reach]
        power, reach = power * power, 2 * reach
    return u


def mixed_filter(values: Array, phi: float, theta: float) -> Array:
    """Return the values made white along their last axis: (I - b g g') A x, whose square is x' S^-1 x."""
    out = without_moving_average(values, np.array(theta))
    out[..., 1:] -= phi * out[..., :-1]
    g = (-theta) ** np.arange(values.shape[-1])
    power, past = float(g @ g), (phi + theta) ** 2 / (1.0 - phi**2)
    shrink = (1.0 - 1.0 / math.sqrt(1.0 + past * power)) / power
    out -= shrink * (out @ g)[..., None] * g
    return out


def twice_negative_log(rows: Array, phis: Array, thetas: Array) -> Array:
    """Return -2 log of the restricted likelihood (Patterson & Thompson 1971) at every pair (K thetas, P phis).

    Parameters
    ----------
    rows : (q + 1, n) array
        Derivatives of the prediction, and below them the residual.
    phis, thetas : (P,) and (K,) arrays
    """
    n = rows.shape[1]
    u = without_moving_average(np.broadcast_to(rows, (thetas.size, *rows.shape)), thetas[:, None, None])
    g = (-thetas[:, None]) ** np.arange(n)
    both = u[..., 1:] @ np.swapaxes(u[..., :-1], 1, 2)
    squares = u @ np.swapaxes(u, 1, 2)
    last = u[..., -1]
    earlier_squares = squares - last[:, :, None] * last[:, None, :]
    first, second = u @ g[..., None], u[..., :-1] @ g[:, 1:, None]
    phi = phis[:, None, None]
    M = squares[:, None] - phi * (both + np.swapaxes(both, 1, 2))[:, None] + phi**2 * earlier_squares[:, None]
    along = (first[:, None] - phi * second[:, None])[..., 0]
    past = (phis + thetas[:, None]) ** 2 / (1.0 - phis**2)
    grown = 1.0 + past * np.sum(g * g, axis=1)[:, None]
    M -= (past / grown)[..., None, None] * along[..., :, None] * along[..., None, :]
    try:
        diagonal = np.log(np.diagonal(np.linalg.cholesky(M), axis1=2, axis2=3))
    except np.linalg.LinAlgError:  # derivatives that repeat each other
        return np.full((thetas.size, phis.size), np.inf)
    total: Array = 2.0 * ((n - rows.shape[0] + 1) * diagonal[..., -1] + diagonal[..., :-1].sum(axis=2)) + np.log(grown)
    return total


def _doubted(rows: Array, phis: Array, thetas: Array) -> Array:
    """Return -2 log of the restricted likelihood with what is added for slow noise."""
    past = (phis + thetas[:, None]) ** 2 / (1.0 - phis**2)
    effective = rows.shape[1] * (1.0 + past) * ((1.0 - phis) / (1.0 + thetas[:, None])) ** 2
    total: Array = twice_negative_log(rows, phis, thetas) + SLOW / effective
    return total


def best_mixed(rows: Array, worth: float) -> tuple[float, float, float] | None:
    """Return the least -2 log of the restricted likelihood, and its phi and theta; None where it is not below `worth`.

    None also where phi + theta is negative: a wander adds power at rest, and noise with less of it than white noise has
    (white noise itself can look so) would make the gain too sure.

    Parameters
    ----------
    rows : (q + 1, n) array
        Derivatives of the prediction, and below them the residual.
    worth : float
        Value that it must fall below.
    """
    surface = np.where(_PHIS + _THETAS[:, None] > 0.0, _doubted(rows, _PHIS, _THETAS), np.inf)
    k, p = np.unravel_index(int(np.argmin(surface)), surface.shape)
    value = float(surface[k, p])
    if not value < worth + _GAIN_OF_CLIMB:
        return None
    best = np.arctanh([_THETAS[k], _PHIS[p]])
    step = np.zeros(2)
    for turn in range(_ROUNDS):
        at = np.clip(best + step, -_MOST, _MOST)
        near = _doubted(rows, np.tanh(at[1] + _STENCIL), np.tanh(at[0] + _STENCIL))
        if turn > 0 and not near[1, 1] <= value:
            step *= 0.3
            continue
        gained, value, best = value - float(near[1, 1]), float(near[1, 1]), at
        if turn > 0 and gained < _ENOUGH:
            break
        slope = np.array([near[2, 1] - near[0, 1], near[1, 2] - near[1, 0]]) / (2.0 * _STEP)
        cross = (near[2, 2] - near[2, 0] - near[0, 2] + near[0, 0]) / 4.0
        bend = [near[2, 1] - 2.0 * near[1, 1] + near[0, 1], near[1, 2] - 2.0 * near[1, 1] + near[1, 0]]
        eigenvalues, vectors = np.linalg.eigh(np.array([[bend[0], cross], [cross, bend[1]]]) / _STEP**2)
        step = np.clip(-vectors @ ((vectors.T @ slope) / np.maximum(np.abs(eigenvalues), 0.1)), -0.5, 0.5)
    theta, phi = np.tanh(best).tolist()
    return (value, phi, theta) if value < worth and phi + theta > 0.0 else None
