"""Walking the likelihood-ratio surface: how far each figure can go before the record objects.

A profile interval holds every value that some model reaches whose sum of squares is within F s^2 of the
least (Bates & Watts, Nonlinear Regression Analysis, 1988, ch. 6). Each figure has two walkers, up and
down; each re-aims along the figure's own gradient with the exact Jacobian, all in one batch. The bounds
r >= 0 and dead time >= 0 hold.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from loopfit.core.arrays import Array
from loopfit.fit.aims import Walkers
from loopfit.fit.columns import Columns
from loopfit.fit.figures_of import Points
from loopfit.fit.jumps import beside_jumps
from loopfit.fit.reach import ARRIVED, quadratic, reach
from loopfit.fit.separable import Solved, solve_linear
from loopfit.fit.valleys import over_all_shapes

_ROUNDS = 4
_ROUNDS_AT_MOST = 16
_FAR = 4.0
_BACK = 0.3
_OVERDAMPED = 0.5
_CLOSE = 1.04
_CHORD = np.linspace(0.08, 0.96, 12)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Surface:
    """What the walkers found.

    `points`: models within the threshold, the optimum first. `open_damping`: the first-order limit is
    within the threshold. `better`: a model clearly better than the optimum, if one was met.
    """

    points: Points
    open_damping: bool
    better: Array | None


def walk(
    columns: Columns, theta: Array, *, free: np.ndarray, threshold: float, variance: float, band: float
) -> Surface:
    """Return the surface around an optimum.

    Parameters
    ----------
    columns : Columns
    theta : (3,) array
        The optimum.
    free : (3,) bool array
        Coordinates that are part of the model.
    threshold : float
        Allowed rise of the sum of squares, in units of the variance.
    variance : float
        Of a row's noise.
    band : float
        Settling band, a fraction.
    """
    walkers = Walkers(columns, theta, free, band)
    lowest, highest = columns.chart.lowest, columns.highest
    best = solve_linear(columns.evaluate(theta[None], derivatives=False)[0], columns.target)
    at = np.repeat(theta[None], walkers.count, axis=0)
    linear = np.repeat(best.linear, walkers.count, axis=0)
    sse_best = float(best.sse[0])
    seen = [Points(theta=theta[None], linear=best.linear), _gain_alone(best, theta, threshold * variance)]
    open_damping, better, rise = False, None, np.zeros(walkers.count)
    rounds, turn = _ROUNDS, 0
    way = np.zeros(walkers.count)  # how far each walker has gone along its own figure
    near_at, near_linear = at, linear  # where each walker last stood near the surface
    while True:
        if turn > 0:
            matrix, slopes = columns.evaluate(at)
            linear, residual, sse = walkers.resolve(matrix, linear)
            rise = (sse - sse_best) / variance
            within = rise <= _CLOSE * threshold
            if within.any():
                seen.append(Points(theta=at[within], linear=linear[within]))
            low = int(np.argmin(rise))
            if rise[low] < -0.1 and (better is None or rise[low] < better[0]):
                better = (float(rise[low]), at[low].copy())
            if columns.chart.by_lags:
                open_damping |= bool(np.any(within & (at[:, 1] <= lowest[1] + 1e-9)))
        else:
            matrix, slopes = columns.evaluate(at[:1])  # all stand on the optimum
            residual = best.residual
        if turn == rounds < _ROUNDS and np.any(np.abs(rise / threshold - 1.0) > _CLOSE - 1.0):
            rounds = _ROUNDS  # not all have arrived after all
        # re-aiming brings most walkers back at once; one that stays away for as many rounds must turn back
        lost = ~(rise <= _FAR * threshold) & (turn >= _ROUNDS)
        if lost.any() and rounds < _ROUNDS_AT_MOST:
            rounds += 1
        if turn < rounds:
            aims = walkers.aims(at, linear)
            H, b = quadratic(matrix, slopes, linear[: matrix.shape[0]], residual, variance)
            if turn == 0:
                H, b = np.repeat(H, walkers.count, axis=0), np.repeat(b, walkers.count, axis=0)
            step = reach(H, b, rise, aims, free, at, lowest, highest, threshold)
            ahead = (aims * step).sum(axis=1)
            way = way + ahead
            if 0 < turn < _ROUNDS and np.all(np.abs(ahead) <= ARRIVED * walkers.longer(way)):
                rounds = turn + 1
            ahead_at, ahead_linear = np.minimum(np.maximum(at + step[:, :3], lowest), highest), linear + step[:, 3:]
            if lost.any():
                back_at, back_linear = near_at + _BACK * (at - near_at), near_linear + _BACK * (linear - near_linear)
                ahead_at = np.where(lost[:, None], back_at, ahead_at)
                ahead_linear = np.where(lost[:, None], back_linear, ahead_linear)
            near = (rise <= _FAR * threshold)[:, None]
            near_at, near_linear = np.where(near, at, near_at), np.where(near, linear, near_linear)
            at, linear = ahead_at, ahead_linear
        elif turn < rounds + 2:  # secant on the root of the rise, along the chord from the optimum
            off = np.abs(rise / threshold - 1.0) > _CLOSE - 1.0
            if not off.any():
                break
            ratio = np.where(off & (rise > 0), np.sqrt(threshold / np.maximum(rise, 1e-3 * threshold)), 1.0)
            ratio = np.clip(ratio, 0.3, 2.0)[:, None]
            at = np.clip(theta + ratio * (at - theta), lowest, highest)
            linear = best.linear + ratio * (linear - best.linear)
        else:
            break
        turn += 1
    # settling time jumps between swings: the jump can lie inside the surface
    ends, end_linear = at, linear
    share = _CHORD[:, None, None]
    inside = Points(
        theta=(theta + share * (ends - theta)).reshape(-1, 3),
        linear=(best.linear + share * (end_linear - best.linear)).reshape(-1, linear.shape[1]),
    )
    within = rise <= _CLOSE * threshold
    keep = np.tile(within, _CHORD.size)
    seen.append(Points(theta=inside.theta[keep], linear=inside.linear[keep]))
    if (
        columns.input is None
        and columns.chart.by_lags
        and free[1]
        and columns.chart.shape(theta[None])[0] < _OVERDAMPED
    ):
        valleys = over_all_shapes(columns, threshold=threshold, variance=variance, sse=sse_best)
        if valleys is not None:
            seen.append(valleys)
            open_damping |= bool(np.any(valleys.theta[:, 1] <= lowest[1] + 1e-9))
    if columns.input is not None and columns.rungs == (1,) and free[1]:
        beside = beside_jumps(
            columns, Points.joined(seen), free=free, threshold=threshold, variance=variance, sse=sse_best, band=band
        )
        seen += [] if beside is None else [beside]
    return Surface(points=Points.joined(seen), open_damping=open_damping, better=None if better is None else better[1])


def _gain_alone(best: Solved, theta: Array, allowed: float) -> Points:
    """Return the two points to which the first linear parameter alone can go: exact, whatever the coordinates do."""
    inverse = np.linalg.inv(best.triangle[0])
    covariance = inverse @ inverse.T
    move = covariance[:, 0] * np.sqrt(allowed / covariance[0, 0])
    return Points(theta=np.stack([theta, theta]), linear=best.linear + np.stack([move, -move]))
