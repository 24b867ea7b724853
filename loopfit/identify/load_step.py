"""A plant from a record in which a load moved the loop: output -> measurement, with a step of unknown size at an unknown instant.

The load is one more column, linear in its size; the instant at which it is felt is a fourth coordinate.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from loopfit.core.arrays import Array
from loopfit.fit.colour import whitener_of
from loopfit.fit.columns import Columns, Input
from loopfit.fit.estimate import Structure, Trace
from loopfit.fit.samples import gather, rows_as_samples
from loopfit.fit.separable import combined, minimise, solve_linear
from loopfit.identify.output_to_measurement import (
    BINS,
    independent_rows,
    integrates,
    noise_and_floor,
    quick_lag,
    trace_of,
)
from loopfit.identify.plants import plants_of, times_of
from loopfit.identify.posterior import degrees_of, drawn, lowest_of
from loopfit.loop.plant import Plant
from loopfit.model.chart import LAGS
from loopfit.record.record import Record

_DAMPINGS = (0.08, 0.4, 1.0, 3.0)
_SLOWNESS = np.geomspace(0.008, 0.4, 8)  # 1 / omega_n over the span
_DEAD_TIMES = (0.0, 1.5)  # in units of 1 / omega_n
_INSTANTS = 4
_STARTS = 8
_ROUNDS = 2
_REST_ROWS, _REST_SHARE = 20, 0.4  # before the load, and the share of their time that a dead time may take
_LONGEST_DEAD = 0.8  # spans
_LONGEST = 100.0  # spans, of the lags
_SLOW = 0.1  # spans: a lag from which an integration is tried
_FIRST = 9  # rows that tell the first level
_CLEAR, _CLEAR_SHARE = 5.0, 0.05  # noise levels, share of the range


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class LoadFit:
    """A plant and the load that moved it: coordinates `theta` (4,), the last the instant at which the load is felt, s."""

    columns: Columns
    structure: Structure
    theta: Array
    linear: Array
    variance: float
    degrees: int
    longest_dead: float  # bound of the dead time, s

    @property
    def plant(self) -> Plant:
        """The plant."""
        times = times_of(self.columns)
        return plants_of(self.columns.chart, self.structure, self.theta[None, :3], self.linear[None], times=times)[0]

    @property
    def load(self) -> float:
        """Size of the load, output units."""
        assert self.columns.input is not None
        level = self.columns.input.unknown_from is not None
        return float(self.linear[1 + level] / self.linear[0])

    @property
    def left_over(self) -> tuple[float, float]:
        """Sum of squares that the model leaves over, and that of the measurement around its mean."""
        columns = replace(self.columns, whitener=None)
        rest = columns.target - self.linear @ columns.evaluate(self.theta[None], derivatives=False)[0][0]
        weights = columns.samples.root_count
        mean = float(weights @ columns.target) / float(weights @ weights)
        return float(rest @ rest), float(np.sum((columns.target - mean * weights) ** 2))

    @property
    def explained(self) -> float:
        """Share of the measurement's squares that the model explains."""
        left, whole = self.left_over
        return 1.0 - left / max(whole, 1e-300)

    def draws(self, count: int, rng: np.random.Generator) -> list[Plant]:
        """Return plants that the record allows, in proportion to their probability; their gains may be of either sign."""
        degrees, factor = degrees_of(self.degrees, 1.0, self.columns.whitener)
        lowest, highest = _bounds(self.columns, self.longest_dead)
        theta, linear = drawn(
            self.columns,
            self.theta,
            free=_free(self.structure),
            lowest=np.append(lowest_of(self.columns, self.theta), lowest[3]),
            highest=highest,
            variance=self.variance * factor,
            degrees=degrees,
            count=count,
            rng=rng,
        )
        return plants_of(self.columns.chart, self.structure, theta[:, :3], linear, times=times_of(self.columns))


def load_fitted(record: Record) -> LoadFit:
    """Return the plant from a record in which a load moved the loop: a step of unknown size, felt at an unknown instant.

    The level of the output before the record and the load are of one kind, and could trade places. They cannot where the
    dead time is well below the time before the load; else the output is taken to have balanced the loop, on the average.
    """
    trace = trace_of(record, float(record.time[0]))
    assert trace.input is not None
    assert record.output is not None
    before = max(_moved(trace.values) - 1, 1)
    if before >= _REST_ROWS:
        limit = _REST_SHARE * float(trace.time[before] - trace.time[0])
        found = _load_or_integrating(trace, limit)
        if found.theta[2] < 0.95 * limit:
            return found
    first = float(record.output.values[0]) - float(np.mean(record.output.values[:before]))
    balanced = Input(times=np.append(trace.time[0], trace.input.times), sizes=np.append(first, trace.input.sizes))
    return _load_or_integrating(replace(trace, input=balanced), _LONGEST_DEAD * float(np.ptp(trace.time)))


def _load_or_integrating(trace: Trace, longest_dead: float) -> LoadFit:
    _, floor = noise_and_floor(trace.values)
    best = _load_fit(trace, Structure(), floor, longest_dead)
    longest = float(best.columns.chart.lags(best.theta[None])[0][0])
    if longest > _SLOW * trace.span:
        near = best.theta.copy()
        near[0], near[1] = math.log(quick_lag(best.columns, best.theta)), LAGS.lowest[1]
        rival = _load_fit(trace, Structure(rungs=(2,), first_order=True), floor, longest_dead, near)
        rows = independent_rows(best.columns.whitener, trace)
        best = rival if integrates(rival.left_over[0], best.left_over[0], rows) else best
    return best


def _free(structure: Structure) -> np.ndarray:
    return np.array([True, not structure.first_order, True, True])


def _bounds(columns: Columns, longest_dead: float) -> tuple[Array, Array]:
    centres = columns.samples.centres
    lowest = np.append(columns.chart.lowest, centres[0])
    highest = np.array([np.log(_LONGEST * np.ptp(centres)), np.inf, longest_dead, centres[-1]])
    return lowest, highest


def _load_fit(
    trace: Trace, structure: Structure, floor: float, longest_dead: float, near: Array | None = None
) -> LoadFit:
    assert trace.input is not None
    samples = gather(trace.time, trace.values, trace.span / BINS, trace.step_row, even=trace.even)
    if not samples.binned:
        samples = rows_as_samples(trace.time, trace.values)
    columns = Columns(samples=samples, chart=LAGS, input=trace.input, rungs=structure.rungs, load=True)
    lowest, highest = _bounds(columns, longest_dead)
    free = _free(structure)
    theta = np.clip(_load_starts(columns, trace), lowest, highest)
    if structure.first_order:
        theta[:, 1] = lowest[1]
    if near is not None:
        theta = np.vstack([theta, near])

    def caps(at: Array) -> Array:
        T, r = LAGS.lags(at)
        unit = T * (2.0 * np.sqrt(r) + 0.5)
        return np.stack([np.full_like(T, 0.8), np.full_like(T, 1.2), unit, 2.0 * unit], axis=1)

    for turn in range(1 + _ROUNDS):
        found = minimise(
            columns.evaluate,
            columns.target,
            theta,
            lowest=lowest,
            highest=highest,
            free=free,
            caps=caps,
            tolerance=1e-6,
            rounds=60,
            thin=True,
        )
        theta = found.theta[np.argsort(found.sse)[:2]]
        solved = solve_linear(columns.evaluate(theta[:1], derivatives=False)[0], columns.target)
        if turn == _ROUNDS or np.ptp(np.diff(samples.centres)[1:-1]) > 0.02 * float(
            np.median(np.diff(samples.centres))
        ):
            break
        plain = replace(columns, whitener=None)
        bare, bare_slopes = plain.evaluate(theta[:1])
        moved = combined(solved.linear, bare_slopes)[0]
        whitener = whitener_of(plain.target - solved.linear[0] @ bare[0], np.vstack([moved[free], bare[0]]))
        if whitener is None:
            break
        columns = replace(columns, whitener=whitener)
    degrees = max(columns.target.size - int(free.sum()) - solved.linear.shape[1], 1)
    return LoadFit(
        columns=columns,
        structure=structure,
        theta=theta[0],
        linear=solved.linear[0],
        variance=max(float(solved.sse[0]) / degrees, floor**2, 1e-300),
        degrees=degrees,
        longest_dead=longest_dead,
    )


def _moved(values: Array) -> int:
    """Return the row at which the measurement has clearly left its first level."""
    noise, _ = noise_and_floor(values)
    away = np.abs(values - np.median(values[:_FIRST])) > max(_CLEAR * noise, _CLEAR_SHARE * float(np.ptp(values)))
    return int(np.argmax(away))


def _load_starts(columns: Columns, trace: Trace) -> Array:
    """Return the best of a grid of models and instants (S, 4)."""
    span = float(trace.time[-1] - trace.time[0])
    slows = span * _SLOWNESS
    if trace.main_frequency is not None:
        slows = np.append(slows, 1.0 / trace.main_frequency)
    z, slow, dead = (axis.ravel() for axis in np.meshgrid(_DAMPINGS, slows, _DEAD_TIMES, indexing="ij"))
    models = LAGS.locate(z, 1.0 / slow, dead * slow)
    instants = trace.time[0] + span * (np.arange(_INSTANTS) + 0.5) / _INSTANTS
    seen = float(trace.time[_moved(trace.values)])
    instants = np.append(instants, [max(seen - share * span, trace.time[0]) for share in (0.0, 0.01, 0.04)])
    theta = np.column_stack([np.repeat(models, instants.size, axis=0), np.tile(instants, models.shape[0])])
    left = []
    for first in range(0, theta.shape[0], 128):
        matrix, _ = columns.evaluate(theta[first : first + 128], derivatives=False)
        left.append(solve_linear(matrix, columns.target).sse)
    out: Array = theta[np.argsort(np.concatenate(left))]
    kept = [0]
    for i in range(1, out.shape[0]):
        apart = np.abs(out[i] - out[kept]) / np.array([0.5, 0.5, span, 0.05 * span])
        if np.all(apart.max(axis=1) > 1.0):
            kept.append(i)
        if len(kept) == _STARTS:
            break
    return out[kept]
