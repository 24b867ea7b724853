"""From rows to a model with intervals: bins, starts, least squares, the likelihood-ratio surface."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np

from loopfit.core.arrays import Array
from loopfit.fit.colour import Whitener
from loopfit.fit.columns import Columns, Input
from loopfit.fit.samples import BINS_AT_LEAST, gather, is_even
from loopfit.fit.separable import Flags, Minimum, minimise, solve_linear
from loopfit.fit.start import main_frequency, scan
from loopfit.model.chart import LAGS, SWING, Chart

_COARSE_BINS = 60
_BINS_PER_CYCLE = 8
_BIN_SHARE = 0.15  # of 1 / omega_n
_LIGHT_DAMPING = 0.1
_EXACT = 1e-12  # share of the squares left over that is rounding
_FIRST_ORDER_R = 0.01  # below this the bins follow T, not omega_n


@dataclass(frozen=True, slots=True, kw_only=True)
class Structure:
    """What a model is made of: the rungs of its input response, and what else may move.

    `first_order` holds r at 0; `moving_start` adds the free response; `drift` a slow straight line.
    """

    rungs: tuple[int, ...] = (1,)
    first_order: bool = False
    moving_start: bool = False
    drift: bool = False


@dataclass(frozen=True, kw_only=True, eq=False)
class Trace:
    """The part of a record that is fitted: rows, the input in it, and where the step is.

    `input` is None for a release. `begins` is the instant of the step (of the first row, for a release), s;
    `step_row` the first row at or after it.
    """

    time: Array
    values: Array
    input: Input | None
    begins: float
    step_row: int

    @property
    def last_change(self) -> float:
        """Instant of the last change of the input, s; of the first row, for a release."""
        return self.begins if self.input is None else float(self.input.times[-1])

    @property
    def span(self) -> float:
        """Time from the step to the last row, s."""
        return float(self.time[-1] - self.begins)

    # every structure that is tried asks for these again

    @cached_property
    def even(self) -> bool:
        """Whether the rows are evenly spaced."""
        return is_even(self.time)

    @cached_property
    def main_frequency(self) -> float | None:
        """The record's main frequency, rad/s, where it has one that a coarse grid can miss."""
        return main_frequency(self.time, self.values)

    @cached_property
    def coarse(self) -> dict[Structure, Columns]:
        """Models on few bins that were asked for, by structure."""
        return {}


@dataclass(frozen=True, kw_only=True, eq=False)
class Fit:
    """A fitted model: its columns, coordinates, linear parameters, and the noise left over.

    `sse` is the sum of squares of the rows as weighed; `variance` the noise power of one row (of the innovations,
    where a `whitener` is given); `colour` the correlation of neighbouring residuals; `inflation` the factor by which
    colour widens the variance of slow shapes where no whitener could be had.
    """

    structure: Structure
    columns: Columns
    theta: Array
    linear: Array
    sse: float
    variance: float
    degrees: int
    colour: float
    inflation: float
    settled: bool
    whitener: Whitener | None = None

    @cached_property
    def working(self) -> Columns:
        """The columns as the likelihood sees them: whitened."""
        return self.columns if self.whitener is None else replace(self.columns, whitener=self.whitener)

    @property
    def free(self) -> Flags:
        """Coordinates that are part of the model (3,)."""
        return free_coordinates(self.structure, self.columns.input is not None)


def free_coordinates(structure: Structure, driven: bool) -> Flags:
    """Return which coordinates are part of a model (3,): scale, shape, dead time."""
    return np.array([True, not structure.first_order, driven])


def fit_trace(trace: Trace, structure: Structure, *, noise_floor: float = 0.0) -> Fit:
    """Return the best model of one structure.

    Parameters
    ----------
    trace : Trace
    structure : Structure
    noise_floor : float
        Least noise of a row that the record's resolution allows, measurement units.
    """
    even = trace.even
    free = free_coordinates(structure, trace.input is not None)
    coarse, main = coarse_columns(trace, structure)
    starts = scan(coarse, trace.span, main, release=trace.input is None)
    if structure.first_order:
        starts[:, 1] = LAGS.lowest[1]
    found = search(coarse, starts, free, thin=True, tolerance=1e-3, rounds=30)
    order = np.argsort(found.sse)
    theta = found.theta[order[: 2 if found.sse.size > 1 else 1]]
    chart = LAGS
    columns = coarse
    for _ in range(3):
        width = _bin_width(chart, theta[:1])
        columns = _columns(trace, structure, chart, width, even)
        found = search(columns, theta, free, tolerance=1e-7, rounds=60)
        best = int(np.argmin(found.sse))
        theta = found.theta[best : best + 1]
        if chart is LAGS and not structure.first_order and chart.damping(theta)[0] < _LIGHT_DAMPING:
            theta = _to_swing(theta, trace)
            chart = SWING
            continue
        if not columns.samples.binned or _bin_width(chart, theta) >= 0.6 * width:
            break
    return _finish(columns, theta[0], structure, free, noise_floor, settled=bool(found.settled[best]))


def coarse_columns(trace: Trace, structure: Structure) -> tuple[Columns, float | None]:
    """Return the model on few bins, for the first search, and the record's main frequency, rad/s."""
    main = trace.main_frequency
    if structure not in trace.coarse:
        cycles = 0.0 if main is None else main * (trace.time[-1] - trace.time[0]) / (2.0 * math.pi)
        bins = max(_COARSE_BINS, int(_BINS_PER_CYCLE * cycles))
        trace.coarse[structure] = _columns(trace, structure, LAGS, math.inf, trace.even, bins)
    return trace.coarse[structure], main


def _finish(
    columns: Columns, theta: Array, structure: Structure, free: Flags, noise_floor: float, *, settled: bool
) -> Fit:
    solved = solve_linear(columns.evaluate(theta[None], derivatives=False)[0], columns.target)
    n = columns.target.size
    degrees = max(n - int(free.sum()) - solved.linear.shape[1], 1)
    sse = float(solved.sse[0])
    scale = float(np.max(np.abs(columns.target))) if n else 0.0
    settled = settled or sse <= _EXACT * float(columns.target @ columns.target)
    variance = max(sse / degrees, noise_floor**2, (1e-13 * scale) ** 2, 1e-300)
    colour = neighbour_correlation(solved.residual[0])
    return Fit(
        structure=structure,
        columns=columns,
        theta=theta,
        linear=solved.linear[0],
        sse=sse,
        variance=variance,
        degrees=degrees,
        colour=colour,
        inflation=inflation_by(colour, n),
        settled=settled,
    )


def inflation_by(colour: float, rows: int) -> float:
    """Return the factor by which a correlation of neighbouring residuals widens the variance of slow shapes."""
    if colour * math.sqrt(rows) <= 3.0:
        return 1.0
    bounded = min(colour + (1.0 + 3.0 * colour) / rows, 0.98)  # Kendall 1954: bias of the lag-one correlation
    return (1.0 + bounded) / (1.0 - bounded)


def _columns(
    trace: Trace, structure: Structure, chart: Chart, width: float, even: bool, fewest: int = BINS_AT_LEAST
) -> Columns:
    samples = gather(trace.time, trace.values, width, trace.step_row, even=even, fewest=fewest)
    free_from = float(trace.time[0]) if structure.moving_start or trace.input is None else None
    return Columns(
        samples=samples,
        chart=chart,
        input=trace.input,
        rungs=structure.rungs if trace.input else (),
        free_from=free_from,
        drift=structure.drift,
    )


def _bin_width(chart: Chart, theta: Array) -> float:
    T, r = chart.lags(theta)
    slow = chart.scale(theta)[0] if not chart.by_lags else T[0] * np.sqrt(max(r[0], _FIRST_ORDER_R))
    return float(_BIN_SHARE * slow)


def _to_swing(theta: Array, trace: Trace) -> Array:
    """Return two starts in the swing chart: where the search ended, and without damping at all."""
    zeta, frequency = LAGS.damping(theta), LAGS.frequency(theta)
    start = SWING.locate(zeta, np.minimum(frequency, 1e3 / max(trace.span, 1e-30)), theta[:, 2])
    flat = start.copy()
    flat[:, 1] = 0.0
    return np.concatenate([start, flat])


def search(
    columns: Columns, starts: Array, free: Flags, *, thin: bool = False, tolerance: float, rounds: int
) -> Minimum:
    """Return where the starts lead, with steps as long as the chart allows."""
    chart = columns.chart

    def caps(theta: Array) -> Array:
        limit = np.empty_like(theta)
        limit[:, 0], limit[:, 1] = (0.8, 1.2) if chart.by_lags else (0.3, 0.3)
        T, r = chart.lags(theta)
        limit[:, 2] = T * (2.0 * np.sqrt(r) + 0.5)  # T sqrt(r) = 1 / omega_n
        return limit

    return minimise(
        columns.evaluate,
        columns.target,
        starts,
        lowest=chart.lowest,
        highest=columns.highest,
        free=free,
        caps=caps,
        tolerance=tolerance,
        rounds=rounds,
        thin=thin,
    )


def neighbour_correlation(residual: Array) -> float:
    """Return the correlation of neighbouring residuals."""
    power = float(residual @ residual)
    return float(residual[1:] @ residual[:-1]) / power if power > 0 else 0.0
