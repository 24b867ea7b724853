"""The three forms of a PID controller, each in terms of kp + ki / s + kd s / (filter_s s + 1) and back."""

from __future__ import annotations

import math
import sys
from dataclasses import dataclass

from loopfit.core.errors import UsageError

FORMS = ("ideal", "parallel", "series")

# A discriminant that rounding alone can have made is 0: it carries some ten roundings of its terms.
_ROUNDING = 64 * sys.float_info.epsilon


@dataclass(frozen=True, slots=True, kw_only=True)
class Terms:
    """kp + ki / s + kd s / (filter_s s + 1): seconds, any unit of gain; an absent term is 0."""

    kp: float
    ki: float = 0.0
    kd: float = 0.0
    filter_s: float = 0.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Times:
    """gain, integral time and derivative time of the ideal or the series form; an absent term is None."""

    gain: float
    integral_time_s: float | None = None
    derivative_time_s: float | None = None
    filter_s: float = 0.0


def terms_of_ideal(times: Times) -> Terms:
    """Return K (1 + 1/(Ti s) + Td s/(Tf s + 1)) as terms: kp = K, ki = K/Ti, kd = K Td."""
    ki = 0.0 if times.integral_time_s is None else times.gain / times.integral_time_s
    kd = 0.0 if times.derivative_time_s is None else times.gain * times.derivative_time_s
    return Terms(kp=times.gain, ki=ki, kd=kd, filter_s=times.filter_s)


def ideal_of_terms(terms: Terms) -> Times:
    """Return the ideal form of the terms.

    Raises
    ------
    UsageError
        If there is no proportional term, or one of the others has the opposite sign.
    """
    if terms.kp == 0.0:
        raise UsageError(
            "a controller without a proportional gain has no ideal or series form; the parallel form has it"
        )
    for name, value in (("integral", terms.ki), ("derivative", terms.kd)):
        if value != 0.0 and (value > 0.0) != (terms.kp > 0.0):
            raise UsageError(
                f"the {name} gain {value:.4g} has not the sign of the proportional gain {terms.kp:.4g}: "
                f"no ideal form has a negative {name} time; the parallel form has it"
            )
    return Times(
        gain=terms.kp,
        integral_time_s=None if terms.ki == 0.0 else terms.kp / terms.ki,
        derivative_time_s=None if terms.kd == 0.0 else terms.kd / terms.kp,
        filter_s=terms.filter_s,
    )


def terms_of_series(times: Times) -> Terms:
    """Return K (1 + 1/(Ti s)) (1 + Td s/(Tf s + 1)) as terms with the same filter.

    Notes
    -----
    kp = K (1 + Td/Ti), ki = K/Ti, kd = K Td (1 - Tf/Ti): partial fractions, exact. Without a filter it is the
    conversion of Åström and Hägglund, PID Controllers, 2nd ed. 1995, section 3.4 (from memory).
    """
    ti, td, tf = times.integral_time_s, times.derivative_time_s, times.filter_s
    if ti is None or td is None:
        return terms_of_ideal(times)
    k = times.gain
    return Terms(kp=k * (1.0 + td / ti), ki=k / ti, kd=k * td * ((ti - tf) / ti), filter_s=tf)


def series_of_terms(terms: Terms, *, integral_longer: bool = True) -> Times:
    """Return the series form of the terms, with the same filter.

    Parameters
    ----------
    terms : Terms
        The controller.
    integral_longer : bool
        The two time constants Ti and Td + Tf of the controller's zeros may change places; which of the two answers is
        wanted, where both exist.

    Raises
    ------
    UsageError
        If no series form with positive times has these terms.

    Notes
    -----
    With x = Td the equations of `terms_of_series` leave x^2 - S x + P = 0, S = kp/ki - Tf, P = kd/ki; the other root
    is Ti - Tf, and K = ki Ti. The roots are real when (kp - ki Tf)^2 >= 4 ki kd, which says that the controller's
    zeros are real (without a filter: Ti >= 4 Td of the ideal form); a positive Td then needs S > 0 or P < 0, and a
    positive Ti the other root above -Tf. The smaller root is P over the larger one, so that nothing cancels.
    """
    if terms.kp == 0.0 or terms.ki == 0.0 or terms.kd == 0.0:
        return ideal_of_terms(terms)
    tf = terms.filter_s
    total, product = terms.kp / terms.ki - tf, terms.kd / terms.ki
    squares = total * total - 4.0 * product
    if abs(squares) <= _ROUNDING * total * total:
        squares = 0.0
    if not squares >= 0.0:
        filtered = f" with the filter of {tf:.4g} s" if tf > 0.0 else ""
        raise UsageError(
            f"no series form has an integral time of {terms.kp / terms.ki:.4g} s and a derivative time of "
            f"{terms.kd / terms.kp:.4g} s (ideal form){filtered}: its zeros would be complex; "
            "in the ideal form the integral time must be at least about four times the derivative time"
        )
    far = 0.5 * (total + math.copysign(math.sqrt(squares), total))
    near = product / far
    low, high = min(far, near), max(far, near)
    choices = [(high, low), (low, high)] if integral_longer else [(low, high), (high, low)]
    for beyond_filter, td in choices:
        ti = beyond_filter + tf
        if ti > 0.0 and td > 0.0:
            return Times(gain=terms.ki * ti, integral_time_s=ti, derivative_time_s=td, filter_s=tf)
    raise UsageError(
        f"no series form with positive times has kp = {terms.kp:.4g}, ki = {terms.ki:.4g} per s, kd = {terms.kd:.4g} s "
        f"and a filter of {tf:.4g} s; the parallel form has it"
    )
