"""How far the response figures go in the richer family before the record objects.

The walk of `surface.py` with one coordinate more; the figures' gradients include gain and zero, so only offset and
drift are solved anew.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from loopfit.core.arrays import Array
from loopfit.core.quantity import Quantity
from loopfit.fit.doubt import Doubt
from loopfit.fit.reach import quadratic, reach
from loopfit.fit.third_figures import FIGURES, third_figures
from loopfit.fit.third_lag import LOWEST
from loopfit.model.chart import LAGS, R_SHIFT

_ROUNDS, _ROUNDS_IF_CLEAR = 6, 10
_FAR = 4.0
_BACK = 0.5
_CLOSE = 1.04
_LONGEST = 0.4  # of the span after the step: a lag beyond is a drift to the record, not a response
_CAPS = np.array([0.5, 0.8, np.inf, 0.8])
_REACHES = np.array([0.3, 0.5, 0.3, 0.5, 0.5, 0.3])  # dead time in units of T, gain and zero of the gain
_CHORD = np.linspace(0.15, 1.0, 6)
_GENEROUS = 1.3  # a surface bends


def widened(doubt: Doubt, figures: dict[str, Quantity | None], span: float, band: float) -> dict[str, Quantity | None]:
    """Return the response figures and the gain with the doubt about the model in their intervals.

    Parameters
    ----------
    doubt : Doubt
    figures : dict
        The second-order figures.
    span : float
        Of the record after the step, s.
    band : float
        Settling band, a fraction.
    """
    seen = _walk(doubt, figures, span, band)
    if not doubt.clear:  # a hint of a third lag moves the final value by less than its own error
        del seen["gain"]
    return {name: _spanning(figures[name], values) for name, values in seen.items()}


def _walk(doubt: Doubt, known: dict[str, Quantity | None], span: float, band: float) -> dict[str, Array]:
    """Return each figure's values (P,) at points that the record allows."""
    family, threshold, variance, least = doubt.family, doubt.threshold, doubt.variance, float(doubt.sse[0])
    target, highest = family.target, family.highest
    at, linear = doubt.theta, doubt.linear
    rounds = _ROUNDS_IF_CLEAR if doubt.clear else _ROUNDS
    everything = np.ones(4, dtype=bool)
    seen: dict[str, list[Array]] = {name: [] for name in FIGURES}
    for turn in range(rounds + 1):
        columns, slopes = family.evaluate(at)
        linear, residual = _resolve(columns, linear, target)
        rise = (np.einsum("bn,bn->b", residual, residual) - least) / variance
        figures, gradients = third_figures(np.concatenate([at, linear[:, :2]], axis=1), span, band, gradients=True)
        allowed = (rise <= _CLOSE * threshold) & (_slowest(at) <= _LONGEST * span)
        for name in FIGURES:
            seen[name].append(figures[name][allowed])
        if turn == rounds:
            break
        H, b = quadratic(columns, slopes, linear, residual, variance)
        # beside kappa = 0 a zero is a shift in time, to first order: without a bound on the step the walkers leap to and fro
        reaches = np.tile(_REACHES, (at.shape[0], 1))
        reaches[:, 2] *= LAGS.scale(at)
        reaches[:, 4:] *= np.abs(linear[:, :1]) + 1e-300
        H[:, range(6), range(6)] += threshold / reaches**2
        if turn == 0:  # from each member to both sides of the figures that it may widen
            member, which, sign = _worth_walking(H, figures, gradients, threshold - rise, known, clear=doubt.clear)
            if member.size == 0:
                break
            at, linear, residual, rise = at[member], linear[member], residual[member], rise[member]
            columns, slopes, H, b = columns[member], slopes[member], H[member], b[member]
            gradients = {name: gradient[member] for name, gradient in gradients.items()}
            home, home_linear, near, near_linear = at, linear, at, linear
        aims = np.zeros((at.shape[0], 4 + linear.shape[1]))
        for i, name in enumerate(FIGURES):
            aims[which == i, :6] = gradients[name][which == i]
        aims *= sign[:, None]
        step = reach(H, b, rise, aims, everything, at, LOWEST, highest, threshold, _CAPS)
        close = (rise <= _FAR * threshold)[:, None]
        near, near_linear = np.where(close, at, near), np.where(close, linear, near_linear)
        ahead = np.clip(at + step[:, :4], LOWEST, highest)
        at = np.where(close, ahead, near + _BACK * (at - near))
        linear = np.where(close, linear + step[:, 4:], near_linear + _BACK * (linear - near_linear))
    else:
        chords = (home + _CHORD[:, None, None] * (near - home)).reshape(-1, 4)
        on_chords = (home_linear + _CHORD[:, None, None] * (near_linear - home_linear)).reshape(-1, linear.shape[1])
        columns, _ = family.evaluate(chords, derivatives=False)
        on_chords, residual = _resolve(columns, on_chords, target)
        rise = (np.einsum("bn,bn->b", residual, residual) - least) / variance
        allowed = (rise <= _CLOSE * threshold) & (_slowest(chords) <= _LONGEST * span)
        points = np.concatenate([chords, on_chords[:, :2]], axis=1)[allowed]
        figures, _ = third_figures(points, span, band, gradients=False)
        for name in FIGURES:
            seen[name].append(figures[name])
    return {name: np.concatenate(values) for name, values in seen.items()}


def _worth_walking(
    H: Array,
    figures: dict[str, Array],
    gradients: dict[str, Array],
    allowed: Array,
    known: dict[str, Quantity | None],
    *,
    clear: bool,
) -> tuple[NDArray[np.intp], NDArray[np.intp], Array]:
    """Return member, figure and sign of the walks that may leave the second order's own intervals."""
    scale = 1.0 / np.sqrt(np.maximum(H.diagonal(axis1=1, axis2=2), 1e-200))
    both = scale[:, :, None] * scale[:, None, :]
    inverse = np.linalg.inv(H * both + 1e-13 * np.eye(H.shape[1])) * both
    walks: list[tuple[int, int, float]] = []
    for i, name in enumerate(FIGURES):
        quantity, slope = known[name], gradients[name]
        if quantity is None or (name == "gain" and not clear):
            continue
        spread = _GENEROUS * np.sqrt(
            np.maximum(np.einsum("bi,bij,bj->b", slope, inverse[:, :6, :6], slope) * allowed, 0.0)
        )
        for member in range(H.shape[0]):
            value = float(figures[name][member])
            if value - spread[member] < quantity.low:
                walks.append((member, i, -1.0))
            if value + spread[member] > quantity.high:
                walks.append((member, i, 1.0))
    table = np.array(walks).reshape(-1, 3)
    return table[:, 0].astype(np.intp), table[:, 1].astype(np.intp), table[:, 2]


def _resolve(columns: Array, linear: Array, target: Array) -> tuple[Array, Array]:
    """Solve offset and drift anew; return the linear parameters and the residual."""
    rest = target - np.einsum("bq,bqn->bn", linear[:, :2], columns[:, :2])
    fixed = columns[0, 2:]
    answer = np.linalg.lstsq(fixed.T, rest.T, rcond=None)[0].T
    return np.concatenate([linear[:, :2], answer], axis=1), rest - answer @ fixed


def _slowest(theta: Array) -> Array:
    """Return the longest lag at each point, s."""
    scale, shape = LAGS.scale(theta), LAGS.shape(theta)
    slow: Array = scale * 0.5 * (1.0 + np.sqrt(np.maximum(1.0 - 4.0 * shape, 0.0)))
    return np.maximum(slow, scale * np.sqrt(shape + R_SHIFT) * np.exp(theta[:, 3]))


def _spanning(quantity: Quantity | None, values: Array) -> Quantity | None:
    there = values[~np.isnan(values)]
    if quantity is None or there.size == 0:
        return quantity
    return Quantity.spanning(
        quantity.value, min(quantity.low, float(there.min())), max(quantity.high, float(there.max()))
    )
