"""Least squares with linear parameters projected out, many starts at a time.

Golub & Pereyra (1973), with the approximation of Kaufman (1975) for the Jacobian; damped steps after
Levenberg (1944) and Marquardt (1963), with an active set for lower bounds. All starts ("members") move
together in one set of arrays: on a few hundred samples the cost is in the number of array operations.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from loopfit.core.arrays import Array

Flags = NDArray[np.bool_]
Evaluate = Callable[[Array], tuple[Array, Array]]

_FIRST_DAMPING = 1e-3
_TINY = 1e-300


class Solved(NamedTuple):
    """The linear part at B points: coefficients (B, q), residual (B, n), its square (B,), and the QR factors."""

    linear: Array
    residual: Array
    sse: Array
    basis: Array
    triangle: Array


class Minimum(NamedTuple):
    """Where the members ended: coordinates (B, p), sum of squares (B,), and whether each settled."""

    theta: Array
    sse: Array
    settled: Flags


def solve_linear(columns: Array, target: Array) -> Solved:
    """Return the best linear parameters at each member.

    Parameters
    ----------
    columns : (B, q, n) array
    target : (n,) array
        A column that is empty or repeats another gets the coefficient 0.
    """
    basis, triangle = np.linalg.qr(np.swapaxes(columns, 1, 2))
    diagonal = np.abs(triangle.diagonal(axis1=1, axis2=2))
    length = np.sqrt((triangle * triangle).sum(axis=1))
    lost = diagonal <= 1e-13 * length + 1e-150  # each against its own length: units do not matter
    if lost.any():
        basis = np.where(lost[:, None, :], 0.0, basis)
        triangle = np.where(lost[:, None, :], 0.0, triangle)
        triangle = triangle + np.eye(triangle.shape[1]) * lost[:, :, None]
    along = target @ basis
    linear = np.linalg.solve(triangle, along[:, :, None])[:, :, 0]
    residual = target - (basis @ along[:, :, None])[:, :, 0]
    return Solved(linear, residual, np.einsum("bn,bn->b", residual, residual), basis, triangle)


def combined(linear: Array, slopes: Array) -> Array:
    """Return the derivative (B, p, n) of the prediction with its linear parameters (B, q) held.

    Parameters
    ----------
    slopes : (B, p, m, n) array
        Derivatives of the first m columns.
    """
    if slopes.shape[2] == 1:  # a product of small matrices costs more than a product
        return linear[:, :1, None] * slopes[:, :, 0]
    moved: Array = (linear[:, None, None, : slopes.shape[2]] @ slopes)[:, :, 0, :]
    return moved


def projected_jacobian(slopes: Array, solved: Solved) -> Array:
    """Return the derivative (B, p, n) of the prediction in the coordinates, linear part re-solved."""
    moved = combined(solved.linear, slopes)
    return moved - (moved @ solved.basis) @ np.swapaxes(solved.basis, 1, 2)


def minimise(
    evaluate: Evaluate,
    target: Array,
    theta: Array,
    *,
    lowest: Array,
    highest: Array | None = None,
    free: Flags,
    caps: Callable[[Array], Array] | None = None,
    tolerance: float = 1e-6,
    rounds: int = 60,
    thin: bool = False,
) -> Minimum:
    """Return the minima reached from the starts.

    Parameters
    ----------
    evaluate : callable
        (B, p) coordinates -> columns (B, q, n), derivatives (B, p, m, n) of the first m columns.
    target : (n,) array
    theta : (B, p) array
        Starts.
    lowest, highest : (p,) array
        Bounds.
    free : (p,) bool array
        Coordinates that may move.
    caps : callable, optional
        (B, p) -> (B, p), longest step in each coordinate.
    tolerance : float
        A member is done when the next step promises less than this fraction of SSE / n.
    rounds : int
        Evaluations at most.
    thin : bool
        Drop members that have merged or fallen hopelessly behind.
    """
    # tiny arrays: the cost is the number of calls, and np.clip, np.einsum and np.where are slow ones
    n = target.size
    top = np.full(theta.shape[1], np.inf) if highest is None else highest
    theta = np.minimum(np.maximum(theta, lowest), top)
    floor = (8 * np.finfo(float).eps) ** 2 * float(target @ target) + _TINY
    damping = np.full(theta.shape[0], _FIRST_DAMPING)
    growth = np.full(theta.shape[0], 2.0)
    settled = np.zeros(theta.shape[0], dtype=bool)
    columns, slopes = evaluate(theta)
    solved = solve_linear(columns, target)
    jacobian = projected_jacobian(slopes, solved)
    sse = solved.sse
    residual = solved.residual
    fixed = ~free
    unit = np.eye(theta.shape[1])
    for turn in range(rounds):
        gradient = (jacobian @ residual[:, :, None])[:, :, 0]
        held = ((theta <= lowest) & (gradient < 0)) | ((theta >= top) & (gradient > 0)) | fixed
        normal = jacobian @ jacobian.swapaxes(1, 2)
        if held.any():
            gradient[held] = 0.0
            normal[held[:, :, None] | held[:, None, :]] = 0.0
        size = np.maximum(normal.diagonal(axis1=1, axis2=2), _TINY) * damping[:, None]
        size[held] = 1.0
        step = np.linalg.solve(normal + size[:, :, None] * unit, gradient[:, :, None])[:, :, 0]
        if caps is not None:
            step /= np.maximum(1.0, (np.abs(step) / caps(theta)).max(axis=1))[:, None]
        trial = np.minimum(np.maximum(theta + step, lowest), top)
        step = trial - theta
        promised = (step * (2.0 * gradient - (normal @ step[:, :, None])[:, :, 0])).sum(axis=1)
        settled = settled | (promised <= tolerance * (sse + floor) / n) | (damping > 1e12) | (sse <= floor)
        if settled.all():
            break
        columns, slopes = evaluate(trial)
        solved = solve_linear(columns, target)
        gained = sse - solved.sse
        better = (gained > 0) & ~settled
        ratio = np.minimum(np.maximum(gained / np.maximum(promised, 1e-150), 0.0), 1.0)
        damping = np.where(
            better,
            damping * np.maximum(0.1, 1.0 - (2.0 * ratio - 1.0) ** 3),
            np.where(settled, damping, damping * growth),
        )
        growth = np.where(better, 2.0, growth * 2.0)
        damping = np.maximum(damping, 1e-12)
        if better.all():
            theta, sse, residual = trial, solved.sse, solved.residual
            jacobian = projected_jacobian(slopes, solved)
        elif better.any():
            fresh = projected_jacobian(slopes, solved)
            theta = np.where(better[:, None], trial, theta)
            sse = np.where(better, solved.sse, sse)
            residual = np.where(better[:, None], solved.residual, residual)
            jacobian = np.where(better[:, None, None], fresh, jacobian)
        if thin and turn % 2 == 1 and theta.shape[0] > 1:
            keep = _worth_keeping(theta, sse, n)
            if keep.size < theta.shape[0]:
                theta, sse, residual, jacobian = theta[keep], sse[keep], residual[keep], jacobian[keep]
                damping, growth, settled = damping[keep], growth[keep], settled[keep]
    return Minimum(theta, sse, settled)


def _worth_keeping(theta: Array, sse: Array, n: int) -> NDArray[np.intp]:
    """Return the members that are neither copies of a better one nor far behind the best."""
    order = np.argsort(sse)
    best = sse[order[0]]
    behind: Flags = np.greater(sse, 4.0 * best + 1e-9) & np.greater(sse, best * (1.0 + 200.0 / n))
    alike = np.abs(theta[:, None] - theta) < 1e-3 * (1.0 + np.abs(theta))
    copies: Flags = np.all(alike, axis=2)  # [i, j]: i is a copy of j
    keep: list[int] = []
    for i in order.tolist():
        if not behind[i] and not any(copies[i, j] for j in keep):
            keep.append(i)
    return np.array(sorted(keep))
