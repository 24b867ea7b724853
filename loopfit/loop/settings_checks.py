"""What settings of a controller must be, checked as they are made."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING, Any

from loopfit.core.errors import UsageError
from loopfit.loop.forms import FORMS
from loopfit.loop.units import known_unit, number

if TYPE_CHECKING:
    from loopfit.loop.settings import Settings

_BEYOND_RANGE = 0.1  # of the span: outputs are often let somewhat below 0 % and above 100 %
_LEAVE_OUT = "leave it out where the controller has none"
_OF_FORM = {
    "ideal": ("integral_time_s", "derivative_time_s"),
    "series": ("integral_time_s", "derivative_time_s"),
    "parallel": ("integral_gain_per_s", "derivative_gain_s"),
}


def checked(settings: Settings) -> dict[str, Any]:
    """Return the numbers of the settings as floats and the ranges as pairs.

    Raises
    ------
    UsageError
        If a value is not what it should be, or two contradict each other.
    """
    if settings.form not in FORMS:
        raise UsageError(f"the form is one of {', '.join(FORMS)}, not {settings.form!r}")
    if settings.action not in (None, "reverse", "direct"):
        raise UsageError(f"the action is reverse or direct, not {settings.action!r}")
    if settings.derivative_on not in ("measurement", "error"):
        raise UsageError(f"the derivative is on the measurement or on the error, not {settings.derivative_on!r}")
    _one_of_each(settings)
    made = {**_gains(settings), **_times(settings), **_ranges(settings)}
    _units(settings)
    _filter(settings, made)
    _weight(settings, made)
    return made


def _one_of_each(settings: Settings) -> None:
    if settings.gain is not None and settings.proportional_band_percent is not None:
        raise UsageError("give a gain or a proportional band, not both: the band is 100 / gain in % per %")
    for time, gain, word in (
        ("integral_time_s", "integral_gain_per_s", "integral"),
        ("derivative_time_s", "derivative_gain_s", "derivative"),
    ):
        given = [name for name in (time, gain) if getattr(settings, name) is not None]
        if len(given) == 2:
            raise UsageError(f"give one {word} setting, not both {time} and {gain}")
        own = _OF_FORM[settings.form][word == "derivative"]
        if given and given != [own]:
            raise UsageError(f"the {settings.form} form takes {own}, not {given[0]}{_why(settings.form, word)}")
    if settings.gain is None and settings.proportional_band_percent is None:
        if settings.form != "parallel":
            raise UsageError(f"the {settings.form} form needs a gain or a proportional band")
        if settings.integral_gain_per_s is None:
            raise UsageError("a controller needs a gain or an integral gain")


def _why(form: str, word: str) -> str:
    if form != "parallel":
        between = "Ki = K/Ti" if word == "integral" else "Kd = K Td"
        return f": divide it out first ({between}), or say parallel"
    return f": whether its {word} time is tied to the gain, a time does not say"


def _gains(settings: Settings) -> dict[str, Any]:
    made: dict[str, Any] = {}
    if settings.proportional_band_percent is not None:
        made["proportional_band_percent"] = number(
            "proportional_band_percent",
            settings.proportional_band_percent,
            above=0.0,
            hint="a band has no sign; say direct action",
        )
    for name in ("gain", "integral_gain_per_s", "derivative_gain_s"):
        value = getattr(settings, name)
        if value is None:
            continue
        made[name] = number(name, value)
        if made[name] == 0.0:
            raise UsageError(
                f"{name} is not 0: {_LEAVE_OUT}" if name != "gain" else "gain is not 0: such a controller does nothing"
            )
        if settings.action is not None and made[name] < 0.0:
            raise UsageError(
                f"{name} is {made[name]:g}, but with {settings.action} action given it is a magnitude: "
                "the action says the sign"
            )
    return made


def _times(settings: Settings) -> dict[str, Any]:
    made: dict[str, Any] = {}
    for name in ("integral_time_s", "derivative_time_s", "derivative_filter_s", "scan_s"):
        value = getattr(settings, name)
        if value is not None:
            made[name] = number(name, value, above=0.0, hint=_LEAVE_OUT)
    return made


def _ranges(settings: Settings) -> dict[str, Any]:
    made: dict[str, Any] = {
        name: _pair(name, getattr(settings, name))
        for name in ("measurement_range", "output_range", "output_limits")
        if getattr(settings, name) is not None
    }
    lone = {"measurement_range", "output_range"} & made.keys()
    if len(lone) == 1:
        (given,) = lone
        missing = "output_range" if given == "measurement_range" else "measurement_range"
        raise UsageError(
            f"{given} without {missing}: a gain in % per % needs both ranges, one in engineering units needs neither"
        )
    if "output_range" in made and "output_limits" in made:
        low, high = made["output_range"]
        room = _BEYOND_RANGE * (high - low)
        if made["output_limits"][0] < low - room or made["output_limits"][1] > high + room:
            limits = made["output_limits"]
            raise UsageError(
                f"output_limits {limits[0]:g} to {limits[1]:g} lie outside output_range {low:g} to {high:g}: "
                "give both in the output's own unit"
            )
    return made


def _pair(name: str, value: object) -> tuple[float, float]:
    if isinstance(value, str) or not isinstance(value, Sequence) or len(value) != 2:
        raise UsageError(f"{name} is two numbers, low and high, not {value!r}")
    low, high = (number(f"{name} ({end})", one) for end, one in zip(("low", "high"), value, strict=True))
    if not low < high:
        raise UsageError(f"{name} goes from low to high, not from {low:g} to {high:g}")
    return low, high


def _units(settings: Settings) -> None:
    if settings.integral_unit is not None:
        known_unit("integral_unit", settings.integral_unit, rates=True, times=settings.form != "parallel")
    known_unit("derivative_unit", settings.derivative_unit, rates=False)
    known_unit("filter_unit", settings.filter_unit, rates=False)


def _filter(settings: Settings, made: dict[str, Any]) -> None:
    derivative = made.get("derivative_time_s", made.get("derivative_gain_s"))
    if derivative is None:
        if "derivative_filter_s" in made:
            raise UsageError(
                "derivative_filter_s without a derivative: it filters the derivative only; "
                "a filter of the measurement belongs to the plant"
            )
        return
    if settings.form != "parallel" or "derivative_filter_s" in made:
        return
    gain = made.get("gain", made.get("proportional_band_percent"))
    if gain is None or (gain > 0.0) != (derivative > 0.0):
        raise UsageError(
            "derivative_filter_s is needed: a tenth of the derivative time stands in for it only where the gain and the "
            "derivative gain have the same sign"
        )


def _weight(settings: Settings, made: dict[str, Any]) -> None:
    if settings.setpoint_weight is None:
        return
    made["setpoint_weight"] = number("setpoint_weight", settings.setpoint_weight, least=0.0)
    if "gain" not in made and "proportional_band_percent" not in made:
        raise UsageError("setpoint_weight without a gain: it weighs the proportional action, and there is none")
    series = settings.form == "series" and settings.derivative_on == "error"
    if series and {"integral_time_s", "derivative_time_s"} <= made.keys() and made["setpoint_weight"] != 1.0:
        raise UsageError(
            "setpoint_weight other than 1 in the series form with the derivative on the error: the weight would reach "
            "the derivative too; such a controller is not covered"
        )
