"""What protects a proposal from a plant that does not obey: lost motion refused, a resonance modelled, the rest bounded.

Friction and lost motion are asked of records whose output moved in automatic: a single step in manual is blind to them. The
levels at which the loop rested check a plant that rests on typed settings; steps that disagree each count as a plant.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace
from itertools import pairwise

import numpy as np

from loopfit.analysis.result import Analysis, StepFigures
from loopfit.core.arrays import Array
from loopfit.core.finding import Finding
from loopfit.core.quantity import Quantity
from loopfit.fit.convolution import even_grid
from loopfit.identify.disc import disc_of
from loopfit.identify.identified import Identified
from loopfit.identify.lost_motion import lost_motion_of
from loopfit.identify.refusals import levels_agree, levels_differ, levels_refuse, steps_disagree
from loopfit.identify.resonance import resonance_of
from loopfit.loop.plant import Plant
from loopfit.loop.simulate import simulate
from loopfit.record.record import Record

HELD_BACK = 1.3  # maximum sensitivity that a plant may be designed for whose fast part was not recorded
_FEWEST_ROWS, _MOST_ROWS = 60, 5_000
_REST_SHARE = 0.3  # of the rows at one setpoint, at their end: those that tell the level
_REST_ROWS = 8
_PARTS = 4
_STUDENT = 3.18  # 95 %, of four means
_MOVING = 0.1  # of the change of levels, from the first part of a rest to the last
_VAGUE = 0.5  # half the interval of the levels' gain over the gain, from which it tells nothing
_FAR = 1.3  # ratio of gains beyond which settings as typed cannot have been those in the controller
_TAILS = (0.025, 0.975)


def protected(found: Identified) -> Identified:
    """Return the plant with what its own record says against it.

    Parameters
    ----------
    found : Identified
        From the recorded output to the measurement, or through the loop; others are returned as they are.
    """
    record = found.record
    if found.how == "through the loop" and found.refused is None:
        text = (
            f"The plant was fitted without the output of every scan: the design keeps the sensitivity at most {HELD_BACK:g}, "
            "since the record cannot show what the plant does at a faster pace than the present loop's."
        )
        finding = Finding(code="held_back", severity="note", text=text)
        return replace(found, most_sensitivity=HELD_BACK, findings=(*found.findings, finding))
    if found.how == "open step" and found.refused is None:
        return _with_resonance(found)
    if found.how != "output to measurement" or found.refused is not None or record is None or record.output is None:
        return found
    if record.time.size < _FEWEST_ROWS or even_grid(record.time) is None:
        return found
    time, output, measurement = record.time, record.output.values, record.measurement.values
    left = left_over(found.plant, record)
    resonant = _with_resonance(found)
    if resonant is not found:
        return resonant
    motion = lost_motion_of(time, output, measurement, found.plant, left)
    if motion.refused and motion.text is not None:
        return replace(found, refused=motion.text)
    return replace(found, disc=disc_of(time, output, left))


def _with_resonance(found: Identified) -> Identified:
    """Return the plant with the resonance that its record shows; as it is, where it shows none."""
    record = found.record
    if record is None or record.output is None or not _FEWEST_ROWS <= record.time.size <= _MOST_ROWS:
        return found
    if even_grid(record.time) is None or found.plant.rational is not None:
        return found
    left = left_over(found.plant, record)
    plant = resonance_of(record.time, record.output.values, record.measurement.values, found.plant, left)
    if plant is None:
        return found
    text = (
        "The record shows a resonance beside the plant's lag, as of two masses on a shaft: the settings are designed for it, "
        "on the fitted plant alone, and the attainable damping is lower."
    )
    finding = Finding(code="resonance", severity="warning", text=text)
    return replace(found, plant=plant, draws=(), fresh=(), findings=(*found.findings, finding))


def left_over(plant: Plant, record: Record) -> Array:
    """Return what the plant, driven by the recorded output leaves of the measurement (n,), rest and free motion taken out."""
    assert record.output is not None
    values, output = record.measurement.values, record.output.values
    interval = float(np.median(np.diff(record.time)))
    followed = simulate(
        plant, None, scan_s=interval, scans=values.size, output=output, initial_output=float(output[0]),
        initial_measurement=float(values[0]),
    ).measurement  # fmt: skip
    left = values - followed
    since = record.time - record.time[0]
    columns = [np.ones_like(since)]
    if plant.integrating:  # the output that holds the level is not known: its error is a slope
        columns.append(since)
    for pole in np.roots(plant.denominator):  # the record need not begin at rest
        if pole.real < 0 and pole.imag >= 0:
            motion = np.exp(np.maximum(pole * since, -700.0)) if pole.imag == 0 else np.exp(pole * since)
            columns += [motion.real] if pole.imag == 0 else [motion.real, motion.imag]
    table = np.stack(columns, axis=1)
    return np.asarray(left - table @ np.linalg.lstsq(table, left, rcond=None)[0])


def checked_by_levels(found: Identified, record: Record, rng: np.random.Generator) -> Identified:
    """Return a plant that was fitted through typed settings with what the levels at rest say of its gain.

    Parameters
    ----------
    found : Identified
        With draws; one that integrates is returned as it is: it rests at any level of its output.
    record : Record
        With the setpoint, and the output at least now and then; else nothing can be compared.
    rng : numpy Generator
        Of the gains that the levels allow.
    """
    levels = None if found.plant.integrating or found.refused is not None else levels_gain(record)
    if levels is None:
        return found
    gain, half = levels
    gains = [plant.gain for plant in (*found.draws, *found.fresh)] or [found.plant.gain]
    low, high = (float(bound) for bound in np.quantile(gains, _TAILS))
    ratio = found.plant.gain / gain
    near = 1.0 / _FAR <= ratio <= _FAR
    meet = low <= gain + half and gain - half <= high
    if not meet and not near:
        return replace(found, refused=levels_refuse(found.plant.gain, (low, high), gain, half))
    if near and low <= gain <= high:
        return replace(found, findings=(*found.findings, levels_agree(found.plant.gain, gain)))
    return replace(
        found,
        draws=_half_with_gain(found.draws, found.plant.gain, gain, half, rng),
        fresh=_half_with_gain(found.fresh, found.plant.gain, gain, half, rng),
        findings=(*found.findings, levels_differ(found.plant.gain, gain, meet=near and meet)),
    )


def levels_gain(record: Record) -> tuple[float, float] | None:
    """Return change of the measurement over change of the output between two rests, and half its 95 % interval.

    Rest before the first step of the setpoint against that rest at another setpoint at which the output lies furthest
    away; None unless there are two, and they tell a gain. The intervals of levels are those of means of four parts.
    """
    if record.setpoint is None or record.output is None:
        return None
    cuts = [0, *(np.flatnonzero(np.diff(record.setpoint.values)) + 1).tolist(), record.time.size]
    rests = [_rest(record, begin, end) for begin, end in pairwise(cuts)]
    if rests[0] is None:
        return None
    first = rests[0]
    best: tuple[float, float, float] | None = None
    for other in rests[1:]:
        if other is None:
            continue
        (y, y_half, y_moved), (u, u_half, u_moved) = (
            (b[0] - a[0], math.hypot(a[1], b[1]), max(a[2], b[2])) for a, b in zip(first, other, strict=True)
        )
        if u == 0.0 or y == 0.0 or y_moved > _MOVING * abs(y) or u_moved > _MOVING * abs(u):
            continue
        half = abs(y / u) * math.hypot(y_half / y, u_half / u)
        if half < _VAGUE * abs(y / u) and (best is None or abs(u) > best[0]):
            best = (abs(u), y / u, half)
    return None if best is None else best[1:]


def _rest(record: Record, begin: int, end: int) -> list[tuple[float, float, float]] | None:
    """Return the levels of measurement and output at the end of some rows at one setpoint; None where these are too few.

    Before the first step all rows count: they are at rest, or none are.
    """
    assert record.output is not None
    if end - begin < (2 * _REST_ROWS if begin else _PARTS):
        return None
    first = end - max(int(_REST_SHARE * (end - begin)), _REST_ROWS) if begin else 0
    return [_level(signal.values[first:end]) for signal in (record.measurement, record.output)]


def _level(values: Array) -> tuple[float, float, float]:
    """Return level, half its 95 % interval, and how far it moved from the first part to the last beyond that."""
    means = np.array([part.mean() for part in np.array_split(values, _PARTS)])
    half = _STUDENT * float(np.std(means, ddof=1)) / math.sqrt(_PARTS)
    return float(values.mean()), half, abs(float(means[-1] - means[0]))


def _half_with_gain(
    plants: Sequence[Plant], fitted: float, gain: float, half: float, rng: np.random.Generator
) -> tuple[Plant, ...]:
    """Return the plants, every second one with its gain moved by what lies between the fitted gain and that of the levels."""
    factors = (gain + half / 2.0 * rng.standard_normal(len(plants))) / fitted
    return tuple(
        replace(plant, gain=plant.gain * float(factor)) if i % 2 and factor > 0.0 else plant
        for i, (plant, factor) in enumerate(zip(plants, factors, strict=True))
    )


def with_every_step(found: Identified, analysis: Analysis, rng: np.random.Generator) -> Identified:
    """Return a plant whose draws come from every step alike, where the steps of a record disagree."""
    if not any(finding.code == "depends_on_step" for finding in analysis.findings) or analysis.step is None:
        return found
    used = analysis.step.time_s
    others = [
        one for one in analysis.per_step
        if one.step.time_s != used and one.gain is not None and one.gain.value * found.plant.gain > 0.0
    ]  # fmt: skip
    if not others:
        return found
    kinds: list[StepFigures | None] = [None, *others]
    draws, fresh = (
        tuple(_of_step(plant, kinds[i % len(kinds)], rng) for i, plant in enumerate(plants))
        for plants in (found.draws, found.fresh)
    )
    gains = [found.plant.gain, *(one.gain.value for one in others if one.gain is not None)]
    return replace(found, draws=draws, fresh=fresh, findings=(*found.findings, steps_disagree(gains)))


def _of_step(plant: Plant, step: StepFigures | None, rng: np.random.Generator) -> Plant:
    """Return a plant as another step tells it; of a plant that is not of second order the gain alone."""
    if step is None or step.gain is None:
        return plant
    gain = _drawn(step.gain, rng)
    if gain * plant.gain <= 0.0:
        gain = step.gain.value
    damping, frequency, dead = step.damping_ratio, step.natural_frequency_rad_s, step.dead_time_s
    if plant.integrating or damping is None or frequency is None or dead is None:
        return replace(plant, gain=gain)
    return Plant(
        gain=gain,
        damping_ratio=max(_drawn(damping, rng), damping.value / 2.0),
        natural_frequency_rad_s=max(_drawn(frequency, rng), frequency.value / 2.0),
        dead_time_s=max(_drawn(dead, rng), 0.0),
    )


def _drawn(quantity: Quantity, rng: np.random.Generator) -> float:
    """Return a value from the interval, each side of it as wide as it is; an open side counts as nothing."""
    deviate = float(rng.standard_normal())
    side = quantity.high - quantity.value if deviate > 0.0 else quantity.value - quantity.low
    return quantity.value + (deviate * side / 2.0 if math.isfinite(side) else 0.0)
