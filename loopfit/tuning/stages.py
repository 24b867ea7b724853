"""The way from the present settings to the proposed ones, in a few stages that a person can watch."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from loopfit.core.errors import UsageError
from loopfit.loop.gains import Gains
from loopfit.loop.margins import margins_of
from loopfit.loop.plant import Plant
from loopfit.loop.visible import Swing
from loopfit.tuning.stage_paths import geometric
from loopfit.tuning.stage_walk import DIP, Ground, Walk, best_walk, damping_of, points_on, row_of

FIRST = "Write down the present settings before anything is changed, so that they can be put back."

_MOST = 5
_TRIED = 20  # draws whose swing says when to stop
_HELD_BACK = (
    0.5  # visible damping that a first stage away from an unstable loop is to have, where the proposal has more
)
_MORE_SWING, _MOST_SWING = 0.1, 0.8  # a person sees 0.1 of the peak; above 0.8 swings hardly die


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Stage:
    """Settings on the way, and what is known about them.

    `proven`: stable, and no straight move from the stage before to it meets the limit of stability. `any_order`: every
    mixture of the old and new gain, integral time and derivative time is stable as well. `in_manual`: what is in the
    controller before is unstable or unknown, so that these are entered with the loop in manual. `moves`: what changes.
    `probability_stable`: share of the draws that are stable; None without draws. `stop_swing`: swing back over the peak
    from which on the model is not to be trusted. `restore`: what goes back in then; None: the loop stays in manual.
    """

    gains: Gains
    swing: Swing
    max_sensitivity: float | None
    proven: bool
    any_order: bool
    in_manual: bool
    moves: tuple[str, ...]
    probability_stable: float | None
    stop_swing: float
    restore: Gains | None

    @property
    def expect(self) -> str:
        """The swing to expect, in words."""
        if self.swing.visible_swing < 0.005:
            return "expect no swing back after a load"
        return (
            f"expect a swing back of about {100 * self.swing.visible_swing:.0f} % of the first departure after a load"
        )

    @property
    def stop(self) -> str:
        """When to stop and what to do then, in words."""
        back = "leave the loop in manual" if self.restore is None else "go to manual and put the earlier settings back"
        return f"stop if the swing back is above {100 * self.stop_swing:.0f} % or swings grow; {back}"


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Staged:
    """The stages, the last with the proposed settings; `dips`: which is worse damped than both ends, and by how much.

    `reason`: why there are none, or what a person must know before the first.
    """

    stages: tuple[Stage, ...]
    dips: str | None = None
    reason: str | None = None


def stages(
    plant: Plant, present: Gains | None, proposed: Gains, *, scan_s: float | None = None, late: bool = False,
    draws: Sequence[Plant] = (),
) -> Staged:  # fmt: skip
    """Return the stages from the present to the proposed settings.

    As many as are needed so that none changes a gain or time more than twofold, at most five. Paths, the first without
    a dip and with every move proven: geometric in kp, ki and kd (a term that appears or goes: in equal parts); straight;
    straight in gain, integral and derivative time; last the way through a lattice whose worst point is best damped. A
    filter that differs changes in the first or the last stage, whichever is better damped; the setpoint weight, which
    no damping depends on, in the last.

    Parameters
    ----------
    plant : Plant
    present : Gains or None
        None: unknown. A start with less of everything is then given if it is as well damped as the proposal.
    proposed : Gains
    scan_s, late : float, bool
        Scan interval, s, and whether the output is written one scan later. Swings are then those of the sampled loop,
        proofs and sensitivities those of the continuous loop that stands in for it.
    draws : sequence of Plant
        Plants that the record allows, for `probability_stable` and `stop_swing`.

    Raises
    ------
    UsageError
        If the proposed settings do not hold the loop.
    """
    ground = Ground(plant, scan_s, late)
    last = ground.swing(proposed)
    if last is None or not last.stable:
        raise UsageError("the proposed settings do not hold this loop: there is no way to them")
    if present is None:
        return _from_nothing(ground, proposed, draws, "the present settings are not known")
    if present == proposed:
        return Staged(stages=(), reason="the present settings are the proposed ones")
    if any(a * b < 0.0 for a, b in zip(row_of(present), row_of(proposed), strict=True)):
        said = "a present gain has the sign opposite to the proposed one, so there is no gradual way"
        return _from_nothing(ground, proposed, draws, said)
    first = ground.swing(present)
    if first is None or not first.stable:
        return _from_unstable(ground, present, proposed, draws)
    walk = best_walk(ground, present, proposed, _MOST)
    return Staged(stages=_made(ground, walk, draws), dips=_dips(walk))


def _dips(walk: Walk) -> str | None:
    if not walk.dip > DIP:
        return None
    worst = min(range(len(walk.swings)), key=lambda k: damping_of(walk.swings[k]))
    swing = walk.swings[worst]
    name = f"stage {worst} of {len(walk.points) - 1}"
    if swing is None or not swing.stable:
        return f"{name} is not stable: enter the proposed settings in manual instead"
    ends = damping_of(swing) + walk.dip
    return (
        f"{name} is worse damped than both ends: damping ratio {damping_of(swing):.2f} against {ends:.2f} at the worse "
        f"end, {walk.dip:.2f} less, with a swing back of {100 * swing.visible_swing:.0f} %"
    )


def _from_unstable(ground: Ground, present: Gains, proposed: Gains, draws: Sequence[Plant]) -> Staged:
    """Return stages whose first leaves an unstable loop, in manual, for the nearest settings that hold it."""
    goal = ground.swing(proposed)
    enough = min(_HELD_BACK, goal.visible_damping - DIP) if goal is not None else 0.0
    start = proposed
    for share in np.arange(1, 20) / 20.0:
        point = points_on(present, proposed, geometric, np.full((2, 3), share), filter_first=True)[1]
        swing = ground.swing(point)
        calm = swing is not None and swing.stable and swing.visible_damping >= enough
        if calm and all(ground.stable(point, plant) for plant in draws[:_TRIED]):
            start = point
            break
    rest = Walk(points=(proposed,), swings=(goal,), proven=())
    if start != proposed:
        rest = best_walk(ground, start, proposed, _MOST - 1)
    held = _stage(ground, present, start, rest.swings[0], draws, proven=False, in_manual=True)
    return Staged(
        stages=(held, *_made(ground, rest, draws)),
        dips=_dips(rest),
        reason="with this plant the present settings do not hold the loop: it is unstable. Put it in manual, bring it to "
        "rest by hand, and enter the first stage before it goes back to automatic",
    )


def _from_nothing(ground: Ground, proposed: Gains, draws: Sequence[Plant], said: str) -> Staged:
    """Return a gentle start and the proposal, both in manual, where no present settings can be moved from."""
    goal = ground.swing(proposed)
    for gain, integral in ((0.5, 0.5), (0.5, 0.25), (1.0, 0.5)):
        start = replace(proposed, kp=gain * proposed.kp, ki=integral * proposed.ki, kd=gain * proposed.kd)
        walk = ground.walk([start, proposed])
        if start == proposed or not walk.good or damping_of(walk.swings[0]) < damping_of(goal) - DIP:
            continue
        held = _stage(ground, None, start, walk.swings[0], draws, proven=False, in_manual=True)
        if held.probability_stable is None or held.probability_stable == 1.0:
            reason = f"{said}: the first stage is a gentler start, entered in manual with the loop at rest"
            return Staged(stages=(held, *_made(ground, walk, draws)), reason=reason)
    return Staged(stages=(), reason=f"{said}, and no gentler start is as well damped as the proposal")


def _made(ground: Ground, walk: Walk, draws: Sequence[Plant]) -> tuple[Stage, ...]:
    rows = zip(walk.points, walk.points[1:], walk.swings[1:], walk.proven, strict=False)
    return tuple(_stage(ground, a, b, swing, draws, proven=proven) for a, b, swing, proven in rows)


def _stage(
    ground: Ground, before: Gains | None, gains: Gains, swing: Swing | None, draws: Sequence[Plant], *, proven: bool,
    in_manual: bool = False,
) -> Stage:  # fmt: skip
    if swing is None:
        raise UsageError("a stage on the way has no meaning as a loop")
    tried = [other.visible_swing for plant in draws[:_TRIED] if (other := ground.swing(gains, plant)) is not None]
    stop = max([swing.visible_swing + _MORE_SWING, *tried])
    stable = [ground.stable(gains, plant) for plant in draws]
    return Stage(
        gains=gains,
        swing=swing,
        max_sensitivity=margins_of(*ground.stand_in(gains)).max_sensitivity,
        proven=proven,
        any_order=before is not None and not in_manual and _any_order(ground, before, gains),
        in_manual=in_manual,
        moves=_moves(before, gains),
        probability_stable=sum(stable) / len(stable) if stable else None,
        stop_swing=min(stop, max(_MOST_SWING, swing.visible_swing)),
        restore=None if in_manual else before,
    )


def _any_order(ground: Ground, before: Gains, after: Gains) -> bool:
    """Tell whether every mixture of the gain, integral time and derivative time of two settings is stable."""
    if before.kp == 0.0 or after.kp == 0.0:
        return False
    pairs = [
        (before.kp, after.kp),
        *((x / before.kp, y / after.kp) for x, y in ((before.ki, after.ki), (before.kd, after.kd))),
    ]
    filters = [gains.filter_s for gains in (before, after) if gains.kd != 0.0] or [0.0]
    return all(
        ground.stable(Gains(kp=pairs[0][i], ki=pairs[0][i] * pairs[1][j], kd=pairs[0][i] * pairs[2][k], filter_s=filter_s))
        for i, j, k in np.ndindex(2, 2, 2) for filter_s in dict.fromkeys(filters)
    )  # fmt: skip


def _moves(before: Gains | None, after: Gains) -> tuple[str, ...]:
    """Return what changes, in words of the ideal form."""
    if before is None:
        return ("all settings",)

    def times(gains: Gains) -> tuple[float, float]:
        whole = gains.kp or 1.0
        return gains.ki / whole, gains.kd / whole

    (i1, d1), (i2, d2) = times(before), times(after)
    named = {
        "gain": (before.kp, after.kp),
        "integral": (i1, i2),
        "derivative": (d1, d2),
        "derivative filter": (before.filter_s if before.kd else 0.0, after.filter_s if after.kd else 0.0),
        "setpoint weight": (before.setpoint_weight, after.setpoint_weight),
        "derivative on": (float(before.derivative_on_error), float(after.derivative_on_error)),
    }
    return tuple(name for name, (x, y) in named.items() if abs(x - y) > 1e-9 * (abs(x) + abs(y)))
