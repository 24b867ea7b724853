"""Search for a way from settings to settings on which no stage is unstable, unproven or badly damped."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from loopfit.core.arrays import Array
from loopfit.core.errors import UsageError
from loopfit.loop.certificate import count_right_of
from loopfit.loop.gains import Gains
from loopfit.loop.plant import Plant
from loopfit.loop.roots import characteristic
from loopfit.loop.sampled import with_scan
from loopfit.loop.visible import Swing
from loopfit.tuning.stage_paths import Path, by_times, geometric, needed, straight
from loopfit.tuning.stage_proof import proven_between
from loopfit.tuning.swing import swing_on

DIP = 0.02  # in the design damping; less is not worth a sentence
_LEVELS = 5  # steps of the lattice in each gain


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Walk:
    """Settings from where a way begins to where it ends, their swings, and which moves between are proven stable."""

    points: tuple[Gains, ...]  # the first is where it begins
    swings: tuple[Swing | None, ...]
    proven: tuple[bool, ...]

    @property
    def dip(self) -> float:
        """How far the worst stage is below the worse end in design damping; 0 where none is."""
        ends = min(damping_of(self.swings[0]), damping_of(self.swings[-1]))
        return max(0.0, ends - min(damping_of(swing) for swing in self.swings))

    @property
    def rank(self) -> tuple[bool, bool, float]:
        """Stable, proven, not far below the ends: more is better."""
        stable = all(swing is not None and swing.stable for swing in self.swings)
        return stable, all(self.proven), -max(self.dip, DIP)

    @property
    def good(self) -> bool:
        """Whether nothing better can be found."""
        return self.rank == (True, True, -DIP)


class Ground:
    """The loop that stages are walked in."""

    def __init__(self, plant: Plant, scan_s: float | None, late: bool) -> None:
        self.plant, self.scan_s, self.late = plant, scan_s, late

    def swing(self, gains: Gains, plant: Plant | None = None) -> Swing | None:
        """Return the swing; None where the loop has no meaning."""
        return swing_on(self.plant if plant is None else plant, gains, self.scan_s, late=self.late)

    def stand_in(self, gains: Gains, plant: Plant | None = None) -> tuple[Plant, Gains]:
        """Return the continuous loop that stands in for a sampled one."""
        plant = self.plant if plant is None else plant
        return (plant, gains) if self.scan_s is None else with_scan(plant, gains, self.scan_s, late=self.late)

    def stable(self, gains: Gains, plant: Plant | None = None) -> bool:
        """Return whether no root lies on the right, by a count."""
        try:
            return count_right_of(characteristic(*self.stand_in(gains, plant)), 0.0) == 0
        except UsageError:
            return False

    def walk(self, points: Sequence[Gains]) -> Walk:
        """Return what is known of a way."""
        swings = tuple(self.swing(point) for point in points)
        proven = tuple(
            a is not None and b is not None and a.stable and b.stable
            and proven_between(self.plant, before, after, scan_s=self.scan_s, late=self.late, near=np.append(a.roots, b.roots))
            for before, after, a, b in zip(points, points[1:], swings, swings[1:], strict=False)
        )  # fmt: skip
        return Walk(points=tuple(points), swings=swings, proven=proven)


def damping_of(swing: Swing | None) -> float:
    """Return the design damping; -1 where the loop has no meaning."""
    return -1.0 if swing is None else swing.design_damping


def row_of(gains: Gains) -> Array:
    """Return kp, ki and kd."""
    return np.array([gains.kp, gains.ki, gains.kd])


def points_on(present: Gains, proposed: Gains, path: Path, shares: Array, *, filter_first: bool) -> list[Gains]:
    """Return the settings at shares (n, 3) of the way, the present ones before and the proposed ones at the end."""
    out = [present]
    for share in shares[:-1]:
        kp, ki, kd = path(row_of(present), row_of(proposed), share).tolist()
        new = present.kd == 0.0 or (filter_first and proposed.kd != 0.0)
        filter_s = (proposed if new else present).filter_s
        out.append(replace(present, kp=kp, ki=ki, kd=kd, filter_s=filter_s))
    return [*out, proposed]


def best_walk(ground: Ground, present: Gains, proposed: Gains, most: int) -> Walk:
    """Return the first good way of at most `most` stages, else the best found."""
    least = needed(row_of(present), row_of(proposed), most)
    both = present.kd != 0.0 and proposed.kd != 0.0 and present.filter_s != proposed.filter_s
    found: list[Walk] = []
    for count in dict.fromkeys((least, most)):
        shares = np.repeat(np.arange(1, count + 1)[:, None] / count, 3, axis=1)
        for path in (geometric, straight, by_times):
            for filter_first in (True, False) if both else (True,):
                walk = ground.walk(points_on(present, proposed, path, shares, filter_first=filter_first))
                if walk.good:
                    return walk
                found.append(walk)
    shares = _widest(ground, present, proposed, most)
    found.append(ground.walk(points_on(present, proposed, geometric, shares, filter_first=True)))
    return max(found, key=lambda walk: walk.rank)


def _widest(ground: Ground, present: Gains, proposed: Gains, count: int) -> Array:
    """Return the shares (count, 3) of the way through a lattice whose worst point is best damped."""
    a, b = row_of(present), row_of(proposed)
    if np.array_equal(a, b):
        return np.ones((1, 3))
    axes = [np.arange(_LEVELS + 1) if a[k] != b[k] else np.array([_LEVELS]) for k in range(3)]
    nodes = np.array([node.ravel() for node in np.meshgrid(*axes, indexing="ij")]).T
    shares = nodes / _LEVELS
    points = [
        points_on(present, proposed, geometric, np.array([share, share]), filter_first=True)[1] for share in shares
    ]
    # of equals the one that moves all gains alike
    worth = np.array([damping_of(ground.swing(point)) for point in points]) - 1e-3 * np.ptp(shares[:, a != b], axis=1)
    step = nodes[None, :, :] - nodes[:, None, :]
    allowed = ((step >= 0) & (step <= math.ceil(_LEVELS / count) + 1)).all(axis=2)
    reach = np.full(len(nodes), -math.inf)
    reach[0] = math.inf  # the lattice begins at the present settings
    came: list[Array] = []
    for _ in range(count):
        through = np.where(allowed, reach[:, None], -math.inf)
        came.append(through.argmax(axis=0))
        reach = np.minimum(through.max(axis=0), worth)
    at, way = len(nodes) - 1, []
    for back in reversed(came):
        way.append(at)
        at = int(back[at])
    kept = [one for k, one in enumerate(way) if k + 1 == len(way) or one != way[k + 1]]
    return np.asarray(shares[kept[::-1]])
