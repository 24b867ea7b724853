"""Where the search starts: a grid of models on thinned samples, and the record's own main frequency."""

from __future__ import annotations

from weakref import WeakKeyDictionary

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
_SCANNED: WeakKeyDictionary[Columns, Array] = WeakKeyDictionary()  # coloured noise asks for the same starts again


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
    known = _SCANNED.get(columns)
    if known is not None:
        return known.copy()
    slow = span * _SLOWNESS
    if main is not None:
        near = np.array([0.85, 0.93, 1.0, 1.08, 1.18]) / main
        slow = np.concatenate([slow, near])
    dampings = np.array(_RELEASE_DAMPINGS if release else _DAMPINGS)
    lags = np.array((0.0,) if release else _DEAD_TIMES)
    z = np.repeat(dampings, slow.size * lags.size)
    w = np.tile(np.repeat(1.0 / slow, lags.size), dampings.size)
    dead = np.tile(lags, dampings.size * slow.size)
    theta = columns.chart.locate(z, w, dead / w)
    theta = theta[theta[:, 2] < 0.8 * span]
    found = _apart(theta, _squares_left(columns, theta), span)
    _SCANNED[columns] = found
    return found.copy()


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


def _squares_left(columns: Columns, theta: Array) -> Array:
    """Return the least sum of squares at each model (B,); what no coordinate moves is taken out once for all of them."""
    matrix, _ = columns.evaluate(theta, derivatives=False)
    m = columns.moving_count
    fixed = np.linalg.qr(matrix[0, m:].T)[0].T
    moving = matrix[:, :m] - (matrix[:, :m] @ fixed.T) @ fixed
    target = columns.target - (columns.target @ fixed.T) @ fixed
    if m > 1:
        return solve_linear(moving, target).sse
    square, whole = ((rows[:, None] @ rows[:, :, None])[:, 0, 0] for rows in (moving[:, 0], matrix[:, 0]))
    told = square > 1e-20 * whole + 1e-300  # else the column is empty, or nothing but an offset
    sse: Array = target @ target - told * (moving[:, 0] @ target) ** 2 / np.where(told, square, 1.0)
    return sse


def _apart(theta: Array, sse: Array, span: float) -> Array:
    time = np.minimum(np.exp(theta[:, 0]), span)
    kept: list[int] = []
    for i in np.argsort(sse).tolist():
        # plain numbers: three comparisons at a time are not worth an array
        scale, shape, dead = theta[i].tolist()
        unlike = all(
            abs(scale - theta[j, 0]) > _APART
            or abs(shape - theta[j, 1]) > _APART
            or abs(dead - theta[j, 2]) > 0.5 * min(time[i], time[j])
            for j in kept
        )
        if unlike:
            kept.append(i)
        if len(kept) == _KEPT:
            break
    return theta[kept]
