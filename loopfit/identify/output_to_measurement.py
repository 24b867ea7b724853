"""A plant from a closed-loop record with the controller's output: output -> measurement.

The recorded output is the input, whatever made it: settings, limits and rounding of the controller drop out. What the
model leaves over is then the disturbance itself, not what the loop made of it (output error; Ljung, System Identification,
2nd ed. 1999, ch. 13: a direct fit is consistent in closed loop where the model of the noise is right, so the colour counts).
"""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np

from loopfit.core.arrays import Array
from loopfit.fit.choose import choose, evidence
from loopfit.fit.colour import Whitener
from loopfit.fit.columns import Columns, Input
from loopfit.fit.estimate import Fit, Structure, Trace, fit_trace, inflation_by, neighbour_correlation, search
from loopfit.fit.intervals import whitened
from loopfit.fit.samples import gather, rows_as_samples
from loopfit.fit.separable import solve_linear
from loopfit.fit.set_aside import row_residuals
from loopfit.model.chart import LAGS
from loopfit.record.record import Record
from loopfit.step.noise import noise_rms, resolution

_OUTLIER = 7.0  # robust noise levels
_OUTLIER_SHARE = 0.005  # of the range
_OUTLIERS_AT_MOST = 0.02  # of the rows
_COLOURED = 4.0  # standard errors of the residual's neighbour correlation
_REST_ROWS = 20  # before the step, that tell where the output rested
_LEVEL_SPREADS, _LEVEL_SHARE = 8.0, 0.1
_FAR_OFF = 12.0  # noise powers, a chance in ten thousand with three coordinates
_EVIDENCE = 10.0  # very strong (Kass & Raftery 1995)
BINS = 2000  # at least so many of an output that moves all the time
_BEYOND = 2.0  # spans: a lag that long is an integration to the record


def trace_of(record: Record, begins: float) -> Trace:
    """Return output and measurement of a record as input and answer.

    Parameters
    ----------
    record : Record
        With its output.
    begins : float
        Where the setpoint steps, or the record begins, s.

    Notes
    -----
    Before the first row the output had some constant level, which is not known: its first recorded value may be
    the first move of the answer already, or off the balance by the noise that the controller passes on.
    """
    assert record.output is not None
    output = record.output.values
    rows = np.flatnonzero(np.diff(output) != 0.0) + 1
    first = float(record.time[0])
    return Trace(
        time=record.time,
        values=record.measurement.values,
        input=Input(times=record.time[rows], sizes=np.diff(output)[rows - 1], unknown_from=first),
        begins=max(begins, first),
        step_row=int(np.searchsorted(record.time, begins)),
    )


def fitted(trace: Trace) -> Fit:
    """Return the model of output -> measurement that the record asks for, under the likelihood of its own noise.

    A level before the record far from where the output rested before the step is no level but a way out: with it a
    sluggish loop can look like an integrating plant of the other sign. Then the output's own mean is taken.
    """
    fit = _best(trace)
    assert trace.input is not None
    known = trace.input.times < trace.begins
    if trace.input.unknown_from is None or trace.step_row < _REST_ROWS or int(known.sum()) < _REST_ROWS // 2:
        return fit
    before = np.cumsum(trace.input.sizes[known])  # from the first recorded value on
    moved = float(np.ptp(np.cumsum(trace.input.sizes)))
    away = abs(float(fit.linear[len(fit.structure.rungs)] / fit.linear[0]) + float(before.mean()))
    if away <= _LEVEL_SPREADS * float(before.std()) + _LEVEL_SHARE * moved:
        return fit
    times = np.append(trace.input.unknown_from, trace.input.times)
    sizes = np.append(-float(before.mean()), trace.input.sizes)
    return _best(replace(trace, input=Input(times=times, sizes=sizes)))


def _best(trace: Trace) -> Fit:
    noise, floor = noise_and_floor(trace.values)
    best = _on_rows(choose(trace, max(noise, floor), noise_floor=floor), trace, floor)
    best = _coloured(_from_rest_or_not(best, trace, floor), trace, floor)
    if best.structure.rungs != (2,) and float(best.columns.chart.lags(best.theta[None])[0][0]) > _BEYOND * trace.span:
        rival = fit_trace(trace, Structure(rungs=(2,), first_order=True), noise_floor=floor)
        near = np.array([math.log(quick_lag(best.columns, best.theta)), LAGS.lowest[1], best.theta[2]])
        rival = min(
            (_on_rows(replace(rival, theta=at), trace, floor) for at in (rival.theta, near)), key=lambda fit: fit.sse
        )
        rival = _from_rest_or_not(rival, trace, floor)
        rival = _coloured(rival, trace, floor)
        if integrates(rival.sse, best.sse, independent_rows(best.whitener, trace)):
            return rival
    return best


def _coloured(fit: Fit, trace: Trace, floor: float) -> Fit:
    """Return the fit under the colour of its residuals; as it was, with wider draws, where that colour is misfit."""
    found = whitened(fit, trace, noise_floor=floor)
    # no noise of that colour moves a model so far: a plant of higher order, filtered by its own misfit, came out wrong
    return fit if found.sse - fit.sse > _FAR_OFF * fit.inflation * fit.variance else found


def _from_rest_or_not(fit: Fit, trace: Trace, floor: float) -> Fit:
    """Return the fit, or one in which the plant moves already in the first row, where the record clearly says so."""
    if fit.structure.moving_start or fit.colour * math.sqrt(fit.columns.target.size) < _COLOURED:
        return fit
    structure = replace(fit.structure, moving_start=True)
    rival = _on_rows(fit_trace(trace, structure, noise_floor=floor), trace, floor)
    return rival if evidence(rival, fit) > _EVIDENCE else fit


def _on_rows(fit: Fit, trace: Trace, floor: float) -> Fit:
    """Return the fit on the rows themselves, or on bins far narrower than those of a single step.

    An output that moves all the time shows quick lags and the dead time at every row; bins that suit a slow plant's step
    would hide them.
    """
    samples = gather(trace.time, trace.values, trace.span / BINS, trace.step_row, even=trace.even)
    if not samples.binned:
        samples = rows_as_samples(trace.time, trace.values)
    columns = replace(fit.columns, samples=samples)
    found = search(columns, fit.theta[None], fit.free, tolerance=1e-6, rounds=60)
    theta = found.theta[0]
    solved = solve_linear(columns.evaluate(theta[None], derivatives=False)[0], columns.target)
    n, sse = columns.target.size, float(solved.sse[0])
    degrees = max(n - int(fit.free.sum()) - solved.linear.shape[1], 1)
    colour = neighbour_correlation(solved.residual[0])
    return replace(
        fit,
        columns=columns,
        theta=theta,
        linear=solved.linear[0],
        sse=sse,
        variance=max(sse / degrees, floor**2, 1e-300),
        degrees=degrees,
        colour=colour,
        inflation=inflation_by(colour, n),
        settled=bool(found.settled[0]),
    )


def quick_lag(columns: Columns, theta: Array) -> float:
    """Return the quicker lag of a model, s, no shorter than a hundredth of a row."""
    T, r = (float(value[0]) for value in columns.chart.lags(theta[None]))
    return max(2.0 * T * r / (1.0 + math.sqrt(max(1.0 - 4.0 * r, 0.0))), 0.01 * columns.samples.interval)


def integrates(sse: float, against: float, rows: float) -> bool:
    """Tell whether an integrating model with one coordinate fewer is as good (Schwarz 1978), by what both leave over."""
    return rows * math.log(max(sse, 1e-300) / max(against, 1e-300)) < math.log(rows) + 2.0


def independent_rows(whitener: Whitener | None, trace: Trace) -> float:
    """Return how many rows of white noise a record is worth."""
    rows = float(trace.values.size)
    return rows if whitener is None else min(rows, whitener.effective_rows)


def noise_and_floor(values: Array) -> tuple[float, float]:
    """Return the fast noise of a row, rms, and the least noise that the resolution allows."""
    noise, grid = noise_rms(values), resolution(values)
    return noise, grid / math.sqrt(12.0) if noise < grid / 3.0 else 0.0  # undithered: sigma >= q / sqrt(12)


def without_wild_rows(trace: Trace, fit: Fit) -> tuple[Trace, int]:
    """Return the trace with isolated rows far from the model led over by their neighbours, and how many there are.

    The spread is the median absolute residual (Hampel 1974). None where they are many. They are not left out: a
    controller's output is known at even rows, and they stay even.
    """
    rest = row_residuals(trace, fit)
    spread = float(np.median(np.abs(rest - np.median(rest)))) / 0.6745
    local = rest.copy()
    local[1:-1] -= 0.5 * (rest[:-2] + rest[2:])
    least = max(_OUTLIER * spread, _OUTLIER_SHARE * float(np.ptp(trace.values)), 2.5 * resolution(trace.values))
    far = np.flatnonzero((np.abs(rest) > least) & (np.abs(local) > 0.5 * np.abs(rest)))
    if far.size == 0 or far.size > max(1.0, _OUTLIERS_AT_MOST * rest.size):
        return trace, 0
    near = np.delete(np.arange(rest.size), far)
    values = trace.values.copy()
    values[far] = np.interp(trace.time[far], trace.time[near], trace.values[near])
    return replace(trace, values=values), int(far.size)
