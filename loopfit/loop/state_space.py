"""A rational plant as a state space, and its exact advance over a time while the input is held."""

from __future__ import annotations

from collections.abc import Sequence
from typing import NamedTuple

import numpy as np

from loopfit.core.arrays import Array

_TAYLOR_DEGREE = 13
_TAYLOR_REACH = 0.25  # 0.25^14 / 14! = 4e-20


class StateSpace(NamedTuple):
    """x' = A x + B v, y = C x + D v: A (n, n), B (n,), C (n,), D a number; n may be 0."""

    A: Array
    B: Array
    C: Array
    D: float


def state_space(numerator: Sequence[float], denominator: Sequence[float]) -> StateSpace:
    """Return a state space of numerator / denominator, coefficients highest power first, proper.

    Controllable canonical form (Ogata, Modern Control Engineering, 5th ed. 2010, section 9-2) in units of time that
    make the first and the last coefficient alike, so that lags in days or in milliseconds come out the same.
    """
    order = len(denominator) - 1
    top = np.concatenate([np.zeros(order + 1 - len(numerator)), np.asarray(numerator, dtype=float)])
    bottom = np.asarray(denominator, dtype=float)
    direct = float(top[0] / bottom[0])
    if order == 0:
        return StateSpace(np.zeros((0, 0)), np.zeros(0), np.zeros(0), direct)
    last = int(np.flatnonzero(bottom)[-1])
    rate = abs(bottom[last] / bottom[0]) ** (1.0 / last) if last else 1.0
    powers = rate ** -np.arange(order + 1.0)
    scaled = bottom / bottom[0] * powers
    rest = (top / bottom[0] * powers - direct * scaled)[1:]
    A = np.zeros((order, order))
    A[0] = -scaled[1:]
    A[np.arange(1, order), np.arange(order - 1)] = 1.0
    B = np.zeros(order)
    B[0] = 1.0
    return StateSpace(rate * A, rate * B, rest, direct)


def exponential(matrices: Array) -> Array:
    """Return the exponential of every matrix of a stack (..., n, n).

    Taylor series of the matrix divided by a power of two, then squared back (Moler and Van Loan, Nineteen dubious
    ways to compute the exponential of a matrix, twenty-five years later, SIAM Review 45, 2003, method 3).
    """
    size = np.sum(np.abs(matrices), axis=-1).max(axis=-1, initial=0.0)
    squarings = np.ceil(np.log2(np.maximum(size / _TAYLOR_REACH, 1.0)))
    small = matrices * (0.5**squarings)[..., None, None]
    unit = np.eye(matrices.shape[-1])
    out: Array = unit + small / _TAYLOR_DEGREE
    for power in range(_TAYLOR_DEGREE - 1, 0, -1):
        out = unit + (small @ out) / power
    for done in range(int(squarings.max(initial=0.0))):
        out = np.where((squarings > done)[..., None, None], out @ out, out)
    return out


def held(A: Array, B: Array, time: Array) -> tuple[Array, Array]:
    """Return exp(A t) (..., n, n) and the integral of exp(A s) B over s from 0 to t (..., n).

    A (..., n, n), B (..., n), t (...,): one time for every system of the stack.
    """
    order = A.shape[-1]
    whole = np.zeros((*A.shape[:-2], order + 1, order + 1))
    whole[..., :order, :order] = A
    whole[..., :order, order] = B
    out = exponential(whole * np.asarray(time)[..., None, None])
    return out[..., :order, :order], out[..., :order, order]
