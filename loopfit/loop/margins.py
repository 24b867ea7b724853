"""Margins of a loop with exact dead time: gain, phase, delay, sensitivity, bandwidth."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from loopfit.core.arrays import Array
from loopfit.loop.gains import Gains
from loopfit.loop.open_loop import OpenLoop, gain_crossovers, grid_of, open_loop, phase_crossovers, root_between
from loopfit.loop.plant import Plant
from loopfit.model.transfer import Complex

_SINGULAR = 1e12  # |L| at a phase crossover beyond this is a pole on the axis, not a crossover
_MARGINAL = 1e9  # sensitivity of a loop with roots on the imaginary axis


@dataclass(frozen=True, slots=True, kw_only=True)
class Margins:
    """How far a loop is from instability; inf where nothing limits, None where the figure does not exist.

    `gain_margin`: smallest factor above 1 on the loop gain that brings a root to the imaginary axis.
    `gain_reduction_margin`: largest such factor below 1, of a conditionally stable loop; None when there is none.
    `phase_margin_deg`: smallest turn of L that does; for an unstable loop by convention the smallest angle, with its
    sign. `delay_margin_s`: smallest additional dead time that does. `gain_crossovers_rad_s`: all |L| = 1.
    `phase_crossovers_rad_s`: where L is real and negative, 0 and inf included; with dead time there are infinitely many,
    and those are given up to where each later one has a smaller |L|. `max_sensitivity`: largest |1 / (1 + L)|,
    `max_complementary_sensitivity`: largest |L / (1 + L)|, each with its frequency, 0 or inf where it is a limit.
    `bandwidth_rad_s`: lowest frequency at which |L / (1 + L)| has fallen 3 dB, to 1 / sqrt(2), below its value at rest;
    it is the setpoint's bandwidth where the setpoint weight is 1 and the derivative acts on the error.
    An unstable loop has no delay margin, sensitivity or bandwidth.
    """

    stable: bool
    positive_feedback: bool
    gain_margin: float | None
    gain_reduction_margin: float | None
    phase_margin_deg: float | None
    delay_margin_s: float | None
    gain_crossovers_rad_s: tuple[float, ...]
    phase_crossovers_rad_s: tuple[float, ...]
    max_sensitivity: float | None
    max_sensitivity_at_rad_s: float | None
    max_complementary_sensitivity: float | None
    max_complementary_sensitivity_at_rad_s: float | None
    bandwidth_rad_s: float | None

    @property
    def sentence(self) -> str:
        """What a person should know first."""
        if self.positive_feedback:
            return "positive feedback: the gain has the wrong sign for this plant; reverse the controller's action"
        if not self.stable:
            return "the loop is unstable"
        if self.gain_reduction_margin is not None:
            return f"the loop is conditionally stable: it becomes unstable below {self.gain_reduction_margin:.3g} of its gain"
        return "the loop is stable"


def margins_of(plant: Plant, gains: Gains) -> Margins:
    """Return the margins of the loop of a plant and a continuous controller.

    Definitions: Skogestad and Postlethwaite, Multivariable Feedback Control, 2nd ed. 2005, section 2.4. Stability is
    counted from the same crossovers by Nyquist's criterion, with integrations passed on the right.
    """
    loop = open_loop(plant, gains)
    gain_at = gain_crossovers(loop)
    floor = 0.1
    while True:
        grid = grid_of(loop, gain_at, floor)
        log_gain, phase, _, phase_slope = loop.along(grid)
        grid, log_gain, phase = _with_turns(loop, grid, log_gain, phase, phase_slope)
        L: Complex = np.exp(log_gain + 1j * phase)
        least, least_at = _least(loop, grid, np.asarray(1.0 + L), _return_difference, _ends(loop, _return_end))
        # beyond the dense part of the grid |L| is below the floor, so the sensitivity is below 1 / (1 - floor)
        if loop.dead_time_s == 0.0 or least <= 1.0 - floor or floor < 1e-3:
            break
        floor *= 0.1
    given = grid <= max([*gain_at, _first_turns(loop, grid, log_gain)])
    crossings = phase_crossovers(loop, grid[given], phase[given])
    values = [abs(loop.at(w)[0]) for w, _ in crossings]
    kept = [(w, value) for (w, _), value in zip(crossings, values, strict=True) if value < _SINGULAR] + _limits(loop)
    turns = [turn for (_, turn), value in zip(crossings, values, strict=True) if value > 1.0]
    stable = _unstable_roots(loop, phase, turns) == 0 and least * _MARGINAL > 1.0
    inverse = [1.0 / value for _, value in kept]
    up, down = [one for one in inverse if one > 1.0], [one for one in inverse if one < 1.0]
    angles = [_wrapped(loop.at(w)[0]) for w in gain_at]
    smallest = min(angles, key=abs, default=math.inf if stable else None)
    if stable:
        most, most_at = _least(
            loop, grid, np.asarray(1.0 + 1.0 / L), _inverse_return_difference, _ends(loop, _inverse_end)
        )
    return Margins(
        stable=stable,
        positive_feedback=loop.at_rest * (-1.0) ** loop.unstable_poles < 0,
        gain_margin=min(up, default=math.inf if stable else None),
        gain_reduction_margin=max(down, default=None),
        phase_margin_deg=None if smallest is None else math.degrees(abs(smallest) if stable else smallest),
        delay_margin_s=_delay_margin(loop, gain_at, angles) if stable else None,
        gain_crossovers_rad_s=tuple(gain_at),
        phase_crossovers_rad_s=tuple(sorted(w for w, _ in kept)),
        max_sensitivity=1.0 / least if stable else None,
        max_sensitivity_at_rad_s=least_at if stable else None,
        max_complementary_sensitivity=1.0 / most if stable else None,
        max_complementary_sensitivity_at_rad_s=most_at if stable else None,
        bandwidth_rad_s=_bandwidth(loop, grid, L) if stable else None,
    )


def _with_turns(loop: OpenLoop, grid: Array, gain: Array, phase: Array, slope: Array) -> tuple[Array, Array, Array]:
    """Return the grid with the extremes of the phase added, so that the phase is monotone between its points."""
    turns = np.flatnonzero(slope[:-1] * slope[1:] < 0)
    near = [i for i in turns if abs(math.remainder(phase[i] - math.pi, 2 * math.pi)) < 1.0]  # the others cannot cross
    if not near:
        return grid, gain, phase
    extremes = [
        root_between(
            lambda w: loop.at(w)[1].imag, float(grid[i]), float(grid[i + 1]), float(slope[i]), float(slope[i + 1])
        )
        for i in near
    ]
    grid = np.unique(np.concatenate([grid, extremes]))
    gain, phase, _, _ = loop.along(grid)
    return grid, gain, phase


def _first_turns(loop: OpenLoop, grid: Array, log_gain: Array) -> float:
    """Return the frequency up to which phase crossovers are given: a turn after |L| has begun to fall for good."""
    if loop.dead_time_s == 0.0:
        return math.inf
    rising = np.flatnonzero(np.diff(log_gain) > 1e-12)
    start = float(grid[rising[-1] + 1]) if rising.size else 0.0
    return start + 4 * math.pi / loop.dead_time_s


def _limits(loop: OpenLoop) -> list[tuple[float, float]]:
    """Return the phase crossovers at rest and at infinity, with |L|."""
    out = []
    if loop.integrations == 0 and loop.at_rest < 0:
        out.append((0.0, -loop.at_rest))
    if loop.at_infinity < 0 or (loop.at_infinity > 0 and loop.dead_time_s > 0):
        out.append((math.inf, abs(loop.at_infinity)))
    return out


def _unstable_roots(loop: OpenLoop, phase: Array, turns: list[int]) -> float:
    """Return the number of closed-loop roots right of the imaginary axis, from the crossings with |L| > 1."""
    far = abs(loop.at_infinity)
    if loop.dead_time_s > 0 and far >= 1.0:
        return math.inf
    rotations = float(sum(turns))
    if loop.integrations > 0 or abs(loop.at_rest) > 1.0:
        rotations += _sheet(float(phase[0])) - _sheet(loop.phase_at_rest())
    if loop.dead_time_s == 0.0 and far > 1.0:
        rotations += _sheet(math.pi * round(float(phase[-1]) / math.pi)) - _sheet(float(phase[-1]))
    return loop.unstable_poles - 2.0 * rotations


def _sheet(phase: float) -> float:
    """Return the turn a phase lies in, halves for a whole odd multiple of pi."""
    turns = (phase + math.pi) / (2.0 * math.pi)
    return round(turns) - 0.5 if abs(turns - round(turns)) < 1e-9 else math.floor(turns)


def _wrapped(L: complex) -> float:
    """Return the angle of L past -180 degrees, in (-pi, pi]."""
    return math.atan2(-L.imag, -L.real)


def _delay_margin(loop: OpenLoop, crossovers: list[float], angles: list[float]) -> float:
    if abs(loop.at_infinity) >= 1.0:
        return 0.0  # any dead time turns L at infinity through every angle
    return min((angle % (2.0 * math.pi) / w for w, angle in zip(crossovers, angles, strict=True)), default=math.inf)


def _return_difference(loop: OpenLoop, w: float) -> tuple[complex, complex]:
    L, rate = loop.at(w)
    return 1.0 + L, L * rate


def _inverse_return_difference(loop: OpenLoop, w: float) -> tuple[complex, complex]:
    L, rate = loop.at(w)
    return 1.0 + 1.0 / L, -rate / L


def _return_end(L: float) -> float:
    return abs(1.0 + L)


def _inverse_end(L: float) -> float:
    return math.inf if L == 0.0 else abs(1.0 + 1.0 / L)


def _ends(loop: OpenLoop, distance: Callable[[float], float]) -> list[tuple[float, float]]:
    """Return the distances at rest and at infinity, with those frequencies."""
    far = -abs(loop.at_infinity) if loop.dead_time_s > 0 else loop.at_infinity
    return [(distance(math.inf if loop.integrations else loop.at_rest), 0.0), (distance(far), math.inf)]


def _least(
    loop: OpenLoop,
    grid: Array,
    along: Complex,
    distance: Callable[[OpenLoop, float], tuple[complex, complex]],
    ends: list[tuple[float, float]],
) -> tuple[float, float]:
    """Return the least |distance| over all frequencies and where it is; candidates on the grid are polished."""

    def slope(w: float) -> float:
        value, rate = distance(loop, w)
        return value.real * rate.real + value.imag * rate.imag

    near, step = np.abs(along), np.abs(np.diff(along))
    dips = np.flatnonzero((near[1:-1] <= near[:-2]) & (near[1:-1] <= near[2:])) + 1
    bounds = near[dips] - np.maximum(step[dips - 1], step[dips])  # of chords; the curve is hardly longer
    found = list(ends)
    best = min(found)[0]
    for k in np.argsort(bounds):
        if bounds[k] > best:
            break
        i = int(dips[k])
        low, high = float(grid[i - 1]), float(grid[i + 1])
        at_low, at_high = slope(low), slope(high)
        w = root_between(slope, low, high, at_low, at_high) if at_low < 0 < at_high else float(grid[i])
        found.append((abs(distance(loop, w)[0]), w))
        best = min(best, found[-1][0])
    # a limit at rest or at infinity stands unless a finite frequency is nearer beyond rounding
    return min(found, key=lambda one: (round(one[0], 13), one[1]))


def _bandwidth(loop: OpenLoop, grid: Array, L: Complex) -> float:
    at_rest = 1.0 if loop.integrations else loop.at_rest / (1.0 + loop.at_rest)
    level = 0.5 * at_rest**2

    def above(w: float) -> float:
        value = loop.at(w)[0]
        return abs(value / (1.0 + value)) ** 2 - level

    below = np.flatnonzero(np.abs(L / (1.0 + L)) ** 2 < level)
    if below.size == 0:
        return math.inf
    first = int(below[0])
    low, high = float(grid[max(first - 1, 0)]), float(grid[first])
    return root_between(above, low, high, above(low), above(high)) if first else low
