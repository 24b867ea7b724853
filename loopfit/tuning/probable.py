"""Settings that meet the goal on the plants that the record allows, not on the fitted one alone.

A nominal critical design meets its target with even odds: the optimum sits on an edge. So the family is tried on draws
of the plant, and the probability that is stated comes from fresh draws, since the first of many to pass is optimistic.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from loopfit.core.arrays import Array
from loopfit.identify.protections import HELD_BACK
from loopfit.loop.gains import Gains
from loopfit.loop.plant import Plant
from loopfit.tuning.design import Designed, design
from loopfit.tuning.goal import Goal
from loopfit.tuning.search import Also, Search
from loopfit.tuning.swing import swing_on

_BEYOND = 0.4  # of the share that may fail, demanded of the draws: 94 % for 90 %
_APART = 0.985  # worth of the next setting that is tried
_ROUNDS = 3
_AS_GOOD = 0.95
_MARGIN = 0.03
_LESS = (0.99, 0.95, 0.9, 0.8, 0.65, 0.5)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Probable:
    """A design with the probability that the true loop meets the goal, from fresh draws; None without draws."""

    designed: Designed
    nominal: Designed
    probability: float | None


class Draws:
    """Plants that the record allows, the hardest first."""

    def __init__(self, plants: Sequence[Plant], scan_s: float | None, *, late: bool, also: Also | None = None) -> None:
        self.also = also
        self.plants = list(plants)
        self.failures = np.zeros(len(self.plants))
        self.scan_s, self.late = scan_s, late

    def share(self, gains: Gains, goal: Goal, *, least: float = 0.0) -> float:
        """Return the share of the plants on which the settings meet the goal; 0 as soon as it must be below `least`."""
        allowed = math.floor(len(self.plants) * (1.0 - least) + 1e-9)
        failed = 0
        passed: list[Plant] = []
        for i in np.argsort(-self.failures, kind="stable"):
            swing = swing_on(self.plants[i], gains, self.scan_s, late=self.late)
            if swing is None or not goal.met_by(swing):
                failed += 1
                self.failures[i] += 1
                if failed > allowed:
                    return 0.0
            else:
                passed.append(self.plants[i])
        if self.also is not None and passed:
            failed += int((~self.also(passed, gains)).sum())
            if failed > allowed:
                return 0.0
        return 1.0 - failed / len(self.plants)


def probable(
    plant: Plant, goal: Goal, draws: Sequence[Plant], fresh: Sequence[Plant], *, present: Gains | None = None,
    scan_s: float | None = None, late: bool = False, coupled: bool = True, also: Also | None = None,
    disc: bool = False, plainer: bool = False,
) -> Probable:  # fmt: skip
    """Return the settings of greatest load rejection that meet the goal with the probability asked for.

    Parameters
    ----------
    plant : Plant
        The fitted one.
    goal : Goal
        Its `confidence` None: the nominal design.
    draws, fresh : sequences of Plant
        Two independent sets; none: the nominal design.
    disc : bool
        Whether the goal's disc is to be used; else it is weighed against a lower sensitivity limit.
    plainer : bool
        Whether a derivative is to be kept even where it does nothing.
    """
    if goal.terms == "PID" and goal.move is None and not plainer:
        whole = probable(plant, goal, draws, fresh, present=present, scan_s=scan_s, late=late, coupled=coupled, also=also,
                         disc=disc, plainer=True)  # fmt: skip
        made = whole.designed.gains
        idle = made is None or made.kp == 0.0 or abs(made.kd / made.kp) < made.filter_s
        if whole.designed.met and not idle:
            return whole
        # a derivative shorter than its own filter does nothing, and the larger search can miss what the smaller finds
        bare = probable(plant, replace(goal, terms="PI"), draws, fresh, present=present, scan_s=scan_s, late=late,
                        coupled=coupled, also=also, disc=disc)  # fmt: skip
        as_good = (bare.designed.met, bare.designed.worth) >= (whole.designed.met, _AS_GOOD * whole.designed.worth)
        return bare if as_good else whole
    if goal.disc is not None and not disc:
        # two protections against what the record did not excite: the disc, or a lower sensitivity; whichever costs less
        by_disc = probable(plant, goal, draws, fresh, present=present, scan_s=scan_s, late=late, coupled=coupled, also=also,
                           disc=True, plainer=plainer)  # fmt: skip
        calmer = replace(goal, disc=None, max_sensitivity=min(goal.max_sensitivity, HELD_BACK))
        held_back = probable(
            plant,
            calmer,
            draws,
            fresh,
            present=present,
            scan_s=scan_s,
            late=late,
            coupled=coupled,
            also=also,
            plainer=plainer,
        )
        return max(by_disc, held_back, key=lambda one: (one.designed.met, one.designed.worth))
    kwargs: dict[str, object] = {"present": present, "scan_s": scan_s, "late": late, "coupled": coupled, "also": also}
    nominal = design(plant, goal, **kwargs)  # type: ignore[arg-type]
    if not draws or not fresh:
        return Probable(designed=nominal, nominal=nominal, probability=None)
    probe = Draws(fresh, scan_s, late=late, also=also)
    if goal.confidence is None:
        share = None if nominal.gains is None else probe.share(nominal.gains, goal)
        return Probable(designed=nominal, nominal=nominal, probability=share)
    found = _certain(plant, goal, draws, probe, kwargs)
    if found is not None:
        return Probable(designed=found[0], nominal=nominal, probability=found[1])
    if nominal.met:  # the target is there, but not with that probability: with which?
        for confidence in _LESS:
            if confidence >= goal.confidence:
                continue
            found = _certain(plant, replace(goal, confidence=confidence), draws, probe, kwargs)
            if found is not None:
                obstacle = "the uncertainty of the plant: another record, or a larger step, would narrow it"
                designed = replace(found[0], met=False, obstacle=obstacle)
                return Probable(designed=designed, nominal=nominal, probability=found[1])
    share = None if nominal.gains is None else probe.share(nominal.gains, goal)
    # short of the design's own measure of damping, but what was promised holds as often as was asked
    holds = share is not None and share >= goal.confidence
    designed = replace(nominal, met=holds, obstacle=None if holds else nominal.obstacle)
    return Probable(designed=designed, nominal=nominal, probability=share)


def _certain(
    plant: Plant, goal: Goal, draws: Sequence[Plant], probe: Draws, kwargs: dict[str, object]
) -> tuple[Designed, float] | None:
    """Return the first settings, by worth, that meet the goal on enough draws, with their share of the fresh ones."""
    assert goal.confidence is not None
    search = Search(plant, goal, **kwargs)  # type: ignore[arg-type]
    tried = Draws(draws, search.scan_s, late=search.late, also=search.also)
    demanded = 1.0 - _BEYOND * (1.0 - goal.confidence) - 0.02 * (1.0 - goal.confidence) / 0.1
    for _ in range(_ROUNDS):
        row = _first_on_draws(search, replace(goal, margin=_MARGIN), tried, demanded)
        if row is None:
            return None
        gains = search.gains_of(row)
        share = probe.share(gains, goal)
        swing = swing_on(plant, gains, search.scan_s, late=search.late)
        if share >= goal.confidence:
            designed = Designed(gains=gains, worth=search.worth(row), met=True, swing=swing, obstacle=None,
                                attainable_damping_ratio=goal.damping_ratio)  # fmt: skip
            return designed, share
        demanded = min(0.5 * (1.0 + demanded), 1.0)
    return None


def _first_on_draws(search: Search, goal: Goal, tried: Draws, demanded: float) -> Array | None:
    last = math.inf

    def accept(row: Array) -> bool:
        nonlocal last
        worth = search.worth(row)
        if worth > _APART * last:
            return False
        last = worth
        swing = search.swing(row)
        if swing is None or not goal.met_by(swing):
            return False
        return tried.share(search.gains_of(row), goal, least=demanded) >= demanded

    found = search.best(goal.design_damping, accept)
    return None if found is None else found[0]
