"""How far the response figures go in the richer family before the record objects.

The walk of `surface.py` with one coordinate more; the figures' gradients include gain and zero, so only offset and
drift are solved anew.
"""

from __future__ import annotations

from typing import NamedTuple

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
_ARRIVED = 0.02  # of a walker's way
_EVERYTHING = np.ones(4, dtype=bool)


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


class _Place(NamedTuple):
    """Where walkers stand: the surface's curvature and gradient there, its rise, the figures and their gradients."""

    linear: Array
    curvature: Array
    gradient: Array
    rise: Array
    figures: dict[str, Array]
    aims: dict[str, Array]
    allowed: NDArray[np.bool_]

    def of(self, members: NDArray[np.intp]) -> _Place:
        """Return the place of some of them."""
        figures, aims = (
            {name: values[members] for name, values in table.items()} for table in (self.figures, self.aims)
        )
        return _Place(
            self.linear[members], self.curvature[members], self.gradient[members], self.rise[members],
            figures, aims, self.allowed[members],
        )  # fmt: skip


def _walk(doubt: Doubt, known: dict[str, Quantity | None], span: float, band: float) -> dict[str, Array]:
    """Return each figure's values (P,) at points that the record allows."""
    threshold, highest = doubt.threshold, doubt.family.highest
    place = _look(doubt, doubt.theta, doubt.linear, span, band)
    seen = {name: [values[place.allowed]] for name, values in place.figures.items()}
    member, which, sign = _worth_walking(place, threshold, known, clear=doubt.clear)
    if member.size:
        place = place.of(member)
        home = near = at = doubt.theta[member]
        home_linear = near_linear = place.linear
        start = own = np.choose(which, [place.figures[name] for name in FIGURES])
        for _ in range(_ROUNDS_IF_CLEAR if doubt.clear else _ROUNDS):
            aims = np.zeros_like(place.gradient)
            for i, name in enumerate(FIGURES):
                aims[which == i, :6] = place.aims[name][which == i]
            step = reach(place.curvature, place.gradient, place.rise, aims * sign[:, None], _EVERYTHING, at, LOWEST, highest,
                         threshold, _CAPS)  # fmt: skip
            close = (place.rise <= _FAR * threshold)[:, None]
            near, near_linear = np.where(close, at, near), np.where(close, place.linear, near_linear)
            ahead = np.minimum(np.maximum(at + step[:, :4], LOWEST), highest)
            linear = np.where(close, place.linear + step[:, 4:], near_linear + _BACK * (place.linear - near_linear))
            at = np.where(close, ahead, near + _BACK * (at - near))
            place = _look(doubt, at, linear, span, band)
            for name, values in place.figures.items():
                seen[name].append(values[place.allowed])
            before, own = own, np.choose(which, [place.figures[name] for name in FIGURES])
            on = np.abs(place.rise / threshold - 1.0) < _CLOSE - 1.0
            with np.errstate(invalid="ignore"):  # a settling time beyond the record is infinite
                moving = np.abs(own - before) > _ARRIVED * np.abs(own - start)
            if (on & ~moving).all():
                break
        near = np.where((place.rise <= _FAR * threshold)[:, None], at, near)
        near_linear = np.where((place.rise <= _FAR * threshold)[:, None], place.linear, near_linear)
        # a jump of the settling time can lie inside; and where the end is not allowed, the way to it may be
        inside = (which == FIGURES.index("settling_time_s")) | ~place.allowed
        share = _CHORD[:, None, None]
        chords = (home + share * (near - home))[:, inside].reshape(-1, 4)
        linear = (home_linear + share * (near_linear - home_linear))[:, inside].reshape(-1, home_linear.shape[1])
        if inside.any():
            for name, values in _along(doubt, chords, linear, span, band).items():
                seen[name].append(values)
    return {name: np.concatenate(values) for name, values in seen.items()}


def _look(doubt: Doubt, at: Array, linear: Array, span: float, band: float) -> _Place:
    columns, slopes = doubt.family.evaluate(at)
    linear, residual = _resolve(columns, linear, doubt.family.target)
    rise = _rise(doubt, residual)
    figures, aims = third_figures(np.concatenate([at, linear[:, :2]], axis=1), span, band, gradients=True)
    H, b = quadratic(columns, slopes, linear, residual, doubt.variance)
    # beside kappa = 0 a zero is a shift in time, to first order: without a bound on the step the walkers leap to and fro
    reaches = np.tile(_REACHES, (at.shape[0], 1))
    reaches[:, 2] *= LAGS.scale(at)
    reaches[:, 4:] *= np.abs(linear[:, :1]) + 1e-300
    H[:, range(6), range(6)] += doubt.threshold / reaches**2
    return _Place(linear, H, b, rise, figures, aims, _allowed(doubt, rise, at, span))


def _along(doubt: Doubt, chords: Array, linear: Array, span: float, band: float) -> dict[str, Array]:
    """Return the figures at those points of the chords that the record allows."""
    columns, _ = doubt.family.evaluate(chords, derivatives=False)
    linear, residual = _resolve(columns, linear, doubt.family.target)
    allowed = _allowed(doubt, _rise(doubt, residual), chords, span)
    return third_figures(np.concatenate([chords, linear[:, :2]], axis=1)[allowed], span, band, gradients=False)[0]


def _rise(doubt: Doubt, residual: Array) -> Array:
    return np.asarray(((residual * residual).sum(axis=1) - doubt.sse[0]) / doubt.variance)


def _allowed(doubt: Doubt, rise: Array, at: Array, span: float) -> NDArray[np.bool_]:
    return (rise <= _CLOSE * doubt.threshold) & (_slowest(at) <= _LONGEST * span)


def _worth_walking(
    place: _Place, threshold: float, known: dict[str, Quantity | None], *, clear: bool
) -> tuple[NDArray[np.intp], NDArray[np.intp], Array]:
    """Return member, figure and sign of the walks that may leave the second order's own intervals."""
    H, allowed = place.curvature, threshold - place.rise
    scale = 1.0 / np.sqrt(np.maximum(H.diagonal(axis1=1, axis2=2), 1e-200))
    both = scale[:, :, None] * scale[:, None, :]
    inverse = np.linalg.inv(H * both + 1e-13 * np.eye(H.shape[1])) * both
    walks: list[tuple[int, int, float]] = []
    for i, name in enumerate(FIGURES):
        quantity, slope = known[name], place.aims[name]
        if quantity is None or (name == "gain" and not clear):
            continue
        spread = _GENEROUS * np.sqrt(
            np.maximum(np.einsum("bi,bij,bj->b", slope, inverse[:, :6, :6], slope) * allowed, 0.0)
        )
        for member in range(H.shape[0]):
            value = float(place.figures[name][member])
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
