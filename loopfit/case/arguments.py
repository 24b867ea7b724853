"""From what a case holds to the arguments of the functions that use it."""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping
from typing import TYPE_CHECKING, Any

from loopfit.core.errors import UsageError

if TYPE_CHECKING:
    from loopfit.loop.settings import Settings

_AS_TYPED = {  # names of Settings as a case has them
    "integral_time_s": "integral", "integral_gain_per_s": "integral", "derivative_time_s": "derivative",
    "derivative_gain_s": "derivative", "derivative_filter_s": "filter", "scan_s": "scan",
}  # fmt: skip
_NAMES = re.compile(rf"\b({'|'.join(_AS_TYPED)})\b")


def reading_arguments(reading: Mapping[str, Any]) -> dict[str, Any]:
    """Return the keyword arguments of `analyze`."""
    made = dict(reading)
    window = made.pop("from_s", None), made.pop("to_s", None)
    if window != (None, None):
        made["window_s"] = window
    return made


def settings_of(controller: Mapping[str, Any]) -> Settings | None:
    """Return the settings of a controller as typed; None when nothing is known of it.

    Raises
    ------
    UsageError
        If they contradict each other, in the words of the case.
    """
    if not controller:
        return None
    from loopfit.loop.settings import Settings

    made = dict(controller)
    form = made.pop("form", "ideal")
    if "filter" in made:
        made["derivative_filter"] = made.pop("filter")
    try:
        return Settings.from_entry(form, **made)
    except UsageError as problem:
        raise UsageError(_NAMES.sub(lambda match: _AS_TYPED[match[1]], str(problem))) from None


def target_arguments(target: Mapping[str, Any]) -> dict[str, Any]:
    """Return the keyword arguments of `retune` that say what is wanted."""
    made = dict(target)
    if made.pop("nominal", False):
        made["confidence_of_target_percent"] = None
    return made


def check_controller(controller: Mapping[str, Any]) -> Iterator[tuple[str, str]]:
    """Yield the place and the problem of each setting that its form cannot have."""
    from loopfit.loop.units import derivative_of, integral_of, time_of

    form = controller.get("form", "ideal")
    for name, value in controller.items():
        try:
            if name == "integral":
                integral_of(value, "it", form=form)
            elif name == "derivative":
                derivative_of(value, "it", form=form)
            elif name in ("filter", "scan"):
                time_of(value, "it")
            elif name == "gain" and value == 0.0:
                raise UsageError("it is not 0: such a controller does nothing")
        except UsageError as problem:
            yield f"controller.{name}", str(problem)


def check_target(target: Mapping[str, Any]) -> Iterator[tuple[str, str]]:
    """Yield the place and the problem of each wish that cannot be one, alone or with another."""
    from loopfit.tuning.goal import Goal

    for name, value in target.items():
        try:
            if name == "confidence_of_target_percent":
                Goal(confidence=value / 100.0)
            elif name not in ("controller", "move", "digits", "nominal"):
                Goal(**{name: value})
        except UsageError as problem:
            yield f"target.{name}", str(problem)
    if target.get("nominal") and "confidence_of_target_percent" in target:
        yield "target.nominal", "confidence_of_target_percent is there too: give one of the two"
    least, most = target.get("at_least", {}), target.get("at_most", {})
    for name in least.keys() & most.keys():
        if not least[name] <= most[name]:
            yield f"target.at_most.{name}", f"{most[name]:g} lies below its at_least, {least[name]:g}"
