"""Draws from what a record leaves possible: by the likelihood itself, not by the covariance at its peak.

Importance sampling from heavy-tailed proposals that adapt to what they find (Cappe et al. 2004), all proposals weighed
as one mixture (Owen & Zhou 2000), then resampled. The coordinates are bounded at r = 0 and dead time 0; where a dead time
of 0 is possible it carries half of the prior by itself, since many plants have none. Linear parameters, the gain among
them, are drawn given the coordinates.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from loopfit.core.arrays import Array
from loopfit.fit.colour import Whitener
from loopfit.fit.columns import Columns
from loopfit.fit.estimate import Fit
from loopfit.fit.separable import projected_jacobian, solve_linear
from loopfit.identify.plants import SHORTEST, plants_of, times_of
from loopfit.loop.plant import Plant

_TAILS = 4.0  # degrees of freedom of the proposals
_WIDER = 1.2
_ROUNDS = 7
_FEWEST = 100  # proposals in a round
_INSIDE = 1.92  # drop of the log-likelihood within which a dead time of 0 is possible (95 %)
_NEAR = 4.0  # standard errors from 0 within which that is looked at
_SMALL_SAMPLE = 6.0  # as for the intervals
_FEWEST_DEGREES = 4.0
_BATCH = 64
_DEAD_TIME = 2
_LEAST_DAMPING = 1e-3  # a plant in a loop is taken to be stable by itself
_WIDEST = (2.5, 2.5)  # standard errors of a logarithm of time and of a shape beyond which a proposal is useless


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Likelihood:
    """A likelihood in p coordinates, its peak and what bounds it.

    `log_of`: (B, p) -> (B,), relative to the peak `centre` (p,), where its curvature is `curvature` (p, p). `free` (p,):
    coordinates that are part of the model. `dead_time`: which coordinate is one, or None.
    """

    log_of: Callable[[Array], Array]
    centre: Array
    curvature: Array
    lowest: Array
    highest: Array
    free: NDArray[np.bool_]
    dead_time: int | None = _DEAD_TIME


class Sampled(Protocol):
    """What draws can be had of: columns of a model, whitened."""

    @property
    def target(self) -> Array:
        """Measurement (n,)."""
        ...

    def evaluate(self, theta: Array, *, derivatives: bool = True) -> tuple[Array, Array]:
        """Return columns (B, q, n) and derivatives (B, p, m, n)."""
        ...


def draws_of(fit: Fit, count: int, rng: np.random.Generator) -> list[Plant]:
    """Return plants that the record of a fit allows, in proportion to their probability.

    Parameters
    ----------
    fit : Fit
        Of output -> measurement, under the likelihood of its own noise.
    count : int
    rng : numpy Generator
    """
    degrees, factor = degrees_of(fit.degrees, fit.inflation, fit.whitener)
    theta, linear = drawn(
        fit.working,
        fit.theta,
        free=fit.free,
        lowest=lowest_of(fit.columns, fit.theta),
        highest=fit.columns.highest,
        variance=fit.variance * fit.inflation * factor,
        degrees=degrees,
        count=count,
        rng=rng,
    )
    return plants_of(fit.columns.chart, fit.structure, theta, linear, times=times_of(fit.columns))


def lowest_of(columns: Columns, theta: Array) -> Array:
    """Return the lower bounds of the coordinates (3,) of draws, none above the optimum.

    r >= 0, or a damping ratio above 0; dead time >= 0; no lags that come and go between two rows.
    """
    lowest = columns.chart.lowest
    if columns.chart.by_lags:
        lowest[0] = min(math.log(SHORTEST * columns.samples.interval), float(theta[0]))
    else:
        lowest[1] = min(_LEAST_DAMPING, float(theta[1]))
    return lowest


def degrees_of(degrees: int, inflation: float, whitener: Whitener | None) -> tuple[float, float]:
    """Return the effective degrees of freedom of the noise, and the factor on its variance for few of them."""
    left, factor = degrees / inflation, 1.0
    if whitener is not None:
        left, factor = min(left, whitener.effective_rows - 5.0), 1.0 + _SMALL_SAMPLE / whitener.effective_rows
    return max(left, _FEWEST_DEGREES), factor


def drawn(
    columns: Sampled,
    theta: Array,
    *,
    free: NDArray[np.bool_],
    lowest: Array,
    highest: Array,
    variance: float,
    degrees: float,
    count: int,
    rng: np.random.Generator,
) -> tuple[Array, Array]:
    """Return coordinates (count, p) and linear parameters (count, q) drawn from a likelihood.

    Parameters
    ----------
    theta : (p,) array
        The optimum.
    variance, degrees : float
        Of the noise of a sample, and how well it is known.
    """
    matrix, slopes = columns.evaluate(theta[None])
    best = solve_linear(matrix, columns.target)
    jacobian = projected_jacobian(slopes, best)[0]

    def log_of(points: Array) -> Array:
        parts = []
        for first in range(0, points.shape[0], _BATCH):
            found = columns.evaluate(points[first : first + _BATCH], derivatives=False)[0]
            parts.append(solve_linear(found, columns.target).sse)
        return log_likelihood(np.concatenate(parts) - best.sse[0], variance, degrees)

    likelihood = Likelihood(
        log_of=log_of,
        centre=theta,
        curvature=jacobian @ jacobian.T / variance,
        lowest=lowest,
        highest=highest,
        free=free,
    )
    points, _ = sampled(likelihood, count, rng)
    linear = np.empty((count, matrix.shape[1]))
    for first in range(0, count, _BATCH):
        part = slice(first, first + _BATCH)
        solved = solve_linear(columns.evaluate(points[part], derivatives=False)[0], columns.target)
        normal = rng.normal(size=solved.linear.shape)
        spread = np.sqrt(variance * degrees / rng.chisquare(degrees, size=normal.shape[0]))
        linear[part] = solved.linear + spread[:, None] * np.linalg.solve(solved.triangle, normal[:, :, None])[:, :, 0]
    return points, linear


def log_likelihood(rise: Array, variance: float, degrees: float) -> Array:
    """Return the log-likelihood by the rise of the sum of squares, the variance being known by so many degrees of freedom."""
    with np.errstate(invalid="ignore"):
        out = -0.5 * (degrees + 1.0) * np.log1p(np.maximum(rise, -0.5 * variance * degrees) / (variance * degrees))
    return np.where(np.isfinite(rise), out, -np.inf)


def sampled(likelihood: Likelihood, count: int, rng: np.random.Generator) -> tuple[Array, float]:
    """Return points (count, p) in proportion to likelihood and prior, and the effective number of them before resampling."""
    free, dead = likelihood.free, likelihood.dead_time
    covariance = _covariance(likelihood, free)
    wanted = max(1.5 * count, _FEWEST)
    points, weights = _explored(likelihood, free, likelihood.centre, covariance, wanted, rng)
    if dead is not None and free[dead]:
        place = int(free[:dead].sum())
        error = math.sqrt(covariance[place, place])
        if likelihood.centre[dead] < _NEAR * error:
            share = _normalised(weights)
            reach = float(share @ points[:, dead] + 2.0 * math.sqrt(share @ (points[:, dead] ** 2)))
            rest = free.copy()
            rest[dead] = False
            centre = likelihood.centre.copy()
            centre[dead] = 0.0
            face, on_face = _explored(likelihood, rest, centre, _covariance(likelihood, rest), wanted, rng)
            if face.size and np.max(likelihood.log_of(face)) > -_INSIDE:
                # half of the prior lies on the face, half is spread over what is possible
                points = np.concatenate([points, face])
                weights = np.concatenate(
                    [weights - math.log(reach) - math.log(weights.size), on_face - math.log(on_face.size)]
                )
    share = _normalised(weights)
    effective = 1.0 / float(share @ share)
    places = (rng.uniform() + np.arange(count)) / count  # systematic resampling
    picked = np.minimum(np.searchsorted(np.cumsum(share), places), share.size - 1)
    return points[rng.permutation(picked)], effective


def _covariance(likelihood: Likelihood, free: NDArray[np.bool_]) -> Array:
    """Return the covariance of some coordinates by the curvature, no wider than makes sense."""
    H = likelihood.curvature[np.ix_(free, free)]
    widest = np.full(free.size, np.inf)
    widest[:2] = _WIDEST
    floor = np.diag(1.0 / widest[free] ** 2) + 1e-12 * np.diag(np.diag(H) + 1e-300)
    return np.asarray(np.linalg.inv(H + floor), dtype=np.float64)


def _explored(
    likelihood: Likelihood,
    free: NDArray[np.bool_],
    centre: Array,
    covariance: Array,
    wanted: float,
    rng: np.random.Generator,
) -> tuple[Array, Array]:
    """Return points (M, p) and the logarithms of their weights (M,), whose mean is the integral of the likelihood."""
    means, factors = [centre[free]], [_factor(_WIDER * covariance)]
    lowest, highest = likelihood.lowest[free], likelihood.highest[free]
    coordinates, logs = np.zeros((0, int(free.sum()))), np.zeros(0)
    weights, points = logs, coordinates
    for _ in range(_ROUNDS):
        fresh = _proposed(means[-1], factors[-1], int(wanted), rng)
        inside = np.all((fresh >= lowest) & (fresh <= highest), axis=1)
        log = np.full(fresh.shape[0], -np.inf)
        if inside.any():
            whole = np.repeat(centre[None], int(inside.sum()), axis=0)
            whole[:, free] = fresh[inside]
            log[inside] = likelihood.log_of(whole)
        coordinates, logs = np.concatenate([coordinates, fresh]), np.concatenate([logs, log])
        density = np.logaddexp.reduce(
            [_log_density(coordinates, m, f) for m, f in zip(means, factors, strict=True)], axis=0
        )
        weights = logs - density + math.log(len(means))
        if not np.isfinite(weights).any():  # the curvature promised far more room than there is: look nearer
            means.append(centre[free])
            factors.append(0.3 * factors[-1])
            continue
        share = _normalised(weights)
        if 1.0 / float(share @ share) >= wanted and len(means) > 1:
            break
        mean, spread = _moments(coordinates, weights)
        means.append(mean)
        factors.append(_factor(_WIDER * spread + 1e-3 * covariance))
    points = np.repeat(centre[None], coordinates.shape[0], axis=0)
    points[:, free] = coordinates
    kept = np.isfinite(weights)
    if not kept.any():
        return centre[None], np.zeros(1)
    # those outside the bounds count in the mean
    return points[kept], weights[kept] + math.log(kept.sum() / kept.size)


def _normalised(weights: Array) -> Array:
    share = np.exp(weights - np.max(weights))
    out: Array = share / share.sum()
    return out


def _moments(points: Array, weights: Array) -> tuple[Array, Array]:
    """Return mean and covariance by the weights, flattened until they speak of enough points."""
    there = np.isfinite(weights)
    for power in (1.0, 0.5, 0.25, 0.1, 0.0):
        share = _normalised(np.where(there, power * np.where(there, weights, 0.0), -np.inf))
        if 1.0 / float(share @ share) >= 6.0 * points.shape[1]:
            break
    mean = share @ points
    away = points - mean
    return mean, (share[:, None] * away).T @ away


def _factor(covariance: Array) -> Array:
    values, vectors = np.linalg.eigh(covariance)
    out: Array = vectors * np.sqrt(np.maximum(values, 1e-12 * values.max()))
    return out


def _proposed(mean: Array, factor: Array, count: int, rng: np.random.Generator) -> Array:
    """Return draws of a multivariate t."""
    normal = rng.normal(size=(count, mean.size))
    stretch = np.sqrt(_TAILS / rng.chisquare(_TAILS, size=count))
    out: Array = mean + stretch[:, None] * (normal @ factor.T)
    return out


def _log_density(points: Array, mean: Array, factor: Array) -> Array:
    d = mean.size
    away = np.linalg.solve(factor, (points - mean).T)
    constant = (
        math.lgamma(0.5 * (_TAILS + d))
        - math.lgamma(0.5 * _TAILS)
        - 0.5 * d * math.log(_TAILS * math.pi)
        - float(np.linalg.slogdet(factor)[1])
    )
    out: Array = constant - 0.5 * (_TAILS + d) * np.log1p(np.sum(away**2, axis=0) / _TAILS)
    return out
