"""A plant from a record: which way the record allows, and what it would take where it allows none."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from functools import partial

import numpy as np

from loopfit.analysis.analyze import analyze_record
from loopfit.analysis.result import Analysis
from loopfit.core.errors import RecordError
from loopfit.core.finding import Finding
from loopfit.identify.gaps import without_gaps
from loopfit.identify.identified import Identified
from loopfit.identify.load_step import load_fitted
from loopfit.identify.output_to_measurement import fitted, noise_and_floor, trace_of, without_wild_rows
from loopfit.identify.plants import plant_of
from loopfit.identify.posterior import draws_of
from loopfit.identify.protections import checked_by_levels, with_every_step
from loopfit.identify.refusals import (
    about_gain,
    against_action,
    limits_left_out,
    measurement_flat,
    no_output,
    not_at_rest,
    once_a_row,
    outputs_at_limit,
    rows_filled,
    slower_than_scan,
    unstable,
    wild_rows,
)
from loopfit.identify.through_loop import Rows, through_loop
from loopfit.identify.way import SLOWER, setpoint_steps, way_of
from loopfit.loop.plant import Plant
from loopfit.loop.settings import Settings
from loopfit.record.record import Record, Signal
from loopfit.step.limits import rows_at_limit

_SEED = 60351
_EVERY = 0.9
_FEWEST_ROWS = 30
_WHOLE = 0.02
_OFF_REST = 5.0  # standard errors

DrawnBy = Callable[[int, np.random.Generator], list[Plant]]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Wanted:
    """How many draws, and from which seed."""

    draws: int
    fresh: int
    seed: int

    def rngs(self) -> tuple[np.random.Generator, np.random.Generator]:
        """Return two independent generators."""
        first, second = np.random.SeedSequence(self.seed).spawn(2)
        return np.random.default_rng(first), np.random.default_rng(second)

    def another_rng(self) -> np.random.Generator:
        """Return a third."""
        return np.random.default_rng(np.random.SeedSequence(self.seed).spawn(3)[2])


def identify(
    record: Record | Analysis,
    *,
    settings: Settings | None = None,
    confidence: float = 0.95,
    draws: int = 50,
    fresh: int = 200,
    seed: int = _SEED,
) -> Identified:
    """Return the plant that a record tells, with what else the record allows.

    Parameters
    ----------
    record : Record or Analysis
        A step of the output in manual; a setpoint step in automatic, best with the output; or a load in automatic with
        the output.
    settings : Settings, optional
        Of the controller during the record; needed where the output was not recorded at every scan.
    confidence : float
        With which the sign of the gain must be told, a fraction.
    draws, fresh : int
        Sizes of two independent sets of plants that the record allows.
    seed : int
        Of the draws.

    Returns
    -------
    Identified
        With `refused` set where a plant was found that no settings may be built on.

    Raises
    ------
    RecordError
        If the record tells no plant; its line says what record to make.
    """
    analysis = record if isinstance(record, Analysis) else None
    rows = record.record if isinstance(record, Analysis) else record
    wanted = Wanted(draws=draws, fresh=fresh, seed=seed)
    stated = analysis is not None and any(finding.code == "stated_step" for finding in analysis.findings)
    if stated and analysis is not None and analysis.step is not None:
        if analysis.step.signal == "output":
            return _open_step(analysis, settings, confidence, wanted)
        levels = np.where(rows.time >= analysis.step.time_s, analysis.step.to, analysis.step.from_)
        rows = replace(rows, setpoint=Signal(name="stated step", unit=None, values=levels))
    way = way_of(rows, settings)
    if way == "open step":
        if analysis is None or analysis.step is None or analysis.step.signal == "setpoint":
            analysis = analyze_record(
                replace(rows, setpoint=None)
            )  # what follows the measurement in manual is no input
        return _open_step(analysis, settings, confidence, wanted)
    rows, filled = without_gaps(rows)
    if rows.time.size < _FEWEST_ROWS:
        raise RecordError(
            rows.source,
            f"{rows.time.size} rows are too few to tell a plant in automatic; record at least {_FEWEST_ROWS}",
        )
    if np.ptp(rows.measurement.values) == 0.0:
        raise RecordError(rows.source, "the measurement is the same in every row", column=rows.measurement.name)
    if way == "through the loop":
        assert settings is not None
        found = _through(rows, settings, confidence, wanted)
    else:
        found = (_closed if way == "closed" else _load)(rows, settings, confidence, wanted)
    findings = [*found.findings, *_noticed(rows, settings, way)]
    if filled:
        findings.append(rows_filled(filled))
    return replace(found, findings=tuple(findings))


def _noticed(record: Record, settings: Settings | None, way: str) -> list[Finding]:
    """Return what reading warned of, and where measurement or output lay at the end of a range."""
    findings = [finding for finding in record.findings if finding.severity != "note"]
    values = record.measurement.values
    flat = rows_at_limit(values)
    if flat.size:
        findings.append(measurement_flat(flat.size, float(values[flat[0]])))
    if record.output is not None:
        output = record.output.values
        limits = None if settings is None else settings.output_limits
        clamped = rows_at_limit(output)
        if limits is not None and not clamped.size:
            clamped = np.flatnonzero((output <= limits[0]) | (output >= limits[1]))
        if clamped.size:
            known = way != "through the loop" or limits is not None
            findings.append(outputs_at_limit(clamped.size, float(output[clamped[0]]), placed=known))
    return findings


def _open_step(analysis: Analysis, settings: Settings | None, confidence: float, wanted: Wanted) -> Identified:
    if analysis.step is None or analysis.fit.columns.input is None:
        raise RecordError(analysis.record.source, "a release tells no gain: step the output in manual and record it")
    fit = analysis.fit
    warned = tuple(finding for finding in analysis.findings if finding.severity != "note")
    found = Identified(plant=plant_of(fit), how="open step", fit=fit, analysis=analysis, findings=warned)
    if analysis.model is None:
        return replace(found, refused=analysis.refusal)
    found = _with_draws(found, partial(draws_of, fit), wanted, settings, confidence)
    found = with_every_step(found, analysis, wanted.another_rng())
    if found.refused is None and not analysis.model.adequate:
        return replace(found, refused=f"The model does not stand for the plant: {analysis.model.reasons[0]}.")
    return found


def _closed(record: Record, settings: Settings | None, confidence: float, wanted: Wanted) -> Identified:
    begins = setpoint_steps(record)
    assert begins is not None
    trace = trace_of(record, begins)
    fit = fitted(trace)
    tamed, count = without_wild_rows(trace, fit)
    findings = [wild_rows(count)] if count else []
    if count:
        fit = fitted(tamed)
    findings += _about_rate(record, settings)
    found = Identified(plant=plant_of(fit), how="output to measurement", findings=tuple(findings), fit=fit)
    if float(fit.columns.chart.damping(fit.theta[None])[0]) <= 0.0:
        return replace(found, refused=unstable())
    rest = tamed.values - tamed.values.mean()
    explained = 1.0 - fit.sse / max(float(rest @ rest), 1e-300)
    return _with_draws(found, partial(draws_of, fit), wanted, settings, confidence, explained)


def _load(record: Record, settings: Settings | None, confidence: float, wanted: Wanted) -> Identified:
    fit = load_fitted(record)
    found = Identified(plant=fit.plant, how="load", findings=tuple(_about_rate(record, settings)))
    return _with_draws(found, fit.draws, wanted, settings, confidence, fit.explained)


def _through(record: Record, settings: Settings, confidence: float, wanted: Wanted) -> Identified:
    rows, findings = _rows(record, settings)
    gains = settings.gains
    _, floor = noise_and_floor(record.measurement.values)
    fit = through_loop(rows, math.copysign(1.0, gains.kp or gains.ki or gains.kd), noise_floor=floor)
    found = Identified(plant=fit.plant, how="through the loop", findings=tuple(findings))
    rest = rows.values - rows.values.mean()
    explained = 1.0 - float(fit.residual @ fit.residual) / max(float(rest @ rest), 1e-300)
    found = _with_draws(found, fit.draws, wanted, settings, confidence, explained)
    return checked_by_levels(found, record, wanted.another_rng())


def _rows(record: Record, settings: Settings) -> tuple[Rows, list[Finding]]:
    """Return the record as the simulated loop sees it."""
    assert record.setpoint is not None
    setpoint, measurement = record.setpoint.values, record.measurement.values
    interval = record.duration_s / (record.time.size - 1)
    scan = interval if settings.scan_s is None else settings.scan_s
    each, every = max(1, round(interval / scan)), max(1, round(scan / interval))
    if abs(each * scan - every * interval) > _WHOLE * max(scan, interval):
        raise RecordError(
            record.source,
            f"rows {interval:.4g} s apart do not fit a scan interval of {scan:.4g} s: log at a whole multiple of it, or "
            "record the output",
        )
    setpoint, measurement = setpoint[::every], measurement[::every]
    begin = max(int(np.argmax(setpoint != setpoint[0])), 1)
    before = measurement[:begin]
    noise, _ = noise_and_floor(measurement)
    findings = []
    rest = float(setpoint[0]) if settings.gains.ki != 0.0 else float(before.mean())
    if abs(float(before.mean()) - rest) > _OFF_REST * noise / math.sqrt(begin) + 0.02 * float(np.ptp(measurement)):
        findings.append(not_at_rest())
    limits, level = settings.output_limits, 0.0
    if record.output is not None:
        level = float(np.median(record.output.values[::every][:begin]))
        findings.append(slower_than_scan())
    elif limits is not None:
        limits = None
        findings.append(limits_left_out())
    else:
        findings.append(no_output())
    rows = Rows(
        values=measurement,
        setpoint=np.repeat(setpoint, each)[: each * (measurement.size - 1) + 1],
        each=each,
        scan_s=every * interval / each,
        gains=settings.gains,
        output_limits=limits,
        initial_output=level,
        initial_measurement=rest,
        initial_setpoint=float(setpoint[0]),
    )
    return rows, findings


def _about_rate(record: Record, settings: Settings | None) -> list[Finding]:
    """Return what must be said of how often the output was recorded."""
    assert record.output is not None
    if settings is not None and settings.scan_s is not None:
        return [slower_than_scan()] if record.sample_interval_s > SLOWER * settings.scan_s else []
    return [once_a_row()] if np.mean(np.diff(record.output.values) != 0.0) > _EVERY else []


def _with_draws(
    found: Identified,
    drawn: DrawnBy,
    wanted: Wanted,
    settings: Settings | None,
    confidence: float,
    explained: float = 1.0,
) -> Identified:
    first, second = wanted.rngs()
    draws, fresh = drawn(wanted.draws, first), drawn(wanted.fresh, second)
    refused = about_gain(found.plant, [*draws, *fresh], found.how, confidence, explained)
    if refused is None and settings is not None:
        refused = against_action(found.plant, settings)
    right = partial(_of_sign, math.copysign(1.0, found.plant.gain))
    return replace(found, draws=right(draws), fresh=right(fresh), refused=refused)


def _of_sign(sign: float, plants: list[Plant]) -> tuple[Plant, ...]:
    return tuple(plant for plant in plants if plant.gain * sign > 0.0)
