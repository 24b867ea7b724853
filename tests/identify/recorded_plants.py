"""Records of plants of many kinds, linear and with lost motion or sticking, and a plain second-order fit to them."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy.optimize import least_squares

from loopfit.identify.held_course import fitted, lags_and_pair, with_gain
from loopfit.loop.gains import Gains
from loopfit.loop.plant import Plant
from loopfit.loop.simulate import simulate
from loopfit.model.transfer import Transfer, transfer_of

Array = np.ndarray


@dataclass(frozen=True, kw_only=True)
class Recorded:
    """A record at even times."""

    time: Array
    setpoint: Array
    output: Array
    measurement: Array
    noise: float


def plain_fit(record: Recorded, *, integrating: bool = False) -> tuple[Plant, Array]:
    """Second order with dead time (integrating: a lag) by least squares from several starts, and what it leaves."""
    every = float(record.time[1] - record.time[0])

    def transfer_at(p: Array) -> Transfer:
        if integrating:
            return lags_and_pair((0.0, -math.exp(p[0])), math.exp(p[2]))
        roots = np.roots([1.0, math.exp(p[1]), math.exp(2.0 * p[0])])
        return lags_and_pair(tuple(complex(root) for root in roots), math.exp(p[2]))

    def left(p: Array) -> Array:
        return fitted(transfer_at(p), record.time, record.output, record.measurement).residual

    starts = [
        np.log([wn, 1.6 * wn, dead_time])
        for wn in np.geomspace(6.0 / (every * len(record.time)), 0.3 / every, 6)
        for dead_time in (0.3 * every, 0.3 / wn)
    ]
    starts.sort(key=lambda p: float(np.sum(left(p) ** 2)))
    solved = [least_squares(left, start, bounds=(start - 7.0, start + 7.0), max_nfev=40) for start in starts[:2]]
    best = min(solved, key=lambda one: float(one.cost))
    fit = fitted(transfer_at(best.x), record.time, record.output, record.measurement)
    return Plant.of_transfer(with_gain(transfer_at(best.x), fit.gain)), fit.residual


def closed_record(
    plant: Plant, gains: Gains, *, scan_s: float, scans: int, rng: np.random.Generator, noise: float = 0.004,
    resolution: float = 0.0, deadband: float = 0.0,
) -> Recorded:  # fmt: skip
    """Setpoint steps of 1 up, .5 down."""
    setpoint = np.where(np.arange(scans) < 0.05 * scans, 0.0, np.where(np.arange(scans) < 0.55 * scans, 1.0, 0.5))
    run = simulate(
        plant, gains, scan_s=scan_s, scans=scans, setpoint=setpoint, noise=noise * rng.standard_normal(scans),
        measurement_resolution=resolution, deadband=deadband,
    )  # fmt: skip
    return Recorded(time=run.time, setpoint=run.setpoint, output=run.output, measurement=run.measurement, noise=noise)


def open_record(plant: Plant, *, scan_s: float, scans: int, rng: np.random.Generator, noise: float = 0.004) -> Recorded:
    """Output up by 1, held."""
    output = np.where(np.arange(scans) < 0.1 * scans, 0.0, 1.0)
    run = simulate(
        plant, output=output, scan_s=scan_s, scans=scans, noise=noise * rng.standard_normal(scans) * plant.gain
    )
    return Recorded(time=run.time, setpoint=run.setpoint, output=run.output, measurement=run.measurement, noise=noise)


def two_masses(*, motor: float, load: float, stiffness: float, shaft_damping: float, friction: float) -> Plant:
    """Torque to the speed of the load: two inertias on an elastic shaft (the equations of motion, by hand)."""
    # motor s w1 = torque - d(w1 - w2) - k(w1 - w2)/s - friction w1;  load s w2 = d(w1 - w2) + k(w1 - w2)/s - friction w2
    s = np.poly1d([1.0, 0.0])
    shaft = shaft_damping * s + stiffness
    one, two = motor * s * s + friction * s + shaft, load * s * s + friction * s + shaft
    below = (one * two - shaft * shaft).coeffs
    return Plant.of_transfer(transfer_of(np.append(shaft.coeffs, 0.0), below))


def many_lags(rng: np.random.Generator) -> tuple[Plant, float]:
    """Three to eight lags with a dead time, and their sum: tanks, heaters, exchangers."""
    lags = np.exp(rng.uniform(-2.5, 0.0, rng.integers(3, 9)))
    dead_time = float(rng.uniform(0.0, 0.5))
    return Plant(gain=1.0, time_constants_s=tuple(float(x) for x in lags), dead_time_s=dead_time), float(
        lags.sum()
    ) + dead_time


def sticking_record(
    plant: Plant, gains: Gains, *, scan_s: float, scans: int, rng: np.random.Generator, stuck: float, jump: float,
    noise: float = 0.004,
) -> Recorded:  # fmt: skip
    """A loop whose element rests until the output is `stuck` away, then follows to within `stuck - jump` of it.

    A valve with static friction in its packing; the scans one by one, the plant advanced exactly.
    """
    from loopfit.loop.state_space import held, state_space

    space = state_space(plant.numerator, plant.denominator)
    matrix, moved = held(space.A, space.B, np.asarray(scan_s))
    waits = [0.0] * round(plant.dead_time_s / scan_s)
    setpoint = np.where(np.arange(scans) < 0.05 * scans, 0.0, np.where(np.arange(scans) < 0.55 * scans, 1.0, 0.5))
    x, total, position = np.zeros(len(moved)), 0.0, 0.0
    out, seen = np.zeros(scans), np.zeros(scans)
    for k in range(scans):
        y = float(space.C @ x) + noise * rng.standard_normal()
        total += gains.ki * scan_s * (setpoint[k] - y)
        u = gains.kp * (setpoint[k] - y) + total
        if abs(u - position) > stuck:
            position = u - math.copysign(stuck - jump, u - position)
        waits.append(position)
        x = matrix @ x + moved * waits.pop(0)
        out[k], seen[k] = u, y
    return Recorded(time=scan_s * np.arange(scans), setpoint=setpoint, output=out, measurement=seen, noise=noise)


def linear_record(rng: np.random.Generator, kind: int) -> Recorded:
    """One of many linear records: lags, an oscillating pair, a zero; open or closed; noise .1 to 1 %, rounding to 3 %."""
    noise = float(math.exp(rng.uniform(math.log(1e-3), math.log(1e-2))))
    resolution = (0.0, 0.0, 0.01, 0.03)[kind // 2 % 4]
    if kind % 3 == 0:
        plant, total = many_lags(rng)
    elif kind % 3 == 1:
        damping, dead_time = float(rng.uniform(0.3, 2.0)), float(rng.uniform(0.0, 0.6))
        plant = Plant(gain=1.0, damping_ratio=damping, natural_frequency_rad_s=1.0, dead_time_s=dead_time)
        total = 2.0 * damping + dead_time + 0.5
    else:
        lags, zero = (float(rng.uniform(0.5, 1.5)), float(rng.uniform(0.1, 0.5)), 0.05), float(rng.uniform(-0.3, 0.4))
        plant = Plant(gain=1.0, time_constants_s=lags, zero_s=zero, dead_time_s=0.2)
        total = sum(lags) + 0.2
    scan = total / float(rng.uniform(25.0, 50.0))
    if kind % 5 == 4:
        return open_record(plant, scan_s=scan, scans=600, rng=rng, noise=noise)
    kp = float(rng.uniform(0.1, 0.8))
    gains = Gains(kp=kp, ki=kp / (total * float(rng.uniform(0.5, 1.2))))
    return closed_record(plant, gains, scan_s=scan, scans=800, rng=rng, noise=noise, resolution=resolution)
