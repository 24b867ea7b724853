"""Lost motion and sticking of the final element: seen in what a linear model leaves, named, and the test that shows it."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import ArrayLike

from loopfit.core.arrays import Array
from loopfit.identify.held_course import fitted, lags_and_pair
from loopfit.loop.plant import Plant
from loopfit.model.transfer import Transfer, transfer_of
from loopfit.step.noise import noise_rms, resolution

MOST_STRUCTURE = 0.03  # of the measurement's range: more is no linear plant
_HINT = 0.006  # the same, from which they are tried
_LOOKED_AT = 0.01  # the same, from which a small part that such an element explains is enough
_EXPLAINED, _PARTLY = 0.75, 0.9  # rms with such an element over without; of linear records never under 0.95
_NOISE_AGAIN = 4.0  # times the noise: what a deadband leaves once it is modelled; sticking leaves more
_FAR_BETTER = 0.5  # times what sticking leaves: lost motion for sure
_FARTHEST = 3.0  # natural logarithm of what width, lags and dead time may change by
_MOST_OVER_NOISE = 10.0
_WIDTHS = np.concatenate((np.geomspace(0.01, 0.1, 6), np.linspace(0.13, 0.9, 14)))  # of the output's range
_JUMPS = (0.0, 0.5, 1.0)  # lost motion, and two that stick
_STARTS = 1  # widths that are polished for each
_ROUNDS = 4
_TIMES_WIDTH = 3.0  # smallest step of the staircase in widths of the lost motion

Cause = Literal["deadband", "sticking", "not linear"]


@dataclass(frozen=True, slots=True, kw_only=True)
class LostMotion:
    """What is left of a linear model, and what explains it.

    `structure`: what is left beyond noise, of the measurement's range; `over_noise`: rms left over that of the noise;
    `ratio`: rms left with lost motion or sticking of `width` (output units, full width) over that without; `cause` and
    `text` None where a linear model will do.
    """

    structure: float
    over_noise: float
    width: float
    ratio: float
    cause: Cause | None
    text: str | None

    @property
    def refused(self) -> bool:
        """Whether no settings may be proposed from the record."""
        return self.cause is not None


def lost_motion_of(
    time: ArrayLike, output: ArrayLike, measurement: ArrayLike, plain: Plant, residual: ArrayLike
) -> LostMotion:
    """Return what the residual of a linear model says of lost motion and sticking.

    Parameters
    ----------
    time, output, measurement : (n,) float
        Even in time, s.
    plain : Plant
        The best linear model of the same record.
    residual : (n,) float
        What it leaves of the measurement.

    Notes
    -----
    The noise is that of second differences of the measurement, and at least that of its rounding. Refused: structure
    above 3 % of the range; above 1 % where lost motion or sticking brings the rms under 0.9 of itself, or where the rms
    is over 10 times the noise; above 0.6 % where it brings the rms under 0.75. The best of the elements names the
    cause: lost motion where it leaves little more than noise or far less than sticking does, else sticking. A single
    open step is blind to both (the element moves one way only): ask for `staircase_test`.
    """
    t, u, y, left = (np.asarray(column, dtype=np.float64) for column in (time, output, measurement, residual))
    span = float(np.ptp(y))
    rms = math.sqrt(float(np.mean(left**2)))
    noise = max(noise_rms(y), resolution(y) / math.sqrt(12.0))
    structure = math.sqrt(max(rms**2 - noise**2, 0.0)) / span if span > 0.0 else 0.0
    over = rms / noise if noise > 0.0 else math.inf if rms > 0.0 else 0.0
    width, ratio, lost = 0.0, 1.0, False
    if structure > _HINT:
        play, *sticks = (_best(jump, plain, t, u, y) for jump in _JUMPS)
        stick = min(sticks)
        left_rms, width = min(play, stick)
        ratio = left_rms / rms
        lost = play <= stick and (left_rms < _NOISE_AGAIN * noise or left_rms < _FAR_BETTER * stick[0])
    explained = ratio < (_PARTLY if structure > _LOOKED_AT else _EXPLAINED)
    if not (explained or structure > MOST_STRUCTURE or (over > _MOST_OVER_NOISE and structure > _LOOKED_AT)):
        return LostMotion(structure=structure, over_noise=over, width=width, ratio=ratio, cause=None, text=None)
    cause: Cause = "not linear" if not explained else "deadband" if lost else "sticking"
    text = f"{_WHY[cause].format(structure=100.0 * structure, width=width)}; {staircase_test(plain, u, width)}"
    return LostMotion(structure=structure, over_noise=over, width=width, ratio=ratio, cause=cause, text=text)


_WHY: dict[Cause, str] = {
    "deadband": (
        "no settings are proposed: the final element has lost motion of about {width:.2g} output units (what a linear model "
        "leaves is {structure:.2g} % of the range, and lost motion explains it); no setting of the controller cures that"
    ),
    "sticking": (
        "no settings are proposed: the final element sticks and jumps (what a linear model leaves is {structure:.2g} % of the "
        "range, and sticking explains it); no setting of the controller cures that"
    ),
    "not linear": (
        "no settings are proposed: no linear model fits the record (what is left is {structure:.2g} % of the range); friction, "
        "sticking, or something else that acted during the record"
    ),
}


def staircase_test(plain: Plant, output: ArrayLike, width: float) -> str:
    """Return the words that ask for a test which shows lost motion: +a, +2a, +a, 0 in manual.

    The step a is a quarter of the output's range in the record and at least three times the width seen; each is held for
    the dead time and four times the sum of the lags (98 % of the way for one lag).
    """
    u = np.asarray(output, dtype=np.float64)
    step = max(0.25 * float(np.ptp(u)), _TIMES_WIDTH * width)
    hold = holding_time_s(plain)
    return (
        f"put it in manual and record a staircase of the output: +{step:.2g}, +{2.0 * step:.2g}, +{step:.2g}, 0 from where it "
        f"is, each held for {hold:.2g} s; the two answers at +{step:.2g} lie apart by what the element loses"
    )


def holding_time_s(plain: Plant) -> float:
    """Return how long each step of the test is held, s: dead time and four times the sum of the lags.

    For an oscillating pair four over the damping ratio and frequency, the time to come to rest within 2 %.
    """
    falling = [pole for pole in plain.transfer.poles if pole.real < 0.0 and pole.imag >= 0.0]
    return plain.dead_time_s + 4.0 * sum(-1.0 / float(pole.real) for pole in falling)


def element_course(output: Array, width: float, jump: float) -> Array:
    """Return where an element stands row by row that rests until pushed by half the width, starting in the middle.

    `jump`: the share of half the width that it jumps by when it gives way; 0 is lost motion, 1 a valve that sticks and
    then goes all the way.
    """
    half, lags = 0.5 * width, 0.5 * width * (1.0 - jump)
    position = float(output[0])
    out = np.empty(len(output))
    for k, value in enumerate(output.tolist()):
        if value - position > half:
            position = value - lags
        elif position - value > half:
            position = value + lags
        out[k] = position
    return out


def _best(jump: float, plain: Plant, time: Array, output: Array, measurement: Array) -> tuple[float, float]:
    """Least rms with that element before the plant, and its width, output units; the plant is fitted anew."""
    span = float(np.ptp(output))
    tried = []
    for share in _WIDTHS:
        moved = element_course(output, share * span, jump)
        if float(np.ptp(moved)) > 0.0:
            tried.append((fitted(plain.transfer, time, moved, measurement).rms, float(share * span)))
    tried.sort()
    return min(tried[0], *(_polished(jump, plain, time, output, measurement, width) for _, width in tried[:_STARTS]))


def _polished(
    jump: float, plain: Plant, time: Array, output: Array, measurement: Array, width: float
) -> tuple[float, float]:
    """Width, poles and dead time together: the element bent those of the linear model."""
    from scipy.optimize import minimize

    every = float(np.median(np.diff(time)))
    transfer = plain.transfer
    poles = [pole for pole in transfer.poles if pole != 0.0]
    two = len(poles) == 2 and len(transfer.numerator) == 1
    product, total = float(np.prod(np.abs(poles))), -float(np.sum(np.real(poles)))
    dead_time = max(transfer.dead_time_s, 0.1 * every)

    def changed(p: Array) -> Transfer:
        later = dead_time * math.exp(float(p[1]))
        if not two:
            return _stretched(transfer, math.exp(float(p[2])), later)
        roots = np.roots([1.0, total * math.exp(float(p[3])), product * math.exp(-2.0 * float(p[2]))])
        return lags_and_pair((*(complex(root) for root in roots), *((0.0,) if plain.integrating else ())), later)

    def left(p: Array) -> float:
        moved = element_course(output, width * math.exp(float(p[0])), jump)
        if not (float(np.ptp(moved)) > 0.0 and float(np.abs(p).max()) < _FARTHEST):
            return float(np.ptp(measurement))
        return fitted(changed(p), time, moved, measurement).rms

    order = 4 if two else 3
    simplex = np.vstack((np.zeros(order), np.diag([0.25, 0.7, -0.4, 0.4][:order])))
    at, rms = np.zeros(order), math.inf
    for _ in range(_ROUNDS):  # a simplex that has shrunk too early is spread again
        found = minimize(left, at, method="Nelder-Mead", options={"maxfev": 160, "initial_simplex": at + simplex})
        at, gained, rms = found.x, rms - float(found.fun), float(found.fun)
        if gained < 0.05 * rms:
            break
    return rms, width * math.exp(float(at[0]))


def _stretched(transfer: Transfer, by: float, dead_time_s: float) -> Transfer:
    """The same shape, `by` times as slow."""

    def slower(coefficients: tuple[float, ...]) -> list[float]:
        last = len(coefficients) - 1
        return [value * by ** (last - k) for k, value in enumerate(coefficients)]

    return transfer_of(slower(transfer.numerator), slower(transfer.denominator), dead_time_s)
