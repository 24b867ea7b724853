"""What a design may turn: directions in the space of kp, ki and kd, and what stays as it is.

A controller is linear in its gains, so that any subset of settings, in any form, is a fixed part and a few directions.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from loopfit.core.arrays import Array
from loopfit.core.errors import UsageError
from loopfit.loop.gains import Gains
from loopfit.loop.plant import Plant
from loopfit.tuning.goal import Goal


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Knobs:
    """(kp, ki, kd) = fixed (3,) + x directions (m, 3), x >= 0; of the magnitudes, for a plant of positive gain."""

    fixed: Array
    directions: Array
    filter_s: float

    def gains(self, x: Array) -> Array:
        """Return (n, 3) gains at (n, m) positions."""
        return np.asarray(self.fixed + x @ self.directions)

    def action(self, p: np.ndarray) -> np.ndarray:
        """Return what kp, ki and kd do at p (...,): (..., 3)."""
        p = np.asarray(p, dtype=complex)
        return np.stack([np.ones_like(p), 1.0 / p, p / (1.0 + self.filter_s * p)], axis=-1)


def knobs_of(goal: Goal, plant: Plant, present: Gains | None, filter_s: float, *, coupled: bool = True) -> Knobs:
    """Return what a goal lets turn.

    Parameters
    ----------
    goal : Goal
    plant : Plant
        Its sign makes the gains magnitudes.
    present : Gains, optional
        Needed where only some settings may move.
    filter_s : float
        Of the derivative.
    coupled : bool
        Whether the gain multiplies the other terms (ideal and series form) or stands alone (parallel form).
    """
    wanted = {"gain"} | ({"integral"} if goal.integral else set()) | ({"derivative"} if goal.derivative else set())
    moving = wanted if goal.move is None else wanted & goal.move
    if not moving:
        raise UsageError("none of the settings that may move belongs to the controller's terms")
    sign = 1.0 if plant.gain > 0 else -1.0
    unit = np.eye(3)
    if moving == wanted:
        rows = [unit[0]] + [unit[1]] * goal.integral + [unit[2]] * goal.derivative
        return Knobs(fixed=np.zeros(3), directions=np.array(rows), filter_s=filter_s)
    if present is None:
        raise UsageError("to move only some settings, give the present ones")
    kp, ki, kd = (sign * value for value in (present.kp, present.ki, present.kd))
    if min(kp, ki, kd) < 0:
        raise UsageError("the present settings feed back positively: the sign of the gain does not go with the plant's")
    held = np.array([kp, ki if goal.integral else 0.0, kd if goal.derivative else 0.0])
    directions: list[Array] = []
    if "gain" in moving:
        first = unit[0].copy()
        if coupled and kp > 0:
            for name, at in (("integral", 1), ("derivative", 2)):
                if name not in moving:
                    first[at] = held[at] / kp
                    held[at] = 0.0
        held[0] = 0.0
        directions.append(first)
    for name, at in (("integral", 1), ("derivative", 2)):
        if name in moving:
            directions.append(unit[at])
            held[at] = 0.0
    return Knobs(fixed=held, directions=np.array(directions), filter_s=filter_s)
