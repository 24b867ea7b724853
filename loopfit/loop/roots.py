"""Roots of a loop with dead time: its characteristic quasi-polynomial and the rightmost zeros of that."""

from __future__ import annotations

import functools
import math
from dataclasses import dataclass

import numpy as np

from loopfit.core.errors import UsageError
from loopfit.loop.gains import Gains
from loopfit.loop.plant import Plant

Array = np.ndarray[tuple[int, ...], np.dtype[np.float64]]
Complex = np.ndarray[tuple[int, ...], np.dtype[np.complex128]]

NODES = 16  # of the transport line; 12 found the six rightmost roots of 120 loops, 10 missed some in 10 of them
_NEAR_NEUTRAL = (
    0.9  # |kd gain / T| from which a filter that is short beside the dead time leaves a loop not worth having
)
_SHORT_FILTER = 0.1  # of the dead time


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Characteristic:
    """f = a(p) + b(p) exp(-dead_time p) in p = unit_s s, so that its coefficients are of order one.

    Closed-loop roots are its zeros; exp(-dead_time p) load(p) / f(p) is the answer to a load step where the
    controller integrates, and to a load impulse where it does not.
    """

    unit_s: float  # seconds per unit of the scaled time
    dead_time: float  # in that unit
    coefficients: Array  # (5, n + 1): a, b, da/dp, db/dp and load, highest power first; a has leading coefficient 1

    @property
    def order(self) -> int:
        """Degree of a."""
        return self.coefficients.shape[1] - 1

    @property
    def direct_gain(self) -> float:
        """Limit of b / a at infinite p: 0 unless the open loop answers at once."""
        return float(self.coefficients[1, 0])

    @property
    def row(self) -> float:
        """Line, a little right of the one that an infinite row of roots approaches, in scaled time; -inf: none."""
        if self.dead_time == 0.0 or self.direct_gain == 0.0:
            return -math.inf
        return (math.log(abs(self.direct_gain)) + 0.1) / self.dead_time

    def parts(self, p: Complex) -> tuple[Complex, Complex]:
        """Return a(p) and b(p) exp(-dead_time p); p of shape (m,)."""
        a, b = self.coefficients[:2] @ _powers(p, self.order)
        return a, b * np.exp(-self.dead_time * p)

    def slopes(self, p: Complex) -> tuple[Complex, Complex, Complex]:
        """Return f(p), df/dp and the size that f is small against; p of shape (m,)."""
        powers = _powers(p, self.order)
        a, b, da, db = self.coefficients[:4] @ powers
        delay = np.exp(-self.dead_time * p)
        terms = np.abs(self.coefficients[:2]) @ np.abs(powers)
        bulk = np.abs(delay)
        # |a| + |b exp|, but not nothing where a root is common to a and b: a lag that the controller cancels
        size = np.maximum(np.abs(a) + np.abs(b) * bulk, 1e-3 * (terms[0] + terms[1] * bulk))
        return a + b * delay, da + (db - self.dead_time * b) * delay, size

    def __call__(self, s: Complex) -> Complex:
        """Return f at s in rad/s, any shape, divided by the leading coefficient of a in scaled time."""
        p = np.asarray(np.ravel(s) * self.unit_s, dtype=complex)
        a, b = self.parts(p)
        return np.asarray((a + b).reshape(np.shape(s)), dtype=complex)


def characteristic(plant: Plant, gains: Gains) -> Characteristic:
    """Return the characteristic function of a loop: a = D s (Tf s + 1), b = N (kp s (Tf s + 1) + ki (Tf s + 1) + kd s^2).

    The factor s is left out where ki = 0, the filter where kd = 0; integrators of the plant stay.

    Raises
    ------
    UsageError
        If the loop has no meaning, or infinitely many (or nearly so) roots with growing frequency that do not die.
    """
    numerator, denominator = np.array(plant.numerator), np.array(plant.denominator)
    rows, below, filter_part = actions(gains.filter_s, integral=gains.ki != 0.0, derivative=gains.kd != 0.0)
    a = np.convolve(denominator, below)
    b = np.convolve(numerator, np.array([gains.kp, gains.ki, gains.kd]) @ rows)
    _refuse(plant, gains, a, b, numerator, denominator)
    return scaled(a, b, np.convolve(numerator, filter_part), plant.dead_time_s)


def actions(filter_s: float, *, integral: bool, derivative: bool) -> tuple[Array, Array, Array]:
    """Return what each unit of kp, ki and kd (3, k) adds to the controller's numerator, its denominator, the filter."""
    filter_part = np.array([filter_s, 1.0]) if derivative else np.ones(1)
    below = np.append(filter_part, 0.0) if integral else filter_part
    rows = np.zeros((3, len(below)))
    rows[0] = below
    if integral:
        rows[1, 1:] = filter_part
    if derivative:
        rows[2, 0] = 1.0  # s^2 over s (Tf s + 1), or s over Tf s + 1
    return rows, below, filter_part


def scaled(a: Array, b: Array, load: Array, dead_time_s: float) -> Characteristic:
    """Return the characteristic function of coefficients in seconds, highest power first, in scaled time."""
    order = len(a) - 1
    unit = _time_unit(a, b, dead_time_s)
    powers = np.arange(order, -1, -1)
    scale = unit ** (order - powers) / a[0]
    rows = np.zeros((5, order + 1))
    for row, values in ((0, a), (1, b), (4, load)):
        rows[row, order + 1 - len(values) :] = values
        rows[row] *= scale
    rows[2:4, 1:] = (rows[:2] * powers)[:, :-1]
    rows.flags.writeable = False
    return Characteristic(unit_s=unit, dead_time=dead_time_s / unit, coefficients=rows)


def rightmost_roots(function: Characteristic, count: int = 6, *, nodes: int = NODES) -> Complex:
    """Return the rightmost roots, rad/s, rightmost first, pairs together with the upper one first.

    Parameters
    ----------
    function : Characteristic
        Of the loop.
    count : int
        Roots wanted; one more where that would part a pair, fewer where there are (or were found) fewer.
    nodes : int
        Chebyshev nodes of the transport line.

    Notes
    -----
    The delayed signal is scalar, so only that is discretised: a transport line w_t = -(2 / dead_time) w_x on [-1, 1],
    collocated (Trefethen, Spectral Methods in Matlab, 2000, ch. 6; for delays Breda, Maset, Vermiglio, 2005).
    Eigenvalues that do not nearly solve f = 0 belong to the discretisation and go; the others are polished by Newton.
    Nothing is missed as a rule; `certificate.certified_roots` makes sure.
    """
    return first_roots(all_found(function, nodes), count) / function.unit_s


def first_roots(upper: Complex, count: int) -> Complex:
    """Return the first `count` of roots whose upper halves are given, with their conjugates."""
    out: list[complex] = []
    for value in upper.tolist():
        if len(out) >= count:
            break
        out.append(value)
        if value.imag > 0.0:
            out.append(value.conjugate())
    return np.array(out, dtype=complex)


def all_found(function: Characteristic, nodes: int = NODES) -> Complex:
    """Return every root found with imaginary part at least 0, in scaled time, rightmost first."""
    if function.dead_time == 0.0:
        raw = np.roots(function.coefficients[0] + function.coefficients[1]).astype(complex)
    else:
        raw = np.linalg.eigvals(_transport(function, nodes)).astype(complex)
        raw = raw[raw.real * function.dead_time > -500.0]  # beyond, exp overflows, and no root there can matter
    raw = raw[raw.imag >= 0.0]
    with np.errstate(all="ignore"):  # a start that is no root may run anywhere: it is not kept
        value, slope, size = function.slopes(raw)
        near = np.abs(value) < 0.3 * size
        raw, value, slope, size = raw[near], value[near], slope[near], size[near]
        root = raw
        for _ in range(5):
            trial = root - value / slope
            trial_value, trial_slope, trial_size = function.slopes(trial)
            better = np.abs(trial_value) < np.abs(value)  # at a multiple root a blind step lands anywhere
            root = np.where(better, trial, root)
            value, slope = np.where(better, trial_value, value), np.where(better, trial_slope, slope)
            size = np.where(better, trial_size, size)
            if not (better & (np.abs(value) > 1e-15 * size)).any():
                break
        kept = (np.abs(value) < 1e-8 * size) & (np.abs(root - raw) < 0.2 * np.abs(raw) + 1e-6)
        root = np.where(root.imag < 0.0, root.conj(), root)[kept]
        simple = np.abs(slope[kept] * root) > 1e-5 * size[kept]
    # roots that approach a line in an infinite row are alike: those of low frequency first
    order = np.lexsort((root.imag, -np.maximum(root.real, function.row)))
    root, simple = root[order], simple[order]
    if len(root) > 1:  # two starts that ran to one simple root
        again = (np.abs(np.diff(root)) < 1e-10 * np.abs(root[1:])) & simple[1:]
        root = root[np.append(True, ~again)]
    return np.asarray(root, dtype=complex)


def _refuse(plant: Plant, gains: Gains, a: Array, b: Array, numerator: Array, denominator: Array) -> None:
    direct = b[0] / a[0] if len(a) == len(b) else 0.0
    if plant.dead_time_s == 0.0:
        if direct <= -1.0:
            raise UsageError(
                "the loop has no solution: the plant answers at once, and the controller feeds back as much or more "
                "with the wrong sign"
            )
        return
    if abs(direct) >= 1.0:
        raise UsageError(
            f"the plant answers at once after its dead time and the loop gain at high frequency is {abs(direct):.3g}: "
            "every such signal comes back larger, with infinitely many unstable roots. Below 1 the loop can be stable; "
            "give the plant's lag if it has one, or a lower proportional or derivative gain"
        )
    if gains.kd != 0.0 and len(denominator) - len(numerator) == 1:
        turn = abs(gains.kd * numerator[0] / denominator[0])
        if turn >= _NEAR_NEUTRAL and gains.filter_s < _SHORT_FILTER * plant.dead_time_s:
            raise UsageError(
                f"derivative action on a first-order rise with dead time: kd times the initial slope is {turn:.2g}, "
                f"and at {_NEAR_NEUTRAL:g} or more with a filter shorter than {_SHORT_FILTER:g} of the dead time the loop "
                "swings at ever higher frequencies as the filter is shortened. Give less derivative or a longer filter"
            )


def _time_unit(a: Array, b: Array, dead_time_s: float) -> float:
    order = len(a) - 1
    if order == 0:
        return dead_time_s or 1.0
    rest = abs(a[-1] + b[-1])
    if rest > 1e-9 * (abs(a[-1]) + abs(b[-1])):
        return float((abs(a[0]) / rest) ** (1.0 / order))  # geometric mean of the roots without dead time
    sizes = np.abs(a)
    sizes[order + 1 - len(b) :] += np.abs(b)
    fastest = max((float(sizes[k] / abs(a[0])) ** (1.0 / k) for k in range(1, order + 1)), default=0.0)
    return 1.0 / fastest if fastest > 0.0 else (dead_time_s or 1.0)


def _powers(p: Complex, order: int) -> Complex:
    out = np.empty((order + 1, p.size), dtype=complex)
    out[order] = 1.0
    for k in range(order - 1, -1, -1):
        np.multiply(out[k + 1], p, out=out[k])
    return out


@functools.lru_cache(maxsize=16)
def _differentiation(nodes: int) -> Array:
    """Chebyshev differentiation matrix on nodes cos(pi k / nodes); Trefethen (2000), ch. 6."""
    k = np.arange(nodes + 1)
    x = np.cos(np.pi * k / nodes)
    weight = np.where((k == 0) | (k == nodes), 2.0, 1.0) * (-1.0) ** k
    gap = x[:, None] - x[None, :] + np.eye(nodes + 1)
    out = np.outer(weight, 1.0 / weight) / gap
    out -= np.diag(out.sum(axis=1))
    out.flags.writeable = False
    return np.asarray(out)


def _transport(function: Characteristic, nodes: int) -> Array:
    """Matrix of x' = A x + B w_outlet, w_inlet = -(C x + d w_outlet), b / a = C (p - A)^-1 B + d, and the line between."""
    order = function.order
    a, b = function.coefficients[:2]
    speed = -2.0 / function.dead_time * _differentiation(nodes)
    out = np.zeros((order + nodes, order + nodes))
    out[order:, order:] = speed[:nodes, :nodes]
    out[order:, order] -= speed[:nodes, nodes] * b[0]
    if order:
        out[0, :order] = -a[1:]
        out[0, order] = 1.0
        out[range(1, order), range(order - 1)] = 1.0
        out[order:, :order] = np.multiply.outer(speed[:nodes, nodes], -(b[1:] - b[0] * a[1:]))
    return out
