"""One trace, fitted and judged."""

from __future__ import annotations

from dataclasses import dataclass, replace

from loopfit.analysis.judge import Figures, Verdict, judge
from loopfit.core.finding import Finding
from loopfit.core.quantity import Quantity
from loopfit.fit.choose import change_of, choose, structured
from loopfit.fit.doubt import doubt_of
from loopfit.fit.estimate import Fit, Trace, fit_trace
from loopfit.fit.figures_of import Points
from loopfit.fit.intervals import quantities, refine, surface_of, whitened
from loopfit.fit.set_aside import Rows, false_first_rows, outliers, without_rows
from loopfit.fit.third_walk import widened
from loopfit.step.limits import rows_at_limit
from loopfit.step.noise import resolution

_REFITS = 3
_ROWS_LEFT = 12
_LISTED = 5
_FAR_OFF = 12.0  # noise powers, a chance in ten thousand with three coordinates
_WORTH_A_LOOK = 0.02  # of the change left unexplained


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Assessment:
    """A fitted trace: its model, all models it allows, the figures with intervals, and what to think of them.

    `plain` is the fit that takes the noise for white, by which the misfit is judged. `trace` lacks the rows that
    were set aside; `aside` says which.
    """

    trace: Trace
    plain: Fit
    fit: Fit
    points: Points
    figures: Figures
    verdict: Verdict
    aside: tuple[Finding, ...]


def assess(
    trace: Trace,
    *,
    noise: float,
    noise_floor: float,
    confidence: float,
    band: float,
    pushed: bool = False,
    setpoint: bool = False,
) -> Assessment:
    """Fit a trace, find its intervals, and judge it.

    Parameters
    ----------
    trace : Trace
        Rows and input.
    noise : float
        Fast noise of a row, rms.
    noise_floor : float
        Least noise that the resolution allows.
    confidence, band : float
        As fractions.
    pushed : bool
        Whether a record without a step begins at rest.
    setpoint : bool
        Whether the step is one of the setpoint.
    """
    aside: list[Finding] = []
    limited = rows_at_limit(trace.values)
    if limited.size and trace.values.size - limited.size >= _ROWS_LEFT:
        aside.append(_at_limit(trace, limited))
        trace = without_rows(trace, limited)
    fit = choose(trace, noise, noise_floor=noise_floor)
    if trace.input is not None and structured(fit, noise) > _WORTH_A_LOOK * abs(change_of(fit, trace)):
        rows = false_first_rows(trace, fit, noise_floor=noise_floor)
        if rows.size:
            aside.append(_false_first(trace, rows))
            trace = without_rows(trace, rows)
            fit = fit_trace(trace, fit.structure, noise_floor=noise_floor)
    wild = outliers(trace, fit, resolution(trace.values))
    if wild.size:
        aside.append(_outliers(trace, wild))
        trace = without_rows(trace, wild)
        fit = choose(trace, noise, noise_floor=noise_floor)
    plain = fit  # least squares explains most; what it leaves is judged, not what the coloured noise may swallow
    doubt = doubt_of(plain, confidence=confidence, noise_floor=noise_floor)
    if doubt is not None and doubt.clear:
        # what a model cannot follow is not noise, and must not be filtered as if it were
        fit = replace(plain, inflation=max(plain.inflation, doubt.inflation))
    else:
        fit = whitened(plain, trace, noise_floor=noise_floor)
        if fit.sse - plain.sse > _FAR_OFF * plain.inflation * plain.variance:
            fit = plain  # no noise of that colour moves a model so far
    surface = surface_of(fit, confidence=confidence, band=band)
    for _ in range(_REFITS):  # a walker can meet a better model than the search did
        if surface.better is None:
            break
        fit = refine(fit, surface.better)
        surface = surface_of(fit, confidence=confidence, band=band)
    figures = quantities(fit, surface, band)
    if doubt is not None:
        figures |= widened(doubt, figures, trace.span, band)
        if doubt.clear:
            aside.append(_beyond_second_order())
    figures["overshoot_percent"] = _told_from_none(figures)
    verdict = judge(trace, plain, figures, noise, pushed=pushed, against_setpoint=setpoint)
    return Assessment(
        trace=trace, plain=plain, fit=fit, points=surface.points, figures=figures, verdict=verdict, aside=tuple(aside)
    )


def _told_from_none(figures: Figures) -> Quantity | None:
    """Return the overshoot, from 0 on where it is smaller than the error of the final value: no record shows that one."""
    over, gain = figures["overshoot_percent"], figures["gain"]
    if over is None or gain is None or gain.value == 0:
        return over
    error = 50.0 * (gain.high - gain.low) / abs(gain.value)
    return replace(over, low=0.0) if over.low < error else over


def _beyond_second_order() -> Finding:
    return Finding(
        code="beyond_second_order",
        severity="note",
        text="A model with a third lag and a zero explains the record clearly better than the second order: overshoot, rise, "
        "delay, peak and settling time carry that doubt in their intervals; damping ratio and frequency are those of the "
        "second-order equivalent.",
    )


def _at_limit(trace: Trace, rows: Rows) -> Finding:
    times = trace.time[rows]
    level = trace.values[rows[0]]
    return Finding(
        code="measurement_saturated",
        severity="warning",
        at_s=(float(times[0]), float(times[-1])),
        text=f"The measurement lies flat at {level:g} for {rows.size} rows, from {times[0]:.6g} s on: it is at the end of its "
        "range. Those rows were set aside; what the record shows of overshoot and peak is a lower bound.",
    )


def _false_first(trace: Trace, rows: Rows) -> Finding:
    values = ", ".join(f"{value:g}" for value in trace.values[rows])
    which = f"first {rows.size} rows" if rows.size > 1 else "first row"
    return Finding(
        code="false_first_rows",
        severity="warning",
        at_s=(float(trace.time[rows][0]), float(trace.time[rows][-1])),
        text=f"The {which} after the step ({values}) {'do' if rows.size > 1 else 'does'} not belong to the response, set aside: the first "
        "samples after a switch are often false, and a fit would take them for ringing.",
    )


def _outliers(trace: Trace, rows: Rows) -> Finding:
    times = trace.time[rows]
    where = ", ".join(f"{value:.6g}" for value in times[:_LISTED]) + (", ..." if rows.size > _LISTED else "")
    what = f"{rows.size} rows are" if rows.size > 1 else "One row is"
    return Finding(
        code="outliers",
        severity="note",
        at_s=(float(times[0]), float(times[-1])),
        text=f"{what} far from all others (at {where} s) and set aside.",
    )
