"""Whether the model stands for the loop, and what forbids giving one."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from loopfit.analysis.swinging import limit_cycle
from loopfit.core.finding import Finding
from loopfit.core.quantity import Quantity
from loopfit.figures.swings import find_swings
from loopfit.fit.choose import change_of, clearly_structured
from loopfit.fit.estimate import Fit, Trace

_STRUCTURE_LIMIT = 0.05  # of the change: beyond it the figures are of an equivalent, not of the loop
_STRUCTURE_SEEN = 0.015
_STRUCTURE_REFUSED = 0.25
_COLOURED = 0.5
_SHAPED = 0.8
_LEAST_EXPLAINED = 0.5
_GROWING_SWINGS = 4
_LEAST_DECAY = 0.2  # of the amplitude, within the record

Figures = dict[str, Quantity | None]


@dataclass(frozen=True, slots=True, kw_only=True)
class Verdict:
    """Findings, adequacy and its reasons; `refused` when an error forbids the model."""

    findings: tuple[Finding, ...]
    adequate: bool
    reasons: tuple[str, ...]

    @property
    def refused(self) -> bool:
        """Whether no model is given."""
        return any(finding.severity == "error" for finding in self.findings)


def judge(trace: Trace, fit: Fit, figures: Figures, noise: float, *, pushed: bool, against_setpoint: bool) -> Verdict:
    """Return what to think of a fit.

    Parameters
    ----------
    trace : Trace
        What was fitted.
    fit : Fit
        The chosen model.
    figures : dict
        Figures with their intervals.
    noise : float
        Fast noise of a row, rms.
    pushed : bool
        Whether the measurement was at rest at first, with no step recorded.
    against_setpoint : bool
        Whether the step is one of the setpoint, which the measurement must follow.
    """
    change = change_of(fit, trace)
    share = clearly_structured(fit, noise) / abs(change) if change != 0 else math.inf
    growing = _growing(trace, figures, noise)
    if growing is not None:
        return Verdict(findings=(growing,), adequate=False, reasons=(growing.text,))
    findings = [
        *_refusals(trace, fit, figures, share, change, noise, pushed=pushed, against_setpoint=against_setpoint),
        *_about_damping(trace, fit, figures, noise),
        *_about_noise(fit, share),
    ]
    reasons = []
    if share > _STRUCTURE_LIMIT:
        reasons.append(
            f"the model leaves {100 * share:.0f} % of the change unexplained: the figures are of an equivalent "
            "second-order system, not of the loop"
        )
    if not fit.settled:
        reasons.append("the search for the best model did not come to rest")
    adequate = not reasons
    if adequate:
        reasons.append(f"what the model leaves over is noise, or at most {max(100 * share, 0.1):.1f} % of the change")
    return Verdict(findings=tuple(findings), adequate=adequate, reasons=tuple(reasons))


def _refusals(
    trace: Trace,
    fit: Fit,
    figures: Figures,
    share: float,
    change: float,
    noise: float,
    *,
    pushed: bool,
    against_setpoint: bool,
) -> list[Finding]:
    gain = figures.get("gain")
    if trace.input is not None and gain is not None and gain.low <= 0.0 <= gain.high:
        return [
            _error(
                "response_too_small",
                "The measurement does not answer the step clearly enough to tell even the sign of its gain; "
                "make a larger step or record longer.",
            )
        ]
    if against_setpoint and gain is not None and gain.high < 0.0:
        return [
            _error(
                "wrong_sign",
                "The measurement moves against the setpoint: the feedback has the wrong sign (check direct and reverse "
                "action before the loop is closed again), or the wrong columns were taken.",
            )
        ]
    if trace.input is None and pushed and abs(float(trace.values[0]) - float(fit.linear[2])) < 0.1 * abs(change):
        return [
            _error(
                "pushed",
                "The measurement leaves its level and comes back to it: a push whose input was not recorded, neither "
                "a step nor a release; start at the moment it is let go with --from, or record the input.",
            )
        ]
    interval = float(np.median(np.diff(trace.time)))
    T, r = (float(value[0]) for value in fit.columns.chart.lags(fit.theta[None]))
    if trace.input is None and T * max(1.0, math.sqrt(r)) < 0.5 * interval:
        return [
            _error(
                "too_quick",
                f"The measurement changes within one row ({interval:.3g} s): there is no return to rest to be seen; "
                "log faster, or record the step's own column.",
            )
        ]
    target = fit.columns.target
    total = float(np.sum((target - target.mean()) ** 2))
    explained = 1.0 - fit.sse / total if total > 0 else 0.0
    if explained < _LEAST_EXPLAINED:
        what = "No second-order response to the step" if trace.input is not None else "No step and no decay to rest"
        return [
            _error(
                "no_response",
                f"{what} is seen: the best model explains {100 * max(explained, 0):.0f} % of what the measurement "
                "does.",
            )
        ]
    cycle = limit_cycle(trace, fit, noise) if share > _STRUCTURE_LIMIT else None
    if cycle is not None:
        return [cycle]
    if share > _STRUCTURE_REFUSED:
        return [
            _error(
                "not_second_order",
                f"The best second-order model with dead time leaves {100 * share:.0f} % of the change unexplained: "
                "its damping would mean nothing.",
            )
        ]
    return []


def _growing(trace: Trace, figures: Figures, noise: float) -> Finding | None:
    """Return the finding of an oscillation that grows, by the model or by the heights of its swings."""
    zeta = figures.get("damping_ratio")
    after = trace.time >= trace.last_change
    departure = trace.values[after] - float(np.mean(trace.values[after]))
    swings = find_swings(trace.time[after], departure, noise)
    heights = swings.heights
    rising = heights.size >= _GROWING_SWINGS and bool(
        np.mean(np.diff(heights) > 0) > 0.8 and heights[-1] > 1.5 * heights[0] and heights[-1] > 8.0 * noise
    )
    if not rising and (zeta is None or zeta.high >= 0.0):
        return None
    return _error(
        "growing_oscillation",
        "The oscillation grows: the loop is unstable; go to manual and lower the gain before any further test.",
    )


def _about_damping(trace: Trace, fit: Fit, figures: Figures, noise: float) -> list[Finding]:
    zeta, frequency = figures.get("damping_ratio"), figures.get("natural_frequency_rad_s")
    if zeta is None or frequency is None:
        return []
    decay = -math.expm1(-zeta.value * frequency.value * trace.span) if math.isfinite(frequency.value) else 1.0
    if zeta.value < 0.5 and decay < _LEAST_DECAY:
        cycle = limit_cycle(trace, fit, noise)
        if cycle is not None:
            return [cycle]
        need = -math.log(0.5) / (max(zeta.value, 1e-6) * frequency.value)
        longer = f"; record about {need:.3g} s" if zeta.low > 0 else ""
        return [
            _error(
                "too_little_decay",
                f"The swings fell by only {100 * max(decay, 0):.0f} % within the record: too little to tell the "
                f"damping{longer}.",
            )
        ]
    return []


def _about_noise(fit: Fit, share: float) -> list[Finding]:
    if fit.colour < _COLOURED:
        return []
    if share > _STRUCTURE_SEEN and fit.colour > _SHAPED:
        return [
            Finding(
                code="shaped_residual",
                severity="warning",
                text=f"The residual is shaped, not noise ({100 * share:.1f} % of the change, neighbours alike by "
                f"{fit.colour:.2f}): something else than a second-order response moves the measurement (drift, "
                "friction, saturation); believe the figures no closer than that.",
            )
        ]
    return [
        Finding(
            code="coloured_noise",
            severity="note",
            text="Neighbouring residuals are alike: the noise is taken as coloured, and the intervals allow for it.",
        )
    ]


def _error(code: str, text: str) -> Finding:
    return Finding(code=code, severity="error", text=text)
