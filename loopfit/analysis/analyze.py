"""From a record to an analysis."""

from __future__ import annotations

import math
import os
from collections.abc import Mapping

from numpy.typing import ArrayLike

from loopfit.analysis.circumstances import about_rows, around_the_step, other_inputs, standing_offset
from loopfit.analysis.figures import model_of, response_of
from loopfit.analysis.judge import judge
from loopfit.analysis.result import Analysis, ObservedFigures
from loopfit.analysis.trace import Prepared, StatedStep, prepare
from loopfit.core.errors import UsageError
from loopfit.core.finding import Finding
from loopfit.core.quantity import Quantity
from loopfit.figures.observed import observe
from loopfit.fit.choose import change_of, choose, structured
from loopfit.fit.estimate import Trace, quantities, refine, surface_of
from loopfit.fit.set_aside import false_first_rows, without_rows
from loopfit.record.read import read_record, record_from_arrays
from loopfit.record.record import Record
from loopfit.step.noise import noise_rms, resolution

_REFITS = 3
_WORTH_A_LOOK = 0.02  # of the change left unexplained


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
    if not 0 < band_percent < 50:
        raise UsageError(f"the settling band must be above 0 and below 50 %, not {band_percent:g}")
    if not 50 <= confidence_percent < 100:
        raise UsageError(f"the confidence must be at least 50 and below 100 %, not {confidence_percent:g}")
    if step is not None and step < 1:
        raise UsageError(f"steps are counted from 1, not {step}")
    stated = _stated(step_at_s, step_from, step_to)
    if source is not None:
        if measurement is not None:
            raise UsageError("give a file or arrays, not both")
        record = read_record(source, columns=columns, interval_s=interval_s, window_s=window_s)
    elif measurement is not None:
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
    trace = prepared.trace
    band, confidence = band_percent / 100.0, confidence_percent / 100.0
    noise = noise_rms(trace.values)
    grid = resolution(trace.values)
    floor = grid / math.sqrt(12.0) if noise < grid / 3.0 else 0.0  # undithered: sigma >= q / sqrt(12)
    observed = _observed(prepared, band, confidence, noise)
    noise = max(noise, floor)
    fit = choose(trace, noise, noise_floor=floor)
    aside: list[Finding] = []
    if trace.input is not None and structured(fit, noise) > _WORTH_A_LOOK * abs(change_of(fit, trace)):
        count, fit = false_first_rows(trace, fit, noise_floor=floor)
        if count:
            aside = [_set_aside(trace, count)]
            trace = without_rows(trace, count)
    surface = surface_of(fit, confidence=confidence, band=band)
    for _ in range(_REFITS):  # a walker can meet a better model than the search did
        if surface.better is None:
            break
        fit = refine(fit, surface.better)
        surface = surface_of(fit, confidence=confidence, band=band)
    figures = quantities(fit, surface, band)
    verdict = judge(trace, fit, figures, noise, pushed=prepared.held_before)
    findings = [*record.findings, *prepared.findings, *aside, *verdict.findings]
    if not verdict.refused:
        findings += around_the_step(trace, fit, figures, noise)
        findings += about_rows(trace, fit, noise)
        if prepared.step is not None:
            findings += other_inputs(record, trace, prepared.step)
            findings += standing_offset(observed, figures["gain"], prepared.step)
    model = None if verdict.refused else model_of(fit, figures, verdict, record.sample_interval_s)
    return Analysis(
        record=record,
        findings=tuple(findings),
        window_s=(float(trace.time[0]), float(trace.time[-1])),
        noise_rms=noise,
        step=prepared.step,
        steps=prepared.steps,
        observed=observed,
        model=model,
        response=None if model is None else response_of(fit, figures, surface, band, model),
        fit=fit,
        points=surface.points,
        band_percent=float(band_percent),
        confidence_percent=float(confidence_percent),
    )


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


def _observed(prepared: Prepared, band: float, confidence: float, noise: float) -> ObservedFigures:
    if prepared.step is None:
        return ObservedFigures()
    step, trace = prepared.step, prepared.trace
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
