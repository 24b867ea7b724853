"""What is said with every proposal, and what is true of this loop in particular."""

from __future__ import annotations

import math
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np

from loopfit.loop.gains import Gains
from loopfit.loop.margins import margins_of
from loopfit.loop.plant import Plant
from loopfit.loop.sampled import scan_matters, with_scan
from loopfit.tuning.screen import lag_sum
from loopfit.tuning.setpoint_overshoot import setpoint_overshoot
from loopfit.tuning.swing import swing_on

if TYPE_CHECKING:
    from loopfit.tuning.result import LoopFigures

_MUCH = 3.0
_RAISED = 1.005
_SHORT = 0.02  # of damping ratio, from which lower gain is said to swing more


def cautions(
    plant: Plant, present: Gains | None, proposed: Gains, *, scan_s: float | None = None, late: bool = False,
    damping_ratio: float = 1.0, noise: float | None = None, operating_range: str | None = None,
    figures: LoopFigures | None = None,
) -> tuple[str, ...]:  # fmt: skip
    """Return the sentences that go with a proposal: the truths of this loop, then what holds for every loop.

    Parameters
    ----------
    plant : Plant
    present : Gains or None
        None: unknown.
    proposed : Gains
    scan_s, late : float, bool
        Scan interval, s, and whether the output is written one scan later.
    damping_ratio : float
        The target.
    noise : float, optional
        Standard deviation of the measurement noise from scan to scan, measurement units.
    operating_range : str, optional
        Of the record, in words: "40 to 55 °C".
    figures : LoopFigures, optional
        Predicted with the proposed settings: the overshoot that is printed beside these sentences.
    """
    said = truths(
        plant, present, proposed, scan_s=scan_s, late=late, damping_ratio=damping_ratio, noise=noise, figures=figures
    )
    return (*said, *always(operating_range))


def always(operating_range: str | None = None) -> tuple[str, ...]:
    """Return the cautions of every proposal."""
    within = "" if operating_range is None else f", {operating_range}"
    return (
        "loopfit writes to no controller: a person enters these settings and answers for them.",
        "Try the settings on the model first, then on the process in small stages, with a person at the controller who "
        "can put it in manual.",
        "A gain that is changed in automatic can bump the output: change it in manual, or with the measurement at rest at "
        "its setpoint.",
        "In a cascade the inner loop comes first, with the outer one in manual; then the outer loop is tuned anew.",
        f"The settings are valid for the operating range of the record{within}: elsewhere the plant may be another.",
        "Protective functions and interlocks stay in service and as they are.",
        "Site procedure and local codes come first, and the responsible licensed engineer approves the change.",
    )


def truths(
    plant: Plant, present: Gains | None, proposed: Gains, *, scan_s: float | None = None, late: bool = False,
    damping_ratio: float = 1.0, noise: float | None = None, figures: LoopFigures | None = None,
) -> tuple[str, ...]:  # fmt: skip
    """Return what a person must know of this loop, the setpoint's overshoot first; arguments as for `cautions`."""
    loop = (plant, proposed) if scan_s is None else with_scan(plant, proposed, scan_s, late=late)
    foreseen = None if figures is None or figures.overshoot_percent is None else figures.overshoot_percent.value
    found = (
        setpoint_overshoot(*loop, damping_ratio, foreseen),
        *changes(present, proposed),
        _less_gain(plant, proposed, scan_s, late),
        _level(plant, present, proposed),
        _noise(present, proposed, scan_s, noise),
        _scan(plant, proposed, scan_s),
        _dead_time(plant),
        _wrong_way(plant),
        _conditional(*loop),
        _runaway(plant),
    )
    return tuple(sentence for sentence in found if sentence is not None)


def changes(present: Gains | None, proposed: Gains) -> tuple[str, ...]:
    """Say which settings of the ideal form rise or fall more than threefold, and that the gain is raised."""
    if present is None:
        return ()
    if present.kp * proposed.kp < 0.0:
        return (
            "The gain changes its sign: the action of the controller is reversed. Make sure of the sign before anything else.",
        )
    out: list[str] = []
    much = False
    rows = (
        ("gain", abs(present.kp), abs(proposed.kp), ""),
        ("integral time", _ratio(present.kp, present.ki), _ratio(proposed.kp, proposed.ki), " s"),
        ("derivative time", _ratio(present.kd, present.kp), _ratio(proposed.kd, proposed.kp), " s"),
    )
    for name, old, new, unit in rows:
        here, there = 0.0 < old < math.inf, 0.0 < new < math.inf
        if here != there:
            term = {"gain": "proportional", "integral time": "integral", "derivative time": "derivative"}[name]
            was = f"a {name} of {_shown(new if there else old)}{unit}"
            out.append(
                f"The {term} action is {'new' if there else 'taken away'}: {was}, {'none before' if there else 'none now'}."
            )
        elif here:
            factor = new / old
            large = max(factor, 1.0 / factor) > _MUCH
            much |= large
            if not large and not (name == "gain" and factor > _RAISED):
                continue
            way = f"rises {factor:.3g} times" if factor > 1.0 else f"falls {1.0 / factor:.3g} times"
            said = f"The {name} {way}, from {_shown(old)} to {_shown(new)}{unit}"
            out.append(f"{said}: {'more than threefold' if large else 'the output will move more than it does now'}.")
    if much:
        out.append(
            "So large a change may come from a setting read in another unit or form: check the present ones before the first stage."
        )
    return tuple(out)


def _less_gain(plant: Plant, gains: Gains, scan_s: float | None, late: bool) -> str | None:
    """Say that a lower gain alone swings more, where it does."""
    if gains.ki == 0.0 or gains.kp == 0.0:
        return None

    def damping(gain: float, integral: float) -> float:
        some = replace(gains, kp=gain * gains.kp, ki=integral * gains.ki, kd=gain * gains.kd)
        swing = swing_on(plant, some, scan_s, late=late)
        return -1.0 if swing is None else swing.visible_damping

    whole, half, quarter = damping(1.0, 1.0), damping(0.5, 0.5), damping(0.25, 0.25)
    if not min(half, quarter) < whole - _SHORT:
        return None
    first = "This plant integrates: a" if plant.integrating else "A"
    return (
        f"{first} lower gain alone makes the loop swing more. With the integral time left at {_shown(gains.kp / gains.ki)} s "
        f"the damping ratio is {_damped(whole)} with the proposed gain, {_damped(half)} with half of it, "
        f"{_damped(quarter)} with a quarter. Lengthen the integral time first: with twice that time half the gain gives "
        f"{_damped(damping(0.5, 0.25))}."
    )


def _level(plant: Plant, present: Gains | None, proposed: Gains) -> str | None:
    if not plant.integrating:
        return None
    if present is not None and max(_over(proposed.kp, present.kp), _over(proposed.ki, present.ki)) <= _RAISED:
        return None
    return (
        "If this is the level of a vessel that is there to even out the flow, do not tighten it without need: a tighter "
        "level passes every change of the inflow on to the outflow."
    )


def _noise(present: Gains | None, proposed: Gains, scan_s: float | None, noise: float | None) -> str | None:
    if proposed.kd == 0.0:
        return None
    if noise is not None and scan_s is not None:
        now = (
            f"a measurement noise of {_shown(noise)} moves the output by {_shown(noise * noise_gain(proposed, scan_s))}"
        )
        before = None if present is None else noise * noise_gain(present, scan_s)
        kind = "(standard deviations"
    else:
        # without a scan interval white noise has no size: what a jump does is said instead
        now = f"a jump of the measurement by 1 moves the output by {_shown(_jump(proposed))} at once"
        before = None if present is None else _jump(present)
        kind = "(in their units"
    than = ")" if before is None else f"; with the present settings {_shown(before)})"
    return f"The derivative passes measurement noise on: {now} {kind}{than}. Watch the actuator for wear."


def noise_gain(gains: Gains, scan_s: float) -> float:
    """Return the standard deviation of the output over that of noise that is new at every scan, by the controller alone.

    With b = kd / (Tf + h) and a = Tf / (Tf + h) of the backward difference: (kp + b)^2 + b^2 (1 - a) / (1 + a), the sum
    of the squared impulse response without the integral action; what comes back around the loop is left out.
    """
    b, a = gains.kd / (gains.filter_s + scan_s), gains.filter_s / (gains.filter_s + scan_s)
    return math.sqrt((gains.kp + b) ** 2 + b**2 * (1.0 - a) / (1.0 + a))


def _jump(gains: Gains) -> float:
    return abs(gains.kp + (gains.kd / gains.filter_s if gains.kd != 0.0 else 0.0))


def _scan(plant: Plant, proposed: Gains, scan_s: float | None) -> str | None:
    if scan_s is None:
        return None
    effect = scan_matters(plant, proposed, scan_s)
    if effect.word == "small":
        return None
    return f"{effect.sentence[0].upper()}{effect.sentence[1:]}. A shorter scan interval would allow more."


def _dead_time(plant: Plant) -> str | None:
    if plant.integrating:
        return None
    lags = lag_sum(plant)
    if not plant.dead_time_s > lags:
        return None
    return (
        f"Dead time dominates: {_shown(plant.dead_time_s)} s against {_shown(max(lags, 0.0))} s of lag. For so long after a "
        "load no settings can answer it; only a shorter dead time makes the loop faster."
    )


def _wrong_way(plant: Plant) -> str | None:
    if not np.any(np.roots(plant.numerator).real > 0.0):
        return None
    return "The plant first answers in the wrong direction: a tighter loop makes that worse, not better."


def _conditional(plant: Plant, gains: Gains) -> str | None:
    least = margins_of(plant, gains).gain_reduction_margin
    if least is None:
        return None
    return (
        f"The loop is conditionally stable: it becomes unstable when its gain falls below {least:.2g} of the proposed one, "
        "as it does in effect while the output is held at a limit."
    )


def _runaway(plant: Plant) -> str | None:
    if not np.any(
        np.roots(plant.denominator).real > 1e-9 * max(1e-300, np.abs(np.roots(plant.denominator)).max(initial=0.0))
    ):
        return None
    return (
        "The plant does not rest without its controller: manual is no safe place for it. Agree beforehand how to stop."
    )


def _ratio(top: float, bottom: float) -> float:
    return abs(top / bottom) if bottom != 0.0 else math.inf


def _over(new: float, old: float) -> float:
    return abs(new) / abs(old) if old != 0.0 else (math.inf if new != 0.0 else 0.0)


def _shown(value: float) -> str:
    return f"{float(f'{value:.3g}'):.12g}"


def _damped(damping: float) -> str:
    return f"{damping:.2f}" if damping > 0.0 else "below 0, unstable,"
