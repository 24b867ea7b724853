"""Beside the jumps of settling time.

Settling time jumps where a swing just leaves the band: exp(-k pi zeta / sqrt(1 - zeta^2)) equals the band at the k-th
extreme. The longest and shortest settling of all models that the record allows often lie right beside such a jump,
where no gradient points; so walkers go along each jump within reach, its damping held.
"""

from __future__ import annotations

import numpy as np

from loopfit.core.arrays import Array
from loopfit.figures import unit_step
from loopfit.fit.columns import Columns
from loopfit.fit.figures_of import Points
from loopfit.fit.reach import ARRIVED, quadratic, reach
from loopfit.fit.separable import solve_linear

_SWINGS = 40
_NEAREST = 2
_BESIDE = 1e-7
_ROUNDS = 3


def beside_jumps(
    columns: Columns, seen: Points, *, free: np.ndarray, threshold: float, variance: float, sse: float, band: float
) -> Points | None:
    """Return models on the surface with a damping just beside a jump; None when no jump is within reach.

    Parameters
    ----------
    columns : Columns
    seen : Points
        Models within the threshold, the optimum first.
    free : (3,) bool array
        Coordinates that are part of the model.
    threshold, variance, sse : float
        Allowed rise in units of the variance, and the least sum of squares.
    band : float
        Settling band, a fraction.
    """
    starts = _starts(columns, seen, band)
    if starts is None:
        return None
    at, linear, sign = starts
    held = free & np.array([True, False, True])
    kept: list[Points] = []
    rounds, way = _ROUNDS, np.zeros(at.shape[0])
    for turn in range(_ROUNDS + 1):
        matrix, slopes = columns.evaluate(at)
        solved = solve_linear(matrix, columns.target)
        linear, rise = solved.linear, (solved.sse - sse) / variance
        within = rise <= 1.04 * threshold
        if within.any():
            kept.append(Points(theta=at[within], linear=linear[within]))
        if turn == rounds:
            break
        T, r = columns.chart.lags(at)
        aims = np.zeros((at.shape[0], 3 + linear.shape[1]))
        aims[:, 0] = columns.chart.scale_sign * T * unit_step.settling_time(r, band) * sign
        aims[:, 2] = sign
        H, b = quadratic(matrix, slopes, linear, solved.residual, variance)
        step = reach(H, b, rise, aims, held, at, columns.chart.lowest, columns.highest, threshold)
        ahead = (aims * step).sum(axis=1)
        way = way + ahead
        if turn > 0 and np.all(np.abs(ahead) <= ARRIVED * np.abs(way)):
            rounds = turn + 1
        at = np.clip(at + step[:, :3], columns.chart.lowest, columns.highest)
    return Points.joined(kept) if kept else None


def _starts(columns: Columns, seen: Points, band: float) -> tuple[Array, Array, Array] | None:
    """Return starts (W, 3), their linear parameters and signs: both sides of each near jump, both ways."""
    log = np.log(1.0 / band) / (np.pi * np.arange(1, _SWINGS + 1))
    zeta = log / np.sqrt(1.0 + log**2)
    jumps = columns.chart.locate(zeta, np.ones_like(zeta), np.zeros_like(zeta))[:, 1]
    best = seen.theta[0, 1]
    starts, linears = [], []
    for end in (int(np.argmin(seen.theta[:, 1])), int(np.argmax(seen.theta[:, 1]))):
        reach_to = seen.theta[end, 1]
        inside = jumps[(jumps - best) * (jumps - reach_to) < 0]
        for jump in inside[np.argsort(np.abs(inside - best))][:_NEAREST]:
            share = (jump - best) / (reach_to - best)
            theta = seen.theta[0] + share * (seen.theta[end] - seen.theta[0])
            linear = seen.linear[0] + share * (seen.linear[end] - seen.linear[0])
            for side in (-_BESIDE, _BESIDE):
                moved = theta.copy()
                moved[1] = jump + side
                starts += [moved, moved]
                linears += [linear, linear]
    if not starts:
        return None
    return np.array(starts), np.array(linears), np.tile([1.0, -1.0], len(starts) // 2)
