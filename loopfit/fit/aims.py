"""Where each walker aims: the gradient of its own figure."""

from __future__ import annotations

import math

import numpy as np

from loopfit.core.arrays import Array
from loopfit.figures import unit_step
from loopfit.fit.columns import Columns
from loopfit.fit.figures_of import Points, figures_of
from loopfit.fit.separable import Solved, solve_linear

_NUDGE = 1e-3
_NUDGES = 1.0 + _NUDGE * np.array([[-1.0], [0.0], [1.0]])


class Walkers:
    """Pairs of walkers, one pair a figure, and the gradients they follow."""

    def __init__(self, columns: Columns, theta: Array, free: np.ndarray, band: float) -> None:
        self.columns, self.free, self.band = columns, free, band
        _, r = columns.chart.lags(theta[None])
        driven = columns.input is not None and 1 in columns.rungs
        names = ["damping", "frequency"] if free[1] else ["frequency"]
        names += ["gain", "dead", "rise", "delay", "settle", "envelope", "lag and dead"] if driven else ["envelope"]
        if columns.input is not None and not driven:
            names += ["gain", "dead", "lag and dead"]
        self.by_difference: dict[str, str] = {}
        if columns.rungs == (1, 0):
            names += ["zero", "overshoot"]
            self.by_difference = {
                "rise": "rise_time_s",
                "delay": "delay_time_s",
                "settle": "settling_time_s",
                "overshoot": "overshoot_percent",
                "peak": "peak_time_s",
            }
            if r[0] <= 0.26:
                names += ["peak"]
        if r[0] > 0.26:
            names += ["peak", "damped"] if free[2] else ["damped"]
        elif r[0] < 0.24 and free[1]:
            names += ["slow", "fast"]
        self.names = names
        self.count = 2 * len(names)
        self.sign = np.tile([1.0, -1.0], len(names))
        self.linear_count = columns.moving_count + columns.fixed.shape[0]
        self.held = np.zeros(self.count, dtype=bool)  # gain walkers keep the gain they have walked to
        self.held_column = 0
        # figures that a zero moves depend on its linear parameter: those walkers keep what they have walked to
        self.kept = np.repeat([name in self.by_difference or name == "zero" for name in names], 2)
        without = ("rise", "damped", "slow", "fast")  # times that the dead time is no part of
        self.after_dead = np.repeat([0.0 if name in without else 1.0 for name in names], 2)
        if "gain" in names:
            self.held[2 * names.index("gain") :][:2] = True

    def longer(self, way: Array) -> Array:
        """Return the longer way of each walker's pair (W,): one of them may stand at a bound."""
        return np.repeat(np.abs(way).reshape(-1, 2).max(axis=1), 2)

    def resolve(self, matrix: Array, linear: Array) -> tuple[Array, Array, Array]:
        """Return linear parameters, residuals and sums of squares, each walker's own constraint kept."""
        solved = solve_linear(matrix, self.columns.target)
        if not (self.held.any() or self.kept.any()):
            return solved.linear, solved.residual, solved.sse
        if self.kept.any():
            solved = self._keep(matrix, linear, solved)
        rows = np.flatnonzero(self.held)
        k = self.held_column
        inverse = np.minimum(np.maximum(np.linalg.inv(solved.triangle[rows]), -1e100), 1e100)
        covariance = inverse @ inverse.swapaxes(1, 2)
        shift = (linear[rows, k] - solved.linear[rows, k]) / covariance[:, k, k]
        out, residual, sse = solved.linear.copy(), solved.residual.copy(), solved.sse.copy()
        out[rows] += covariance[:, :, k] * shift[:, None]
        residual[rows] = self.columns.target - (out[rows, None, :] @ matrix[rows])[:, 0, :]
        sse[rows] = np.einsum("bn,bn->b", residual[rows], residual[rows])
        return out, residual, sse

    def _keep(self, matrix: Array, linear: Array, solved: Solved) -> Solved:
        """Re-solve only offset and drift for the walkers that keep their moving linear parameters."""
        rows, m = np.flatnonzero(self.kept), self.columns.moving_count
        rest = self.columns.target - (linear[rows, None, :m] @ matrix[rows, :m])[:, 0, :]
        fixed = matrix[0, m:]
        answer = np.linalg.lstsq(fixed.T, rest.T, rcond=None)[0].T
        out, residual, sse = solved.linear.copy(), solved.residual.copy(), solved.sse.copy()
        out[rows, :m], out[rows, m:] = linear[rows, :m], answer
        residual[rows] = rest - answer @ fixed
        sse[rows] = np.einsum("bn,bn->b", residual[rows], residual[rows])
        return solved._replace(linear=out, residual=residual, sse=sse)

    def aims(self, theta: Array, linear: Array) -> Array:
        """Return the gradient (W, 3 + q) of each walker's figure, signed."""
        chart = self.columns.chart
        out = np.zeros((self.count, 3 + self.linear_count))
        T, r = chart.lags(theta)
        by_r, T_by = self._conversions(theta, r)
        differences = self._differences(theta, linear) if self.by_difference else {}
        times: list[int] = []
        for i, name in enumerate(self.names):
            rows = slice(2 * i, 2 * i + 2)
            if name in differences:
                out[rows] = differences[name]
            elif name == "damping":
                out[rows, 1] = -1.0 if chart.by_lags else 1.0
            elif name == "frequency":
                out[rows, 0] = -1.0 if chart.by_lags else 1.0
                out[rows, 1] = -0.5 * by_r[rows] / r[rows] if chart.by_lags else 0.0
            elif name == "gain":
                out[rows, 3 + self.held_column] = 1.0
            elif name == "dead":
                out[rows, 2] = 1.0
            elif name == "zero":
                scale = chart.scale(theta[rows])
                out[rows, 4] = scale / linear[rows, 0]
                out[rows, 3] = -scale * linear[rows, 1] / linear[rows, 0] ** 2
                out[rows, 0] = chart.scale_sign * scale * linear[rows, 1] / linear[rows, 0]
            else:
                times.append(i)
        if times:  # a time T rho(r) (+ dead time): gradients by the product rule, all in one
            chosen = np.repeat(2 * np.array(times), 2)
            chosen[1::2] += 1
            value, slope = _unit_times(r[chosen], [self.names[i] for i in times], self.band)
            T_here = T[chosen]
            out[chosen, 0] = T_here * value * (1.0 if chart.by_lags else -1.0)
            out[chosen, 1] = T_here * (slope * by_r[chosen] + value * T_by[chosen])
            out[chosen, 2] = self.after_dead[chosen]
        out[:, :3] *= self.free
        signed: Array = out * self.sign[:, None]
        return signed

    def _differences(self, theta: Array, linear: Array) -> dict[str, Array]:
        """Return gradients (2, 3 + q) by central differences, for figures that a zero moves."""
        wanted = [i for i, name in enumerate(self.names) if name in self.by_difference]
        walkers = np.concatenate([[2 * i, 2 * i + 1] for i in wanted])
        here = np.concatenate([theta[walkers], linear[walkers]], axis=1)
        size = here.shape[1]
        nudges = _NUDGE * np.concatenate([np.ones(2), [0.0], np.ones(size - 3)]) * np.maximum(np.abs(here), 1e-12)
        nudges[:, :2] = _NUDGE
        nudges[:, 2] = _NUDGE * self.columns.chart.lags(theta[walkers])[0]
        steps = nudges[:, None, :] * np.eye(size)[None]
        around = np.concatenate([here[:, None] + steps, here[:, None] - steps], axis=1).reshape(-1, size)
        table = figures_of(self.columns, Points(theta=around[:, :3], linear=around[:, 3:]), self.band)
        out = {}
        for k, i in enumerate(wanted):
            values = table[self.by_difference[self.names[i]]].reshape(len(walkers), 2, size)[2 * k : 2 * k + 2]
            both = np.isfinite(values).all(axis=1)
            rise = np.where(both, values[:, 0], 0.0) - np.where(both, values[:, 1], 0.0)
            out[self.names[i]] = rise / (2.0 * nudges[2 * k : 2 * k + 2])
        return out

    def _conversions(self, theta: Array, r: Array) -> tuple[Array, Array]:
        """Return dr and dlog T in the second coordinate."""
        chart = self.columns.chart
        if chart.by_lags:
            return chart.shape_slope(r), np.zeros_like(r)
        zeta = np.maximum(theta[:, 1], 1e-4)
        return -0.5 / zeta**3, 1.0 / zeta


def _unit_times(r: Array, names: list[str], band: float) -> tuple[Array, Array]:
    """Return times in units of T and their slopes in r (2 K,) for K pairs of walkers, by small differences.

    Parameters
    ----------
    r : (2 K,) array
        Of the walkers.
    names : list
        What each pair walks for.
    """
    spread = np.maximum(r, 1e-5) * _NUDGES
    pairs = spread.reshape(3, len(names), 2)
    levels = {"rise": (0.1, 0.9), "delay": (0.5,), "settle": (1.0 - band,)}
    wanted = [(i, level) for i, name in enumerate(names) for level in levels.get(name, ())]
    crossings: dict[tuple[str, float], Array] = {}
    if wanted:  # all in one call
        times = unit_step.crossing_time(
            pairs[:, [i for i, _ in wanted]], np.array([level for _, level in wanted])[:, None]
        )
        crossings = {(names[i], level): times[:, k] for k, (i, level) in enumerate(wanted)}
    values = np.empty_like(pairs)
    for i, name in enumerate(names):
        values[:, i] = _unit_time(name, pairs[:, i], crossings, band)
    low, middle, high = values.reshape(spread.shape)
    return middle, (high - low) / (spread[2] - spread[0])


def _unit_time(name: str, r: Array, crossings: dict[tuple[str, float], Array], band: float) -> Array:
    value: Array
    match name:
        case "rise":
            value = crossings[name, 0.9] - crossings[name, 0.1]
        case "delay":
            value = crossings[name, 0.5]
        case "settle":
            value = crossings[name, 1.0 - band]
        case "envelope":
            value = 2.0 * r * math.log(1.0 / band)
        case "peak" | "damped":
            value = 2.0 * np.pi * r / np.sqrt(np.maximum(4.0 * r - 1.0, 1e-3))
        case "slow":
            value = 0.5 * (1.0 + np.sqrt(np.maximum(1.0 - 4.0 * r, 1e-6)))
        case "fast":
            value = 0.5 * (1.0 - np.sqrt(np.maximum(1.0 - 4.0 * r, 1e-6)))
        case _:  # lag and dead time together
            value = np.ones_like(r)
    return value
