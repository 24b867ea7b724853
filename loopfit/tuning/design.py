"""The settings of greatest load rejection within the limits, for one plant.

Objective: the integral gain, whose inverse is the integrated error after a load (Shinskey; Astrom & Hagglund, PID
Controllers, 1995, section 4.6, from memory); without integral action the proportional gain.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

from loopfit.core.arrays import Array
from loopfit.loop.gains import Gains
from loopfit.loop.plant import Plant
from loopfit.loop.visible import Swing
from loopfit.tuning.goal import Goal
from loopfit.tuning.search import Also, Search, slower
from loopfit.tuning.swing import swing_with

_BISECTIONS = 7
_LOWEST = 0.05
_NEARLY = 0.95


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Designed:
    """What a design found for one plant.

    `gains` None where no settings at all were found; `met`: the nominal plant meets the goal; `attainable_damping_ratio`:
    the target itself where met, else the best that was found; `obstacle`: what stands in the way, in words.
    """

    gains: Gains | None
    worth: float
    met: bool
    attainable_damping_ratio: float | None
    obstacle: str | None
    swing: Swing | None


def design(
    plant: Plant, goal: Goal, *, present: Gains | None = None, scan_s: float | None = None, late: bool = False,
    filter_s: float | None = None, coupled: bool = True, also: Also | None = None,
) -> Designed:  # fmt: skip
    """Return the settings of greatest load rejection within the limits.

    Parameters
    ----------
    plant : Plant
    goal : Goal
    present : Gains, optional
        Present settings; needed where only some may move.
    scan_s : float, optional
        Scan interval: designed with half of it as dead time and filter, checked by the exact sampled roots.
    late : bool
        Whether the output is written one scan later.
    filter_s : float, optional
        Of the derivative; chosen by default.
    coupled : bool
        Whether the gain multiplies the other terms (ideal and series form).
    also : callable, optional
        A further demand on the fitted plant.
    """
    search = Search(
        plant, goal, present=present, scan_s=scan_s, late=late, filter_s=filter_s, coupled=coupled, also=also
    )
    damping = goal.design_damping
    row = _polished_best(search, damping)
    if row is not None:
        return _designed(search, row, met=True)
    low, high = _LOWEST, damping
    kept = search.best(low)
    if kept is None and also is not None:  # not even at the least damping: what is to be had without the demand
        plain = design(plant, goal, present=present, scan_s=scan_s, late=late, filter_s=filter_s, coupled=coupled)
        return replace(plain, met=False, obstacle="the overshoot or settling time that was asked for")
    if kept is None:
        return Designed(gains=None, worth=0.0, met=False, attainable_damping_ratio=None, swing=None,
                        obstacle="no settings at all are within the limits and bounds given: allow more with --at-most, --at-least, --noise-gain or --max-sensitivity")  # fmt: skip
    for _ in range(_BISECTIONS):
        middle = 0.5 * (low + high)
        found = search.best(middle)
        low, high, kept = (middle, high, found) if found is not None else (low, middle, kept)
    more = search.best(_NEARLY * low)  # for a little less damping there is often much more load rejection
    designed = _designed(search, (more or kept)[0], met=False)
    return replace(designed, obstacle=_obstacle(search, damping))


def _polished_best(search: Search, damping: float) -> Array | None:
    found = search.best(damping)
    if found is None:
        return None
    return search.polished(found[0], lambda row: search.passes(row, damping) and search.meets_demands(row))


def _designed(search: Search, row: Array, *, met: bool) -> Designed:
    gains = search.gains_of(row)
    swing = swing_with(search.true_plant, gains, search.scan_s, late=search.late)
    met = met and search.goal.met_by(swing)
    return Designed(gains=gains, worth=search.worth(row), met=met, swing=swing, obstacle=None,
                    attainable_damping_ratio=search.goal.damping_ratio if met else swing.visible_damping)  # fmt: skip


def _obstacle(search: Search, damping: float) -> str:
    """Say what stands in the way of the target, by taking one limit away at a time."""
    goal, plant = search.goal, search.true_plant
    kwargs = {"present": search.present, "late": search.late, "coupled": search.coupled, "also": search.also}

    def reaches(other: Plant, changed: Goal, scan_s: float | None) -> bool:
        return Search(other, changed, scan_s=scan_s, **kwargs).best(damping) is not None  # type: ignore[arg-type]

    if goal.move is not None and reaches(plant, replace(goal, move=None), search.scan_s):
        return "the settings that may not move"
    if (goal.at_least or goal.at_most) and reaches(plant, replace(goal, at_least={}, at_most={}), search.scan_s):
        return "the bounds on the settings"
    if search.scan_s is not None and reaches(plant, goal, None):
        return "the scan interval: the controller acts too seldom"
    if goal.derivative and reaches(plant, replace(goal, noise_gain=10.0 * goal.noise_gain), search.scan_s):
        return "the limit of the noise gain"
    if reaches(plant, replace(goal, max_sensitivity=3.0), search.scan_s):
        return "the limit of the sensitivity"
    if not goal.derivative and reaches(plant, replace(goal, terms="PID"), search.scan_s):
        return f"a plant that swings under {goal.terms} control: a derivative would reach the target"
    if plant.dead_time_s > 0 and reaches(slower(plant, -plant.dead_time_s), goal, search.scan_s):
        return "the dead time of the plant"
    return "the plant itself: it swings by more than this controller can damp"
