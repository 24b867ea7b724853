"""What the screen of a controller shows of its settings, and to which digits it takes them."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from loopfit.core.errors import UsageError
from loopfit.loop.units import PER_SECOND, from_unit, in_unit

if TYPE_CHECKING:
    from loopfit.loop.settings import Settings

_CLEAN = 12  # significant digits that survive a conversion of units


def unit_in_form(form: str, unit: str | None) -> str | None:
    """Return the unit of an integral setting when its controller is written in that form."""
    if unit is not None and form == "parallel" and unit not in PER_SECOND:
        return f"/{unit}" if f"/{unit}" in PER_SECOND else "/s"
    return unit


def integral_unit_of(settings: Settings) -> str:
    """Return the unit of the integral setting, the one of its form when none was given."""
    return settings.integral_unit or ("/s" if settings.form == "parallel" else "s")


def shown_integral(settings: Settings) -> float | None:
    """Return the integral setting as the screen shows it: a time, repeats per time, or a gain per time."""
    unit = integral_unit_of(settings)
    if settings.form == "parallel":
        return None if settings.integral_gain_per_s is None else in_unit(settings.integral_gain_per_s, unit)
    if settings.integral_time_s is None:
        return None
    return in_unit(1.0 / settings.integral_time_s if unit in PER_SECOND else settings.integral_time_s, unit)


def rounded(settings: Settings, digits: int) -> dict[str, Any]:
    """Return the fields of the settings to that many significant digits of what the screen shows.

    Raises
    ------
    UsageError
        If `digits` is not a whole number from 1 to 15.
    """
    if isinstance(digits, bool) or not isinstance(digits, int) or not 1 <= digits <= 15:
        raise UsageError(f"digits is a whole number from 1 to 15, not {digits!r}")
    made: dict[str, Any] = {}
    for name, unit in (
        ("gain", "s"),
        ("proportional_band_percent", "s"),
        ("setpoint_weight", "s"),
        ("derivative_time_s", settings.derivative_unit),
        ("derivative_gain_s", settings.derivative_unit),
        ("derivative_filter_s", settings.filter_unit),
    ):
        value = getattr(settings, name)
        if value is not None:
            made[name] = from_unit(_figures(in_unit(value, unit), digits), unit)
    shown, unit = shown_integral(settings), integral_unit_of(settings)
    if shown is not None:
        amount = from_unit(_figures(shown, digits), unit)
        if settings.form == "parallel":
            made["integral_gain_per_s"] = amount
        else:
            made["integral_time_s"] = 1.0 / amount if unit in PER_SECOND else amount
    return made


def entered(settings: Settings) -> dict[str, Any]:
    """Return the settings in the controller's own form and units, as plain data."""
    out: dict[str, Any] = {"form": settings.form, "action": settings.action}
    if settings.proportional_band_percent is not None:
        out["proportional_band_percent"] = _clean(settings.proportional_band_percent)
    else:
        in_percent = settings.measurement_range is not None
        out["gain"] = _clean(settings.gain)
        out["gain_unit"] = "%/%" if in_percent else "output per measurement"
    unit = integral_unit_of(settings)
    bare = unit.removeprefix("/")
    if settings.form == "parallel":
        out[f"integral_gain_per_{bare}"] = _clean(shown_integral(settings))
        kind, derivative = "derivative_gain", settings.derivative_gain_s
    else:
        key = f"integral_repeats_per_{bare}" if unit in PER_SECOND else f"integral_time_{unit}"
        out[key] = _clean(shown_integral(settings))
        kind, derivative = "derivative_time", settings.derivative_time_s
    out[f"{kind}_{settings.derivative_unit}"] = _in(derivative, settings.derivative_unit)
    has_derivative = derivative is not None
    out[f"derivative_filter_{settings.filter_unit}"] = _in(
        settings.filter_s if has_derivative else None, settings.filter_unit
    )
    out["derivative_on"] = settings.derivative_on
    out["setpoint_weight"] = _clean(settings.setpoint_weight)
    out["scan_s"] = settings.scan_s
    for name in ("measurement_range", "output_range", "output_limits"):
        pair = getattr(settings, name)
        out[name] = None if pair is None else list(pair)
    return out


def _figures(value: float, digits: int) -> float:
    return float(f"{value:.{digits - 1}e}")


def _clean(value: float | None) -> float | None:
    return None if value is None else _figures(value, _CLEAN)


def _in(value: float | None, unit: str) -> float | None:
    return None if value is None else _clean(in_unit(value, unit))
