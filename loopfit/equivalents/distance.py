"""How far the step response of a second-order model is from the exact one."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from loopfit.equivalents.course import Course
from loopfit.equivalents.form import Form
from loopfit.equivalents.result import Equivalent
from loopfit.equivalents.system import System


def errors_of(form: Form, course: Course) -> tuple[float, float]:
    """Return the largest step error at any time, and the rms over the window, percent of the final value.

    The largest is met within the spacing of the samples, of which each radian of each mode has six; it includes the
    error at rest, and both sides of a jump at the end of the model's dead time. The rms is a mean over time.
    """
    time, exact, final = course.time, course.value, course.final
    error = (form.step(time) - exact) / final
    largest = max(float(np.abs(error).max()), abs(form.gain / final - 1.0))
    if form.dead_time > 0.0:
        there = float(np.interp(form.dead_time, time, exact)) / final
        after = float(form.step(np.array([form.dead_time]))[0]) / final
        largest = max(largest, abs(there), abs(after - there))
    inside = time < course.window_s
    if not inside.any():
        return 100.0 * largest, 100.0 * largest
    square = np.append(error[inside], np.interp(course.window_s, time, error)) ** 2
    gap = np.diff(np.append(time[inside], course.window_s))
    mean = float(np.sum(0.5 * (square[1:] + square[:-1]) * gap) / gap.sum())
    return 100.0 * largest, 100.0 * mean**0.5


def judged(method: str, forms: list[Form], course: Course, system: System, reason: str | None = None) -> Equivalent:
    """Return the form with the smallest largest error as the method's equivalent; the dead time of the system is added."""
    best, errors = None, (np.inf, np.inf)
    for form in forms:
        late = replace(form, dead_time=form.dead_time + system.dead_time_s)
        found = errors_of(late, course)
        if found[0] < errors[0]:
            best, errors = late, found
    if best is None:
        return Equivalent(method=method, reason=reason or "the method gives no stable model here")
    return described(method, best, errors)


def described(method: str, form: Form, errors: tuple[float, float] | None) -> Equivalent:
    """Return a form as an equivalent; a first order has no damping ratio."""
    return Equivalent(
        method=method,
        gain=float(form.gain),
        damping_ratio=form.a1 / (2.0 * form.a2**0.5) if form.a2 > 0.0 else None,
        natural_frequency_rad_s=form.a2**-0.5 if form.a2 > 0.0 else None,
        dead_time_s=float(form.dead_time),
        time_constants_s=form.lags,
        zero_s=form.zero or None,
        step_error_max_percent=None if errors is None else errors[0],
        step_error_rms_percent=None if errors is None else errors[1],
        reason=form.note,
    )
