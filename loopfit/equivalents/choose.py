"""Equivalent second-order models of a system by all methods, and which to use."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from loopfit.equivalents.balanced import by_balancing
from loopfit.equivalents.course import SETTLED, Course, course_of
from loopfit.equivalents.direct import by_step_error
from loopfit.equivalents.distance import described, errors_of, judged
from loopfit.equivalents.dominant import by_dominant_poles
from loopfit.equivalents.form import Form
from loopfit.equivalents.half_rule import by_half_rule
from loopfit.equivalents.moments import by_moments
from loopfit.equivalents.response import figures_of
from loopfit.equivalents.result import Equivalent, Equivalents, ExactFigures, share_words
from loopfit.equivalents.routh import by_routh, by_routh_array
from loopfit.equivalents.system import RationalSystem, System
from loopfit.equivalents.trust import cautions

ITSELF = "the system itself"
DOMINANT = "dominant poles (Davison)"
HALF_RULE = "half rule (Skogestad)"
MOMENTS = "time moments (Gibilaro and Lees)"
TRUNCATED = "balanced truncation (Moore)"
RESIDUALISED = "balanced residualisation (Fernando and Nicholson)"
ROUTH = "Routh approximation (Hutton and Friedland)"
ROUTH_ARRAY = "Routh array (Krishnamurthy and Seshadri)"
DIRECT = "smallest step error"
DIRECT_ZERO = "smallest step error with a zero"
_DIRECT = (DIRECT, DIRECT_ZERO)

ADEQUATE_PERCENT = 5.0  # of the final value: the largest step error of an adequate equivalent
_GOOD_PERCENT = 1.0  # a published method this near is not set aside for a fit
_CLEARLY = 0.5  # of the largest step error: what a fit, or a zero in it, must come down to
_NO_GAIN = 1e-9  # static gain in relation to the highest point of the response: below, rounding


def equivalents_of(system: System, *, expression: str | None = None, band_percent: float = 2.0) -> Equivalents:
    """Return the equivalents of a system by all methods, the exact figures of its response, and the choice.

    Chosen is the published method with the smallest largest step error (in doubt the first in the list). The model of
    smallest step error is chosen instead where the published ones are off by more than 1 % of the final value and it
    comes down to half of that, or where it is adequate and they are not; of the two such models, that with a zero only
    by the same rule again. An equivalent is adequate when its largest step error, at any time and at rest, is at most
    5 % of the final value. The rms error is taken from the step until the exact response stays within 0.1 %.

    A system of at most two poles and one zero is its own equivalent. Of an integrating system the equivalents
    are those of the rest, which the integration follows; the errors are in percent of the final slope then.
    """
    reasons: list[str] = []
    figures: ExactFigures | None = None
    body = seen = system  # what the methods work on, and the exact system that they are judged by
    if isinstance(system, RationalSystem):
        reasons += cautions(system)
        seen, left_out = system.without_fast
        body, removed = seen.without_cancellations
        reasons += [*left_out, *removed]
    if body.integrating:
        figures = _no_figures("the response of an integrating system comes to no final value: it has no figures")
        rest = body.rest if isinstance(body, RationalSystem) else None
        if not isinstance(body, RationalSystem) or (rest is not None and rest.integrating):
            how = "more than once" if isinstance(body, RationalSystem) else "and is no rational function"
            reasons.append(f"the system integrates {how}: no second-order model stands for it")
            return _result(system, expression, [], reasons, figures, band_percent)
        if rest is None and body.order > 1:
            reasons.append(
                "the system integrates and also passes its input on at once: its response is a jump and a ramp, and no "
                "second-order model with an integration makes that jump; give the lag that it has in truth"
            )
            return _result(system, expression, [], reasons, figures, band_percent)
        if rest is None:
            found = [
                replace(described(ITSELF, _ramp(body), (0.0, 0.0)), reason="an integration and a jump, without a lag")
            ]
            return _result(system, expression, found, reasons, figures, band_percent)
        whole = seen.rest if isinstance(seen, RationalSystem) and seen is not body else None
        body, seen = rest, rest if whole is None else whole
        reasons.append(
            "the system integrates: each equivalent is that of the rest, to be multiplied by 1/s, its gain is per second "
            "and its errors are in percent of the final slope of the step response"
        )
    if not body.stable:
        reasons.append("the system is unstable: its response has no final value to compare with, and no figures")
        found = _of_unstable(body)
        figures = figures or _no_figures(
            "the response of an unstable system comes to no final value: it has no figures"
        )
        return _result(system, expression, found, reasons, figures, band_percent)
    final = body.static_gain or 0.0
    if not abs(final) > _NO_GAIN * _height(body):
        reasons.append(
            "the static gain is 0: the response returns to where it began, and no model with a gain does that"
        )
        figures = figures or _no_figures("the final value is 0: the figures are shares of it")
        return _result(system, expression, [], reasons, figures, band_percent)
    if isinstance(body, RationalSystem) and body.biproper and body.order > 1:
        reasons.append(
            "the system passes its input on at once, and its response begins with a jump of "
            f"{share_words(100.0 * body.numerator[0] / body.denominator[0] / final)} % of the final value, "
            "which no model of this form makes"
        )
    hidden = not seen.stable  # then a part that is not stable was removed: it does not show in the response
    seen = body if hidden else seen
    course = course_of(seen, final)
    figures = figures or figures_of(seen, course, band_percent)
    found = _all(body, course, system.integrating, exact=seen is body)
    return _result(system, expression, found, reasons, figures, band_percent, course.window_s, hidden=hidden)


def _no_figures(reason: str) -> ExactFigures:
    return ExactFigures(reasons=(reason,))


def _height(system: System) -> float:
    rates = -system.poles.real
    if rates.size == 0:
        return 0.0
    time = system.dead_time_s + np.concatenate([np.linspace(0.0, 8.0 / rate, 60) for rate in rates])
    return float(np.abs(system.step(np.sort(time))).max())


def _all(body: System, course: Course, integrating: bool, *, exact: bool) -> list[Equivalent]:
    if isinstance(body, RationalSystem) and body.order <= 2 and len(body.numerator) <= 2:
        form = itself(body)
        return [described(ITSELF, form, (0.0, 0.0) if exact else errors_of(form, course))]
    found: list[Equivalent] = []
    starts: list[Form] = []

    def add(method: str, forms: list[Form], reason: str | None) -> Equivalent:
        one = judged(method, forms, course, body, reason)
        starts.extend(forms)
        found.append(one)
        return one

    add(DOMINANT, *by_dominant_poles(body, course))
    if isinstance(body, RationalSystem) and body.order >= 2:
        add(HALF_RULE, *by_half_rule(body, integrating=integrating))
        add(MOMENTS, *by_moments(body))
        truncated, residualised, reason = by_balancing(body)
        one = add(TRUNCATED, truncated, reason)
        other = judged(RESIDUALISED, residualised, course, body)
        if other.exists and _error(other) < _error(one):
            add(RESIDUALISED, residualised, None)
        add(ROUTH, *by_routh(body))
        add(ROUTH_ARRAY, *by_routh_array(body))
    else:
        why = "the method needs a rational function"
        if isinstance(body, RationalSystem):
            why = "the method needs at least two poles"
        found += [Equivalent(method=name, reason=why) for name in (HALF_RULE, MOMENTS, TRUNCATED, ROUTH, ROUTH_ARRAY)]
    add(DIRECT, [by_step_error(body, course, starts, zero=False)], None)
    add(DIRECT_ZERO, [by_step_error(body, course, starts, zero=True)], None)
    return found


def itself(system: RationalSystem) -> Form:
    """Return a system of at most two poles and one zero, not integrating, as the form it already has."""
    bottom = [value / system.denominator[-1] for value in system.denominator]
    top = system.numerator
    gain = top[-1] / system.denominator[-1]
    zero = top[-2] / top[-1] if len(top) > 1 else 0.0
    a2, a1 = [0.0, 0.0, *bottom[:-1]][-2:]
    return Form(gain=gain, a1=a1, a2=a2, dead_time=system.dead_time_s, zero=zero, note=_order_word(a1, a2))


def _ramp(system: RationalSystem) -> Form:
    """Return gain (zero s + 1) for a system gain (zero s + 1) / s."""
    direct, slope = (value / system.denominator[0] for value in system.numerator)
    return Form(gain=slope, a1=0.0, a2=0.0, dead_time=system.dead_time_s, zero=direct / slope)


def _order_word(a1: float, a2: float) -> str | None:
    if a2 != 0.0:
        return None
    return "a first order: it has no damping ratio" if a1 != 0.0 else "a gain with dead time: it has no damping ratio"


def _of_unstable(body: System) -> list[Equivalent]:
    if isinstance(body, RationalSystem) and body.order <= 2 and len(body.numerator) <= 2 and body.numerator[-1]:
        one = described(ITSELF, itself(body), None)
        return [replace(one, reason="; ".join(word for word in (one.reason, "unstable: no step error") if word))]
    poles = body.poles
    if poles.size < 2 or not body.static_gain:
        return [Equivalent(method=DOMINANT, reason="the system is unstable, and no two poles stand for it")]
    first = poles[0]
    second = first.conjugate() if first.imag != 0 else poles[poles.imag == 0][1:2]
    if first.imag == 0 and (second.size == 0 or second[0] >= 0 or first == 0):
        return [Equivalent(method=DOMINANT, reason="the system is unstable, and no two poles stand for it")]
    second = complex(np.ravel(second)[0])
    form = Form(
        gain=body.static_gain,
        a1=float(-(1.0 / first + 1.0 / second).real),
        a2=float((1.0 / (first * second)).real),
        dead_time=body.dead_time_s,
        note="unstable: the two poles furthest to the right, with the ratio of output to input at rest; no step error",
    )
    return [described(DOMINANT, form, None)]


def _error(one: Equivalent) -> float:
    return np.inf if one.step_error_max_percent is None else one.step_error_max_percent


def chosen_of(found: list[Equivalent]) -> Equivalent | None:
    """Return the equivalent to use by the rule of `equivalents_of`; None when there is none."""
    present = [one for one in found if one.exists]
    published = [one for one in present if one.method not in _DIRECT]
    best = min(published, key=_error, default=None)
    for method in _DIRECT:
        one = next((each for each in present if each.method == method), None)
        if one is None:
            continue
        rescued = best is not None and _error(one) <= ADEQUATE_PERCENT < _error(best)
        if best is None or rescued or (_error(best) > _GOOD_PERCENT and _error(one) <= _CLEARLY * _error(best)):
            best = one
    return best


def _result(
    system: System,
    expression: str | None,
    found: list[Equivalent],
    reasons: list[str],
    figures: ExactFigures,
    band_percent: float,
    window_s: float | None = None,
    *,
    hidden: bool = False,
) -> Equivalents:
    best = chosen_of(found)
    within = best is not None and bool(_error(best) <= ADEQUATE_PERCENT)
    adequate = within and not hidden
    if best is None:
        reasons.append("no method gives an equivalent")
    elif best.step_error_max_percent is None:
        reasons.append(f"'{best.method}' cannot be compared with the exact response")
    elif best.method == ITSELF:
        reasons.append("the system is of second order or less: it is its own equivalent")
    else:
        what = "final slope" if system.integrating else "final value"
        side = "no more than" if within else "more than"
        reasons.append(
            f"the step response of '{best.method}' is off by at most {share_words(best.step_error_max_percent)} % of the {what} "
            f"(rms {share_words(best.step_error_rms_percent or 0.0)} % over {window_s:.4g} s, from where on the exact one stays within "
            f"{100.0 * SETTLED:g} %): {side} the {ADEQUATE_PERCENT:g} % of an adequate one"
        )
        if best.method in _DIRECT:
            reasons.append("it was fitted to the exact response; the best published method is clearly further off")
    if hidden:
        reasons.append("not adequate: a part of the system that is not stable does not show in its transfer function")
    return Equivalents(
        system=system,
        expression=expression,
        equivalents=tuple(found),
        chosen=None if best is None else best.method,
        adequate=adequate,
        reasons=tuple(reasons),
        response=figures,
        band_percent=band_percent,
        window_s=window_s,
    )
