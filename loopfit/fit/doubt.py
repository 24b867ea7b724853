"""Response figures when second order is not enough: the union over a family with a third lag and a zero.

A second-order fit to another system gives figures that are too sure of themselves. Where a richer model explains the
record clearly better, every member of the family that the record allows contributes its own interval (as model
averaging would; a profile over the discrete part of the model).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from loopfit.core.arrays import Array
from loopfit.core.quantity import Quantity
from loopfit.figures.sampled import sampled_figures
from loopfit.fit.colour import whitener_of
from loopfit.fit.estimate import Fit, Trace
from loopfit.fit.figures_of import quantile_of_f
from loopfit.fit.separable import minimise, projected_jacobian, solve_linear
from loopfit.fit.third_lag import ThirdLag, third_order
from loopfit.model.chart import LAGS, R_SHIFT

_LAGS = (0.03, 0.15, 0.3, 0.5, 0.8, 1.2, 1.8, 2.8)  # over omega_n, about
_LEAST_LAG = 0.02
_LARGEST_LAG, _LARGEST_SHAPE = 4.0, 10.0  # logarithms
_REFINED = 4
_CLEARLY = 4.0  # drop of the squares, in noise powers, from which the second order is doubted
_LOOK = 6.0  # noise powers by the score test, from which the family is fitted
_MEMBERS = 12
_GRID = 3000
_SPANS = 3.0
_DIFFERENCE = 0.02
_CLOSE = 1.1
_LONGEST = 0.4  # of the span after the step
_LOWEST = np.append(LAGS.lowest, np.log(_LEAST_LAG))


def doubted_response(
    fit: Fit, trace: Trace, figures: dict[str, Quantity | None], *, confidence: float, band: float
) -> dict[str, Quantity | None] | None:
    """Return the response figures with the doubt about the model in them; None where there is none.

    Parameters
    ----------
    fit : Fit
        The second-order fit that takes the noise for white.
    trace : Trace
        What was fitted.
    figures : dict
        The second-order figures, whose intervals are widened.
    confidence, band : float
        As fractions.
    """
    driven = fit.columns.input is not None and fit.structure.rungs == (1,) and not fit.structure.moving_start
    if not driven or fit.structure.first_order:
        return None
    start = _starts(fit)
    if not _worth_fitting(fit, start[: len(_LAGS)]):
        return None
    family = ThirdLag(columns=fit.columns)
    target = fit.columns.target
    highest = np.array([fit.columns.highest[0], _LARGEST_SHAPE, np.inf, _LARGEST_LAG])
    fixed_lag, any_lag = np.array([True, True, True, False]), np.ones(4, dtype=bool)
    first = minimise(
        family.evaluate,
        target,
        start,
        lowest=_LOWEST,
        highest=highest,
        free=fixed_lag,
        caps=_caps,
        tolerance=1e-3,
        rounds=25,
    )
    order = np.argsort(first.sse)
    last = minimise(family.evaluate, target, first.theta[order[:_REFINED]], lowest=_LOWEST, highest=highest, free=any_lag, caps=_caps,
                    tolerance=1e-4, rounds=40)  # fmt: skip
    found = np.concatenate([last.theta, first.theta[order[: _MEMBERS - _REFINED]]])
    columns, slopes = family.evaluate(found)
    solved = solve_linear(columns, target)
    best = int(np.argmin(solved.sse))
    n, parameters = target.size, 4 + columns.shape[1]
    degrees = max(n - parameters, 1)
    variance = max(float(solved.sse[best]) / degrees, 1e-300)
    jacobian = projected_jacobian(slopes, solved)
    whitener = whitener_of(solved.residual[best], np.vstack([jacobian[best], columns[best]]))
    factor = 1.0
    if whitener is not None:
        rows = whitener.effective_rows
        variance *= n / rows
        degrees, factor = max(min(degrees, int(rows - 5)), 4), 1.0 + 6.0 / rows
    if (fit.sse - float(solved.sse[best])) / variance < _CLEARLY:
        return None
    limit, least = factor * quantile_of_f(confidence, degrees), float(solved.sse[best])
    allowed = limit - (solved.sse - least) / variance
    kept = np.flatnonzero(allowed > 0)
    table = _reach(family, found, columns, slopes, solved.linear, allowed, kept, variance, limit, least, trace, band)
    return {name: _widened(figures[name], values) for name, values in table.items()}


def _worth_fitting(fit: Fit, start: Array) -> bool:
    """Tell by a score test (Rao 1948) whether any third lag or zero would take up some of the residual."""
    columns, slopes = fit.columns.evaluate(fit.theta[None])
    moved = (fit.linear[None, : slopes.shape[2]] @ slopes[0])[:, 0, :]
    tangent = np.linalg.qr(np.vstack([moved[fit.free], columns[0]]).T)[0]
    rest = fit.columns.target - fit.linear @ columns[0]
    rest = rest - tangent @ (tangent.T @ rest)
    more = ThirdLag(columns=fit.columns).values(start)[:, :2]
    more = more - (more @ tangent) @ tangent.T
    basis = np.linalg.qr(np.swapaxes(more, 1, 2))[0]
    taken = np.sum((rest @ basis) ** 2, axis=1)
    power = float(rest @ rest) / fit.degrees
    return bool(power > 0 and np.max(taken) > _LOOK * power)


def _starts(fit: Fit) -> Array:
    """Return starts for every third lag: from the second-order optimum, with the lag taken from the dead time or from T."""
    chart = fit.columns.chart
    zeta = np.maximum(chart.damping(fit.theta[None]), 1e-3)
    at = LAGS.locate(zeta, chart.frequency(fit.theta[None]), fit.theta[None, 2])
    starts = np.repeat(at, len(_LAGS), axis=0)
    lag = np.array(_LAGS) * LAGS.scale(starts) * np.sqrt(LAGS.shape(starts) + R_SHIFT)
    from_dead, shorter, later, ringing = (starts.copy() for _ in range(4))
    from_dead[:, 2] = np.maximum(from_dead[:, 2] - lag, 0.0)
    shorter[:, 0] -= np.log1p(0.5 * lag / LAGS.scale(starts))
    # at the optimum a zero is a shift in time: only other dead times and other shapes lead away from there
    later[:, 2] += 0.5 * LAGS.scale(later)
    ringing[:, 1] += 0.7
    ringing[:, 2] = from_dead[:, 2]
    starts = np.concatenate([from_dead, shorter, later, ringing])
    return np.column_stack([starts, np.tile(np.log(_LAGS), 4)])


def _caps(theta: Array) -> Array:
    limit = np.empty_like(theta)
    limit[:, 0], limit[:, 1] = 0.5, 0.8
    limit[:, 2] = LAGS.scale(theta)
    limit[:, 3] = 0.5
    return limit


def _reach(
    family: ThirdLag, theta: Array, columns: Array, slopes: Array, linear: Array, allowed: Array, kept: NDArray[np.intp],
    variance: float, limit: float, least: float, trace: Trace, band: float,
) -> dict[str, Array]:  # fmt: skip
    """Return each figure at every kept member and at the ends of its own interval there."""
    jacobian = np.concatenate([(linear[:, None, None, :2] @ slopes)[:, :, 0, :], columns[:, :2]], axis=1)
    # offset and drift are projected out; what is left: T, r, dead time, third lag, gain, zero
    fixed = columns[0, 2:]
    basis = np.linalg.qr(fixed.T)[0]
    jacobian = jacobian - (jacobian @ basis) @ basis.T
    H = jacobian @ np.swapaxes(jacobian, 1, 2) / variance
    points = np.concatenate([theta, linear[:, :2]], axis=1)
    out: dict[str, list[Array]] = {}
    for i in kept:
        scale = 1.0 / np.sqrt(np.maximum(np.diag(H[i]), 1e-200))
        covariance = (
            np.linalg.pinv(H[i] * scale[:, None] * scale[None, :], rcond=1e-9) * scale[:, None] * scale[None, :]
        )
        spread = np.sqrt(np.maximum(np.diag(covariance), 0.0))
        nudge = np.minimum(_DIFFERENCE * np.abs(points[i]) + 1e-12, np.maximum(0.3 * spread, 1e-9))
        nudge[[0, 1, 3]] = np.minimum(_DIFFERENCE, np.maximum(0.3 * spread[[0, 1, 3]], 1e-6))
        around = np.concatenate([points[i][None], points[i] + np.diag(nudge), points[i] - np.diag(nudge)])
        figures = _figures(around, trace, band)
        for name, values in figures.items():
            settled = np.isfinite(values[1:7]) & np.isfinite(values[7:13])
            slope = np.where(settled, values[1:7], 0.0) - np.where(settled, values[7:13], 0.0)
            slope = slope / (2.0 * nudge)
            along = covariance @ slope
            length = float(slope @ along)
            ends = points[i][None]
            if length > 0:
                move = along * np.sqrt(allowed[i] / length)
                ends = points[i] + np.linspace(-1.0, 1.0, 9)[:, None] * move
                ends = ends[(_squares(family, ends) - least) / variance <= _CLOSE * limit]
            ends = ends[_slowest(ends) <= _LONGEST * trace.span]
            if ends.size == 0:
                continue
            reached = _figures(ends, trace, band)[name]
            out.setdefault(name, []).append(np.append(reached, values[0]))
    return {name: np.concatenate(parts) for name, parts in out.items()}


def _slowest(points: Array) -> Array:
    """Return the longest lag at each point, s: one far beyond the record is a drift to it, not a response."""
    scale, shape = LAGS.scale(points[:, :3]), LAGS.shape(points[:, :3])
    slow: Array = scale * 0.5 * (1.0 + np.sqrt(np.maximum(1.0 - 4.0 * shape, 0.0)))
    return np.maximum(slow, scale * np.sqrt(shape + R_SHIFT) * np.exp(np.minimum(points[:, 3], 5.0)))


def _squares(family: ThirdLag, points: Array) -> Array:
    """Return the sum of squares at points (P, 6), offset and drift solved anew: a straight line leaves the surface."""
    columns = family.values(np.clip(points[:, :4], _LOWEST, [np.inf, _LARGEST_SHAPE, np.inf, _LARGEST_LAG]))
    rest = family.columns.target - np.einsum("pq,pqn->pn", points[:, 4:6], columns[:, :2])
    basis = np.linalg.qr(columns[0, 2:].T)[0]
    rest = rest - (rest @ basis) @ basis.T
    squares: Array = np.einsum("pn,pn->p", rest, rest)
    return squares


def _figures(points: Array, trace: Trace, band: float) -> dict[str, Array]:
    """Return the figures of responses at points (P, 6): T, r, dead time, third lag, gain, zero."""
    theta = np.clip(points[:, :4], _LOWEST, [np.inf, _LARGEST_SHAPE, np.inf, _LARGEST_LAG])
    scale = LAGS.scale(theta)
    time = np.linspace(0.0, _SPANS * trace.span, _GRID)
    x = (time[None, :] - theta[:, 2:3]) / scale[:, None]
    _, response, slope = third_order(x, LAGS.shape(theta), np.exp(np.minimum(theta[:, 3], 5.0)))
    kappa = points[:, 5] / np.where(points[:, 4] == 0, 1e-300, points[:, 4])
    return sampled_figures(time, response + kappa[:, None] * slope, band)


def _widened(quantity: Quantity | None, values: Array) -> Quantity | None:
    there = values[~np.isnan(values)]
    if quantity is None or there.size == 0:
        return quantity
    return Quantity.spanning(
        quantity.value, min(quantity.low, float(there.min())), max(quantity.high, float(there.max()))
    )
