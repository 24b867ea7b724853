"""The damping of a loop that a person sees: the swing of its answer to a load, from exact roots and residues.

A loop with dead time has infinitely many roots, and their damping ratio tends to 0, so that the least of all says
nothing. What counts is how large a mode is when the answer to a load step peaks (to a load impulse where the controller
does not integrate, since only that comes back).
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from loopfit.loop.certificate import CertifiedRoots, certified_roots
from loopfit.loop.gains import Gains
from loopfit.loop.plant import Plant
from loopfit.loop.roots import Array, Characteristic, Complex, all_found, characteristic
from loopfit.loop.state_space import exponential

_FULL_WEIGHT = 0.1  # share of the peak from which a mode's damping counts in full for a design
_NEAR_MULTIPLE = 1e-4  # |p df/dp| over the size of f, below which residues of neighbours cancel beyond their digits
_APART = 1e-7  # relative change of the loop gain that parts a multiple root for the residues alone
_OPEN_STEPS = 6  # the open-loop part of the answer has 2^6 steps
_COURSE = 200  # points of the answer after that


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Swing:
    """How a loop swings after a load."""

    visible_damping: float  # of a second-order answer with the same swing; 1: none; negative: unstable
    design_damping: float  # least of all modes above a tenth of the peak, smaller ones in proportion: to constrain
    visible_swing: float  # swing back over the peak as a fraction of it
    roots: Complex  # (m,) rad/s, rightmost first, imaginary part at least 0
    weights: Array  # (m,) size of each swinging mode at the peak, as a fraction of it; 0 for real roots
    peak_time_s: float  # after the load is first felt; inf where the loop is unstable
    peak: float  # measurement units per unit of load at the plant's input; inf where the loop is unstable
    stable: bool
    complete: bool  # the count of roots confirmed that none is missing


def swing_of(plant: Plant, gains: Gains, roots: CertifiedRoots | None = None) -> Swing:
    """Return the swing of a loop after a load.

    Parameters
    ----------
    plant, gains : Plant, Gains
        The loop.
    roots : CertifiedRoots, optional
        Where they are known already.

    Raises
    ------
    UsageError
        If the loop has no meaning (see `characteristic`).

    Notes
    -----
    Mode p with residue R has at the peak (time t, or one dead time where that is later; height y) the weight w = 2 |R| exp(t Re p) sqrt(1 - zeta^2) / y,
    1 for a loop of second order. Visible swing: the largest min(1, w) exp(-pi zeta / sqrt(1 - zeta^2)).
    """
    function = characteristic(plant, gains)
    known = certified_roots(function) if roots is None else roots
    upper = known.upper * function.unit_s
    if len(upper) and not is_stable(upper):
        return unstable_swing(known.upper, complete=known.complete)
    p, residue = _residues(function, upper, known.nodes)
    time, peak = _peak(function, p, residue)
    felt = max(time, function.dead_time)  # before that the answer is the plant's own, and modes say nothing one by one
    return swing_from_modes(p, residue, time, peak, function.unit_s, felt=felt, complete=known.complete)


def swing_from_modes(
    p: Complex, residue: Complex, time: float, peak: float, unit_s: float, *, felt: float, complete: bool
) -> Swing:
    """Return the swing of an answer that is the sum of Re(residue exp(p t)), twice that for pairs, in scaled time.

    `time` and `peak` are those of its largest deviation, `felt` the time that the size of modes is taken at.
    """
    damping = damping_of(p)
    swings = p.imag > 0.0
    across = np.sqrt(1.0 - np.where(swings, damping, 1.0) ** 2)
    if peak > 0.0:
        weight = np.where(swings, 2.0 * np.abs(residue) * np.exp(p.real * felt) * across / peak, 0.0)
    else:
        weight = np.zeros(len(p))
    share = np.minimum(1.0, weight)
    back = np.where(swings, np.exp(-math.pi * damping / np.where(across > 0.0, across, math.inf)), 0.0) * (across > 0.0)
    swing = float((share * back).max(initial=0.0))
    design = 1.0 - (1.0 - damping) * np.minimum(1.0, weight / _FULL_WEIGHT)
    return Swing(
        visible_damping=damping_with_overshoot(swing),
        design_damping=float(design.min(initial=1.0)),
        visible_swing=swing,
        roots=p / unit_s,
        weights=weight,
        peak_time_s=time * unit_s,
        peak=peak / unit_s,
        stable=True,
        complete=complete,
    )


def damping_of(p: Complex) -> Array:
    """Return the damping ratio of roots: -Re p / |p|; 1 or -1 for real ones, 0 at the origin."""
    size = np.abs(p)
    return np.asarray(-p.real / np.where(size > 0.0, size, 1.0), dtype=float)


def damping_with_overshoot(swing: float) -> float:
    """Return the damping ratio of a second-order step answer whose overshoot is `swing`, a fraction; 1 for none."""
    if swing <= 0.0:
        return 1.0
    turn = -math.log(swing)
    return turn / math.hypot(math.pi, turn)


def is_stable(p: Complex) -> bool:
    """Return whether every root is left of the imaginary axis by more than rounding."""
    return bool(np.all(p.real < -1e-12 * np.maximum(1.0, np.abs(p))))


def unstable_swing(upper: Complex, *, complete: bool) -> Swing:
    """Return the swing of a loop that is not stable, from its roots in rad/s, worst first: what the worst one says."""
    worst = float(damping_of(upper[:1])[0])
    across = math.sqrt(1.0 - worst**2)
    return Swing(
        visible_damping=worst,
        design_damping=worst,
        visible_swing=math.exp(-math.pi * worst / across) if across > 0.0 else math.inf,
        roots=upper,
        weights=np.where(upper.real >= upper[0].real, 1.0, 0.0),
        peak_time_s=math.inf,
        peak=math.inf,
        stable=False,
        complete=complete,
    )


def _residues(function: Characteristic, upper: Complex, nodes: int) -> tuple[Complex, Complex]:
    _, slope, size = function.slopes(upper)
    if (np.abs(slope * upper) < _NEAR_MULTIPLE * size).any():
        rows = function.coefficients.copy()
        rows[[1, 3]] *= 1.0 + _APART
        function = replace(function, coefficients=rows)
        apart = all_found(function, nodes)
        if len(apart):
            upper = apart
        _, slope, _ = function.slopes(upper)
    powers = upper ** np.arange(function.order, -1, -1)[:, None]
    return upper, function.coefficients[4] @ powers / np.where(slope == 0.0, np.finfo(float).tiny ** 0.5, slope)


def _peak(function: Characteristic, p: Complex, residue: Complex) -> tuple[float, float]:
    """Time and height of the largest deviation, in scaled time."""
    time, height = _open_peak(function)
    if not len(p):
        return time, height
    twice = np.where(p.imag > 0.0, 2.0, 1.0) * residue
    first, last = 0.02 / float(np.abs(p[:6]).max()), 5.0 / float(-p.real.max())
    grid = function.dead_time + np.append(0.0, np.geomspace(min(first, 0.01 * last), last, _COURSE))
    course = np.abs((twice @ np.exp(p[:, None] * grid)).real)
    top = int(course.argmax())
    if not course[top] > height:
        return time, height
    if 0 < top < _COURSE:
        grid = np.linspace(grid[top - 1], grid[top + 1], 17)
        course = np.abs((twice @ np.exp(p[:, None] * grid)).real)
        top = int(course.argmax())
    return float(grid[top]), float(course[top])


def _open_peak(function: Characteristic) -> tuple[float, float]:
    """Peak of the answer until the dead time has passed once more, when the controller is first felt: load / a alone.

    There the sum over modes converges slowly; the plant itself is exact.
    """
    order = function.order
    if function.dead_time == 0.0 or order == 0:
        return 0.0, 0.0
    a, load = function.coefficients[0], function.coefficients[4]
    matrix = np.zeros((order, order))
    matrix[0] = -a[1:]
    matrix[range(1, order), range(order - 1)] = 1.0
    step = exponential(matrix * (function.dead_time / 2**_OPEN_STEPS))
    course = np.abs(course_of(step, np.eye(order, 1), load[1:] - load[0] * a[1:], 2**_OPEN_STEPS + 1))
    top = int(course.argmax())
    return top * function.dead_time / 2**_OPEN_STEPS, float(course[top])


def course_of(step: Array, start: Array, row: Array, count: int) -> Array:
    """Return row step^k start for k from 0 to count - 1; step (n, n), start (n, 1), row (n,)."""
    states = start
    while states.shape[1] < count:
        states = np.hstack((states, step @ states))
        step = step @ step
    return np.asarray(row @ states[:, :count])
