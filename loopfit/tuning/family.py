"""Settings that place chosen closed-loop poles, dead time exact: a controller is linear in its gains.

For a pair of poles the characteristic equation is two real equations linear in the gains; two gains follow, a third is
swept. At critical damping the optimum lies on a multiple root, where general searches find only a thin wedge: this
family lies on it.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from loopfit.core.arrays import Array
from loopfit.loop.plant import Plant
from loopfit.tuning.knobs import Knobs

_FREQUENCIES = 60
_RATIOS = (1.01, 1.25, 1.6, 2.0, 3.0, 5.0, 8.0)
_SWEPT = 16
_ONE_KNOB = 240
_SLOW, _FAST = 0.025, 6.0
_NOISE_SPAN = 300.0


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Candidates:
    """n settings (n, 3) of kp, ki, kd, and how each was made (n, 3): frequency, shape, swept knob."""

    gains: Array
    made: Array


def pace_of(plant: Plant) -> float:
    """Return the time that a loop around the plant can be fast against, s."""
    return plant.dead_time_s + 0.35 * fast_lag(plant)


def fast_lag(plant: Plant) -> float:
    """Return the lag that a derivative can act against, s: that of the plant's pair, or of its first two lags together."""
    poles = np.roots(plant.denominator)
    size = np.abs(poles[np.abs(poles) > 0])
    if size.size == 0:
        return 0.0 if plant.dead_time_s > 0 else 1.0
    slow = np.sort(1.0 / size)[::-1]
    # two lags: their geometric mean; more: the second counts, the rest acts as dead time
    return (
        float(math.sqrt(slow[0] * slow[1])) if slow.size > 1 else float(slow[0]) * (0.1 if plant.dead_time_s else 1.0)
    )


def frequencies(plant: Plant) -> Array:
    """Return pole frequencies to try (60,), rad/s."""
    pace = max(pace_of(plant), 1e-12)
    return np.geomspace(_SLOW, _FAST, _FREQUENCIES) / pace


def placed(plant: Plant, knobs: Knobs, damping: float, kd_most: float) -> Candidates:
    """Return the family for one damping ratio over all frequencies, shapes and swept values."""
    shapes = [damping] if damping < 1.0 else []
    if damping < 1.0:
        shapes += [damping + share * (1.0 - damping) for share in (0.3, 0.65)]
    shapes += [1.0 + ratio for ratio in _RATIOS]  # above 1: a ratio of real poles
    swept = np.zeros(1)
    if knobs.directions.shape[0] == 3:
        swept = np.concatenate([[0.0], np.geomspace(1e-3, 1.0, _SWEPT) * kd_most])
    w, shape, third = (grid.ravel() for grid in np.meshgrid(frequencies(plant), np.array(shapes), swept, indexing="ij"))
    return at(plant, knobs, w, shape, third)


def at(plant: Plant, knobs: Knobs, w: Array, shape: Array, third: Array) -> Candidates:
    """Return the settings (n, 3) that place the chosen poles; nan where none do.

    Parameters
    ----------
    w : (n,) array
        Frequency, rad/s.
    shape : (n,) array
        At most 1: damping ratio of a pair; above: 1 + the ratio of two real poles.
    third : (n,) array
        Position of the knob that is not solved for.
    """
    made = np.stack([w, shape, third], axis=1)
    if knobs.directions.shape[0] == 1:
        raise ValueError("one knob is swept, not solved for")
    zeta = np.minimum(shape, 1.0)
    pair = shape <= 1.0
    with np.errstate(all="ignore"):
        first = w * (-zeta + 1j * np.sqrt(1.0 - zeta**2))
        second = np.where(pair, np.conj(first), -w * np.maximum(shape - 1.0, 1.0))
        fixed = knobs.fixed + (third[:, None] * knobs.directions[2] if knobs.directions.shape[0] == 3 else 0.0)
        rows, right = [], []
        for p in (first, second):
            action = knobs.action(p)
            value = -1.0 / plant_at(plant, p) - (action * fixed).sum(axis=1)
            rows.append(action @ knobs.directions[:2].T)
            right.append(value)
        # a pair: real and imaginary part of one equation; two real poles: two equations
        top = np.where(pair[:, None], rows[0].real, rows[0].real)
        low = np.where(pair[:, None], rows[0].imag, rows[1].real)
        r1, r2 = right[0].real, np.where(pair, right[0].imag, right[1].real)
        det = top[:, 0] * low[:, 1] - top[:, 1] * low[:, 0]
        x1 = (r1 * low[:, 1] - r2 * top[:, 1]) / det
        x2 = (top[:, 0] * r2 - low[:, 0] * r1) / det
        gains = fixed + x1[:, None] * knobs.directions[0] + x2[:, None] * knobs.directions[1]
    return Candidates(gains=gains, made=made)


def swept(knobs: Knobs, most: float) -> Candidates:
    """Return settings along the only knob that may turn, up to `most`."""
    x = np.geomspace(most / 1e4, most, _ONE_KNOB)
    made = np.stack([np.zeros_like(x), np.zeros_like(x), x], axis=1)
    return Candidates(gains=knobs.gains(x[:, None]), made=made)


def plant_at(plant: Plant, p: np.ndarray) -> np.ndarray:
    """Return the plant, its gain made positive, at p."""
    rational = np.polyval(plant.numerator, p) / np.polyval(plant.denominator, p)
    return np.asarray(math.copysign(1.0, plant.gain) * rational * np.exp(-plant.dead_time_s * p))
