"""From a record to an analysis."""

from __future__ import annotations

import math
import os
from collections.abc import Mapping
from dataclasses import replace
from functools import partial

import numpy as np
from numpy.typing import ArrayLike

from loopfit.analysis.advice import Determined
from loopfit.analysis.advice_words import advised
from loopfit.analysis.assess import assess
from loopfit.analysis.circumstances import (
    about_rows,
    apart_from_record,
    around_the_step,
    drifting_tail,
    other_inputs,
    output_limits,
    standing_offset,
)
from loopfit.analysis.figures import model_of, response_of
from loopfit.analysis.noise import noise_of
from loopfit.analysis.prepared import StatedStep
from loopfit.analysis.result import Analysis, ObservedFigures, StepFigures, StepUsed
from loopfit.analysis.several import disagreements, of_each
from loopfit.analysis.swinging import about_swings
from loopfit.analysis.trace import prepare
from loopfit.core.errors import RecordError, UsageError
from loopfit.core.finding import Finding
from loopfit.core.quantity import Quantity
from loopfit.figures.observed import observe
from loopfit.figures.swings import find_swings
from loopfit.fit.choose import change_of
from loopfit.fit.estimate import Trace
from loopfit.record.read import read_record, record_from_arrays
from loopfit.record.record import Record
from loopfit.step.noise import noise_rms, resolution

_SWINGS_TO_COMPARE = 3
_CLEAR = 15.0


def analyze(
    source: str | os.PathLike[str] | None = None,
    *,
    time: ArrayLike | None = None,
    measurement: ArrayLike | None = None,
    setpoint: ArrayLike | None = None,
    output: ArrayLike | None = None,
    columns: Mapping[str, str | int] | None = None,
    interval_s: float | None = None,
    window_s: tuple[float | None, float | None] | None = None,
    step: int | None = None,
    step_at_s: float | None = None,
    step_from: float | None = None,
    step_to: float | None = None,
    band_percent: float = 2.0,
    confidence_percent: float = 95.0,
) -> Analysis:
    """Analyse one recorded step test or release.

    Parameters
    ----------
    source : path, optional
        A file ("-" for standard input); without it, `measurement` and its companions.
    time, measurement, setpoint, output : (n,) array-like, optional
        The signals, s and engineering units.
    columns : mapping, optional
        "time", "measurement", "setpoint", "output" to a header name or 1-based number.
    interval_s : float, optional
        Time between rows, s, where there is no time column.
    window_s : (from, to), optional
        Part of the record, s on its own clock.
    step : int, optional
        Which step, counted from 1.
    step_at_s, step_from, step_to : float, optional
        A step that the record does not hold; all three.
    band_percent : float
        Settling band, % of the change.
    confidence_percent : float
        Of every interval.

    Returns
    -------
    Analysis
        With `model` None when the record was readable but tells no model.

    Raises
    ------
    UsageError
        If the arguments contradict each other.
    RecordError
        If the record cannot be used.
    """
    _check_types(band_percent=band_percent, confidence_percent=confidence_percent, interval_s=interval_s,
                 step_at_s=step_at_s, step_from=step_from, step_to=step_to)  # fmt: skip
    if window_s is not None:
        if not isinstance(window_s, tuple | list) or len(window_s) != 2:
            raise UsageError("window_s is a pair: from and to, either may be None")
        _check_types(window_from=window_s[0], window_to=window_s[1])
    if step is not None and (isinstance(step, bool) or not isinstance(step, int)):
        raise UsageError(f"step is a whole number, not {step!r}")
    if not 0 < band_percent < 50:
        raise UsageError(f"the settling band must be above 0 and below 50 %, not {band_percent:g}")
    if not 50 <= confidence_percent < 100:
        raise UsageError(f"the confidence must be at least 50 and below 100 %, not {confidence_percent:g}")
    if step is not None and step < 1:
        raise UsageError(f"steps are counted from 1, not {step}")
    stated = _stated(step_at_s, step_from, step_to)
    if step is not None and stated is not None:
        raise UsageError("a stated step leaves no choice: give --step or --step-at, not both")
    arrays = (time, measurement, setpoint, output)
    if source is not None:
        if any(array is not None for array in arrays):
            raise UsageError("give a file or arrays, not both")
        if str(source).lower().endswith(".toml"):
            raise RecordError(
                str(source), "this is a case, not a record, and cases cannot be analysed yet; give the record"
            )
        record = read_record(source, columns=columns, interval_s=interval_s, window_s=window_s)
    elif measurement is not None:
        if columns:
            raise UsageError("columns= is for a file; give each array its own argument")
        record = record_from_arrays(
            time=time,
            measurement=measurement,
            setpoint=setpoint,
            output=output,
            interval_s=interval_s,
            window_s=window_s,
        )
    else:
        raise UsageError("give a file, or measurement= and time= or interval_s=")
    return analyze_record(
        record, step=step, stated=stated, band_percent=band_percent, confidence_percent=confidence_percent
    )


def _check_types(**numbers: object) -> None:
    for name, value in numbers.items():
        if value is not None and (
            isinstance(value, bool) or not isinstance(value, int | float | np.integer | np.floating)
        ):
            raise UsageError(f"{name} is a number, not {value!r}")


def _stated(at: float | None, from_: float | None, to: float | None) -> StatedStep | None:
    if at is None and from_ is None and to is None:
        return None
    if at is None or from_ is None or to is None:
        raise UsageError("a stated step needs its instant and both levels: --step-at, --step-from and --step-to")
    if not all(math.isfinite(value) for value in (at, from_, to)):
        raise UsageError("the instant and levels of a stated step must be finite numbers")
    return StatedStep(at_s=at, from_=from_, to=to)


def analyze_record(
    record: Record,
    *,
    step: int | None = None,
    stated: StatedStep | None = None,
    band_percent: float = 2.0,
    confidence_percent: float = 95.0,
) -> Analysis:
    """Analyse a record that has been read; see `analyze`."""
    prepared = prepare(record, number=step, stated=stated)
    band, confidence = band_percent / 100.0, confidence_percent / 100.0
    noise = noise_rms(prepared.trace.values)
    grid = resolution(prepared.trace.values)
    floor = grid / math.sqrt(12.0) if noise < grid / 3.0 else 0.0  # undithered: sigma >= q / sqrt(12)
    noise = max(noise, floor)
    one = partial(
        assess,
        noise=noise,
        noise_floor=floor,
        confidence=confidence,
        band=band,
        setpoint=prepared.step is not None and prepared.step.signal == "setpoint",
    )
    findings = [*record.findings, *prepared.findings]
    each: list[StepFigures] = []
    steps, first_trace = prepared.steps, prepared.trace
    apart: list[Finding] = []
    if prepared.separate:
        alone = [one(trace) for _, trace in prepared.separate]
        each = [of_each(step_used, assessed) for (step_used, _), assessed in zip(prepared.separate, alone, strict=True)]
        first_trace = prepared.separate[0][1]
        apart = disagreements(each)
        findings += apart or [_taken_together(len(each))]
    if apart:  # then there is no model of all steps together to look for
        best = alone[0]
        steps = tuple(replace(s, used=s.time_s == prepared.separate[0][0].time_s) for s in steps)
    else:
        best = one(prepared.trace, pushed=prepared.held_before)
    observed = _observed(prepared.step, first_trace, band, confidence, noise)
    findings += [*best.aside, *best.verdict.findings]
    fit, figures, trace = best.fit, best.figures, best.trace
    model = None if best.verdict.refused else model_of(fit, figures, best.verdict, record.sample_interval_s)
    response = None if model is None else response_of(fit, figures, best.points, band, model)
    about_noise = noise_of(trace, None if model is None else fit, rms=noise, grid=grid)
    verdicts: tuple[Determined, ...] = ()
    if model is not None:
        findings += around_the_step(trace, fit, figures, noise)
        findings += about_rows(trace, fit, noise)
        findings += drifting_tail(trace, fit, figures, noise)
        findings += apart_from_record(observed, figures)
        findings += about_swings(trace, best.plain, noise, change_of(best.plain, trace))
        if prepared.step is not None:
            findings += other_inputs(record, trace, prepared.step)
            findings += output_limits(record, trace, prepared.step)
            if not fit.structure.drift:
                findings += standing_offset(observed, figures["gain"], prepared.step)
        verdicts, notes = advised(best, model, response, about_noise, confidence, coarse=floor > 0)
        findings += notes
    return Analysis(
        record=record,
        findings=tuple(findings),
        window_s=(float(trace.time[0]), float(trace.time[-1])),
        noise=about_noise,
        step=prepared.step,
        steps=steps,
        per_step=tuple(each),
        observed=observed,
        model=model,
        response=response,
        determined=verdicts,
        fit=fit,
        points=best.points,
        band_percent=float(band_percent),
        confidence_percent=float(confidence_percent),
    )


def _taken_together(count: int) -> Finding:
    return Finding(
        code="several_steps",
        severity="note",
        text=f"The {count} steps of the record agree and are fitted together; what the record shows is of the first.",
    )


def _observed(step: StepUsed | None, trace: Trace, band: float, confidence: float, noise: float) -> ObservedFigures:
    if step is None:
        return _observed_release(trace, confidence, noise)
    if step.size == 0:
        return ObservedFigures()
    setpoint = step.to if step.signal == "setpoint" else None
    seen = observe(
        trace.time,
        trace.values,
        step.time_s,
        setpoint_after=setpoint,
        band=band,
        confidence=confidence,
        noise_rms=noise,
    )
    figures = {name: getattr(seen, name, None) for name in ObservedFigures.__dataclass_fields__}
    if setpoint is not None and seen.peak_value is not None:
        percent = 100.0 * math.copysign(1.0, step.size) / abs(step.size)
        past = seen.peak_value.shifted(-step.to).scaled(percent)
        figures["overshoot_over_setpoint_percent"] = Quantity(*(max(x, 0.0) for x in (past.value, past.low, past.high)))
    return ObservedFigures(**figures)


def _observed_release(trace: Trace, confidence: float, noise: float) -> ObservedFigures:
    """Return what a release shows without a model: where it begins, and the decay of its swings."""
    from scipy.special import ndtri  # the other quantiles need it too: already there

    rest = float(np.mean(trace.values[-max(5, trace.values.size // 10) :]))
    heights = find_swings(trace.time, trace.values - rest, noise).heights
    heights = heights[heights > _CLEAR * noise]  # smaller ones are raised by the noise they stand in
    first = float(trace.values[0])
    width = float(ndtri(0.5 + 0.5 * confidence)) * noise
    begin = Quantity(first, first - width, first + width)
    if heights.size < _SWINGS_TO_COMPARE:
        return ObservedFigures(initial_value=begin)
    swings = heights.size - 1
    ratio = float((heights[-1] / heights[0]) ** (2.0 / swings))  # two swings make a period
    error = 2.0 / swings * width * math.hypot(1.0 / heights[0], 1.0 / heights[-1])
    decay = Quantity(ratio, max(ratio * (1.0 - error), 0.0), ratio * (1.0 + error))
    return ObservedFigures(initial_value=begin, decay_ratio=decay)
