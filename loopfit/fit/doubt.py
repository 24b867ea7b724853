"""Is second order enough? The best model with a third lag and a zero, and by how much it explains the record better.

A second-order fit to another system gives figures that are too sure of themselves, long before a test would reject it.
So the family's members count from the first hint on, and to the extent that they explain the record.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from loopfit.core.arrays import Array
from loopfit.fit.colour import whitener_of
from loopfit.fit.estimate import Fit, inflation_by, neighbour_correlation, search
from loopfit.fit.figures_of import quantile_of_f
from loopfit.fit.intervals import evenly_spaced
from loopfit.fit.separable import combined, minimise, solve_linear
from loopfit.fit.third_lag import LOWEST, ThirdLag
from loopfit.model.chart import LAGS, R_SHIFT

_LAGS = (0.2, 0.5, 1.0, 1.7, 3.5, 8.0)  # over omega_n, about
_HIDING = (0.7, 1.7)
_CLEAR = 12.0  # noise powers from which the record is clearly not of second order
# noise powers by the score test from which the family is fitted; a hidden lag hides best where nothing swings
_LOOK, _LOOK_IF_SWINGING = 2.6, 3.4
_SWINGING = 0.5  # r from which a response swings well (damping ratio 0.71)
_SMALL_SAMPLE = 6.0
_FEWEST_DEGREES = 4
_STARTS = 4
_MEMBERS = 3
_APART = 0.25  # of a coordinate: members nearer than that lie in one valley
_EXACT = 1e-13


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Doubt:
    """The richer family on a record: its best members and how far from them the record lets it go.

    `theta` (M, 4) and `linear` (M, q) with their sums of squares `sse` (M,), the best first; `threshold`: allowed rise
    of the sum of squares over the `variance`, which holds the `inflation` of coloured noise that is not filtered;
    `clear`: the record is clearly not of second order.
    """

    family: ThirdLag
    theta: Array
    linear: Array
    sse: Array
    variance: float
    threshold: float
    inflation: float
    clear: bool


def doubt_of(fit: Fit, *, confidence: float, noise_floor: float) -> Doubt | None:
    """Return the doubt about a second-order fit that takes the noise for white; None where the record raises none.

    Parameters
    ----------
    fit : Fit
    confidence : float
        A fraction.
    noise_floor : float
        Least noise of a row that the record's resolution allows.
    """
    driven = fit.columns.input is not None and fit.structure.rungs == (1,) and not fit.structure.moving_start
    if not driven or fit.structure.first_order:
        return None
    starts = _promising(fit)
    if starts.size == 0:
        return None
    family = ThirdLag(columns=fit.columns)
    tolerance, rounds = (0.05, 7) if starts.shape[0] <= _STARTS else (1e-3, 40)  # where doubt is great, be exact
    last = _minimise(family, starts, tolerance, rounds)
    columns, slopes = family.evaluate(last[:1])
    solved = solve_linear(columns, family.target)
    residual = solved.residual[0]
    inflation = inflation_by(neighbour_correlation(residual), residual.size)
    left = max(float(solved.sse[0]), 1e-300)
    at_once = (fit.sse - left) * residual.size / (left * inflation)
    factor, plain = 1.0, fit.sse
    if evenly_spaced(fit):
        whitener = whitener_of(residual, np.vstack([combined(solved.linear, slopes)[0], columns[0]]))
        if at_once > _CLEAR:
            # what the family leaves over may itself be misfit: it widens, but is not filtered as if it were noise
            if whitener is not None:
                inflation = max(inflation, residual.size / whitener.effective_rows)
        else:
            inflation = 1.0
            if whitener is not None:
                family = ThirdLag(columns=fit.columns, whitener=whitener)
                last = _minimise(family, _apart(last), tolerance, rounds)
                working = replace(fit.columns, whitener=whitener)
                plain = float(search(working, fit.theta[None], fit.free, tolerance=0.01, rounds=12).sse[0])
                factor = 1.0 + _SMALL_SAMPLE / whitener.effective_rows
    kept = _apart(last)
    solved = solve_linear(family.evaluate(kept, derivatives=False)[0], family.target)
    n, parameters = family.target.size, 4 + solved.linear.shape[1]
    degrees = max(n - parameters, 1)
    rounding = (_EXACT * float(np.max(np.abs(fit.columns.target)))) ** 2
    variance = max(float(solved.sse[0]) / degrees, noise_floor**2, rounding, 1e-300) * inflation
    if family.whitener is not None:
        degrees = min(degrees, int(family.whitener.effective_rows - 5.0))
    drop = max((plain - float(solved.sse[0])) / variance, at_once)
    limit = factor * quantile_of_f(confidence, max(int(degrees / inflation), _FEWEST_DEGREES))
    near = solved.sse - solved.sse[0] <= limit * variance
    return Doubt(
        family=family,
        theta=kept[near],
        linear=solved.linear[near],
        sse=solved.sse[near],
        variance=variance,
        threshold=limit,
        inflation=inflation,
        clear=drop > _CLEAR,
    )


def _promising(fit: Fit) -> Array:
    """Return the starts from which a third lag or a zero would take up some of the residual, by a score test (Rao 1948)."""
    columns, slopes = fit.columns.evaluate(fit.theta[None])
    moved = combined(fit.linear[None], slopes)[0]
    tangent = np.linalg.qr(np.vstack([moved[fit.free], columns[0]]).T)[0]
    rest = fit.columns.target - fit.linear @ columns[0]
    rest = rest - tangent @ (tangent.T @ rest)
    starts = _starts(fit)
    more = ThirdLag(columns=fit.columns).evaluate(starts, derivatives=False)[0][:, :2]
    more = more - (more @ tangent) @ tangent.T
    basis = np.linalg.qr(np.swapaxes(more, 1, 2))[0]
    taken = np.sum((rest @ basis) ** 2, axis=1)
    power = float(rest @ rest) / fit.degrees
    swings = fit.columns.chart.lags(fit.theta[None])[1][0] > _SWINGING
    if not (power > 0 and np.max(taken) > (_LOOK_IF_SWINGING if swings else _LOOK) * power):
        return starts[:0]
    return starts if np.max(taken) > _CLEAR * power else starts[np.argsort(-taken)[:_STARTS]]


def _minimise(family: ThirdLag, starts: Array, tolerance: float, rounds: int) -> Array:
    """Return where the starts lead (M, 4), the best first."""
    found = minimise(
        family.evaluate,
        family.target,
        starts,
        lowest=LOWEST,
        highest=family.highest,
        free=np.ones(4, dtype=bool),
        caps=_caps,
        tolerance=tolerance,
        rounds=rounds,
        thin=True,
    )
    theta: Array = found.theta[np.argsort(found.sse)]
    return theta


def _starts(fit: Fit) -> Array:
    """Return starts (8, 4) from the second-order optimum: a third lag taken from the dead time, or a swing hidden by it."""
    chart = fit.columns.chart
    zeta = np.maximum(chart.damping(fit.theta[None]), 1e-3)
    at = LAGS.locate(zeta, chart.frequency(fit.theta[None]), fit.theta[None, 2])
    factors = np.array(_LAGS + _HIDING)
    starts = np.column_stack([np.repeat(at, factors.size, axis=0), np.log(factors)])
    lag = factors * LAGS.scale(starts) * np.sqrt(LAGS.shape(starts) + R_SHIFT)
    starts[:, 2] = np.maximum(starts[:, 2] - lag, 0.0)
    starts[len(_LAGS) :, 1] += 0.7
    return starts


def _caps(theta: Array) -> Array:
    limit = np.empty_like(theta)
    limit[:, 0], limit[:, 1] = 0.5, 0.8
    limit[:, 2] = LAGS.scale(theta)
    limit[:, 3] = 0.5
    return limit


def _apart(theta: Array) -> Array:
    """Return the best member and at most two others from other valleys."""
    kept = [0]
    for i in range(1, theta.shape[0]):
        if len(kept) == _MEMBERS:
            break
        distance = np.abs(theta[i] - theta[kept])
        distance[:, 2] /= LAGS.scale(theta[kept])
        if (distance.max(axis=1) > _APART).all():
            kept.append(i)
    return theta[kept]
