"""Which main figures a record determines, and what record would determine the others."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np

from loopfit.analysis.information import Hypothesis
from loopfit.analysis.noise import Noise
from loopfit.core.arrays import Array
from loopfit.core.quantity import Quantity
from loopfit.fit.estimate import Fit, Trace

MAIN = ("damping_ratio", "natural_frequency_rad_s", "gain", "dead_time_s")
WITHIN = 0.2  # half-width of the interval over the value: closer, a figure counts as determined
_MARGIN = 0.9  # the advised record aims a little closer: half-widths vary by some 5 % from record to record
_MOST = {"larger_step": 10.0, "longer_record": 10.0, "faster_sampling": 20.0}
_NEAR_CRITICAL = 0.05  # as the regime has it


@dataclass(frozen=True, slots=True, kw_only=True)
class Determined:
    """Whether a record determines a figure, and the least factors that would; None where a remedy does not help.

    `half_width` is half the interval and `wanted` the widest that still determines the figure, in its unit.
    `larger_step` multiplies the step (the displacement, for a release), `longer_record` the time after the step,
    which adds `longer_by_s`, `faster_sampling` the number of rows in a second; each alone, the rest as in the record.
    """

    figure: str
    determined: bool
    half_width: float
    wanted: float
    larger_step: float | None = None
    longer_record: float | None = None
    longer_by_s: float | None = None
    faster_sampling: float | None = None


def determined(
    fit: Fit,
    trace: Trace,
    figures: Mapping[str, Quantity | None],
    noise: Noise,
    *,
    dead_time_within: float,
    confidence: float,
    kind: str,
    only_noise: bool = True,
    coarse: bool = False,
) -> tuple[Determined, ...]:
    """Return what the record says of each main figure that the model has.

    Parameters
    ----------
    fit, trace : Fit, Trace
        The model, and the rows it was fitted to.
    figures : mapping
        Main figures with their intervals; None or absent where the model has none.
    noise : Noise
        Of the record.
    dead_time_within : float
        Half-width, s, with which a dead time is told well enough even where that is more than 20 % of it.
    confidence : float
        Of the intervals, as a fraction.
    kind : str
        Of the model: the damping ratio of a single lag has no upper bound to be found, and the dead time of a mere jump
        is told by the rows before and after it alone.
    only_noise : bool
        Whether what the model leaves over is noise; if not, no other record of this kind is advised.
    coarse : bool
        Whether the rows repeat each other because of the resolution, so that more of them tell nothing new.

    Notes
    -----
    Half-widths of other records are those of the inverse Fisher information (Cramer 1946; Rao 1945) of the fitted model
    and noise. They are as good as the fitted values: where these are far off, so are the factors.
    """
    there = {name: figure for name in MAIN if (figure := figures.get(name)) is not None}
    wanted = {name: _wanted(name, figure, dead_time_within) for name, figure in there.items()}
    half = {name: 0.5 * (figure.high - figure.low) for name, figure in there.items()}
    open_ones = {name for name in there if not half[name] <= wanted[name]}
    found: dict[str, dict[str, float | None]] = {name: {} for name in there}
    told = open_ones - ({"damping_ratio", "natural_frequency_rad_s"} if kind == "first_order" else set())
    if told and only_noise:
        remedies = _remedies(fit, trace, noise, confidence, coarse=coarse)
        for name in told:
            found[name] = {
                remedy: _least(tried, widths[name], _MARGIN * wanted[name], half[name])
                for remedy, (tried, widths) in remedies.items()
                if name in widths
            }
            if kind == "dead_time" and name == "dead_time_s":
                factor = half[name] / (_MARGIN * wanted[name]) if wanted[name] > 0 else math.inf
                found[name] = {"faster_sampling": factor if factor <= _MOST["faster_sampling"] else None}
            longer = found[name].get("longer_record")
            found[name]["longer_by_s"] = None if longer is None else (longer - 1.0) * trace.span
    return tuple(
        Determined(
            figure=name, determined=name not in open_ones, half_width=half[name], wanted=wanted[name], **found[name]
        )
        for name in there
    )


def _wanted(name: str, figure: Quantity, dead_time_within: float) -> float:
    """Return the widest half-width at which a figure is determined."""
    share = WITHIN * abs(figure.value)
    if name == "dead_time_s":
        return max(share, dead_time_within)
    if name == "damping_ratio":
        from_critical = abs(figure.value - 1.0)
        # either the interval keeps away from 1, or it lies in the band that is called critical
        return min(share, max(from_critical, _NEAR_CRITICAL - from_critical))
    return share


def _remedies(
    fit: Fit, trace: Trace, noise: Noise, confidence: float, *, coarse: bool
) -> dict[str, tuple[Array, dict[str, Array]]]:
    alike = 1.0 if noise.rows_per_independent is None else noise.rows_per_independent
    if alike < 1.0:  # rows that make up for each other are most often chance: nothing is built on them
        fit, alike = replace(fit, whitener=None, variance=max(fit.variance, fit.sse / fit.degrees)), 1.0
    other = Hypothesis(fit=fit, confidence=confidence, rows_per_independent=alike)
    out = {
        "larger_step": other.of_larger_step(_MOST["larger_step"]),
        "longer_record": other.of_longer_record(trace.span, _MOST["longer_record"]),
    }
    if not coarse:
        out["faster_sampling"] = other.of_faster_sampling(_MOST["faster_sampling"])
    return out


def _least(tried: Array, widths: Array, wanted: float, now: float) -> float | None:
    """Return the least factor beyond 1 with a half-width as wanted; None when there is none."""
    if widths[0] <= wanted:  # the likelihood is wider than its curvature says: so will it be there
        if math.isinf(now):
            return None
        wanted *= max(float(widths[0]) / now, 0.5)
    enough = np.flatnonzero(widths[1:] <= wanted)
    return float(tried[1 + enough[0]]) if enough.size else None
