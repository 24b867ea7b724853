"""What was understood of a controller's settings, in words."""

from __future__ import annotations

from typing import TYPE_CHECKING

from loopfit.loop.screen import integral_unit_of, shown_integral
from loopfit.loop.units import PER_SECOND, in_unit

if TYPE_CHECKING:
    from loopfit.loop.settings import Settings

_ACTIONS = {
    "reverse": "reverse acting: the output falls as the measurement rises",
    "direct": "direct acting: the output rises with the measurement",
}


def words(settings: Settings) -> list[str]:
    """Return a line for each setting, with what a default filled in."""
    action = _ACTIONS.get(
        settings.action or "", "no action given: a positive gain is reverse acting, a negative one direct"
    )
    lines = [f"{settings.form} form, {action}"]
    lines += [_gain(settings), _integral(settings), *_derivative(settings)]
    meets = settings.gains.setpoint_weight
    if settings.setpoint_weight is None and meets != 1.0:
        lines.append(
            f"no setpoint weight; the derivative block is on the measurement alone: the setpoint meets K, {meets:.4g} of kp"
        )
    elif settings.setpoint_weight is None:
        lines.append("no setpoint weight")
    else:
        lines.append(f"setpoint weight {settings.setpoint_weight:.6g}")
    if settings.scan_s is None:
        lines.append("no scan interval given: taken as continuous")
    else:
        lines.append(f"scan interval {settings.scan_s:.6g} s")
    if settings.output_limits is not None:
        low, high = settings.output_limits
        lines.append(f"output limits {low:.6g} to {high:.6g} in the unit of the output")
    return lines


def _gain(settings: Settings) -> str:
    gain = settings.shown_gain
    if gain is None:
        return "no proportional gain"
    band = settings.proportional_band_percent
    line = f"gain taken as {gain:.6g}" if band is None else f"proportional band {band:.6g} % taken as gain {gain:.6g}"
    if settings.measurement_range is not None and settings.output_range is not None:
        (low, high), (least, most) = settings.measurement_range, settings.output_range
        engineering = gain * abs(settings.gain_scale)
        return (
            f"{line} %/% on {low:.6g} to {high:.6g} (measurement) and {least:.6g} to {most:.6g} (output) "
            f"= {engineering:.6g} output units per measurement unit"
        )
    if band is not None:
        return f"{line} %/%: without ranges, measurement and output are taken to be in % already"
    return f"{line} output units per measurement unit"


def _integral(settings: Settings) -> str:
    unit, shown = integral_unit_of(settings), shown_integral(settings)
    if shown is None:
        return "no integral"
    bare = unit.removeprefix("/")
    if settings.integral_gain_per_s is not None:
        what = "gain per"
        other = "s" if bare != "s" else "min"
        return f"integral taken as {shown:.6g} {what} {bare} = {in_unit(settings.integral_gain_per_s, f'/{other}'):.3g} {what} {other}"
    seconds = settings.integral_time_s or 0.0
    if unit in PER_SECOND:
        return f"integral taken as {shown:.6g} repeats per {bare} = {seconds:.6g} s"
    return f"integral taken as {_time(seconds, unit)}"


def _derivative(settings: Settings) -> list[str]:
    if settings.derivative_gain_s is not None:
        unit = settings.derivative_unit
        other = "s" if unit != "s" else "min"
        value = settings.derivative_gain_s
        line = f"derivative taken as {in_unit(value, unit):.6g} gain {unit} = {in_unit(value, other):.3g} gain {other}"
    elif settings.derivative_time_s is not None:
        line = f"derivative taken as {_time(settings.derivative_time_s, settings.derivative_unit)}"
    else:
        return ["no derivative"]
    line += f", on the {settings.derivative_on}"
    if settings.derivative_filter_s is None:
        return [line, f"derivative filter {settings.filter_s:.6g} s: none given, a tenth of the derivative time"]
    return [line, f"derivative filter taken as {_time(settings.derivative_filter_s, settings.filter_unit)}"]


def _time(seconds: float, unit: str) -> str:
    other = "s" if unit != "s" else "min"
    return f"{in_unit(seconds, unit):.6g} {unit} = {in_unit(seconds, other):.3g} {other}"
