"""The scans of a sampled loop one after another: in plain floats for one loop, in arrays for many."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from operator import mul

import numpy as np
from numpy.typing import NDArray

from loopfit.core.arrays import Array
from loopfit.loop.gains import Gains


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Held:
    """Exact advance of P plants of order n over one scan: x <- matrix x + older v[k-m-1] + newer v[k-m].

    `matrix` (P, n, n); `older`, `newer`, `measured` (P, n); `direct` (P,); `scans` (P,), the whole scans m of dead time.
    The measurement is taken just before the output is written: measured x + direct v[k-m-1].
    """

    matrix: Array
    older: Array
    newer: Array
    measured: Array
    direct: Array
    scans: NDArray[np.int64]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Course:
    """What acts on the loops, (n, P) each, and where they rest before the first scan; `manual` None in automatic."""

    setpoint: Array
    load: Array
    noise: Array
    manual: Array | None
    measurement: float
    output: float
    start_setpoint: float


@dataclass(frozen=True, slots=True, kw_only=True)
class Actuator:
    """Limits of the output and of its change per scan, half the lost motion, units of rounding (0 for none)."""

    low: float
    high: float
    step: float
    half_play: float
    measurement_unit: float
    output_unit: float
    conditional: bool


def scan_one(
    held: Held,
    gains: Sequence[Gains] | None,
    tracking: Sequence[float] | None,
    scan_s: float,
    course: Course,
    actuator: Actuator,
) -> tuple[Array, Array, Array]:
    """Return controlled variable, measurement and output, (n, 1) each, of a single loop."""
    order = held.measured.shape[1]
    rows = [
        ([float(v) for v in row], float(b), float(a))
        for row, b, a in zip(held.matrix[0], held.older[0], held.newer[0], strict=True)
    ]
    measured, direct = held.measured[0].tolist(), float(held.direct[0])
    two = order == 2
    if two:
        ((p11, p12), b1, a1), ((p21, p22), b2, a2) = rows
        c1, c2 = measured
    x1 = x2 = 0.0
    x = [0.0] * order
    inputs = [0.0] * (int(held.scans[0]) + 1)  # inputs[k] is v[k - m - 1]
    rest, bias = course.measurement, course.output
    low, high, step, half_play = actuator.low, actuator.high, actuator.step, actuator.half_play
    unit, output_unit = actuator.measurement_unit, actuator.output_unit
    manual = None if course.manual is None else course.manual[:, 0].tolist()
    kp = ki_h = kd = weight = keep = back = share = w = 0.0
    on_error = False
    if gains is not None and tracking is not None:
        one = gains[0]
        kp, ki_h, weight, on_error = one.kp, one.ki * scan_s, one.setpoint_weight, one.derivative_on_error
        keep, share, back = one.filter_s / (one.filter_s + scan_s), one.kd / (one.filter_s + scan_s), tracking[0]
        kd = one.kd
        w = (course.start_setpoint if on_error else 0.0) - rest
    integral = bias - kp * (weight * course.start_setpoint - rest)
    slope = 0.0
    limited = position = bias
    controlled, seen, written = [], [], []
    for k, (r, d, e) in enumerate(
        zip(course.setpoint[:, 0].tolist(), course.load[:, 0].tolist(), course.noise[:, 0].tolist(), strict=True)
    ):
        old = inputs[k]
        y = rest + direct * old + (c1 * x1 + c2 * x2 if two else sum(map(mul, measured, x)))
        controlled.append(y)
        y += e
        if unit > 0.0:
            y = _rounded(y, unit)
        seen.append(y)
        if manual is not None:
            wanted = manual[k]
        else:
            if kd != 0.0:
                last, w = w, r - y if on_error else -y
                slope = keep * slope + share * (w - last)
            move = ki_h * (r - y)
            integral += move
            wanted = kp * (weight * r - y) + integral + slope
        floor, ceiling = max(low, limited - step), min(high, limited + step)
        held_back = wanted > ceiling or wanted < floor
        if held_back and manual is None:
            if back > 0.0:
                integral += back * ((ceiling if wanted > ceiling else floor) - wanted)
            elif actuator.conditional and (move > 0.0) == (wanted > ceiling):
                integral -= move
                wanted -= move
        limited = min(max(wanted, floor), ceiling)
        u = _rounded(limited, output_unit) if output_unit > 0.0 else limited
        written.append(u)
        position = min(max(position, u - half_play), u + half_play) if half_play > 0.0 else u
        inputs.append(position - bias + d)
        new = inputs[k + 1]
        if two:
            x1, x2 = p11 * x1 + p12 * x2 + b1 * old + a1 * new, p21 * x1 + p22 * x2 + b2 * old + a2 * new
        else:
            x = [sum(map(mul, row, x)) + b * old + a * new for row, b, a in rows]
    return (np.array(controlled)[:, None], np.array(seen)[:, None], np.array(written)[:, None])


def scan_many(
    held: Held,
    gains: Sequence[Gains] | None,
    tracking: Sequence[float] | None,
    scan_s: float,
    course: Course,
    actuator: Actuator,
) -> tuple[Array, Array, Array]:
    """Return controlled variable, measurement and output, (n, P) each, of P loops scanned together."""
    scans, loops = course.setpoint.shape
    order = held.measured.shape[1]
    whole = np.concatenate([held.matrix, held.older[:, :, None], held.newer[:, :, None]], axis=2)
    state = np.zeros((loops, order + 2, 1))  # plant states, then the older and the newer input
    x, old, new = state[:, :order, 0], state[:, order, 0], state[:, order + 1, 0]
    longest, each = int(held.scans.max()), np.arange(loops)
    # inputs[k + longest + 1] is v[k], so that row k + longest - m is v[k - m - 1]
    inputs = np.zeros((scans + longest + 1, loops))
    first = longest - held.scans
    rest, bias = course.measurement, course.output
    low, high, step, half_play = actuator.low, actuator.high, actuator.step, actuator.half_play
    unit, output_unit = actuator.measurement_unit, actuator.output_unit
    limits = not (np.isinf(low) and np.isinf(high) and np.isinf(step))
    kp = ki_h = kd = weight = keep = share = back = np.zeros(loops)
    on_error = np.zeros(loops)
    if gains is not None and tracking is not None:
        kp, ki_h, kd = (np.array([getattr(one, name) for one in gains]) for name in ("kp", "ki", "kd"))
        filters = np.array([one.filter_s for one in gains]) + scan_s
        ki_h, weight = ki_h * scan_s, np.array([one.setpoint_weight for one in gains])
        keep, share, back = 1.0 - scan_s / filters, kd / filters, np.array(tracking)
        on_error = np.array([1.0 if one.derivative_on_error else 0.0 for one in gains])
    derives = bool(np.any(kd != 0.0))
    integral = bias - kp * (weight * course.start_setpoint - rest)
    w = on_error * course.start_setpoint - rest
    slope: Array = np.zeros(loops)
    limited = position = np.full(loops, bias)
    controlled, seen, written = np.empty((scans, loops)), np.empty((scans, loops)), np.empty((scans, loops))
    for k in range(scans):
        old[:] = inputs[first + k, each]
        y = rest + held.direct * old + (held.measured * x).sum(axis=1)
        controlled[k] = y
        y = y + course.noise[k]
        if unit > 0.0:
            y = unit * np.round(y / unit)
        seen[k] = y
        if course.manual is not None:
            wanted = course.manual[k]
        else:
            r = course.setpoint[k]
            if derives:
                last, w = w, on_error * r - y
                slope = keep * slope + share * (w - last)
            move = ki_h * (r - y)
            integral = integral + move
            wanted = kp * (weight * r - y) + integral + slope
        if limits:
            floor, ceiling = np.maximum(low, limited - step), np.minimum(high, limited + step)
            if course.manual is None:
                over = wanted > ceiling
                held_back = over | (wanted < floor)
                if held_back.any():
                    excess = np.where(over, ceiling, floor) - wanted
                    integral = integral + np.where(held_back & (back > 0.0), back * excess, 0.0)
                    if actuator.conditional:
                        undone = np.where(held_back & (back == 0.0) & ((move > 0.0) == over), move, 0.0)
                        integral, wanted = integral - undone, wanted - undone
            limited = np.minimum(np.maximum(wanted, floor), ceiling)
        else:
            limited = wanted
        u = output_unit * np.round(limited / output_unit) if output_unit > 0.0 else limited
        written[k] = u
        position = np.minimum(np.maximum(position, u - half_play), u + half_play) if half_play > 0.0 else u
        inputs[k + longest + 1] = position - bias + course.load[k]
        new[:] = inputs[first + k + 1, each]
        x[:] = (whole @ state)[:, :, 0]
    return controlled, seen, written


def _rounded(value: float, unit: float) -> float:
    multiple = value / unit
    return unit * round(multiple) if abs(multiple) < 2.0**53 else value  # beyond, all floats are whole
