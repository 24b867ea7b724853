"""A plant from a closed-loop setpoint record without its output: through the exact sampled loop with its own settings.

Gain, lags and dead time are those with which the simulated loop, limits and anti-windup in it, gives the recorded
measurement. Noise goes round the loop, so that what is left over is coloured: the colour is estimated and the fit repeated.
Wrong settings do not show in what is left over: with all gains typed 1.5 times too large the fit is the same, with a
plant gain 1.5 times too small.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from loopfit.core.arrays import Array
from loopfit.fit.colour import Whitener, whitener_of
from loopfit.fit.estimate import Structure
from loopfit.identify.plants import SHORTEST, plants_of
from loopfit.identify.posterior import Likelihood, degrees_of, log_likelihood, sampled
from loopfit.loop.gains import Gains
from loopfit.loop.plant import Plant
from loopfit.loop.simulate import AntiWindup, simulate
from loopfit.model.chart import LAGS, R_SHIFT

_LAGS = (0.1, 0.3, 0.8)  # of the time in which the measurement moves
_DAMPINGS = (0.4, 0.9, 2.5)
_DEAD_SHARES = (0.0, 0.3, 0.8)  # of the sum of the lags: several for the same lag
_GAINS = (0.2, 0.6, 2.0, 6.0)  # of the loop at the frequency 1 / (sum of the lags)
_STARTS = 6
_ROUNDS = 40
_LEFT = 3  # starts that are followed to the end
_THINNED = (4, 8, 12)  # rounds after which copies are dropped
_FIRST_ORDER = 0.02  # r below which dead time may hide a lag
_UNLIKE, _ALIKE = 0.4, 0.05  # coordinates (dead time over T) by which starts differ, and those that lead apart
_STEP = 1e-5
_STEP_AT_LIMITS = 3e-3  # anti-windup acts or not at a scan: small steps would see the smooth part alone
_CAPS = np.array([0.7, 1.0, 0.5, 0.7])  # log T, shape, dead time over T, log gain
_COLOURS = 2
_BEYOND = 2.0  # spans
_LARGEST = 1e8  # times the range: beyond, the simulated loop is unstable


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Rows:
    """What was recorded: `values` (n,) at every `each`-th scan of `setpoint` (N,), and the loop around it."""

    values: Array
    setpoint: Array
    each: int
    scan_s: float
    gains: Gains
    output_limits: tuple[float, float] | None
    initial_output: float
    initial_measurement: float
    initial_setpoint: float
    anti_windup: AntiWindup = "conditional integration"
    late: bool = False

    def predicted(self, plants: Sequence[Plant]) -> Array:
        """Return the measurement (B, n) of the simulated loops."""
        run = simulate(
            plants,
            self.gains,
            scan_s=self.scan_s,
            scans=self.setpoint.size,
            setpoint=self.setpoint,
            output_limits=self.output_limits,
            anti_windup=self.anti_windup,
            initial_measurement=self.initial_measurement,
            initial_output=self.initial_output,
            initial_setpoint=self.initial_setpoint,
            late=self.late,
        )
        return run.controlled[:: self.each].T


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class LoopFit:
    """A plant found through the loop: coordinates `theta` (4,) are log T, log(r + 0.03), dead time, log of the gain's size."""

    rows: Rows
    structure: Structure
    sign: float
    theta: Array
    residual: Array
    jacobian: Array
    variance: float
    degrees: int
    whitener: Whitener | None

    @property
    def plant(self) -> Plant:
        """The plant."""
        return _plants(self.theta[None], self.structure, self.sign, self.rows)[0]

    def draws(self, count: int, rng: np.random.Generator) -> list[Plant]:
        """Return plants that the record allows, in proportion to their probability."""
        degrees, factor = degrees_of(self.degrees, 1.0, self.whitener)
        variance = self.variance * factor
        whitened = _identity if self.whitener is None else self.whitener
        least = float(np.sum(whitened(self.residual) ** 2))
        J = whitened(self.jacobian)

        def log_of(theta: Array) -> Array:
            rest = whitened(self.rows.values - _finite(self.rows, _plants(theta, self.structure, self.sign, self.rows)))
            return log_likelihood(np.einsum("bn,bn->b", rest, rest) - least, variance, degrees)

        lowest, highest = _bounds(self.rows)
        likelihood = Likelihood(
            log_of=log_of,
            centre=self.theta,
            curvature=J @ J.T / variance,
            lowest=lowest,
            highest=highest,
            free=_free(self.structure),
        )
        return _plants(sampled(likelihood, count, rng)[0], self.structure, self.sign, self.rows)


def through_loop(rows: Rows, sign: float, *, noise_floor: float) -> LoopFit:
    """Return the plant with which the simulated loop gives the recorded measurement.

    Parameters
    ----------
    rows : Rows
    sign : float
        Of the plant's gain: that with which its controller feeds back negatively.
    noise_floor : float
        Least noise of a row that the resolution allows.
    """
    best = _fit(rows, Structure(), sign, noise_floor)
    if math.exp(best.theta[0]) > _BEYOND * rows.scan_s * rows.setpoint.size:
        rival = _fit(rows, Structure(rungs=(2,), first_order=True), sign, noise_floor)
        n = rows.values.size
        if n * math.log(rival.variance / best.variance) < math.log(n) + 2.0:  # Schwarz 1978
            return rival
    return best


def _fit(rows: Rows, structure: Structure, sign: float, floor: float) -> LoopFit:
    free = _free(structure)
    theta = _starts(rows, structure, sign)
    whitener: Whitener | None = None
    found = _minimised(rows, structure, sign, theta, _identity)
    if free[1] and LAGS.shape(found[0][None])[0] < _FIRST_ORDER:
        found = min((found, _minimised(rows, structure, sign, _hidden_lag(found[0]), _identity)), key=_squares)
    for _ in range(_COLOURS):
        theta, rest, J = found
        whitener = whitener_of(rest, J[free])
        if whitener is None:
            break
        found = _minimised(rows, structure, sign, theta[None], whitener)
    theta, rest, J = found
    degrees = max(rest.size - int(free.sum()), 1)
    left = rest if whitener is None else whitener(rest)
    return LoopFit(
        rows=rows,
        structure=structure,
        sign=sign,
        theta=theta,
        residual=rest,
        jacobian=J,
        variance=max(float(left @ left) / degrees, floor**2, 1e-300),
        degrees=degrees,
        whitener=whitener,
    )


def _hidden_lag(theta: Array) -> Array:
    """Return starts (2, 4) where a second lag takes the place of dead time: that valley is apart from the first-order one."""
    out = np.repeat(theta[None], 2, axis=0)
    out[:, 1] = math.log(0.2 + R_SHIFT)
    out[:, 2] *= np.array([0.3, 0.7])
    return out


def _squares(found: tuple[Array, Array, Array]) -> float:
    return float(found[1] @ found[1])


def _identity(values: Array) -> Array:
    return values


def _free(structure: Structure) -> NDArray[np.bool_]:
    return np.array([True, not structure.first_order, True, True])


def _bounds(rows: Rows) -> tuple[Array, Array]:
    span = rows.scan_s * rows.setpoint.size
    lowest = np.array([math.log(SHORTEST * rows.scan_s), LAGS.lowest[1], 0.0, -np.inf])
    return lowest, np.array([math.log(100.0 * span), math.log(1e4), 0.5 * span, np.inf])


def _plants(theta: Array, structure: Structure, sign: float, rows: Rows) -> list[Plant]:
    # a lag that comes and goes between two scans is kept as it is here: the search needs its slope
    times = (0.0, rows.scan_s * rows.setpoint.size)
    return plants_of(LAGS, structure, theta[:, :3], sign * np.exp(theta[:, 3:]), times=times)


def _finite(rows: Rows, plants: Sequence[Plant]) -> Array:
    """Return the predictions (B, n); those of unstable loops infinite."""
    out = rows.predicted(plants)
    bound = _LARGEST * (float(np.ptp(rows.values)) + float(np.max(np.abs(rows.values))) + 1e-300)
    with np.errstate(invalid="ignore"):
        wild = ~np.all(np.abs(out) <= bound, axis=1)
    return np.where(wild[:, None], bound, out)


def _starts(rows: Rows, structure: Structure, sign: float) -> Array:
    """Return the best of a grid of models (S, 4)."""
    y = np.abs(rows.values - rows.initial_measurement)
    begin = int(np.argmax(rows.setpoint[:: rows.each] != rows.initial_setpoint))
    reached = begin + int(np.argmax(y[begin:] > 0.6 * np.max(y[begin:])))
    time = max(reached - begin, 2) * rows.each * rows.scan_s
    dampings = (2.5,) if structure.first_order else _DAMPINGS
    T, z, dead, gain = (
        axis.ravel() for axis in np.meshgrid(time * np.array(_LAGS), dampings, _DEAD_SHARES, _GAINS, indexing="ij")
    )
    controller = np.abs(rows.gains.kp) + np.abs(rows.gains.ki) * T + np.abs(rows.gains.kd) / (T + rows.gains.filter_s)
    size = gain / controller
    if structure.rungs == (2,):
        size = size / T
    theta = np.column_stack([np.log(T), np.log(0.25 / z**2 + R_SHIFT), dead * T, np.log(size)])
    if structure.first_order:
        theta[:, 1] = LAGS.lowest[1]
    rest = rows.values - _finite(rows, _plants(theta, structure, sign, rows))
    return theta[_apart(theta, np.einsum("bn,bn->b", rest, rest), _UNLIKE, _STARTS)]


def _apart(theta: Array, sse: Array, distance: float, most: int) -> list[int]:
    """Return the best members that differ from each other by a distance in some coordinate."""
    kept: list[int] = []
    for i in np.argsort(sse).tolist():
        apart = np.abs(theta[i] - theta[kept])
        apart[:, 2] *= np.exp(-theta[kept, 0])
        if np.all(apart.max(axis=1, initial=0.0) > distance):
            kept.append(i)
        if len(kept) == most:
            break
    return kept


def _minimised(
    rows: Rows, structure: Structure, sign: float, theta: Array, whitened: Callable[[Array], Array]
) -> tuple[Array, Array, Array]:
    """Return optimum (4,), residual (n,) and derivatives of the prediction (4, n), by damped steps from many starts.

    Levenberg (1944), Marquardt (1963); derivatives by differences, all loops simulated together.
    """
    lowest, highest = _bounds(rows)
    free = _free(structure)
    damping = np.full(theta.shape[0], 1e-2)
    growth = np.full(theta.shape[0], 2.0)
    rest, J = _linearised(rows, structure, sign, theta)
    for turn in range(_ROUNDS):
        left, slopes = whitened(rest), whitened(J)
        sse = np.einsum("bn,bn->b", left, left)
        slope = np.einsum("bpn,bn->bp", slopes, left)
        H = np.einsum("bpn,bqn->bpq", slopes, slopes)
        held = ~free | ((theta <= lowest) & (slope < 0.0)) | ((theta >= highest) & (slope > 0.0))
        slope[held] = 0.0
        H[held[:, :, None] | held[:, None, :]] = 0.0
        diagonal = np.einsum("bpp->bp", H)
        ridge = damping[:, None] * (diagonal + 1e-9 * diagonal.max(axis=1, keepdims=True)) + held + 1e-300
        step = np.linalg.solve(H + ridge[:, :, None] * np.eye(4), slope[:, :, None])[:, :, 0]
        caps = _CAPS * np.ones_like(theta)
        caps[:, 2] *= np.exp(theta[:, 0])
        step *= np.minimum(1.0, np.min(caps / np.maximum(np.abs(step), 1e-300), axis=1))[:, None]
        promised = np.einsum("bp,bp->b", step, slope)
        best = int(np.argmin(sse))
        if promised[best] <= 1e-9 * sse[best]:
            break
        trial = np.minimum(np.maximum(theta + step, lowest), highest)
        new_rest, new_J = _linearised(rows, structure, sign, trial)
        new_left = whitened(new_rest)
        better = np.einsum("bn,bn->b", new_left, new_left) < sse
        theta = np.where(better[:, None], trial, theta)
        rest = np.where(better[:, None], new_rest, rest)
        J = np.where(better[:, None, None], new_J, J)
        damping = np.where(better, 0.2 * damping, damping * growth)
        growth = np.where(better, 2.0, 2.0 * growth)
        if turn in _THINNED and theta.shape[0] > 1:
            left = whitened(rest)
            keep = _apart(theta, np.einsum("bn,bn->b", left, left), _ALIKE, _LEFT)
            theta, rest, J, damping, growth = theta[keep], rest[keep], J[keep], damping[keep], growth[keep]
        if damping.min() > 1e10:
            break
    left = whitened(rest)
    best = int(np.argmin(np.einsum("bn,bn->b", left, left)))
    return theta[best], rest[best], J[best]


def _linearised(rows: Rows, structure: Structure, sign: float, theta: Array) -> tuple[Array, Array]:
    """Return residuals (B, n) and derivatives of the prediction (B, 4, n)."""
    B = theta.shape[0]
    size = _STEP if rows.output_limits is None else _STEP_AT_LIMITS
    steps = np.full((B, 4), size)
    steps[:, 2] = size * (np.exp(theta[:, 0]) + rows.scan_s)
    moved = theta[:, None, :] + np.concatenate([np.zeros((B, 1, 4)), steps[:, :, None] * np.eye(4)], axis=1)
    predicted = _finite(rows, _plants(moved.reshape(-1, 4), structure, sign, rows)).reshape(B, 5, -1)
    return rows.values - predicted[:, 0], (predicted[:, 1:] - predicted[:, :1]) / steps[:, :, None]
