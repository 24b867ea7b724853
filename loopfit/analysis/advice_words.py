"""What a record does not determine and what record would, in a sentence for each figure."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence

import numpy as np

from loopfit.analysis.advice import MAIN, WITHIN, Determined, determined
from loopfit.analysis.assess import Assessment
from loopfit.analysis.noise import Noise
from loopfit.analysis.result import Model, ResponseFigures
from loopfit.core.finding import Finding
from loopfit.core.quantity import Quantity
from loopfit.core.rounding import decimals_for, decimals_of, number

NAMES = {
    "damping_ratio": "damping ratio",
    "natural_frequency_rad_s": "natural frequency",
    "gain": "gain",
    "dead_time_s": "dead time",
}
_UNITS = {"natural_frequency_rad_s": " rad/s", "dead_time_s": " s"}
_WITHIN_RISE = 0.05  # a dead time is told well enough within this share of the rise time
_WITHIN_ROW = 0.5  # or of the time between rows
_TOGETHER = {"damping_ratio", "natural_frequency_rad_s"}


def advised(
    best: Assessment,
    model: Model,
    response: ResponseFigures | None,
    noise: Noise,
    confidence: float,
    *,
    coarse: bool,
) -> tuple[tuple[Determined, ...], list[Finding]]:
    """Return what the record says of each main figure, and the notes on what record would say more."""
    if not model.adequate:
        return (), []
    fit, trace = best.fit, best.trace
    only_noise = all(finding.code != "shaped_residual" for finding in best.verdict.findings)
    one_lag = model.kind == "first_order"
    main = {name: getattr(model, name) for name in MAIN}
    if one_lag:
        main["natural_frequency_rad_s"] = None
    rise = None if response is None or model.kind == "dead_time" else response.rise_time_s
    if rise is not None and math.isfinite(rise.value):
        dead_time_within = _WITHIN_RISE * rise.value
    else:  # an integration or a mere jump has no rise to compare with
        both = 0.0 if model.lag_plus_dead_time_s is None else model.lag_plus_dead_time_s.value
        dead_time_within = max(_WITHIN_ROW * float(np.median(np.diff(trace.time))), _WITHIN_RISE * both)
    verdicts = determined(
        fit,
        trace,
        main,
        noise,
        dead_time_within=dead_time_within,
        confidence=confidence,
        kind=model.kind,
        only_noise=only_noise,
        coarse=coarse,
    )
    if not only_noise:  # what it leaves over would be in a longer record too, and grow with the step
        return verdicts, []
    settling = None if response is None or fit.columns.input is None else response.settling_time_s
    beyond = -1.0 if settling is None else settling.value - float(trace.time[-1] - trace.last_change)
    return verdicts, advice(
        verdicts,
        main,
        release=fit.columns.input is None,
        settles_after=beyond if 0.0 < beyond < math.inf else None,
        one_lag=one_lag,
    )


def advice(
    verdicts: Sequence[Determined],
    figures: Mapping[str, Quantity | None],
    *,
    release: bool,
    settles_after: float | None,
    one_lag: bool,
) -> list[Finding]:
    """Return a note for each main figure that the record does not determine.

    Parameters
    ----------
    verdicts : sequence of Determined
    figures : mapping
        The figures with their intervals.
    release : bool
        Whether the record has no step.
    settles_after : float, optional
        How long after the end of the record the response settles, s; None when it has settled.
    one_lag : bool
        Whether the best model is a single lag.
    """
    missing = [verdict for verdict in verdicts if not verdict.determined]
    findings = []
    if one_lag and any(verdict.figure == "damping_ratio" for verdict in missing):
        damping = figures["damping_ratio"]
        assert damping is not None
        missing = [verdict for verdict in missing if verdict.figure not in _TOGETHER]
        findings.append(
            _note(
                "damping_ratio",
                f"The response is that of a single time constant: all that can be said of the damping ratio is that it is "
                f"{_range(damping)}, and no other record is sure to bound it.",
            )
        )
    pair = [verdict for verdict in missing if verdict.figure in _TOGETHER]
    groups = [[verdict] for verdict in missing]
    if len(pair) == 2 and not _about_regime(pair[0], figures):
        groups = [pair, *([verdict] for verdict in missing if verdict not in pair)]
    for group in groups:
        subject = _subject(group, figures)
        text = f"{subject}: {_remedies(group, figures, release=release, settles_after=settles_after)}."
        findings.append(_note(group[0].figure, text))
    return findings


def _note(figure: str, text: str) -> Finding:
    return Finding(code=f"{NAMES[figure].replace(' ', '_')}_not_determined", severity="note", text=text)


def _about_regime(verdict: Determined, figures: Mapping[str, Quantity | None]) -> bool:
    """Tell whether a damping ratio is close enough by itself, but not on one side of 1."""
    quantity = figures[verdict.figure]
    assert quantity is not None
    return verdict.figure == "damping_ratio" and verdict.half_width <= WITHIN * abs(quantity.value)


def _subject(group: Sequence[Determined], figures: Mapping[str, Quantity | None]) -> str:
    parts = []
    for verdict in group:
        quantity = figures[verdict.figure]
        assert quantity is not None
        parts.append(f"the {NAMES[verdict.figure]} ({_range(quantity)}{_UNITS.get(verdict.figure, '')})")
    if _about_regime(group[0], figures):
        return f"This record does not tell on which side of 1 {parts[0]} lies"
    text = " and ".join(parts) + (" are" if len(parts) > 1 else " is") + " not determined by this record"
    return text[0].upper() + text[1:]


def _range(quantity: Quantity) -> str:
    if math.isinf(quantity.high):
        return f"at least {number(quantity.low, decimals_of(quantity))}"
    places = decimals_for(min(quantity.value - quantity.low, quantity.high - quantity.value), quantity.value)
    return f"{number(quantity.low, places)} to {number(quantity.high, places)}"


def _remedies(
    group: Sequence[Determined],
    figures: Mapping[str, Quantity | None],
    *,
    release: bool,
    settles_after: float | None,
) -> str:
    larger, longer, longer_by, faster = (
        _largest([getattr(verdict, name) for verdict in group])
        for name in ("larger_step", "longer_record", "longer_by_s", "faster_sampling")
    )
    would, would_not = [], []
    if larger is not None:
        would.append(f"a {'displacement' if release else 'step'} {_times(larger)} times larger")
    else:
        would_not.append("a larger displacement" if release else "a larger step")
    if longer is not None and longer_by is not None:
        if settles_after is not None and longer_by <= settles_after:
            would.append(f"a record until it has settled ({settles_after:.3g} s longer)")
        else:
            would.append(f"a record {longer_by:.2g} s longer")
    else:
        would_not.append("recording longer")
    if faster is not None:
        would.append(f"rows {_times(faster)} times as often")
    else:
        would_not.append("sampling faster")
    end = _enough(group, figures)
    if not would:
        what = "displacement" if release else "step"
        return f"none of a {what} 10 times larger, recording longer and sampling faster would tell {end}"
    text = f"{', or '.join(would)}{',' if len(would) > 1 else ''} would tell {end}"
    if would_not:
        text += f"; {' or '.join(would_not)} would not"
    return text


def _largest(values: Sequence[float | None]) -> float | None:
    there = [value for value in values if value is not None]
    return max(there) if there and len(there) == len(values) else None


def _enough(group: Sequence[Determined], figures: Mapping[str, Quantity | None]) -> str:
    verdict = group[0]
    if _about_regime(verdict, figures):
        return "it"
    quantity = figures[verdict.figure]
    assert quantity is not None
    what = "both" if len(group) > 1 else "it"
    if verdict.figure == "dead_time_s" and verdict.wanted > WITHIN * abs(quantity.value):
        return f"{what} within {number(verdict.wanted, decimals_for(verdict.wanted, verdict.wanted))} s"
    return f"{what} within {100 * WITHIN:.0f} %"


def _times(factor: float) -> str:
    """Return a factor to two figures, rounded up, so that it is enough."""
    tenths = math.ceil(10.0 * factor - 1e-9)
    return f"{tenths / 10:g}" if tenths < 100 else f"{math.ceil(factor - 1e-9)}"
