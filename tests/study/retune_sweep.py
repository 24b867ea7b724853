"""The best settings that a dense sweep with polish finds on a plant: slow, and apart from the design that it is held against."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from retune_plants import Array

from loopfit.core.errors import UsageError
from loopfit.loop.gains import Gains
from loopfit.loop.plant import Plant
from loopfit.loop.visible import swing_of
from loopfit.tuning.design import Designed
from loopfit.tuning.family import fast_lag

SENSITIVITY, NOISE_GAIN, SHORT = 1.6, 20.0, 0.02  # limits of the study, common to design and sweep
_UNSEEN, _FULL = 0.02, 0.10  # size of a mode, of the peak, from which its damping counts and counts in full
_CHECKS = 500  # exact checks of candidates of a sweep
_CLIMBS = 3
_STEPS = (0.1, 0.03, 0.01, 0.003, 0.001)
_MOST_MOVES = 150
_NEAR = 0.05  # shortfall of damping from which a climb is worth while


@dataclass(frozen=True, kw_only=True, eq=False)
class Task:
    """A plant made of gain above 0, limits, and the filter of the derivative."""

    plant: Plant
    damping: float
    filter_s: float
    noise_scale: float
    derivative: bool
    omega: Array  # rad/s, of the sensitivity
    action: Array  # (w, 3) complex: loop gain per unit of kp, ki, kd

    def sensitivity(self, rows: Array) -> Array:
        """Return the largest sensitivity of settings (n, 3)."""
        out = np.empty(len(rows))
        for k in range(0, len(rows), 2000):
            out[k : k + 2000] = 1.0 / np.abs(1.0 + rows[k : k + 2000] @ self.action.T).min(axis=1)
        return out

    def allowed(self, rows: Array) -> Array:
        """Return which settings (n, 3) keep signs, noise and sensitivity, of the latter cheaply."""
        good = np.isfinite(rows).all(axis=1) & (rows[:, 0] >= 0.0) & (rows[:, 1] > 0.0) & (rows[:, 2] >= 0.0)
        good &= self.noise_scale * (rows[:, 0] + rows[:, 2] / self.filter_s) <= NOISE_GAIN
        good[good] = self.sensitivity(rows[good]) <= SENSITIVITY
        return good

    def short_of(self, row: Array) -> float:
        """Return how far the settings (3,) miss the damping, 0 where they meet it; 2 for a loop that is not stable."""
        kp, ki, kd = (float(v) for v in row)
        try:
            swing = swing_of(self.plant, Gains(kp=kp, ki=ki, kd=kd, filter_s=self.filter_s if kd else 0.0))
        except UsageError:
            return 2.0
        if not swing.stable:
            return 2.0
        damping = -swing.roots.real / np.abs(swing.roots)
        share = np.clip((swing.weights - _UNSEEN) / (_FULL - _UNSEEN), 0.0, 1.0)
        return max(self.damping - float((1.0 - (1.0 - damping) * share).min(initial=1.0)), 0.0)


def best_of_sweep(plant: Plant, unit_s: float, damping: float, terms: str, found: Designed) -> float:
    """Return the largest integral gain that sweeps and climbs found; 0 where they found none.

    The sweeps hold only settings above what `found` has; climbs begin at the best of them, at those that miss the
    damping by least, and at the settings of `found`.
    """
    task = _task(plant, unit_s, damping, terms)
    least = found.worth if found.met else 0.0
    rows = np.vstack([_placed(task, unit_s), _grid(task, unit_s, least)])
    rows = rows[rows[:, 1] > least]
    rows = rows[task.allowed(rows)]
    rng = np.random.default_rng(7)
    if len(rows) > _CHECKS:
        rows = rows[rng.choice(len(rows), _CHECKS, replace=False)]
    short = np.array([task.short_of(row) for row in rows])
    order = [k for k in np.lexsort((-rows[:, 1], short)) if short[k] < _NEAR]
    starts = [rows[k] for k in order[:_CLIMBS]]
    if found.met and found.gains is not None:
        starts.append(np.abs([found.gains.kp, found.gains.ki, found.gains.kd]))
    return max((_climbed(task, row) for row in starts), default=0.0)


def _task(plant: Plant, unit_s: float, damping: float, terms: str) -> Task:
    positive = Plant(
        gain=abs(plant.gain), time_constants_s=plant.time_constants_s, damping_ratio=plant.damping_ratio,
        natural_frequency_rad_s=plant.natural_frequency_rad_s, dead_time_s=plant.dead_time_s, zero_s=plant.zero_s,
        integrating=plant.integrating,
    )  # fmt: skip
    filter_s = 0.03 * (plant.dead_time_s + fast_lag(plant))
    lags = 2.0 * plant.damping_ratio * unit_s if plant.damping_ratio is not None else unit_s
    omega = np.geomspace(0.003, 300.0, 700) / unit_s
    return Task(
        plant=positive, damping=damping - SHORT, filter_s=filter_s, derivative=terms == "PID", omega=omega,
        noise_scale=positive.gain * (lags + plant.dead_time_s if plant.integrating else 1.0),
        action=_action(positive, filter_s, 1j * omega),
    )  # fmt: skip


def _action(plant: Plant, filter_s: float, s: np.ndarray) -> np.ndarray:
    value = np.polyval(plant.numerator, s) / np.polyval(plant.denominator, s) * np.exp(-plant.dead_time_s * s)
    return np.stack([value, value / s, value * s / (1.0 + filter_s * s)], axis=-1)


def _derivatives(task: Task, count: int) -> Array:
    if not task.derivative:
        return np.zeros(1)
    return np.append(0.0, np.geomspace(1e-3, 1.0, count) * NOISE_GAIN * task.filter_s / task.noise_scale)


def _placed(task: Task, unit_s: float) -> Array:
    """Return settings that place a pair of the target damping and above, or two real poles, for many kd."""
    pace = task.plant.dead_time_s + 0.1 * unit_s
    omega, kd = np.geomspace(0.01, 20.0, 160) / pace, _derivatives(task, 24)
    zetas = task.damping + (1.0 - task.damping) * np.array([0.0, 0.1, 0.3, 0.6, 0.9])
    w, zeta, d = (g.ravel() for g in np.meshgrid(omega, zetas, kd, indexing="ij"))
    with np.errstate(all="ignore"):
        one = _action(task.plant, task.filter_s, w * (-zeta + 1j * np.sqrt(1.0 - zeta**2)))
        right = -1.0 - one[:, 2] * d
        pairs = _solved(one[:, 0].real, one[:, 1].real, right.real, one[:, 0].imag, one[:, 1].imag, right.imag)
        w, ratio, e = (g.ravel() for g in np.meshgrid(omega, [1.005, 1.1, 1.3, 1.8, 3.0, 6.0], kd, indexing="ij"))
        one = _action(task.plant, task.filter_s, -w + 0j).real
        two = _action(task.plant, task.filter_s, -w * ratio + 0j).real
        reals = _solved(one[:, 0], one[:, 1], -1.0 - one[:, 2] * e, two[:, 0], two[:, 1], -1.0 - two[:, 2] * e)
    return np.vstack([np.column_stack([*pairs, d]), np.column_stack([*reals, e])])


def _solved(a: Array, b: Array, r: Array, c: Array, d: Array, s: Array) -> tuple[Array, Array]:
    det = a * d - b * c
    return (r * d - b * s) / det, (a * s - c * r) / det


def _grid(task: Task, unit_s: float, least: float) -> Array:
    kp_most = NOISE_GAIN / task.noise_scale
    kp = np.append(0.0, np.geomspace(1e-4, 1.0, 60) * kp_most)
    ki = least * np.geomspace(1.0, 3.0, 30) if least > 0 else np.geomspace(1e-5, 10.0, 60) * kp_most / unit_s
    return np.stack([g.ravel() for g in np.meshgrid(kp, ki, _derivatives(task, 12), indexing="ij")], axis=1)


def _climbed(task: Task, row: Array) -> float:
    """Return the integral gain at the end of a climb that lowers the shortfall, then raises ki; 0 if it ends short.

    Compass search in the logarithms, along the axes, their diagonals, and directions drawn at random.
    """
    rng = np.random.default_rng(11)
    free = np.flatnonzero(row > 0.0)
    corners = [np.array(m, dtype=float) - 1.0 for m in np.ndindex(*(3,) * len(free))]
    now = (task.short_of(row), -float(row[1]))
    if not task.allowed(row[None])[0]:
        return 0.0
    for step in _STEPS:
        for _ in range(_MOST_MOVES):
            drawn = rng.standard_normal((12, len(free)))
            moves = [*corners, *(drawn / np.linalg.norm(drawn, axis=1)[:, None])]
            trials = np.repeat(row[None], len(moves), axis=0)
            trials[:, free] *= np.exp(step * np.array(moves))
            if now[0] == 0.0:
                trials = trials[trials[:, 1] > row[1] * (1.0 + 1e-5)]
            trials = trials[task.allowed(trials)]
            better = None
            for trial in trials[np.argsort(-trials[:, 1])]:
                value = (task.short_of(trial), -float(trial[1]))
                if value < now:
                    better = trial, value
                    break
            if better is None:
                break
            row, now = better
    return -now[1] if now[0] == 0.0 and math.isfinite(now[1]) else 0.0
