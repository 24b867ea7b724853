"""A resonance hidden under a second-order fit: lag and oscillating pair fitted to recorded output and measurement."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import ArrayLike

from loopfit.core.arrays import Array
from loopfit.identify.held_course import CourseFit, fitted, lags_and_pair, with_gain
from loopfit.loop.plant import Plant
from loopfit.model.transfer import Transfer

TAKEN_ABOVE = 100.0  # of the statistic; resonant plants of a feasibility study had 396 and more, others at most 22
_MOST_DAMPING = 0.5  # of the pair: more is no resonance
_ROUGH_ROWS = 4000
_FASTEST = 0.7  # of the Nyquist frequency
_STARTS = 3


def resonance_of(
    time: ArrayLike, output: ArrayLike, measurement: ArrayLike, plain: Plant, residual: ArrayLike
) -> Plant | None:
    """Return a plant with a lag and a resonance where the record shows one that the plain model has not, else None.

    Parameters
    ----------
    time, output, measurement : (n,) float
        Even in time, s.
    plain : Plant
        Second order with dead time, fitted to the same record.
    residual : (n,) float
        What the plain model leaves of the measurement.

    Notes
    -----
    Taken when n (rms_plain^2 / rms_resonant^2 - 1) (1 - rho) / (1 + rho) is above 100: a likelihood ratio with the
    rows corrected for the first-order colour rho of the residual. The plain rms is the least of the given one and
    refits of the plain model with the same offset and free motion, so that these are not what the resonance gains.
    """
    t, u, y, left = (np.asarray(column, dtype=np.float64) for column in (time, output, measurement, residual))
    found = _fitted_resonance(t, u, y, plain)
    if found is None:
        return None
    transfer, fit = found
    again = _refitted(t, u, y, plain)
    plain_rms = min(math.sqrt(float(np.mean(left**2))), again)
    return Plant.of_transfer(with_gain(transfer, fit.gain)) if statistic(plain_rms, fit) > TAKEN_ABOVE else None


def statistic(plain_rms: float, resonant: CourseFit) -> float:
    """Return n (rms_plain^2 / rms_resonant^2 - 1) (1 - rho) / (1 + rho), rho the lag-one correlation that is left."""
    left = resonant.residual
    size = float(left @ left)
    if size == 0.0:
        return math.inf if plain_rms > 0.0 else 0.0
    rho = min(max(float(left[1:] @ left[:-1]) / size, 0.0), 0.99)
    return len(left) * ((plain_rms / resonant.rms) ** 2 - 1.0) * (1.0 - rho) / (1.0 + rho)


def _fitted_resonance(
    time: Array, output: Array, measurement: Array, plain: Plant
) -> tuple[Transfer, CourseFit] | None:
    """Lag (or integration) x pair, started at many frequencies and at the plain model's slow pole and dead time."""
    from scipy.optimize import least_squares

    every = float(np.median(np.diff(time)))
    slow = _slow_rate(plain, every * len(time))
    highest = _FASTEST * math.pi / every
    lowest = min(max(0.3 * slow, 6.0 / (every * len(time))), 0.1 * highest)
    dead_times = sorted({0.0, 0.5 * plain.dead_time_s, plain.dead_time_s})
    scale = float(np.std(measurement)) or 1.0

    def transfer_at(p: Array) -> Transfer:
        wn, damping = math.exp(float(p[1])), _MOST_DAMPING / (1.0 + math.exp(-float(p[2])))
        pair = complex(-damping * wn, wn * math.sqrt(1.0 - damping**2))
        lag = 0.0 if plain.integrating else -math.exp(float(p[0]))
        return lags_and_pair((lag, pair, pair.conjugate()), every * math.exp(float(p[3])))

    rows = slice(0, _ROUGH_ROWS)
    starts = []
    for wn in np.geomspace(lowest, highest, 28):
        for dead_time in dead_times:
            for lag in (slow,) if plain.integrating else (slow, 0.5 * slow):
                for damping in (0.05, 0.25):
                    logit, later = -math.log(_MOST_DAMPING / damping - 1.0), math.log(dead_time / every + 1e-3)
                    start = (math.log(lag), math.log(float(wn)), logit, later)
                    rough = fitted(transfer_at(np.array(start)), time[rows], output[rows], measurement[rows])
                    starts.append((rough.rms, start))
    best: tuple[Transfer, CourseFit] | None = None
    low = np.array([math.log(0.02 * slow), math.log(0.5 * lowest), -8.0, math.log(1e-4)])
    high = np.array([math.log(30.0 * highest), math.log(1.4 * highest), 8.0, math.log(0.5 * len(time))])

    def left(p: Array) -> Array:
        return np.asarray(fitted(transfer_at(p), time, output, measurement).residual / scale)

    for _, begin in _apart(sorted(starts)):
        solved = least_squares(
            left, np.clip(begin, low + 1e-6, high - 1e-6), bounds=(low, high), max_nfev=40, xtol=1e-6, ftol=1e-8,
        )  # fmt: skip
        transfer = transfer_at(solved.x)
        fit = fitted(transfer, time, output, measurement)
        if fit.gain != 0.0 and (best is None or fit.rms < best[1].rms):
            best = transfer, fit
    return best


def _apart(starts: list[tuple[float, tuple[float, ...]]]) -> list[tuple[float, tuple[float, ...]]]:
    """The best starts whose frequencies differ by more than a fifth."""
    out: list[tuple[float, tuple[float, ...]]] = []
    for one in starts:
        if all(abs(one[1][1] - other[1][1]) > 0.2 for other in out):
            out.append(one)
        if len(out) == _STARTS:
            break
    return out


def _refitted(time: Array, output: Array, measurement: Array, plain: Plant) -> float:
    """Least rms of the plain structure with offset and free motion, polished from its own figures."""
    from scipy.optimize import least_squares

    poles = [pole for pole in plain.transfer.poles if pole != 0.0]
    if len(poles) not in (1, 2):
        return math.inf
    every = float(np.median(np.diff(time)))
    product = float(np.prod([abs(p) for p in poles]))
    total = -float(np.sum([p.real for p in poles]))
    start = np.log([max(product, 1e-300), max(total, 1e-300), max(plain.dead_time_s, 1e-3 * every)])

    def transfer_at(p: Array) -> Transfer:
        q, s, dead_time = (math.exp(float(value)) for value in p)
        below = np.roots([1.0, s, q]) if len(poles) == 2 else np.array([-q])
        return lags_and_pair((*(complex(one) for one in below), *((0.0,) if plain.integrating else ())), dead_time)

    scale = float(np.std(measurement)) or 1.0

    def left(p: Array) -> Array:
        return np.asarray(fitted(transfer_at(p), time, output, measurement).residual / scale)

    solved = least_squares(
        left, start, bounds=(start - 6.0, start + 6.0), max_nfev=40, xtol=1e-6, ftol=1e-8,
    )  # fmt: skip
    return fitted(transfer_at(solved.x), time, output, measurement).rms


def _slow_rate(plain: Plant, length_s: float) -> float:
    """Slowest rate of the plain model, rad/s, at least what the record can show."""
    rates = [abs(pole) for pole in plain.transfer.poles if pole != 0.0]
    return max(min(rates, default=1.0 / length_s), 0.3 / length_s)
