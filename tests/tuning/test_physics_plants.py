"""Plants from their physics, none of second order: retuned from their own records, run again, judged without loopfit.

The demands (well damped at 0.55 for a target of 0.7, overshoot as predicted within 5 points, none made worse, friction
and lost motion refused) are those of the project's own feasibility study of such plants.
"""

from __future__ import annotations

import functools
import math
import time
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import pytest
from physics_plants import PLAY, SHAFT, SMOOTH, STICKING, Array, Physics

import loopfit
from loopfit.core.errors import RecordError
from loopfit.loop.gains import Gains
from loopfit.record.read import record_from_arrays
from loopfit.record.record import Record
from loopfit.tuning.result import Retuning

TARGET, WELL, POINTS, SHARE = 0.7, 0.55, 5.0, 0.95
_LONG = 6000
_BEFORE = 60  # scans before the step
_MOST_PRESENT = 0.8  # setpoint overshoot of the present settings


@dataclass(frozen=True, kw_only=True)
class Seen:
    """A noise-free run of the true plant: damping from the swing after a load, overshoot of a setpoint step, %."""

    damping: float
    overshoot: float


@dataclass(frozen=True, kw_only=True)
class Round:
    """One retuning: which plant, record and terms; before, after, and what was predicted."""

    name: str
    before: Seen
    after: Seen | None
    found: Retuning | None
    refused: str

    @property
    def predicted(self) -> float:
        """Predicted setpoint overshoot, %."""
        assert self.found is not None
        assert self.found.proposed is not None
        overshoot = self.found.proposed.figures.overshoot_percent
        return math.inf if overshoot is None else overshoot.value

    @property
    def words(self) -> str:
        """What came of it."""
        if self.after is None:
            return f"{self.name}: {self.refused}"
        assert self.found is not None
        assert self.found.proposed is not None
        damping = self.found.proposed.figures.damping_ratio
        return (
            f"{self.name}: met {self.found.met}, damping {self.before.damping:.2f} -> {self.after.damping:.2f} (predicted "
            f"{-1.0 if damping is None else damping.value:.2f}), overshoot {self.after.overshoot:.1f} % (predicted {self.predicted:.1f} %)"
        )


def damping_seen(load: Array) -> float:
    """Return the damping ratio of a second-order answer that swings back as far, 1 where it does not; below 0 if it grows."""
    if not np.all(np.isfinite(load)):
        return -1.0
    top = int(np.argmax(np.abs(load[: len(load) // 2])))
    after = -math.copysign(1.0, load[top]) * load[top:]
    back = float(after.max() / abs(load[top]))
    if np.abs(load[-len(load) // 6 :]).max() > 0.5 * abs(load[top]):
        return -1.0
    if back <= 1e-9:
        return 1.0
    turn = -math.log(min(back, 1.0))
    return turn / math.hypot(math.pi, turn)


def judged(plant: Physics, gains: Gains) -> Seen:
    """Run the true plant without noise and rounding."""
    settings = (gains.kp, gains.ki, gains.kd, gains.filter_s)
    rest = plant.see(plant.rest)
    scans = min(_LONG, round(40.0 * plant.ultimate[1] / plant.scan_s))
    load, _ = plant.run(scans, settings, load=0.3 * plant.step_out, rounded=False)
    answer, _ = plant.run(scans, settings, setpoint=plant.step_set, rounded=False, weight=gains.setpoint_weight)
    top = float(np.max((answer - rest) / plant.step_set))
    return Seen(damping=damping_seen(load - rest), overshoot=100.0 * max(top - 1.0, 0.0))


@functools.cache
def present_of(plant: Physics, start: str, derivative: bool) -> loopfit.Settings:
    """Return badly tuned settings: ringing, or sluggish; common practice from the ultimate gain and period."""
    ultimate, period = plant.ultimate
    share, ti = (0.4, 0.9 * period) if start == "ringing" else (0.12, 2.0 * period)
    while True:
        kp = share * ultimate
        td = 0.12 * period if derivative else None
        settings = loopfit.Settings("ideal", gain=kp, integral_time_s=ti, derivative_time_s=td, scan_s=plant.scan_s)
        answer, _ = plant.run(_LONG // 2, _of(settings), setpoint=plant.step_set)
        error = (answer - plant.see(plant.rest)) / plant.step_set - 1.0
        valve = plant.stick or plant.play  # may cycle to the end
        if error.max() < _MOST_PRESENT and (valve or np.abs(error[-100:]).max() < 0.1):
            return settings
        share *= 0.8


def _of(settings: loopfit.Settings) -> tuple[float, float, float, float]:
    gains = settings.gains
    return gains.kp, gains.ki, gains.kd, gains.filter_s


def record_of(plant: Physics, kind: str, settings: loopfit.Settings, seed: int) -> Record:
    """Return a record with noise and rounding: an open step, or a setpoint step, until it has settled."""
    answer: Array
    if kind == "open":
        if plant.integrating:
            settled = 8.0 * plant.ultimate[1] / plant.scan_s
        else:
            answer, _ = plant.run(_LONG, None, manual=np.full(_LONG, plant.step_out), rounded=False)
            settled = _settled(answer - answer[-1])
    else:
        answer, _ = plant.run(_LONG, _of(settings), setpoint=plant.step_set, rounded=False)
        settled = _settled(answer - answer[-1]) if not (plant.stick or plant.play) else 20.0 * plant.ultimate[1] / plant.scan_s
    scans = _BEFORE + min(max(round(1.3 * settled), 200), _LONG)
    on = np.where(np.arange(scans) < _BEFORE, 0.0, 1.0)
    noise = plant.noise * np.random.default_rng(seed).standard_normal(scans)
    times = plant.scan_s * np.arange(scans)
    if kind == "open":
        y, u = plant.run(scans, None, manual=plant.step_out * on, noise=noise)
        return record_from_arrays(time=times, measurement=y, output=u)
    y, u = plant.run(scans, _of(settings), setpoint=plant.step_set * on, noise=noise)
    return record_from_arrays(time=times, measurement=y, output=u, setpoint=plant.see(plant.rest) + plant.step_set * on)


def _settled(away: Array) -> float:
    outside = np.flatnonzero(np.abs(away) > 0.02 * np.ptp(away))
    return float(outside[-1]) if len(outside) else 0.0


def retuned(plant: Physics, kind: str, start: str, terms: str, seed: int = 3) -> Round:
    """Retune a plant once from its own record and run it again."""
    settings = present_of(plant, start, terms == "PID")
    record = record_of(plant, kind, settings, seed)
    before, name = judged(plant, settings.gains), f"{plant.name}, {kind}, {start}, {terms}"
    try:
        found = loopfit.retune(record, settings=settings, damping_ratio=TARGET)
    except RecordError as error:
        return Round(name=name, before=before, after=None, found=None, refused=str(error))
    if found.proposed is None:
        return Round(name=name, before=before, after=None, found=found, refused=found.refused or "no proposal")
    return Round(name=name, before=before, after=judged(plant, found.proposed.gains), found=found, refused="")


def rounds(plants: list[Physics]) -> Iterator[Round]:
    """Retune every plant from both records, both starts, both sets of terms."""
    for plant in plants:
        for kind in ("open", "closed"):
            for start in ("ringing", "sluggish"):
                for terms in ("PI", "PID"):
                    yield retuned(plant, kind, start, terms)
