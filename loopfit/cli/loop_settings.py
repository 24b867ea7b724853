"""Options for the present settings of a controller and for what is wanted of new ones."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import TYPE_CHECKING, Annotated, Any

import typer

from loopfit.core.errors import UsageError

if TYPE_CHECKING:
    from loopfit.case.schema import Case
    from loopfit.loop.settings import Settings

Pair = tuple[float, float] | None
Form = Annotated[str | None, typer.Option(help="Form of the controller: ideal, parallel or series.")]
Gain = Annotated[float | None, typer.Option(help="Gain as its screen shows it.")]
Band = Annotated[float | None, typer.Option("--proportional-band", help="Proportional band instead of a gain, %.")]
Integral = Annotated[str | None, typer.Option(help="Integral: 150, 2.5min, 0.8/min (repeats), off.")]
Derivative = Annotated[str | None, typer.Option(help="Derivative: 15, 0.25min, off.")]
Filter = Annotated[str | None, typer.Option("--filter", help="Filter of the derivative: 1.5, 100ms.")]
Weight = Annotated[float | None, typer.Option("--setpoint-weight", help="Setpoint weight, where it has that setting.")]
Scan = Annotated[str | None, typer.Option(help="Scan interval: 0.5, 100ms.")]
Reverse = Annotated[bool | None, typer.Option("--reverse/--direct", help="Output falls or rises with measurement.")]
DerivativeOn = Annotated[str | None, typer.Option(help="What is differentiated: measurement or error.")]
MeasurementRange = Annotated[Pair, typer.Option(metavar="LOW HIGH", help="Range in which the controller is in %.")]
OutputRange = Annotated[Pair, typer.Option(metavar="LOW HIGH", help="Range of the output of such a controller.")]
OutputLimits = Annotated[Pair, typer.Option(metavar="LOW HIGH", help="Limits of the output, in its own unit.")]

Damping = Annotated[float | None, typer.Option("--damping-ratio", help="Wanted, above 0 to 1; 1 unless said.")]
Overshoot = Annotated[float | None, typer.Option(help="Most overshoot of a setpoint step, %.")]
Settling = Annotated[str | None, typer.Option(help="Longest settling time: 90, 1.5min.")]
Sensitivity = Annotated[float | None, typer.Option("--max-sensitivity", help="Its limit; 1.6 unless said.")]
NoiseGain = Annotated[float | None, typer.Option(help="Most plant gain x high-frequency gain; 20 unless said.")]
Terms = Annotated[str | None, typer.Option("--controller", help="P, PI, PD or PID; else those it has, or PI.")]
Move = Annotated[
    list[str] | None, typer.Option(metavar="NAME", help="Only this may change: gain, integral, derivative. Repeat.")
]
AtLeast = Annotated[
    list[str] | None,
    typer.Option(metavar="NAME=VALUE", help="Least gain, integral_time_s, derivative_time_s, ideal form. Repeat."),
]
AtMost = Annotated[list[str] | None, typer.Option(metavar="NAME=VALUE", help="Largest of the same. Repeat.")]
Digits = Annotated[int | None, typer.Option(help="Significant digits that the screen takes.")]
TargetConfidence = Annotated[
    float | None, typer.Option("--confidence-of-target", help="Probability of meeting it, %; 90 unless said.")
]
Nominal = Annotated[bool, typer.Option("--nominal", help="Design for the fitted plant alone.")]

_CONTROLLER = {
    "form": "form", "gain": "gain", "proportional_band": "proportional_band_percent", "integral": "integral",
    "derivative": "derivative", "filter_": "filter", "setpoint_weight": "setpoint_weight", "scan": "scan",
    "derivative_on": "derivative_on", "measurement_range": "measurement_range", "output_range": "output_range",
    "output_limits": "output_limits",
}  # fmt: skip
_TARGET = {
    "damping_ratio": "damping_ratio", "overshoot": "overshoot_percent", "max_sensitivity": "max_sensitivity",
    "noise_gain": "noise_gain", "digits": "digits", "confidence_of_target": "confidence_of_target_percent",
}  # fmt: skip


def settings_from(options: Mapping[str, Any], case: Case | None = None) -> Settings | None:
    """Return the present settings: those of the options, then those of the case; None without any.

    Raises
    ------
    UsageError
        If what was typed makes no controller.
    CaseError
        If what the case alone holds makes none.
    """
    from loopfit.case.arguments import settings_of
    from loopfit.case.words import CaseError
    from loopfit.loop.units import OFF

    typed = {key: options[name] for name, key in _CONTROLLER.items() if options[name] is not None}
    if options["reverse"] is not None:
        typed["action"] = "reverse" if options["reverse"] else "direct"
    held = {} if case is None else dict(case.controller)
    if {"gain", "proportional_band_percent"} & typed.keys():
        held = {key: value for key, value in held.items() if key not in ("gain", "proportional_band_percent")}
    if str(typed.get("derivative", "")).strip().casefold() == OFF:
        held.pop("filter", None)  # of that derivative
    try:
        return settings_of({**held, **typed})
    except UsageError as problem:
        if case is not None and not typed:
            raise CaseError(case.file, "controller", str(problem)) from None
        raise


def target_from(options: Mapping[str, Any], case: Case | None = None) -> dict[str, Any]:
    """Return what is wanted as keyword arguments of `retune`: the options, then the case."""
    from loopfit.case.arguments import target_arguments
    from loopfit.loop.units import time_of
    from loopfit.tuning.goal import SETTINGS

    typed = {key: options[name] for name, key in _TARGET.items() if options[name] is not None}
    if options["settling"] is not None:
        entry = time_of(options["settling"], "--settling")
        if entry is None:
            raise UsageError("--settling is a time such as 90 or 1.5min; leave it out for none")
        typed["settling_s"] = entry.amount
    if options["controller"] is not None:
        typed["controller"] = _one_of("--controller", options["controller"].upper(), ("P", "PI", "PD", "PID"))
    if options["move"]:
        typed["move"] = tuple(_one_of("--move", name, SETTINGS) for name in options["move"])
    held = {} if case is None else dict(case.target)
    for name in ("at_least", "at_most"):
        if options[name]:
            typed[name] = {**held.get(name, {}), **_bounds(f"--{name.replace('_', '-')}", options[name])}
    if options["nominal"]:
        if "confidence_of_target_percent" in typed:
            raise UsageError("give --confidence-of-target or --nominal, not both")
        typed["nominal"] = True
        held.pop("confidence_of_target_percent", None)
    elif "confidence_of_target_percent" in typed:
        held.pop("nominal", None)
    return target_arguments({**held, **typed})


def _bounds(option: str, texts: Iterable[str]) -> dict[str, float]:
    from loopfit.loop.units import time_of
    from loopfit.tuning.goal import LIMITED

    made: dict[str, float] = {}
    for text in texts:
        name, sign, value = (part.strip() for part in text.partition("="))
        if not sign:
            raise UsageError(f"{option} takes NAME=VALUE, such as gain=3, not {text!r}")
        name = _one_of(option, name, LIMITED)
        try:
            made[name] = float(value)
        except ValueError:
            entry = time_of(value, f"{option} {name}") if name != "gain" else None
            if entry is None:
                raise UsageError(f"{option} {name} takes a number, not {value!r}") from None
            made[name] = entry.amount
    return made


def _one_of(option: str, name: str, known: Iterable[str]) -> str:
    from loopfit.case.words import hint

    names = tuple(known)
    if name not in names:
        raise UsageError(f"{option} {name!r} is not known; {hint(name, names)}")
    return name
