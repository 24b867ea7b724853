"""Where the search starts: a grid of models on thinned samples, and the record's own main frequency."""

from __future__ import annotations

import numpy as np

from loopfit.core.arrays import Array
from loopfit.fit.columns import Columns
from loopfit.fit.separable import solve_linear

_DAMPINGS = (0.03, 0.12, 0.35, 0.8, 1.6, 4.0)
_RELEASE_DAMPINGS = (0.01, 0.05, 0.15, 0.4, 0.9, 2.0)
_SLOWNESS = np.geomspace(0.006, 0.5, 11)  # 1 / omega_n as a share of the span after the step
_DEAD_TIMES = (0.0, 0.8, 2.5)  # in units of 1 / omega_n
_KEPT = 6
_APART = 0.6
_PERIODOGRAM_ROWS = 4096


def scan(columns: Columns, span: float, main: float | None, *, release: bool) -> Array:
    """Return the best starts (B, 3) that differ from each other, in the columns' chart.

    Parameters
    ----------
    columns : Columns
        The model on thinned samples.
    span : float
        Time from the step to the end of the record, s.
    main : float or None
        The record's main frequency, rad/s.
    release : bool
        Whether there is no input, and so no dead time.
    """
    slow = span * _SLOWNESS
    if main is not None:
        near = np.array([0.85, 0.93, 1.0, 1.08, 1.18]) / main
        slow = np.concatenate([slow, near])
    dampings = np.array(_RELEASE_DAMPINGS if release else _DAMPINGS)
    lags = np.array((0.0,) if release else _DEAD_TIMES)
    z, w, dead = (a.ravel() for a in np.meshgrid(dampings, 1.0 / slow, lags, indexing="ij"))
    theta = columns.chart.locate(z, w, dead / w)
    theta = theta[theta[:, 2] < 0.8 * span]
    matrix, _ = columns.evaluate(theta, derivatives=False)
    sse = solve_linear(matrix, columns.target).sse
    return _apart(theta, sse, span)


def main_frequency(time: Array, values: Array) -> float | None:
    """Return the angular frequency at the peak of the periodogram of a record, rad/s.

    Long ringing has a narrow valley in frequency that a coarse grid can miss. None when the peak lies
    at the lowest frequencies, where the grid is fine enough.

    Parameters
    ----------
    time, values : (n,) arrays
        Rising times, s; measurement.
    """
    n = min(time.size, _PERIODOGRAM_ROWS)
    even = np.linspace(time[0], time[-1], n)
    trace = np.interp(even, time, values)
    ramp = np.linspace(-1.0, 1.0, n)
    trace = trace - trace.mean()
    trace = trace - ramp * (trace @ ramp) / (ramp @ ramp)
    power = np.abs(np.fft.rfft(trace * np.hanning(n), 4 * n)) ** 2
    peak = int(np.argmax(power))
    cycles = peak / 4.0
    if cycles < 3.0 or peak >= power.size - 1:
        return None
    return float(2.0 * np.pi * cycles * (n - 1) / n / (even[-1] - even[0]))


def _apart(theta: Array, sse: Array, span: float) -> Array:
    kept: list[Array] = []
    for i in np.argsort(sse):
        here = theta[i]
        unlike = all(
            np.any(np.abs(here[:2] - other[:2]) > _APART)
            or abs(here[2] - other[2]) > 0.5 * min(np.exp(min(here[0], other[0])), span)
            for other in kept
        )
        if unlike:
            kept.append(here)
        if len(kept) == _KEPT:
            break
    return np.array(kept)
