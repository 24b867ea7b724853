"""Rows right after the step that do not belong to the response."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from loopfit.fit.estimate import Fit, Trace, fit_trace
from loopfit.fit.samples import rows_as_samples

_AT_MOST = 3
_FALLS_TO = 0.4  # a share of the squares that a few rows may carry only when they do not belong
_APART = 6.0  # noise levels


def false_first_rows(trace: Trace, fit: Fit, *, noise_floor: float) -> tuple[int, Fit]:
    """Return how many rows from the step on do not belong, and the fit without them (0 and the fit itself if none).

    Loggers and counters can give one or two wild readings when the output switches; a fit takes them for
    ringing. They are set aside only when the rest then fits far better and none of them fits the rest.
    """
    best = fit
    for count in range(1, _AT_MOST + 1):
        rest = without_rows(trace, count)
        if rest.time.size < 4 * _AT_MOST:
            break
        rival = fit_trace(rest, fit.structure, noise_floor=noise_floor)
        if rival.sse / rest.time.size > _FALLS_TO * best.sse / trace.time.size:
            continue
        if np.all(_distances(trace, rival, count) > _APART):
            return count, rival
    return 0, fit


def without_rows(trace: Trace, count: int) -> Trace:
    """Return the trace without the first rows of the step."""
    gone = np.arange(trace.step_row, trace.step_row + count)
    return replace(trace, time=np.delete(trace.time, gone), values=np.delete(trace.values, gone))


def _distances(trace: Trace, fit: Fit, count: int) -> np.ndarray:
    """Return how far the rows set aside are from the fit, in noise levels."""
    rows = slice(trace.step_row, trace.step_row + count)
    samples = rows_as_samples(trace.time[rows], trace.values[rows])
    columns, _ = replace(fit.columns, samples=samples).evaluate(fit.theta[None], derivatives=False)
    away: np.ndarray = np.abs(trace.values[rows] - fit.linear @ columns[0]) / np.sqrt(fit.variance)
    return away
