"""Walking the likelihood-ratio surface: how far each figure can go before the record objects.

A profile interval holds every value that some model reaches whose sum of squares is within F s^2 of the
least (Bates & Watts, Nonlinear Regression Analysis, 1988, ch. 6). Each figure has two walkers, up and
down; each re-aims along the figure's own gradient with the exact Jacobian, all in one batch. The bounds
r >= 0 and dead time >= 0 hold.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from loopfit.core.arrays import Array
from loopfit.figures import unit_step
from loopfit.fit.columns import Columns
from loopfit.fit.figures_of import Points
from loopfit.fit.separable import solve_linear

_ROUNDS = 4
_CLOSE = 1.04
_NUDGE = 1e-3
_CAPS = (0.8, 1.2)
_CHORD = np.linspace(0.08, 0.96, 12)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Surface:
    """What the walkers found.

    `points`: models within the threshold, the optimum first. `open_damping`: the first-order limit is
    within the threshold. `better`: a model clearly better than the optimum, if one was met.
    """

    points: Points
    open_damping: bool
    better: Array | None


def walk(
    columns: Columns, theta: Array, *, free: np.ndarray, threshold: float, variance: float, band: float
) -> Surface:
    """Return the surface around an optimum.

    Parameters
    ----------
    columns : Columns
    theta : (3,) array
        The optimum.
    free : (3,) bool array
        Coordinates that are part of the model.
    threshold : float
        Allowed rise of the sum of squares, in units of the variance.
    variance : float
        Of a row's noise.
    band : float
        Settling band, a fraction.
    """
    walkers = _Walkers(columns, theta, free, band)
    lowest = columns.chart.lowest
    best = solve_linear(columns.evaluate(theta[None], derivatives=False)[0], columns.target)
    at = np.repeat(theta[None], walkers.count, axis=0)
    linear = np.repeat(best.linear, walkers.count, axis=0)
    sse_best = float(best.sse[0])
    seen = [Points(theta=theta[None], linear=best.linear)]
    open_damping, better, rise = False, None, np.zeros(walkers.count)
    for turn in range(_ROUNDS + 3):
        if turn > 0:
            matrix, slopes = columns.evaluate(at)
            linear, residual, sse = walkers.resolve(matrix, linear)
            rise = (sse - sse_best) / variance
            within = rise <= _CLOSE * threshold
            if within.any():
                seen.append(Points(theta=at[within], linear=linear[within]))
            low = int(np.argmin(rise))
            if rise[low] < -0.1 and (better is None or rise[low] < better[0]):
                better = (float(rise[low]), at[low].copy())
            if columns.chart.by_lags:
                open_damping |= bool(np.any(within & (at[:, 1] <= lowest[1] + 1e-9)))
        else:
            matrix, slopes = columns.evaluate(at[:1])
            residual = np.repeat(best.residual, walkers.count, axis=0)
            matrix, slopes = (np.repeat(a, walkers.count, axis=0) for a in (matrix, slopes))
        if turn < _ROUNDS:
            aims = walkers.aims(at, linear)
            step = _aim(matrix, slopes, linear, residual, rise, aims, free, at, lowest, threshold, variance)
            at = np.maximum(at + step[:, :3], lowest)
            linear = linear + step[:, 3:]
        elif turn < _ROUNDS + 2:  # secant on the root of the rise, along the chord from the optimum
            off = np.abs(rise / threshold - 1.0) > _CLOSE - 1.0
            if not off.any():
                break
            ratio = np.where(off & (rise > 0), np.sqrt(threshold / np.maximum(rise, 1e-3 * threshold)), 1.0)
            ratio = np.clip(ratio, 0.3, 2.0)[:, None]
            at = np.maximum(theta + ratio * (at - theta), lowest)
            linear = best.linear + ratio * (linear - best.linear)
    # settling time jumps between swings: the jump can lie inside the surface
    ends, end_linear = at, linear
    share = _CHORD[:, None, None]
    inside = Points(
        theta=(theta + share * (ends - theta)).reshape(-1, 3),
        linear=(best.linear + share * (end_linear - best.linear)).reshape(-1, linear.shape[1]),
    )
    keep = np.tile(rise <= _CLOSE * threshold, _CHORD.size)
    seen.append(Points(theta=inside.theta[keep], linear=inside.linear[keep]))
    return Surface(points=Points.joined(seen), open_damping=open_damping, better=None if better is None else better[1])


class _Walkers:
    """Pairs of walkers, one pair a figure, and the gradients they follow."""

    def __init__(self, columns: Columns, theta: Array, free: np.ndarray, band: float) -> None:
        self.columns, self.free, self.band = columns, free, band
        _, r = columns.chart.lags(theta[None])
        driven = columns.input is not None and 1 in columns.rungs
        names = ["damping", "frequency"] if free[1] else ["frequency"]
        names += ["gain", "dead", "rise", "delay", "settle", "envelope", "lag and dead"] if driven else ["envelope"]
        if columns.input is not None and not driven:
            names += ["gain", "dead", "lag and dead"]
        if columns.rungs == (1, 0):
            names += ["zero"]
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
        if "gain" in names:
            self.held[2 * names.index("gain") :][:2] = True

    def resolve(self, matrix: Array, linear: Array) -> tuple[Array, Array, Array]:
        """Return linear parameters, residuals and sums of squares, each walker's own constraint kept."""
        solved = solve_linear(matrix, self.columns.target)
        if not self.held.any():
            return solved.linear, solved.residual, solved.sse
        rows = np.flatnonzero(self.held)
        k = self.held_column
        inverse = np.linalg.inv(solved.triangle[rows])
        covariance = inverse @ np.swapaxes(inverse, 1, 2)
        shift = (linear[rows, k] - solved.linear[rows, k]) / covariance[:, k, k]
        out, residual, sse = solved.linear.copy(), solved.residual.copy(), solved.sse.copy()
        out[rows] += covariance[:, :, k] * shift[:, None]
        residual[rows] = self.columns.target - (out[rows, None, :] @ matrix[rows])[:, 0, :]
        sse[rows] = np.einsum("bn,bn->b", residual[rows], residual[rows])
        return out, residual, sse

    def aims(self, theta: Array, linear: Array) -> Array:
        """Return the gradient (W, 3 + q) of each walker's figure, signed."""
        chart = self.columns.chart
        out = np.zeros((self.count, 3 + self.linear_count))
        T, r = chart.lags(theta)
        by_r, T_by = self._conversions(theta, r)
        rho = _UnitTimes(r, self.names, self.band)
        for i, name in enumerate(self.names):
            rows = slice(2 * i, 2 * i + 2)
            if name == "damping":
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
                value, slope = rho.of(name, rows)
                # a time T rho(r) (+ dead time): gradient by the product rule
                out[rows, 0] = T[rows] * value * (1.0 if chart.by_lags else -1.0)
                out[rows, 1] = T[rows] * (slope * by_r[rows] + value * T_by[rows])
                out[rows, 2] = 0.0 if name in ("rise", "damped", "slow", "fast") else 1.0
        out[:, :3] *= self.free
        signed: Array = out * self.sign[:, None]
        return signed

    def _conversions(self, theta: Array, r: Array) -> tuple[Array, Array]:
        """Return dr and dlog T in the second coordinate."""
        chart = self.columns.chart
        if chart.by_lags:
            return chart.shape_slope(r), np.zeros_like(r)
        zeta = np.maximum(theta[:, 1], 1e-4)
        return -0.5 / zeta**3, 1.0 / zeta


class _UnitTimes:
    """Times in units of T as functions of r, with slopes by small differences, for the walkers' aims."""

    def __init__(self, r: Array, names: list[str], band: float) -> None:
        self.band = band
        nudges = 1.0 + _NUDGE * np.array([-1.0, 0.0, 1.0])[:, None]
        self.spread = np.maximum(r, 1e-5)[None, :] * nudges
        levels = {"rise": (0.1, 0.9), "delay": (0.5,), "settle": (1.0 - band,)}
        wanted = [(i, level) for i, name in enumerate(names) for level in levels.get(name, ())]
        if wanted:  # all crossings in one call
            pairs = np.stack([self.spread[:, 2 * i : 2 * i + 2] for i, _ in wanted])
            times = unit_step.crossing_time(pairs, np.array([level for _, level in wanted])[:, None, None])
            self.crossings = {(names[i], level): time for (i, level), time in zip(wanted, times, strict=True)}

    def of(self, name: str, rows: slice) -> tuple[Array, Array]:
        """Return value and slope in r for the walkers in these rows."""
        r = self.spread[:, rows]
        low, middle, high = self._value(name, r)
        return middle, (high - low) / (r[2] - r[0])

    def _value(self, name: str, r: Array) -> Array:
        root = np.sqrt(np.maximum(1.0 - 4.0 * r, 1e-6))
        value: Array
        match name:
            case "rise":
                value = self.crossings[name, 0.9] - self.crossings[name, 0.1]
            case "delay":
                value = self.crossings[name, 0.5]
            case "settle":
                value = self.crossings[name, 1.0 - self.band]
            case "envelope":
                value = 2.0 * r * np.log(1.0 / self.band)
            case "peak" | "damped":
                value = 2.0 * np.pi * r / np.sqrt(np.maximum(4.0 * r - 1.0, 1e-3))
            case "slow":
                value = 0.5 * (1.0 + root)
            case "fast":
                value = 0.5 * (1.0 - root)
            case _:  # lag and dead time together
                value = np.ones_like(r)
        return value


def _aim(
    matrix: Array,
    slopes: Array,
    linear: Array,
    residual: Array,
    rise: Array,
    aims: Array,
    free: np.ndarray,
    at: Array,
    lowest: Array,
    threshold: float,
    variance: float,
) -> Array:
    """Return each walker's step (W, 3 + q) to where its own figure is extreme on the surface."""
    m = slopes.shape[2]
    jacobian = np.concatenate([(linear[:, None, None, :m] @ slopes)[:, :, 0, :], matrix], axis=1)
    H = jacobian @ np.swapaxes(jacobian, 1, 2) / variance
    b = (jacobian @ residual[:, :, None])[:, :, 0] / variance
    W, size = b.shape
    held = np.zeros((W, size), dtype=bool)
    held[:, :3] = ~free
    move = np.zeros((W, size))
    for _ in range(3):
        step = _step_to_surface(H, b, aims, rise, held, move, threshold)
        limit = np.full((W, 3), 2.0 * threshold)
        limit[:, 0], limit[:, 1] = _CAPS
        limit[:, 2] = np.inf
        shrink = np.min(limit / np.maximum(np.abs(step[:, :3]), 1e-300), axis=1)
        step *= np.minimum(1.0, shrink)[:, None]
        crossing = (at + step[:, :3] < lowest - 1e-12) & ~held[:, :3]
        if not crossing.any():
            break
        move[:, :3] = np.where(crossing, lowest - at, move[:, :3])
        held[:, :3] |= crossing
    return step


def _step_to_surface(
    H: Array, b: Array, aims: Array, rise: Array, held: np.ndarray, move: Array, threshold: float
) -> Array:
    """Solve for the extreme of a linear figure on a quadratic surface, some coordinates held at a given move."""
    size = b.shape[1]
    kept = ~held
    pull = b - (H @ move[:, :, None])[:, :, 0]
    b_free, c = np.where(kept, pull, 0.0), np.where(kept, aims, 0.0)
    pairs = kept[:, :, None] & kept[:, None, :]
    # scaled to a unit diagonal, so that the units of the parameters do not matter
    scale = np.where(kept, 1.0 / np.sqrt(np.maximum(np.diagonal(H, axis1=1, axis2=2), 1e-300)), 1.0)
    inner = np.where(pairs, H * scale[:, :, None] * scale[:, None, :], 0.0)
    inner = inner + np.where(held, 1.0, 1e-13)[:, :, None] * np.eye(size)
    both = np.linalg.solve(inner, np.stack([b_free * scale, c * scale], axis=2)) * scale[:, :, None]
    to_bottom, along = both[:, :, 0], both[:, :, 1]
    bottom = rise - 2.0 * np.einsum("bp,bp->b", b, move) + np.einsum("bp,bp->b", move, b - pull)
    bottom = bottom - np.einsum("bp,bp->b", b_free, to_bottom)
    stretch = np.einsum("bp,bp->b", c, along)
    length = np.sqrt(np.maximum(threshold - bottom, 0.0) / np.maximum(stretch, 1e-300))
    length = np.where(stretch > 1e-300, length, 0.0)
    return np.where(held, move, to_bottom + length[:, None] * along)
