"""Random loops for the tests of roots: plants like those of process loops, gains up to and beyond the limit of stability."""

from __future__ import annotations

import math

import numpy as np

from loopfit.core.errors import UsageError
from loopfit.loop.certificate import count_right_of
from loopfit.loop.gains import Gains
from loopfit.loop.plant import Plant
from loopfit.loop.roots import characteristic

Loop = tuple[Plant, Gains]


def random_loops(seed: int, count: int) -> list[Loop]:
    """Second order (damping .1 to 5), integrating with a lag, first order, with a zero; dead time 0 to 3; PI and PID.

    Six in ten are scaled to lie near the limit of stability, on either side.
    """
    rng = np.random.default_rng(seed)
    out: list[Loop] = []
    while len(out) < count:
        plant = _plant(rng)
        slower = 1.0 + plant.dead_time_s
        kp = _log_uniform(rng, 0.05, 5.0) / slower * (0.3 if plant.integrating else 1.0)
        ki, kd = kp / _log_uniform(rng, 0.5, 10.0), kp * _log_uniform(rng, 0.1, 2.0)
        filter_s = 0.03 * slower
        if rng.random() < 0.5:
            kd, filter_s = 0.0, 0.0
        gains = Gains(kp=kp, ki=ki, kd=kd, filter_s=filter_s)
        if rng.random() < 0.6:
            gains = _near_limit(plant, gains, math.exp(rng.normal(-0.1, 0.15)))
        try:
            characteristic(plant, gains)
        except UsageError:
            continue
        out.append((plant, gains))
    return out


def scaled_gains(gains: Gains, by: float) -> Gains:
    """All gains by one factor."""
    return Gains(kp=gains.kp * by, ki=gains.ki * by, kd=gains.kd * by, filter_s=gains.filter_s)


def characteristic_of(plant: Plant, gains: Gains, s: np.ndarray) -> np.ndarray:
    """D s (Tf s + 1) + N (kp s (Tf s + 1) + ki (Tf s + 1) + kd s^2) exp(-theta s), written out, in the precision of s."""
    filtered = gains.filter_s * s + 1
    acts = gains.kp * s * filtered + gains.ki * filtered + gains.kd * s * s
    delayed = np.polyval(np.array(plant.numerator, s.real.dtype), s) * acts * np.exp(-plant.dead_time_s * s)
    return np.polyval(np.array(plant.denominator, s.real.dtype), s) * s * filtered + delayed


def count_in_rectangle(plant: Plant, gains: Gains, sigma: float, precision: type = complex) -> int:
    """Zeros of `characteristic_of` right of sigma: winding number around a rectangle that holds them all.

    A dense grid, halved where a phase step is above 0.8 rad.
    """
    s = np.poly1d([1.0, 0.0])
    filtered = np.poly1d([gains.filter_s, 1.0])
    acts = float(gains.kp) * s * filtered + float(gains.ki) * filtered + float(gains.kd) * s * s
    a = (np.poly1d(plant.denominator) * s * filtered).coeffs
    b = np.abs((np.poly1d(plant.numerator) * acts).coeffs) * math.exp(-min(plant.dead_time_s * sigma, 0.0))
    sizes = np.abs(a).astype(float)
    sizes[len(a) - len(b) :] += b
    # beyond, the leading power outweighs all else: no zero of f with Re s >= sigma is there
    bound = 2.0 * max((float(sizes[k]) / abs(a[0])) ** (1.0 / k) for k in range(1, len(a)))  # Fujiwara (1916)
    ladder = bound * np.geomspace(1e-3, 1.0, 200)
    outweighed = np.polyval(np.append(0.0, sizes[1:]), ladder) >= abs(a[0]) * ladder ** (len(a) - 1)
    radius = abs(sigma) + float(ladder[np.flatnonzero(outweighed).max(initial=0) + 1 : len(ladder)].min(initial=bound))
    up, across, side = complex(sigma, radius), complex(radius, radius), complex(radius, 0.0)
    points = int(radius * plant.dead_time_s / 0.2) + 2000
    even, few = np.linspace(0.0, 1.0, points), np.linspace(0.0, 1.0, max(500, points // 20))
    close = np.append(0.0, np.geomspace(1e-6, 1.0, 1000))  # to the real axis and the left edge, where the roots are
    path = np.concatenate(
        [sigma + np.union1d(even, close) * (up - sigma), up + close * (across - up), across + few * (side - across)]
    ).astype(precision)
    for _ in range(60):
        value = characteristic_of(plant, gains, path)
        ratio = value[1:] / value[:-1]
        step = np.angle(ratio.astype(complex))
        coarse = np.flatnonzero(np.abs(step) > 0.8)
        if not len(coarse):
            return round(-float(step.sum()) / math.pi)  # clockwise along the upper half; the lower half mirrors it
        path = np.insert(path, coarse + 1, 0.5 * (path[coarse] + path[coarse + 1]))
    raise AssertionError(f"phase steps stay large right of {sigma}: {plant}, {gains}")


def _plant(rng: np.random.Generator) -> Plant:
    dead_time = 0.0 if rng.random() < 0.07 else float(rng.uniform(0.0, 3.0))
    kind = rng.choice(4, p=[0.66, 0.12, 0.11, 0.11])
    if kind == 1:
        return Plant(
            gain=1.0, time_constants_s=(float(rng.uniform(0.1, 2.0)),), integrating=True, dead_time_s=dead_time
        )
    if kind == 2:
        return Plant(gain=1.0, time_constants_s=(1.0,), dead_time_s=dead_time)
    zero = float(rng.uniform(-1.0, 2.0)) if kind == 3 else None
    damping = _log_uniform(rng, 0.1, 5.0)
    return Plant(gain=1.0, damping_ratio=damping, natural_frequency_rad_s=1.0, dead_time_s=dead_time, zero_s=zero)


def _near_limit(plant: Plant, gains: Gains, beside: float) -> Gains:
    def unstable(by: float) -> bool:
        try:
            return count_right_of(characteristic(plant, scaled_gains(gains, by)), 1e-9) > 0
        except UsageError:
            return True

    low, high = 1e-3, 1e3
    if unstable(low) or not unstable(high):
        return gains
    for _ in range(30):
        middle = math.sqrt(low * high)
        low, high = (low, middle) if unstable(middle) else (middle, high)
    return scaled_gains(gains, low * beside)


def _log_uniform(rng: np.random.Generator, low: float, high: float) -> float:
    return float(math.exp(rng.uniform(math.log(low), math.log(high))))
