"""Oscillations that are not those of a linear loop: limit cycles, friction, frequency that follows amplitude."""

from __future__ import annotations

import math

import numpy as np

from loopfit.core.arrays import Array
from loopfit.core.finding import Finding
from loopfit.figures.swings import Swings, find_swings
from loopfit.fit.estimate import Fit, Trace

_SWINGS = 4
_BEFORE_SHARE = 0.05  # of the change: a swing before the step below it does no harm
_STEADY = 0.15  # spread of the heights of a limit cycle
_EQUAL_STEPS = 0.4  # how much better equal steps must fit than equal ratios
_REJECTED = 9.0  # noise powers by which equal ratios must miss
_CHANGES = 0.05
_ERRORS = 5.0

MANUAL_TEST = (
    "put the loop in manual with the output held: if the swing dies away it is made in the loop (a sticking valve or its "
    "tuning), if it goes on it comes from upstream or from another loop"
)


def swings_after(trace: Trace, fit: Fit, noise: float) -> Swings:
    """Return the swings about the final value after the last change."""
    rows = trace.time >= trace.last_change + float(fit.theta[2])
    return find_swings(trace.time[rows], trace.values[rows] - _final_value(trace, fit), noise)


def _final_value(trace: Trace, fit: Fit) -> float:
    offset = float(fit.linear[fit.columns.moving_count])
    return offset if trace.input is None else offset + float(fit.linear[0] * np.sum(trace.input.sizes))


def about_swings(trace: Trace, fit: Fit, noise: float, change: float) -> list[Finding]:
    """Return what the swings before and after the step say against a linear loop.

    Parameters
    ----------
    trace : Trace
        What was fitted.
    fit : Fit
        Its model.
    noise : float
        Fast noise of a row, rms.
    change : float
        Of the measurement, by the model.
    """
    findings = _before(trace, noise, change)
    if fit.structure.rungs == (2,):
        return findings
    swings = swings_after(trace, fit, noise)
    strong = swings.heights > max(6.0 * noise, 0.01 * abs(change))
    heights, halves = swings.heights[strong], swings.half_periods[strong]
    turns = swings.turns[strong]
    if heights.size < _SWINGS:
        return findings
    span = (float(turns[0]), float(turns[-1]))
    if _falls_by_equal_steps(heights, noise):
        findings.append(
            Finding(
                code="friction_like_decay",
                severity="warning",
                at_s=span,
                text="The swings fall by equal steps, not by equal ratios: dry friction brakes the movement, the damping ratio "
                "is that of an equivalent at this amplitude, and a smaller step will look better damped.",
            )
        )
    change_of_period = _trend(halves)
    if change_of_period is not None:
        findings.append(
            Finding(
                code="frequency_changes",
                severity="warning",
                at_s=span,
                text=f"The swings get {'quicker' if change_of_period < 0 else 'slower'} as they die away (half periods change by "
                f"{100 * abs(change_of_period):.0f} %): the frequency depends on the amplitude, so the loop is not linear at "
                "this size of step.",
            )
        )
    return findings


def _before(trace: Trace, noise: float, change: float) -> list[Finding]:
    rows = trace.step_row
    if trace.input is None or rows < 4 * _SWINGS:
        return []
    t, y = trace.time[:rows], trace.values[:rows]
    trend = np.polynomial.polynomial.polyval(t, np.polynomial.polynomial.polyfit(t, y, 1))
    swings = find_swings(t, y - trend, noise)
    if swings.heights.size < _SWINGS or np.median(swings.heights) < max(5.0 * noise, _BEFORE_SHARE * abs(change)):
        return []
    period = 2.0 * float(np.median(swings.half_periods))
    return [
        Finding(
            code="swinging_before_step",
            severity="warning",
            at_s=(float(t[0]), float(t[-1])),
            text=f"The measurement swings before the step, period {period:.3g} s, amplitude {np.median(swings.heights):.3g}: "
            f"the response carries that swing. To find its cause, {MANUAL_TEST}.",
        )
    ]


def limit_cycle(trace: Trace, fit: Fit, noise: float) -> Finding | None:
    """Return the finding of a sustained oscillation of constant amplitude; None when it is none."""
    swings = swings_after(trace, fit, noise)
    if swings.heights.size < _SWINGS:
        return None
    heights = swings.heights
    middle = float(np.median(heights))
    if float(np.std(heights)) > _STEADY * middle:
        return None
    period = 2.0 * float(np.median(swings.half_periods))
    return Finding(
        code="limit_cycle",
        severity="error",
        at_s=(float(swings.passes[0]), float(swings.passes[-1])),
        text=f"The measurement swings without dying away, period {period:.3g} s, amplitude {middle:.3g}"
        f"{_shape_words(trace, fit, swings)}: damping cannot be told from it; {MANUAL_TEST}.",
    )


def _shape_words(trace: Trace, fit: Fit, swings: Swings) -> str:
    """Say when the wave is far from a sine: rms over height is 0.71 for a sine, 0.58 triangle, 1 square."""
    inside = (trace.time >= swings.passes[0]) & (trace.time <= swings.passes[-1])
    departure = trace.values[inside] - _final_value(trace, fit)
    form = float(np.sqrt(np.mean(departure**2))) / float(np.median(swings.heights))
    if form > 0.80:
        return ", nearly square"
    if form < 0.62:
        return ", nearly triangular"
    return ""


def _falls_by_equal_steps(heights: Array, noise: float) -> bool:
    k = np.arange(heights.size, dtype=np.float64)
    steps = np.polynomial.polynomial.polyfit(k, heights, 1)
    by_steps = float(np.sum((heights - np.polynomial.polynomial.polyval(k, steps)) ** 2))
    weights = heights / heights.max()
    ratios = np.polynomial.polynomial.polyfit(k, np.log(heights), 1, w=weights)
    by_ratios = float(np.sum((heights - np.exp(np.polynomial.polynomial.polyval(k, ratios))) ** 2))
    missed = by_ratios > _REJECTED * noise**2 * (heights.size - 2)
    fallen = heights[-1] < 0.6 * heights[0]
    return bool(steps[1] < 0 and fallen and missed and by_steps < _EQUAL_STEPS * by_ratios)


def _trend(halves: Array) -> float | None:
    """Return the relative change of the half periods from first to last; None when it is not clear."""
    k = np.arange(halves.size, dtype=np.float64)
    line = np.polynomial.polynomial.polyfit(k, halves, 1)
    rest = halves - np.polynomial.polynomial.polyval(k, line)
    error = math.sqrt(float(rest @ rest) / max(halves.size - 2, 1) / float(np.sum((k - k.mean()) ** 2)))
    change = float(line[1]) * (halves.size - 1) / float(np.mean(halves))
    clear = abs(line[1]) > _ERRORS * error and abs(change) > _CHANGES
    return change if clear else None
