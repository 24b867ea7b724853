"""The search for settings: the family of placed poles, screened, checked exactly, and polished, for one plant."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from loopfit.core.arrays import Array
from loopfit.core.errors import UsageError
from loopfit.loop.gains import Gains
from loopfit.loop.plant import Plant
from loopfit.loop.visible import Swing, damping_of, swing_of
from loopfit.tuning import family
from loopfit.tuning.family import Candidates
from loopfit.tuning.goal import Goal
from loopfit.tuning.knobs import Knobs, knobs_of
from loopfit.tuning.screen import noise_scale, peak_sensitivity, screened, stable_of

_FILTER_SHARE = 0.03
_CHECKS = 150  # exact checks of one sweep at most
_BATCH = 400
_GRID = (240, 44, 20)  # points a knob, for one, two and three knobs
_ZOOMS = 3
_UNSEEN, _FULL = 0.02, 0.1
_POLISH = (0.05, 0.02, 0.007, 0.002)
_SENSITIVITY_SLACK = 1.0005

# a further demand, on each of some plants: overshoot, settling time
Also = Callable[[Sequence[Plant], Gains], NDArray[np.bool_]]


class Search:
    """A design's plant, knobs and checks: with a scan interval, those of the continuous stand-in."""

    def __init__(
        self, plant: Plant, goal: Goal, *, present: Gains | None = None, scan_s: float | None = None, late: bool = False,
        filter_s: float | None = None, coupled: bool = True, also: Also | None = None,
    ) -> None:  # fmt: skip
        half = 0.0 if scan_s is None else 0.5 * scan_s + (scan_s if late else 0.0)
        self.true_plant, self.goal, self.scan_s, self.late = plant, goal, scan_s, late
        self.plant = slower(plant, half)
        _check_pace(self.plant, goal)
        self.own_filter = 0.0
        if goal.derivative:
            self.own_filter = filter_s if filter_s else _FILTER_SHARE * (plant.dead_time_s + family.fast_lag(plant))
            if scan_s is not None and not filter_s:
                self.own_filter = max(self.own_filter, scan_s)
        self.filter_s = self.own_filter + (0.5 * scan_s if scan_s is not None and goal.derivative else 0.0)
        self.present = present
        self.coupled, self.also = coupled, also
        self.weight = 1.0 if present is None else present.setpoint_weight
        self.on_error = False if present is None else present.derivative_on_error
        self.knobs: Knobs = knobs_of(goal, plant, present, self.filter_s, coupled=coupled)
        self.sign = 1.0 if plant.gain > 0 else -1.0

    def gains_of(self, row: Array, *, stand_in: bool = False) -> Gains:
        """Return settings (3,) of magnitudes as gains of the plant's sign."""
        kp, ki, kd = (self.sign * float(value) for value in row)
        filter_s = (self.filter_s if stand_in else self.own_filter) if kd else 0.0
        return Gains(
            kp=kp, ki=ki, kd=kd, filter_s=filter_s, setpoint_weight=self.weight, derivative_on_error=self.on_error
        )

    def worth(self, row: Array) -> float:
        """Return the objective of settings (3,)."""
        return float(row[1] if self.goal.integral else row[0])

    def candidates(self, damping: float) -> Candidates:
        """Return the family for one damping ratio."""
        kd_most = self.goal.noise_gain * self.filter_s / noise_scale(self.plant) if self.goal.derivative else 0.0
        if self.knobs.directions.shape[0] == 1:
            return family.swept(self.knobs, self._most(kd_most))
        return family.placed(self.plant, self.knobs, damping, kd_most)

    def _most(self, kd_most: float) -> float:
        direction = self.knobs.directions[0]
        kp_most = self.goal.noise_gain / noise_scale(self.plant)
        if direction[0] > 0:
            return kp_most / float(direction[0])
        return kp_most / max(family.pace_of(self.plant), 1e-9) * 10.0 if direction[1] > 0 else kd_most

    def passes(self, row: Array, damping: float) -> bool:
        """Tell whether settings meet the design damping and the exact sensitivity limit."""
        swing = self.swing(row)
        if swing is None or not swing.stable or counted_damping(swing) < damping:
            return False
        return peak_sensitivity(self.plant, self.knobs, row) <= self.goal.max_sensitivity * _SENSITIVITY_SLACK

    def swing(self, row: Array) -> Swing | None:
        """Return the swing of the stand-in loop; None where the loop has no meaning."""
        try:
            return swing_of(self.plant, self.gains_of(row, stand_in=True))
        except UsageError:
            return None

    def meets_demands(self, row: Array) -> bool:
        """Tell whether the true plant meets what is demanded besides the damping."""
        return self.also is None or bool(self.also([self.true_plant], self.gains_of(row))[0])

    def best(self, damping: float, accept: Callable[[Array], bool] | None = None) -> tuple[Array, Array] | None:
        """Return the settings (3,) of most worth in the family that pass, and how they were made; None without any."""
        wanted = accept or (lambda row: self.passes(row, damping))

        def accept_all(row: Array) -> bool:
            return wanted(row) and self.meets_demands(row)

        found = self._first(self.candidates(max(damping, 0.02)), accept_all)
        if found is None:
            found = self._first(self._plain_grid(), accept_all)
            if found is not None:
                return self.polished(found[0], accept_all), found[1]
        if found is None or self.knobs.directions.shape[0] == 1:
            return found
        for zoom in range(_ZOOMS):
            finer = self._first(self._around(found[1], 0.25 / 3**zoom), accept_all, least=self.worth(found[0]))
            found = found if finer is None else finer
        return found

    def _first(
        self, family_of: Candidates, accept: Callable[[Array], bool], least: float = 0.0
    ) -> tuple[Array, Array] | None:
        order = screened(self.plant, self.goal, self.knobs, family_of.gains)
        checked = 0
        for begin in range(0, order.size, _BATCH):
            some = order[begin : begin + _BATCH]
            if self.worth(family_of.gains[some[0]]) <= least * (1.0 + 1e-6):
                return None
            for i in some[stable_of(self.plant, self.goal, family_of.gains[some], self.filter_s)]:
                row = family_of.gains[i]
                checked += 1
                if self.worth(row) <= least * (1.0 + 1e-6) or checked > _CHECKS:
                    return None
                if accept(row):
                    return row, family_of.made[i]
        return None

    def _plain_grid(self) -> Candidates:
        """Return settings on a plain logarithmic grid, for plants on which no placed poles are within the limits."""
        size = self.knobs.directions.shape[0]
        kp = self.goal.noise_gain / noise_scale(self.plant)
        pace = max(family.pace_of(self.plant), 1e-9)
        most = {0: kp, 1: 10.0 * kp / pace, 2: kp * self.filter_s}
        axes = []
        for direction in self.knobs.directions:
            top = most[int(np.argmax(direction > 0))] / float(direction[direction > 0][0])
            axes.append(np.geomspace(1e-5 * top, top, _GRID[size - 1]))
        x = np.stack([g.ravel() for g in np.meshgrid(*axes, indexing="ij")], axis=1)
        return Candidates(gains=self.knobs.gains(x), made=np.zeros((x.shape[0], 3)))

    def _around(self, made: Array, share: float) -> Candidates:
        w0, shape0, third0 = made
        w = w0 * np.exp(np.linspace(-share, share, 11))
        if shape0 <= 1.0:
            shape = np.minimum(shape0 + np.linspace(-share, share, 11) * (1.0 - min(shape0, 0.95)), 1.0)
        else:
            shape = 1.0 + np.maximum((shape0 - 1.0) * np.exp(np.linspace(-share, share, 11)), 1.003)
        third = third0 * np.exp(np.linspace(-share, share, 5)) if third0 > 0 else np.zeros(1)
        grids = (g.ravel() for g in np.meshgrid(w, shape, third, indexing="ij"))
        return family.at(self.plant, self.knobs, *grids)

    def polished(self, row: Array, accept: Callable[[Array], bool]) -> Array:
        """Return settings of more worth near these, each kept only when it passes: a pattern search in the logarithms."""
        free = [k for k in range(3) if row[k] > 0 and np.any(self.knobs.directions[:, k] != 0)]
        if self.knobs.directions.shape[0] < len(free) or self.knobs.directions.shape[0] == 1:
            return row
        moves = [np.array(m) for m in np.ndindex(*(3,) * len(free)) if any(v != 1 for v in m)]
        for step in _POLISH:
            while True:
                trials = []
                for move in moves:
                    trial = row.copy()
                    trial[free] *= np.exp(step * (move - 1))
                    trials.append(trial)
                table = np.array(trials)
                order = screened(self.plant, self.goal, self.knobs, table)
                better = next(
                    (table[i] for i in order if self.worth(table[i]) > self.worth(row) and accept(table[i])), None
                )
                if better is None:
                    break
                row = better
        return row


def counted_damping(swing: Swing) -> float:
    """Return the least damping ratio of the modes, each counted from 2 % of the peak on and in full from 10 %.

    Modes below 2 % swing by less than a critical design promises; counted from nothing on, as `design_damping` counts
    them, the endless row of small ones in the answer of a loop without integral action holds the gain down by half.
    """
    share = np.clip((swing.weights - _UNSEEN) / (_FULL - _UNSEEN), 0.0, 1.0)
    return float((1.0 - (1.0 - damping_of(swing.roots)) * share).min(initial=1.0))


def slower(plant: Plant, extra: float) -> Plant:
    """Return the plant with more dead time."""
    if extra == 0.0:
        return plant
    dead = max(plant.dead_time_s + extra, 0.0)
    if plant.rational is not None:
        return Plant.of_transfer(replace(plant.rational, dead_time_s=dead))
    return replace(plant, dead_time_s=dead)


def _check_pace(plant: Plant, goal: Goal) -> None:
    """Refuse a plant that nothing holds back: every gain would do, and the largest be proposed."""
    if plant.dead_time_s > 0 or np.any(np.abs(np.roots(plant.denominator)) > 0):
        return
    if not plant.integrating:
        raise UsageError("a plant without lag, dead time or integration follows at once: there is no loop to tune")
    if "gain" not in goal.at_most:
        raise UsageError(
            "an integration without lag or dead time allows any gain: give the scan interval (--scan), the dead time, or the largest "
            "gain (--at-most gain=...)"
        )
