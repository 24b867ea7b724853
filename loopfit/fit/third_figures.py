"""Figures of responses with a third lag and a zero, and their gradients: read where the response crosses its levels.

A crossing time moves by -(dy/dtheta) / (dy/dt) there (implicit function theorem), so exact derivatives are needed at a
few instants only.
"""

from __future__ import annotations

import numpy as np

from loopfit.core.arrays import Array
from loopfit.figures.sampled import first_crossing, last_entry
from loopfit.fit.third_lag import third_order
from loopfit.model.chart import LAGS

FIGURES = ("gain", "overshoot_percent", "peak_time_s", "rise_time_s", "settling_time_s", "delay_time_s")
_SPANS = 3.0  # of the record, over which a response is looked at
_FINE, _COARSE = 260, 60
_LEVELS = (0.1, 0.5, 0.9)
_LEAST_OVERSHOOT = 1e-6
_STEEP = 1e-9
_BESIDE = 1e-3  # of T


def third_figures(
    points: Array, span: float, band: float, *, gradients: bool
) -> tuple[dict[str, Array], dict[str, Array]]:
    """Return the figures (B,) of unit responses, nan where there is none, and their gradients (B, 6).

    Parameters
    ----------
    points : (B, 6) array
        T, r, dead time and third lag as coordinates, then gain and gain times kappa.
    span : float
        Of the record after the step, s.
    band : float
        Settling band, a fraction.
    """
    theta, gain = points[:, :4], np.where(points[:, 4] == 0, 1e-300, points[:, 4])
    kappa = points[:, 5] / gain
    time = np.concatenate(
        [np.linspace(0.0, 1.1 * span, _FINE, endpoint=False), np.linspace(1.1 * span, _SPANS * span, _COARSE)]
    )
    scale = LAGS.scale(theta)
    y = _responses((time - theta[:, 2:3]) / scale[:, None], theta, kappa)
    rows = np.arange(y.shape[0])
    crossing = np.stack([first_crossing(time, y, level) for level in _LEVELS], axis=1)
    settle, edge = last_entry(time, y, band)
    top = np.clip(np.argmax(y, axis=1), 1, time.size - 2)
    before, at, after = y[rows, top - 1], y[rows, top], y[rows, top + 1]
    left, right = time[top] - time[top - 1], time[top + 1] - time[top]
    peak_time = time[top] + _vertex((before - at) / left, (after - at) / right, left, right)
    instants = np.column_stack([crossing, settle, peak_time])
    safe = np.where(np.isfinite(instants), instants, 0.0)
    x = (safe - theta[:, 2:3]) / scale[:, None]
    if gradients:
        x = np.column_stack([x, x[:, 4] + _BESIDE])  # beside the peak, for the bend there
    rungs = third_order(x, LAGS.shape(theta), np.exp(theta[:, 3]), 1, derivatives=gradients)
    k = kappa[:, None]
    slope = rungs[0][0] + k * rungs[-1][0]  # in units of 1 / T
    there = rungs[1][0] + k * rungs[0][0]
    # straight lines between samples are out by their bend: one step of Newton's
    steep = np.abs(slope) > _STEEP
    levels = np.column_stack([np.tile(_LEVELS, (y.shape[0], 1)), 1.0 + band * edge])
    more = np.where(steep[:, :4], (levels - there[:, :4]) / np.where(steep[:, :4], slope[:, :4], 1.0), 0.0)
    gap = 1.1 * span / _FINE
    more = np.where((edge != 0)[:, None] | (np.arange(4) < 3), np.clip(more * scale[:, None], -gap, gap), 0.0)
    crossing, settle = crossing + more[:, :3], settle + more[:, 3]
    over = np.maximum(np.maximum(there[:, 4], at) - 1.0, 0.0)
    swings = over > _LEAST_OVERSHOOT
    figures = {
        "gain": points[:, 4],
        "overshoot_percent": 100.0 * over,
        "peak_time_s": np.where(swings, peak_time, np.nan),
        "rise_time_s": crossing[:, 2] - crossing[:, 0],
        "settling_time_s": settle,
        "delay_time_s": crossing[:, 1],
    }
    if not gradients:
        return figures, {}
    moved = np.stack(
        [
            -np.maximum(x, 0.0) * slope,
            rungs[1][1] + k * rungs[0][1],
            -slope / scale[:, None],
            rungs[1][2] + k * rungs[0][2],
            -k / gain[:, None] * rungs[0][0],
            rungs[0][0] / gain[:, None],
        ],
        axis=2,
    )
    later = np.where(steep[..., None], -moved / np.where(steep, slope, 1.0)[..., None], 0.0) * scale[:, None, None]
    later[:, :5][~np.isfinite(instants)] = 0.0
    only_gain = np.zeros_like(points)
    only_gain[:, 4] = 1.0
    return figures, {
        "gain": only_gain,
        "overshoot_percent": 100.0 * moved[:, 4] * swings[:, None],
        "peak_time_s": _peak_moves(rungs, x[:, 4], kappa, gain, scale) * swings[:, None],
        "rise_time_s": later[:, 2] - later[:, 0],
        "settling_time_s": later[:, 3] * (edge != 0)[:, None],
        "delay_time_s": later[:, 1],
    }


def _responses(x: Array, theta: Array, kappa: Array) -> Array:
    rungs = third_order(x, LAGS.shape(theta), np.exp(theta[:, 3]), 1, lowest=0, derivatives=False)
    return rungs[1][0] + kappa[:, None] * rungs[0][0]


def _peak_moves(
    rungs: dict[int, tuple[Array, Array, Array]], x: Array, kappa: Array, gain: Array, scale: Array
) -> Array:
    """Return the gradient (B, 6) of the peak time: where the slope crosses 0. The rungs are at the peak and beside it."""

    def rise(rung: int, part: int) -> Array:
        values = rungs[rung][part]
        return np.asarray((values[:, 5] - values[:, 4]) / _BESIDE)

    slope, bend = rungs[0][0][:, 4] + kappa * rungs[-1][0][:, 4], rise(0, 0) + kappa * rise(-1, 0)
    by_shape, by_lag = (rise(1, part) + kappa * rise(0, part) for part in (1, 2))
    second = rungs[-1][0][:, 4]
    moved = np.stack(
        [-x * bend - slope, by_shape, -bend / scale, by_lag, -kappa / gain * second, second / gain], axis=1
    )
    flat = np.abs(bend) < 1e-9
    out: Array = np.where(flat[:, None], 0.0, -moved / np.where(flat, 1.0, bend)[:, None] * scale[:, None])
    return out


def _vertex(left_slope: Array, right_slope: Array, left: Array, right: Array) -> Array:
    """Return where the parabola through three points is highest, from the middle one."""
    curve = (left_slope + right_slope) / (left + right)
    tilt = right_slope - curve * right
    return np.clip(np.where(curve < 0, -tilt / np.where(curve < 0, 2.0 * curve, 1.0), 0.0), -left, right)
