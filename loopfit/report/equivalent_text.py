"""Equivalent second-order models of a system as a page of text."""

from __future__ import annotations

import math
import textwrap

import numpy as np

from loopfit.core.quantity import Quantity
from loopfit.equivalents.course import course_of
from loopfit.equivalents.interchange import transfer_of_equivalent
from loopfit.equivalents.response import figures_of
from loopfit.equivalents.result import Equivalent, Equivalents, ExactFigures, share_words
from loopfit.equivalents.system import RationalSystem
from loopfit.model.transfer import Complex

_WIDTH, _LABEL = 100, 13
_NAME, _UNIT, _VALUE = 28, 8, 12
_METHOD, _CELL = 51, 10
_ON_AXIS = 1e-10  # real part in relation to size: a pole on the imaginary axis, within rounding
_UNSEEN = 0.01  # %: an overshoot that no recorder shows, and the figures that hang on it
_ALIKE = 1e-6  # poles this near, in relation to their size, are shown as one repeated
_OF_A_PEAK = ("overshoot_percent", "peak_time_s", "decay_ratio")
_LEAST_DECAY = 0.001  # a second peak below a thousandth of the first
_FIGURES = (
    ("overshoot", "%", "overshoot_percent"),
    ("rise time", "s", "rise_time_s"),
    ("delay time", "s", "delay_time_s"),
    ("peak time", "s", "peak_time_s"),
    ("settling time", "s", "settling_time_s"),
    ("decay ratio", "", "decay_ratio"),
    ("final value", "", "final_value"),
    ("peak value", "", "peak_value"),
)


def page(result: Equivalents) -> str:
    """Return the whole page, without a final newline."""
    parts = ["\n".join(_filled(line, 120) for line in answer(result).split("\n")), _system(result)]
    table = _figures(result)
    if table:
        parts.append(table)
    if result.equivalents:
        parts.append(_methods(result))
    notes = [_wrapped("" if i else "reasons", reason) for i, reason in enumerate(result.reasons)]
    parts.append("\n".join(notes))
    return "\n\n".join(parts)


def answer(result: Equivalents) -> str:
    """Return the answer in words: the chosen equivalent, and how far its step response is off."""
    best = result.best
    if best is None:
        return f"No equivalent of second order: {result.reasons[0] if result.reasons else 'no method gives one'}."
    first = f"{_model_words(best, integrating=result.system.integrating)}."
    if not result.adequate and best.step_error_max_percent is not None:
        first = f"NOT adequate; the nearest: {first}"
    return f"{first[0].upper()}{first[1:]}\n{_quality(result, best)}"


def pole_words(poles: Complex, *, most: int = 12) -> str:
    """Return "-1 (5 times), -0.5 ± 2j"; a pair once."""
    words = []
    for one, count in repeated(poles):
        if one.imag < 0:
            continue
        word = _digits(one.real, 6)
        if one.imag > 0:
            word += f" ± {_digits(one.imag, 6)}j"
        words.append(word if count == 1 else f"{word} ({count} times)")
    if len(words) > most:
        words = [*words[:most], f"and {len(words) - most} more"]
    return ", ".join(words) if words else "none"


def repeated(roots: Complex) -> list[tuple[complex, int]]:
    """Return each root once, with how often it occurs; roots that nearly agree count as one."""
    out = []
    left = [complex(root) for root in roots]
    while left:
        one = left[0]
        apart = [other for other in left if abs(other - one) > _ALIKE * abs(one)]
        out.append((one, len(left) - len(apart)))
        left = apart
    return out


def equivalent_figures(result: Equivalents) -> ExactFigures | None:
    """Return the figures of the chosen equivalent's own step response; None where it comes to no final value."""
    best = result.best
    if best is None or best.gain is None or result.system.integrating:
        return None
    own = RationalSystem(transfer_of_equivalent(best))
    return figures_of(own, course_of(own, best.gain), result.band_percent) if own.stable else None


def _model_words(best: Equivalent, *, integrating: bool) -> str:
    lags = best.time_constants_s
    start = "unstable, " if any(lag < 0 for lag in lags or ()) or (best.damping_ratio or 0.0) < 0 else ""
    start += "integrating, " if integrating else ""
    start += "followed by " if integrating and (lags or best.damping_ratio is not None) else ""
    if best.damping_ratio is not None and best.natural_frequency_rad_s is not None:
        text = f"damping ratio {_digits(best.damping_ratio)}, natural frequency {_digits(best.natural_frequency_rad_s)} rad/s"
        if lags:
            text += f" (time constants {' and '.join(_digits(lag) for lag in lags)} s)"
    elif lags:
        text = f"time constant{'s' if len(lags) > 1 else ''} {' and '.join(_digits(lag) for lag in lags)} s"
        text = f"first order, {text}" if len(lags) == 1 else text
    else:
        text = "no lag"
    if best.dead_time_s:
        text += f", dead time {_digits(best.dead_time_s)} s"
    if best.zero_s is not None:
        text += f", zero {_digits(best.zero_s)} s"
    gain = 0.0 if best.gain is None else best.gain
    return f"{start}{text}, gain {_digits(gain)}{' per s' if integrating else ''}"


def _quality(result: Equivalents, best: Equivalent) -> str:
    verdict = "adequate" if result.adequate else "NOT adequate"
    largest, rms = best.step_error_max_percent, best.step_error_rms_percent
    if largest is None or rms is None:
        return f"{_capital(best.method)}; it cannot be compared with the exact response: {verdict}."
    if largest == 0.0:
        return f"{_capital(best.method)}: nothing that shows is left out; {verdict}."
    what = "final slope" if result.system.integrating else "final value"
    return (
        f"By {best.method}: its step response is off by at most {share_words(largest)} % of the {what}, "
        f"{share_words(rms)} % rms; {verdict}."
    )


def _system(result: Equivalents) -> str:
    system = result.system
    lines = [] if result.expression is None else [_wrapped("system", result.expression)]
    kind = "integrating" if system.integrating else "stable" if system.stable else "UNSTABLE"
    if kind == "UNSTABLE" and not np.any(system.poles.real > _ON_AXIS * np.abs(system.poles)):
        kind = "NOT STABLE: undamped, it swings without end"
    lines.append(_wrapped("", f"{kind}, dead time {_digits(system.dead_time_s)} s"))
    if result.expression is None:
        lines[0] = _wrapped("system", lines[0].strip())
    more = " (those furthest to the right of infinitely many)" if system.denominator is None else ""
    lines.append(_wrapped("poles", f"{pole_words(system.poles)}{' rad/s' if system.poles.size else ''}{more}"))
    lines.append(_wrapped("zeros", f"{pole_words(system.zeros)}{' rad/s' if system.zeros.size else ''}"))
    return "\n".join(lines)


def _figures(result: Equivalents) -> str:
    exact, own = result.response, equivalent_figures(result)
    rows = []
    for name, unit, field in _FIGURES:
        cells = [_shown(exact, field), "" if own is None else _shown(own, field)]
        if name == "settling time":
            name = f"{name} (±{result.band_percent:g} %)"
        if any(cell.strip("-") for cell in cells):
            rows.append(f"{name:{_NAME}}{unit:{_UNIT}}{cells[0]:>{_VALUE}}{cells[1]:>{_VALUE}}".rstrip())
    if not rows:
        return ""
    head = f"{'figures of a unit step':{_NAME}}{'':{_UNIT}}{'exact':>{_VALUE}}{'equivalent':>{_VALUE}}"
    return "\n".join([head, *rows])


def _methods(result: Equivalents) -> str:
    head = ("damping", "rad/s", "gain", "dead time", "zero s", "error %", "rms %")
    rows = [f"{'method (* chosen)':<{_METHOD}}" + "".join(f"{word:>{_CELL}}" for word in head)]
    for one in result.equivalents:
        mark = "* " if one.method == result.chosen else "  "
        name = f"{mark}{one.method}"
        if not one.exists:
            rows.append(textwrap.fill(f"{name:<{_METHOD}}  {one.reason}", 120, subsequent_indent=" " * (_METHOD + 2)))
            continue
        numbers = (one.damping_ratio, one.natural_frequency_rad_s, one.gain, one.dead_time_s, one.zero_s)
        errors = (one.step_error_max_percent, one.step_error_rms_percent)
        cells = ["-" if value is None else _digits(value) for value in numbers]
        cells += ["-" if value is None else share_words(value) for value in errors]
        rows.append((f"{name:<{_METHOD}}" + "".join(f" {cell:>{_CELL - 1}}" for cell in cells)).rstrip())
        if one.reason:
            rows.append(textwrap.fill(one.reason, 116, initial_indent=" " * 6, subsequent_indent=" " * 6))
    return "\n".join(rows)


def _shown(figures: ExactFigures, field: str) -> str:
    quantity: Quantity | None = getattr(figures, field)
    if quantity is None:
        return "-"
    overshoot = figures.overshoot_percent
    if overshoot is not None and 0.0 < overshoot.value < _UNSEEN and field in _OF_A_PEAK:
        return f"< {_UNSEEN:g}" if field == "overshoot_percent" else "-"
    if field == "decay_ratio" and quantity.value < _LEAST_DECAY:
        return f"< {_LEAST_DECAY:g}"
    return _digits(quantity.value)


def _digits(value: float, figures: int = 4) -> str:
    """Return so many figures, without an exponent where that is readable."""
    if value == 0.0:
        return "0"
    if not 1e-4 <= abs(value) < 1e6:
        return f"{value:.{figures}g}"
    places = max(figures - 1 - math.floor(math.log10(abs(value))), 0)
    text = f"{value:.{places}f}"
    return text.rstrip("0").rstrip(".") if "." in text else text


def _capital(words: str) -> str:
    return words[0].upper() + words[1:]


def _wrapped(label: str, text: str) -> str:
    return _filled(text, _WIDTH, f"{label:<{_LABEL}}", " " * _LABEL)


def _filled(text: str, width: int, first: str = "", rest: str = "") -> str:
    """Return the text in lines, without a break between a number and its sign or per cent."""
    tied = text.replace(" ± ", "\u00a0±\u00a0").replace(" %", "\u00a0%")
    lines = textwrap.fill(tied, width, initial_indent=first, subsequent_indent=rest, break_on_hyphens=False)
    return lines.replace("\u00a0", " ")
