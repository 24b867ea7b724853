"""A plant from a record: which way the record allows, and what it would take where it allows none."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from functools import partial
from typing import Literal

import numpy as np

from loopfit.analysis.analyze import analyze_record
from loopfit.analysis.result import Analysis
from loopfit.core.arrays import Array
from loopfit.core.errors import RecordError
from loopfit.core.finding import Finding
from loopfit.identify.gaps import gaps_in, without_gaps
from loopfit.identify.identified import Identified
from loopfit.identify.output_to_measurement import fitted, load_fitted, noise_and_floor, trace_of, without_wild_rows
from loopfit.identify.plants import plant_of
from loopfit.identify.posterior import draws_of
from loopfit.identify.refusals import (
    about_gain,
    against_action,
    limits_left_out,
    no_output,
    not_at_rest,
    once_a_row,
    rows_filled,
    slower_than_scan,
    unstable,
    wild_rows,
)
from loopfit.identify.through_loop import Rows, through_loop
from loopfit.loop.plant import Plant
from loopfit.loop.settings import Settings
from loopfit.record.record import Record
from loopfit.step.detect import find_steps

_SEED = 60351
_FEW = 20  # changes of an output that a person makes by hand
_HELD = 2.0  # noise levels of an output that rests between its moves
_APART = 3  # rows within which changes are one
_ALIKE = 0.9  # of the rows in which a setpoint that follows the measurement equals it
_SLOWER = 1.5  # scans in a row from which the output was not seen at the scan rate
_EVERY = 0.9
_FEWEST_ROWS = 30
_WHOLE = 0.02
_OFF_REST = 5.0  # standard errors

Way = Literal["open step", "closed", "load", "through the loop"]
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
    way = way_of(rows, settings)
    if way == "open step":
        return _open_step(analyze_record(rows) if analysis is None else analysis, settings, confidence, wanted)
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
    return replace(found, findings=(*found.findings, rows_filled(filled))) if filled else found


def way_of(record: Record, settings: Settings | None) -> Way:
    """Return the way in which a record tells its plant.

    Raises
    ------
    RecordError
        If there is none.
    """
    stepped = _setpoint_steps(record) is not None
    output = None if record.output is None else record.output.values
    if output is None:
        if not stepped:
            raise RecordError(
                record.source,
                "nothing that moves the plant was recorded: record the controller's output, or step the setpoint in automatic "
                "and give the controller's settings",
            )
        if settings is None:
            raise RecordError(
                record.source,
                "a closed-loop record without the controller's output tells the plant only with the settings of the "
                "controller during the record: give them, or record the output at every scan",
            )
        _check_even(record)
        return "through the loop"
    if np.ptp(output) == 0.0:
        raise RecordError(
            record.source,
            "the output is the same in every row: "
            + ("the setpoint steps, but the controller is in manual" if stepped else "nothing was moved")
            + ", or the wrong column was taken (choose with --output); step the output in manual, or the setpoint in "
            "automatic",
            column=None if record.output is None else record.output.name,
        )
    if not stepped and _by_hand(record.time, output):
        return "open step"
    _check_even(record)
    scan = None if settings is None else settings.scan_s
    if scan is not None and stepped and record.sample_interval_s > _SLOWER * scan:
        return "through the loop"
    return "closed" if stepped else "load"


def _check_even(record: Record) -> None:
    if gaps_in(record) is None:
        raise RecordError(
            record.source,
            "the rows are at uneven times, so that the output between them is not known: log at even times, best at every scan",
        )


def _setpoint_steps(record: Record) -> float | None:
    """Return where the setpoint steps first, s; None where it does not, or merely follows the measurement in manual."""
    if record.setpoint is None:
        return None
    values = record.setpoint.values
    span = float(np.ptp(record.measurement.values))
    if np.mean(np.abs(values - record.measurement.values) <= 1e-9 * span) > _ALIKE:
        return None
    found = find_steps(record.time, values, "setpoint")
    if found.steps:
        return found.steps[0].time_s
    moves = np.flatnonzero(np.diff(values))
    return float(record.time[moves[0] + 1]) if found.always_moving and moves.size else None


def _by_hand(time: Array, output: Array) -> bool:
    """Tell whether an output is held between a few moves: the controller is in manual."""
    found = find_steps(time, output, "output")
    if not found.steps:
        return False
    if found.noise == 0.0:
        return 1 + int(np.sum(np.diff(found.rows) > _APART)) <= _FEW
    held = np.concatenate([part - part.mean() for part in np.split(output, found.rows)])  # its sensor is noisy
    return float(np.std(held)) < _HELD * found.noise


def _open_step(analysis: Analysis, settings: Settings | None, confidence: float, wanted: Wanted) -> Identified:
    if analysis.step is None or analysis.fit.columns.input is None:
        raise RecordError(analysis.record.source, "a release tells no gain: step the output in manual and record it")
    fit = analysis.fit
    found = Identified(plant=plant_of(fit), how="open step", fit=fit, analysis=analysis)
    if analysis.model is None:
        return replace(found, refused=analysis.refusal)
    found = _with_draws(found, partial(draws_of, fit), wanted, settings, confidence)
    if found.refused is None and not analysis.model.adequate:
        return replace(found, refused=f"The model does not stand for the plant: {analysis.model.reasons[0]}.")
    return found


def _closed(record: Record, settings: Settings | None, confidence: float, wanted: Wanted) -> Identified:
    begins = _setpoint_steps(record)
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
    return _with_draws(found, fit.draws, wanted, settings, confidence, explained)


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
        return [slower_than_scan()] if record.sample_interval_s > _SLOWER * settings.scan_s else []
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
