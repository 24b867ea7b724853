"""Which of many settings keep within the limits that cost little to check: sign, noise, bounds, sensitivity."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from loopfit.core.arrays import Array
from loopfit.loop.certificate import stable_among
from loopfit.loop.plant import Plant
from loopfit.tuning.family import pace_of, plant_at
from loopfit.tuning.goal import Goal
from loopfit.tuning.knobs import Knobs

_FREQUENCIES = 160
_CHUNK = 4_000
_TINY = 1e-12
_GRID_SLACK = 1.003  # the grid can miss a peak by about that
_FINE = 2_000
_DISTANCE = 0.4  # of any plant in the disc from the limit of stability


def noise_scale(plant: Plant) -> float:
    """Return what turns kp + kd / filter into a noise gain: |gain|, for an integrating plant times its lags and dead time."""
    if not plant.integrating:
        return abs(plant.gain)
    return abs(plant.gain) * max(lag_sum(plant) + plant.dead_time_s, 1e-12)


def lag_sum(plant: Plant) -> float:
    """Return the sum of the plant's lags, s, from the slope of its denominator at rest."""
    denominator = np.trim_zeros(np.array(plant.denominator), "b")
    return float(denominator[-2] / denominator[-1]) if denominator.size > 1 else 0.0


def within_limits(plant: Plant, goal: Goal, gains: Array, filter_s: float) -> NDArray[np.bool_]:
    """Return which settings (n, 3) have no wrong sign, little enough noise, and keep the bounds."""
    kp, ki, kd = gains.T
    with np.errstate(all="ignore"):
        noise = noise_scale(plant) * (kp + (kd / filter_s if goal.derivative else 0.0))
        good = (
            np.isfinite(gains).all(axis=1) & (kp >= 0) & (kd >= 0) & (ki >= 0) & (noise <= goal.noise_gain * (1 + 1e-9))
        )
        if goal.integral:
            good &= ki > 0
        if goal.series:
            good &= (kp - ki * filter_s) ** 2 >= 4.0 * ki * kd * (1 + 1e-9)
        shown = {
            "gain": kp,
            "integral_time_s": kp / np.where(ki > 0, ki, _TINY),
            "derivative_time_s": kd / np.maximum(kp, _TINY),
        }
        for name, value in goal.at_least.items():
            good &= shown[name] >= value * (1 - 1e-9)
        for name, value in goal.at_most.items():
            good &= shown[name] <= value * (1 + 1e-9)
    return np.asarray(good, dtype=bool)


def grid_of(plant: Plant) -> Array:
    """Return the frequencies of the sensitivity screen, rad/s."""
    slow = lag_sum(plant) + plant.dead_time_s + pace_of(plant)
    return np.geomspace(0.02 / max(slow, 1e-12), 40.0 / max(pace_of(plant), 1e-12), _FREQUENCIES)


def sensitivity(plant: Plant, knobs: Knobs, gains: Array) -> Array:
    """Return the largest sensitivity on the grid (n,) of settings (n, 3)."""
    s = 1j * grid_of(plant)
    columns = (knobs.action(s) * plant_at(plant, s)[:, None]).T
    out = np.empty(gains.shape[0])
    for begin in range(0, gains.shape[0], _CHUNK):
        some = gains[begin : begin + _CHUNK]
        back = 1.0 + some @ columns
        out[begin : begin + _CHUNK] = 1.0 / np.sqrt(np.maximum((back.real**2 + back.imag**2).min(axis=1), 1e-30))
    return out


def peak_sensitivity(plant: Plant, knobs: Knobs, row: Array) -> float:
    """Return the largest sensitivity of one setting (3,), on a grid that misses a peak by less than 1e-4 of it."""
    grid = grid_of(plant)
    fine = np.geomspace(grid[0], grid[-1], _FINE)
    back = np.abs(1.0 + (knobs.action(1j * fine) @ row) * plant_at(plant, 1j * fine))
    least = float(back.min())
    if len(plant.numerator) == len(
        plant.denominator
    ):  # it answers at once: the loop gain does not fall at high frequencies
        high = abs(plant.numerator[0] / plant.denominator[0]) * (row[0] + (row[2] / knobs.filter_s if row[2] else 0.0))
        least = min(least, abs(1.0 - float(high)))
    return 1.0 / max(least, 1e-15)


def stable_of(plant: Plant, goal: Goal, gains: Array, filter_s: float) -> NDArray[np.bool_]:
    """Return which settings (n, 3) of magnitudes give a stable loop, by a count of the roots on the right."""
    sign = 1.0 if plant.gain > 0 else -1.0
    out = np.zeros(gains.shape[0], dtype=bool)
    # a count is for settings that all have a derivative, or none
    for has in (True, False):
        some = (gains[:, 2] > 0) == has
        if some.any():
            kp, ki, kd = sign * gains[some].T
            out[some] = stable_among(
                plant, kp, ki if goal.integral else np.zeros_like(ki), kd, filter_s if has else 0.0
            )
    return out


def keeps_distance(plant: Plant, goal: Goal, knobs: Knobs, gains: Array) -> NDArray[np.bool_]:
    """Return for which settings (n, 3) every plant in the goal's disc keeps |1 + L| at least 0.4."""
    if goal.disc is None:
        return np.ones(gains.shape[0], dtype=bool)
    s = 1j * goal.disc[0]
    action = gains @ knobs.action(s).T
    distance = np.abs(1.0 + action * plant_at(plant, s)) - np.abs(action) * goal.disc[1]
    return np.asarray(distance.min(axis=1) >= _DISTANCE)


def screened(plant: Plant, goal: Goal, knobs: Knobs, gains: Array) -> NDArray[np.intp]:
    """Return which settings (n, 3) are within the cheap limits and the sensitivity limit, best objective first."""
    index = np.flatnonzero(within_limits(plant, goal, gains, knobs.filter_s))
    if index.size == 0:
        return index
    index = index[sensitivity(plant, knobs, gains[index]) <= goal.max_sensitivity * _GRID_SLACK]
    index = index[keeps_distance(plant, goal, knobs, gains[index])]
    worth = gains[index, 1] if goal.integral else gains[index, 0]
    return index[np.argsort(-worth, kind="stable")]
