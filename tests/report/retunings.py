"""Retunings made by hand from simulated loops: what the page and the picture are tested on."""

from __future__ import annotations

from dataclasses import replace
from functools import cache

import numpy as np

from loopfit.analysis.analyze import analyze
from loopfit.analysis.result import Analysis
from loopfit.core.finding import Finding
from loopfit.identify.identified import Identified
from loopfit.identify.typed import TypedCheck
from loopfit.loop.gains import Gains
from loopfit.loop.plant import Plant
from loopfit.loop.settings import Settings
from loopfit.loop.simulate import simulate
from loopfit.tuning.design import design
from loopfit.tuning.forecast import forecast
from loopfit.tuning.goal import Goal
from loopfit.tuning.result import Move, Retuning, Side

CAUTIONS = (
    "Try the settings on a simulation of the loop first: what stands here is a prediction from one record, and no more.",
    "Go in small stages, one at a time; at each, watch a small upset die away before the next one.",
    "Have a person at manual for as long as settings are being changed.",
    "Changing the gain in automatic bumps the output by the change times the error: change it at rest, or in manual.",
    "Where this loop is the inner one of a cascade, tune it first, and the outer one after it.",
    "Valid for the operating range of the record only; elsewhere the plant is another one.",
    "Leave protective functions and interlocks as they are.",
    "Site procedure and local codes come first; a responsible licensed engineer decides.",
)
HEATER = Plant(gain=2.0, time_constants_s=(120.0, 30.0), dead_time_s=20.0)
HEATER_NOW = Settings.from_entry(
    "ideal", proportional_band_percent=40.0, integral="1.2min", action="reverse", measurement_range=(0.0, 400.0),
    output_range=(0.0, 100.0), scan="2s",
)  # fmt: skip
SERVO = Plant(gain=8.0, time_constants_s=(0.04,), dead_time_s=0.003, integrating=True)
SERVO_NOW = Settings("parallel", gain=8.0, derivative_gain_s=0.02, scan_s=0.002)
LEVEL = Plant(gain=-0.02, time_constants_s=(4.0,), dead_time_s=6.0, integrating=True)
LEVEL_NOW = Settings.from_entry("ideal", gain=0.3, integral="2/min", action="direct")
SWINGING = Plant(gain=1.5, damping_ratio=0.12, natural_frequency_rad_s=2.0, dead_time_s=0.4)
SWINGING_NOW = Settings("series", gain=0.05, integral_time_s=0.3, setpoint_weight=1.0)


def draws_of(plant: Plant, count: int = 12, share: float = 0.05, seed: int = 7) -> tuple[Plant, ...]:
    """Plants about one, every figure off by a share."""
    rng = np.random.default_rng(seed)

    def off(value: float) -> float:
        return value * float(np.exp(share * rng.normal()))

    out = []
    for _ in range(count):
        own = {"gain": off(plant.gain), "dead_time_s": off(plant.dead_time_s)}
        if plant.damping_ratio is not None and plant.natural_frequency_rad_s is not None:
            own["damping_ratio"] = off(plant.damping_ratio)
            own["natural_frequency_rad_s"] = off(plant.natural_frequency_rad_s)
            out.append(replace(plant, **own))
        else:
            lags = tuple(off(lag) for lag in plant.time_constants_s or ())
            out.append(replace(plant, time_constants_s=lags, **own))
    return tuple(out)


def side(plant: Plant, settings: Settings, draws: tuple[Plant, ...] = (), share: float | None = None) -> Side:
    figures = forecast(plant, settings.gains, draws, scan_s=settings.scan_s)
    return Side(settings=settings, gains=settings.gains, figures=figures, probability_of_target=share)


def keyed(gains: Gains, like: Settings | None) -> Settings:
    if like is not None:
        gains = replace(gains, setpoint_weight=like.own_weight(gains))
    return Settings.from_gains(gains, like=like).rounded(4)


def retuned(
    plant: Plant, now: Settings | None, goal: Goal, *, draws: int = 12, share: float | None = 0.94, stages: int = 2,
    **more: object,
) -> Retuning:  # fmt: skip
    """A design with its stages, between which the settings go in equal ratios."""
    found = more.pop("identified", None) or Identified(
        plant=plant,
        how="open step" if draws else "given",
        draws=draws_of(plant, draws),
        fresh=draws_of(plant, 5, seed=8),
    )
    assert isinstance(found, Identified)
    scan = None if now is None else now.scan_s
    designed = design(plant, goal, present=None if now is None else now.gains, scan_s=scan)
    assert designed.gains is not None
    then = keyed(designed.gains, now)
    moves = []
    if now is not None:
        for part in np.linspace(0.0, 1.0, stages + 1)[1:]:
            a, b = now.gains, then.gains
            mixed = replace(
                b, kp=_between(a.kp, b.kp, part), ki=_between(a.ki, b.ki, part), kd=_between(a.kd, b.kd, part)
            )
            step = then if part == 1.0 else keyed(mixed, now)
            moves.append(Move(side=side(plant, step), text="Every straight move from the stage before is stable."))
    return Retuning(
        identified=found, goal=goal, met=designed.met, current=None if now is None else side(plant, now, found.draws),
        proposed=side(plant, then, found.draws, share if draws else None), moves=tuple(moves), cautions=CAUTIONS,
        findings=(Finding(code="short", severity="note", text="The record ends before the loop is quite at rest."),),
        band_percent=2.0, attainable_damping_ratio=designed.attainable_damping_ratio, obstacle=designed.obstacle,
        **more,  # type: ignore[arg-type]
    )  # fmt: skip


def _between(a: float, b: float, part: float) -> float:
    return a + part * (b - a) if a * b <= 0 else a * (b / a) ** part


@cache
def heater_record() -> Analysis:
    """A setpoint step of the ringing heater, its output recorded."""
    scans = 900
    setpoint = np.where(np.arange(scans) < 60, 180.0, 200.0)
    noise = np.random.default_rng(3).normal(0.0, 0.1, scans)
    ran = simulate(
        HEATER, HEATER_NOW.gains, scan_s=2.0, scans=scans, setpoint=setpoint, initial_measurement=180.0,
        initial_output=40.0, noise=noise,
    )  # fmt: skip
    return analyze(time=ran.time, measurement=ran.measurement, setpoint=ran.setpoint, output=ran.output)


@cache
def retuning_of(name: str) -> Retuning:
    """The cases by name."""
    critical = Goal()
    match name:
        case "ringing heater":
            found = Identified(
                plant=HEATER, how="output to measurement", draws=draws_of(HEATER), fresh=draws_of(HEATER, 5, seed=8),
                analysis=heater_record(),
            )  # fmt: skip
            typed = TypedCheck(verdict="agree", text="The recorded output obeys the settings as typed (r² 0.9999).")
            others = (("Skogestad 2003, PI", side(HEATER, keyed(Gains(kp=1.7, ki=0.012), HEATER_NOW))),)
            return retuned(HEATER, HEATER_NOW, critical, identified=found, typed=typed, comparisons=others)
        case "servo":
            return retuned(SERVO, SERVO_NOW, Goal(terms="PD", damping_ratio=0.7))
        case "level":
            return retuned(LEVEL, LEVEL_NOW, critical)
        case "not met":
            return retuned(SWINGING, SWINGING_NOW, critical, share=0.02)
        case "no present settings":
            return retuned(HEATER, None, Goal(terms="PID", damping_ratio=0.7, confidence=None), draws=0)
        case "unstable now":
            return retuned(HEATER, replace(HEATER_NOW, proportional_band_percent=10.0), critical)
        case "refused":
            whole = retuning_of("ringing heater")
            reason = "the valve sticks: the output moves up to 1.2 % before the measurement follows"
            found = replace(whole.identified, refused=reason)
            return replace(whole, identified=found, met=False, proposed=None, moves=(), cautions=(), refused=reason)
    raise KeyError(name)


NAMES = (
    "ringing heater", "servo", "level", "not met", "no present settings", "unstable now", "refused",
)  # fmt: skip
