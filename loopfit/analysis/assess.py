"""One trace, fitted and judged."""

from __future__ import annotations

from dataclasses import dataclass

from loopfit.analysis.judge import Figures, Verdict, judge
from loopfit.core.finding import Finding
from loopfit.fit.choose import change_of, choose, structured
from loopfit.fit.estimate import Fit, Trace, quantities, refine, surface_of
from loopfit.fit.figures_of import Points
from loopfit.fit.set_aside import false_first_rows, without_rows

_REFITS = 3
_WORTH_A_LOOK = 0.02  # of the change left unexplained


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Assessment:
    """A fitted trace: its model, all models it allows, the figures with intervals, and what to think of them.

    `trace` lacks the rows that were set aside; `aside` says which.
    """

    trace: Trace
    fit: Fit
    points: Points
    figures: Figures
    verdict: Verdict
    aside: tuple[Finding, ...]


def assess(
    trace: Trace, *, noise: float, noise_floor: float, confidence: float, band: float, pushed: bool = False
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
    """
    fit = choose(trace, noise, noise_floor=noise_floor)
    aside: tuple[Finding, ...] = ()
    if trace.input is not None and structured(fit, noise) > _WORTH_A_LOOK * abs(change_of(fit, trace)):
        count, fit = false_first_rows(trace, fit, noise_floor=noise_floor)
        if count:
            aside = (_set_aside(trace, count),)
            trace = without_rows(trace, count)
    surface = surface_of(fit, confidence=confidence, band=band)
    for _ in range(_REFITS):  # a walker can meet a better model than the search did
        if surface.better is None:
            break
        fit = refine(fit, surface.better)
        surface = surface_of(fit, confidence=confidence, band=band)
    figures = quantities(fit, surface, band)
    verdict = judge(trace, fit, figures, noise, pushed=pushed)
    return Assessment(trace=trace, fit=fit, points=surface.points, figures=figures, verdict=verdict, aside=aside)


def _set_aside(trace: Trace, count: int) -> Finding:
    rows = slice(trace.step_row, trace.step_row + count)
    values = ", ".join(f"{value:g}" for value in trace.values[rows])
    which = f"first {count} rows" if count > 1 else "first row"
    return Finding(
        code="false_first_rows",
        severity="warning",
        at_s=(float(trace.time[rows][0]), float(trace.time[rows][-1])),
        text=f"The {which} after the step ({values}) do not belong to the response and were set aside: the first "
        "samples after a switch are often false, and a fit would take them for ringing.",
    )
