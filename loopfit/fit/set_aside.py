"""Rows that do not belong to the response, set aside before the answer is given."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from loopfit.core.arrays import Array
from loopfit.fit.estimate import Fit, Trace, fit_trace
from loopfit.fit.samples import rows_as_samples

_FIRST_AT_MOST = 3
_FALLS_TO = 0.4  # a share of the squares that a few rows may carry only when they do not belong
_APART = 6.0  # noise levels
_OUTLIER = 7.0  # robust noise levels
_OUTLIER_SHARE = 0.005  # of the range: less does no harm
_OUTLIERS_AT_MOST = 0.02  # of the rows: more is not a few wild readings
_OUTLIERS_IN_A_ROW = 2

Rows = NDArray[np.intp]


def row_residuals(trace: Trace, fit: Fit) -> Array:
    """Return measurement minus model at every row (n,)."""
    samples = rows_as_samples(trace.time, trace.values)
    shift = trace.time.mean() - fit.columns.samples.centres.mean() if fit.structure.drift else 0.0
    columns, _ = replace(fit.columns, samples=samples).evaluate(fit.theta[None], derivatives=False)
    linear = fit.linear
    if shift != 0.0:  # the drift column is centred on the samples of the fit
        linear = linear.copy()
        linear[-2] += linear[-1] * shift
    rest: Array = trace.values - linear @ columns[0]
    return rest


def false_first_rows(trace: Trace, fit: Fit, *, noise_floor: float) -> Rows:
    """Return the rows from the step on that do not belong to the response (none, as a rule).

    Loggers and counters can give one or two wild readings when the output switches; a fit takes them for
    ringing. They are named only when the rest then fits far better and none of them fits the rest.
    """
    for count in range(1, _FIRST_AT_MOST + 1):
        rows = np.arange(trace.step_row, trace.step_row + count)
        rest = without_rows(trace, rows)
        if rest.time.size < 4 * _FIRST_AT_MOST:
            break
        rival = fit_trace(rest, fit.structure, noise_floor=noise_floor)
        if rival.sse / rest.time.size > _FALLS_TO * fit.sse / trace.time.size:
            continue
        away = np.abs(row_residuals(trace, rival)[rows]) / np.sqrt(rival.variance)
        next_level = float(np.median(trace.values[rows[-1] + 1 : rows[-1] + 4]))
        beyond = np.abs(trace.values[rows] - next_level) / np.sqrt(rival.variance)  # not simply where it stays
        if np.all(away > _APART) and np.all(beyond > _APART):
            return rows
    return np.zeros(0, dtype=np.intp)


def outliers(trace: Trace, fit: Fit, grid: float) -> Rows:
    """Return isolated rows far from the model and from their neighbours; none when they are many.

    The spread is the median absolute residual (Hampel 1974), which a few wild rows do not move. `grid` is the
    measurement's resolution, or 0. The rows of the steps themselves are never called wild.
    """
    rest = row_residuals(trace, fit)
    spread = float(np.median(np.abs(rest - np.median(rest)))) / 0.6745
    local = rest.copy()
    local[1:-1] -= 0.5 * (rest[:-2] + rest[2:])  # a smooth misfit is no outlier
    least = max(_OUTLIER * spread, _OUTLIER_SHARE * float(np.ptp(trace.values)), 2.5 * grid)
    far = (np.abs(rest) > least) & (np.abs(local) > 0.5 * np.abs(rest))
    if trace.input is not None:
        at = np.searchsorted(trace.time, trace.input.times)
        far[np.clip(np.concatenate([at - 1, at, at + 1]), 0, far.size - 1)] = False
    rows = np.flatnonzero(far)
    if rows.size == 0 or rows.size > max(1.0, _OUTLIERS_AT_MOST * rest.size):
        return np.zeros(0, dtype=np.intp)
    runs = np.split(rows, np.flatnonzero(np.diff(rows) > 1) + 1)
    return np.concatenate([run for run in runs if run.size <= _OUTLIERS_IN_A_ROW] or [rows[:0]])


def without_rows(trace: Trace, rows: Rows) -> Trace:
    """Return the trace without some rows."""
    return replace(
        trace,
        time=np.delete(trace.time, rows),
        values=np.delete(trace.values, rows),
        step_row=trace.step_row - int(np.sum(rows < trace.step_row)),
    )
