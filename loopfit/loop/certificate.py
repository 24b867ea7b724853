"""Proof that no root was missed: the number of roots right of a line, by the argument principle."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from loopfit.core.errors import UsageError
from loopfit.loop.gains import Gains
from loopfit.loop.plant import Plant
from loopfit.loop.roots import (
    NODES,
    Array,
    Characteristic,
    Complex,
    actions,
    all_found,
    characteristic,
    first_roots,
    scaled,
)

Truth = np.ndarray[tuple[int, ...], np.dtype[np.bool_]]

_TURN = 0.7  # rad; larger phase steps are halved
_TRIED_NODES = (NODES, 2 * NODES, 4 * NODES, 8 * NODES)
_SPREAD = np.append(0.0, np.geomspace(1e-4, 1.0, 60))
_LADDER = np.geomspace(1e-3, 1.0, 40)
_SMOOTHED = 12  # roots found that are divided out before counting


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class CertifiedRoots:
    """Rightmost roots of a loop, rad/s, and whether their number was confirmed."""

    roots: Complex  # (m,) rightmost first, pairs together
    upper: Complex  # every root found, also left of those, imaginary part at least 0
    right_of: float  # rad/s; the line that the count was taken on
    complete: bool  # no root right of that line is missing
    nodes: int


def count_right_of(function: Characteristic, sigma: float) -> int:
    """Return the number of roots with real part above `sigma`, rad/s, with their multiplicity.

    Raises
    ------
    UsageError
        If a root lies on the line, or infinitely many lie right of it.

    Notes
    -----
    Along s = sigma + jw, w from 0 to infinity, the argument of f turns by n pi/2 less pi for each root on the right
    (Mikhailov's criterion on a shifted line; n is the degree of a). Up to R, where the leading power outweighs all
    other terms together, the turn is summed over steps that are halved until small; beyond, it is under pi/2.
    """
    return _count(function, sigma * function.unit_s, np.zeros(0, dtype=complex))


def certified_roots(function: Characteristic, count: int = 6) -> CertifiedRoots:
    """Return the rightmost roots with a count that says none was missed right of the last; finer lines where one was.

    Where infinitely many roots approach a line (an open loop that answers at once), the count is taken right of that.
    """
    unit = function.unit_s
    for nodes in _TRIED_NODES:
        found = all_found(function, nodes)
        roots = first_roots(found, count)
        line = _line(function, found, roots)
        complete = line is None
        if line is not None:
            known = first_roots(found, max(len(roots), _SMOOTHED))
            try:
                complete = _count(function, line, known) == int((known.real > line).sum())
            except UsageError:
                complete = False
        if complete or function.dead_time == 0.0:
            break
    right_of = -math.inf if line is None else line / unit
    return CertifiedRoots(roots=roots / unit, upper=found / unit, right_of=right_of, complete=complete, nodes=nodes)


def stable_among(plant: Plant, kp: Array, ki: Array, kd: Array, filter_s: float) -> Truth:
    """Return for many gains of one plant whether the loop is stable.

    Parameters
    ----------
    plant : Plant
        Of the loops.
    kp, ki, kd : (m,) float
        Gains as in `Gains`; `ki` all 0 or none, `kd` likewise.
    filter_s : float
        Time of the derivative filter, 0 where `kd` is.

    Notes
    -----
    The count of `count_right_of` at 0 for all on one frequency grid; a loop whose phase turns too much in one step to
    be sure is counted on its own.
    """
    sets = np.stack(np.broadcast_arrays(kp, ki, kd)).astype(float)
    wide = np.abs(sets).max(axis=1)
    rows, below, _ = actions(filter_s, integral=wide[1] > 0.0, derivative=wide[2] > 0.0)
    numerator, a = np.array(plant.numerator), np.convolve(plant.denominator, below)
    forward = np.stack([np.convolve(numerator, row) for row in rows])
    if forward.shape[1] == len(a):  # an open loop that answers at once: rare, and a matter of its own for each
        unsure = np.ones(sets.shape[1], dtype=bool)
        out = np.zeros(sets.shape[1], dtype=bool)
    else:
        function = scaled(a, wide @ np.abs(forward), numerator, plant.dead_time_s)
        order, unit = function.order, function.unit_s
        end = _outweighs([abs(x) + y for x, y in function.coefficients[:2].T], 0.9)
        steps = min(int(end * function.dead_time / 0.4) + 1, 2000)
        grid = np.unique(np.concatenate((end * _SPREAD, np.linspace(0.0, end, steps)))) / unit
        out, unsure = np.zeros(sets.shape[1], dtype=bool), np.ones(sets.shape[1], dtype=bool)
        for finer in (1, 8):
            grid = np.interp(np.arange(0.0, len(grid) - 1 + 0.5 / finer, 1.0 / finer), np.arange(len(grid)), grid)
            powers = (1j * grid) ** np.arange(order, -1, -1)[:, None]
            path = forward @ powers[order + 1 - forward.shape[1] :] * np.exp(-1j * plant.dead_time_s * grid)
            for some in np.array_split(np.flatnonzero(unsure), 1 + len(grid) * int(unsure.sum()) // 1_000_000):
                value = a @ powers + sets[:, some].T @ path
                with np.errstate(all="ignore"):
                    step = np.angle(value[:, 1:] / value[:, :-1])
                out[some] = np.rint((0.5 * math.pi * order - step.sum(axis=1)) / math.pi) == 0
                unsure[some] = ~(np.abs(step) < 2.0 * _TURN).all(axis=1)
    for k in np.flatnonzero(unsure):
        out[k] = _stable(plant, Gains(kp=sets[0, k], ki=sets[1, k], kd=sets[2, k], filter_s=filter_s))
    return out


def _stable(plant: Plant, gains: Gains) -> bool:
    try:
        return count_right_of(characteristic(plant, gains), 0.0) == 0
    except UsageError:  # a root on the axis, or a loop that no filter or lag holds
        return False


def _line(function: Characteristic, found: Complex, roots: Complex) -> float | None:
    """Real part to count at: just left of the last root, where possible in the gap before the next; None: no need."""
    if function.dead_time == 0.0 and len(roots) == function.order:
        return None
    if len(roots) == 0:
        # no root found: none may exist right of where a delayed loop could still matter
        return -1.0 / function.dead_time if function.dead_time else -1.0
    last = float(roots[-1].real)
    beyond = found.real[found.real < last - 1e-9 * abs(last)]
    step = 1e-3 * max(abs(last), 1e-3)
    line = last - (min(step, 0.5 * (last - float(beyond.max()))) if len(beyond) else step)
    return max(line, function.row)


def _count(function: Characteristic, sigma: float, known: Complex) -> int:
    """Zeros right of sigma in scaled time; the turn due to `known` zeros (with conjugates) is taken exactly."""
    end = _end(function, sigma)
    grid = end * _SPREAD
    if function.dead_time > 0.0:
        a, b = function.parts(np.asarray(sigma + 1j * grid, dtype=complex))
        lively = grid[min(int(np.flatnonzero(np.abs(b) >= 0.3 * np.abs(a)).max(initial=0)) + 1, len(grid) - 1)]
        steps = min(int(lively * function.dead_time / 0.4) + 1, 200_000)
        grid = np.sort(np.concatenate((grid, np.linspace(0.0, lively, steps + 2)[1:-1])))
    turn = _turn(function, sigma, grid[None, :], known, 0)
    if len(known):
        away = sigma - known.real
        turn += float((np.arctan((end - known.imag) / away) + np.arctan(known.imag / away)).sum())
    return round((0.5 * math.pi * function.order - turn) / math.pi)


def _end(function: Characteristic, sigma: float) -> float:
    """Frequency from which p^n outweighs all else on the line, so that the phase of f stays within pi/2 of p^n's."""
    if function.dead_time == 0.0:
        summed = _shifted(function.coefficients[0] + function.coefficients[1], sigma)
        return _outweighs([abs(x / summed[0]) for x in summed], 0.9)
    decay = math.exp(min(-function.dead_time * sigma, 700.0))
    room = 0.9 * (1.0 - abs(function.direct_gain) * decay)
    if not room > 0.0:
        raise UsageError(f"infinitely many roots lie right of {sigma / function.unit_s:.4g} rad/s")
    a, b = (_shifted(row, sigma) for row in function.coefficients[:2])
    return _outweighs([abs(x) + abs(y) * decay for x, y in zip(a, b, strict=True)], room)


def _outweighs(sizes: list[float], room: float) -> float:
    """Frequency from which the sum of all but the first of sizes w^k is under `room` w^n for good."""
    bound = max(((2.0 * size / room) ** (1.0 / k) for k, size in enumerate(sizes) if k), default=0.0)
    if bound == 0.0:
        return 1.0
    ladder = bound * _LADDER
    enough = np.polyval([0.0, *sizes[1:]], ladder) <= room * ladder ** (len(sizes) - 1)
    first = 0 if enough.all() else len(ladder) - int(np.argmin(enough[::-1]))
    return float(ladder[min(first, len(ladder) - 1)])


def _shifted(coefficients: Array, sigma: float) -> list[float]:
    """Coefficients of c(p + sigma) by repeated synthetic division, highest power first."""
    out = [float(value) for value in coefficients]
    for stop in range(len(out), 1, -1):
        for k in range(1, stop):
            out[k] += sigma * out[k - 1]
    return out


def _turn(function: Characteristic, sigma: float, grid: Array, known: Complex, depth: int) -> float:
    """Turn of arg f less that of the known factors, summed along the rows of grid, rad."""
    p = np.asarray(sigma + 1j * grid, dtype=complex)
    a, b = function.parts(p.ravel())
    value = (a + b).reshape(grid.shape)
    if not np.all(value != 0.0) or depth > 40:
        raise UsageError(f"a root lies on the line {sigma / function.unit_s:.6g} rad/s: count beside it")
    if len(known):
        value = value / np.prod(p[..., None] - known, axis=-1)
    ratio = value[:, 1:] / value[:, :-1]
    step = np.angle(ratio)
    size = np.abs(ratio)
    coarse = (np.abs(step) > _TURN) | (size > 8.0) | (size < 0.125)
    turn = float(step[~coarse].sum())
    if coarse.any():
        low, high = grid[:, :-1][coarse], grid[:, 1:][coarse]
        turn += _turn(function, sigma, np.linspace(low, high, 5, axis=1), known, depth + 1)
    return turn
