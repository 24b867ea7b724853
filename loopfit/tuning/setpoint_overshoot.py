"""Overshoot of a setpoint step that the damping does not explain, and what removes it."""

from __future__ import annotations

import math
from dataclasses import replace

from loopfit.loop.gains import Gains
from loopfit.loop.loop import Loop
from loopfit.loop.plant import Plant
from loopfit.loop.visible import swing_of

_POINTS_MORE = 5.0  # % of overshoot beyond the target's
_REMOVED = 1.0  # % left by a setpoint weight that removes the overshoot
_BISECTIONS = 7


def setpoint_overshoot(plant: Plant, gains: Gains, damping_ratio: float, foreseen: float | None = None) -> str | None:
    """Say why a setpoint step overshoots by more than 5 points beyond the target's, and what removes that; else None.

    The plant and gains of a sampled loop are those of its continuous stand-in; `foreseen` is its overshoot, %, where a
    simulation has told it.
    """
    across = math.sqrt(1.0 - damping_ratio**2)
    wanted = 100.0 * math.exp(-math.pi * damping_ratio / across) if across > 0.0 else 0.0
    percent = overshoot_percent(plant, gains) if foreseen is None else foreseen
    if percent is None or not percent > wanted + _POINTS_MORE:
        return None
    said = f"A setpoint step overshoots by {percent:.0f} %, where the target damping alone would give {wanted:.0f} %. "
    swing = 100.0 * swing_of(plant, gains).visible_swing
    if swing > wanted + _POINTS_MORE:
        return f"{said}The loop itself swings: after a load it swings back by {swing:.0f} %."
    said += (
        "That comes from the zero of the setpoint path, not from poor damping: after a load the loop "
        f"{f'swings back by {swing:.0f} % only' if swing >= 0.5 else 'does not swing back'}. "
    )
    others = "A setpoint that is ramped instead of stepped, or a target for the overshoot (--overshoot)"
    weight = _weight_without(plant, gains, wanted + _REMOVED)
    if weight is None:
        return f"{said}{others} removes it."
    return f"{said}A setpoint weight of {weight:.2g} removes it, where the controller has one. {others} does so too."


def overshoot_percent(plant: Plant, gains: Gains) -> float | None:
    """Return the overshoot of the setpoint step of a continuous loop over its rest, %; None where it comes to no rest."""
    loop = Loop(plant, gains)
    final = loop.closed.static_gain
    if not swing_of(plant, gains).stable or final is None or final == 0.0:
        return None
    return max(0.0, 100.0 * (float((loop.respond(setpoint_step=1.0).measurement / final).max()) - 1.0))


def _weight_without(plant: Plant, gains: Gains, percent: float) -> float | None:
    """Return the largest setpoint weight whose overshoot is at most `percent`, rounded down to two digits."""

    def little(weight: float) -> bool:
        over = overshoot_percent(plant, replace(gains, setpoint_weight=weight))
        return over is not None and over <= percent

    if gains.ki == 0.0 or gains.kp == 0.0 or not little(0.0):
        return None
    low, high = 0.0, gains.setpoint_weight
    for _ in range(_BISECTIONS):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if little(middle) else (low, middle)
    return math.floor(100.0 * low) / 100.0
