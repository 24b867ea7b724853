"""Analysing the records of a cell, and counting what the intervals did."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator
from concurrent.futures import ProcessPoolExecutor, as_completed
from dataclasses import dataclass
from typing import Any

import numpy as np
from cells import CELLS, Cell
from noises import Array

FIGURES = (
    "damping_ratio",
    "natural_frequency_rad_s",
    "gain",
    "overshoot_percent",
    "rise_time_s",
    "settling_time_s",
    "dead_time_s",
    "delay_time_s",
)
WITH_BOUND = ("damping_ratio", "natural_frequency_rad_s", "gain")
NOMINAL = 0.95
_BATCH = 20
_AT_BOUND = 0.5  # share of records at a bound from which the bound counts as active


@dataclass(frozen=True, kw_only=True, eq=False)
class Outcome:
    """What the analysis said of n records: value, low and high of each figure (n, 8, 3), nan where it gave none.

    `kinds` (n,): the kind of the model, "refused" where there is none; `adequate` (n,). `efficient` (n, 3): errors that
    the estimator of least variance would have made on the same noise, nan where the cell has no such bound.
    """

    figures: Array
    kinds: np.ndarray
    adequate: np.ndarray
    efficient: Array

    @staticmethod
    def joined(parts: list[Outcome]) -> Outcome:
        """Return several outcomes in one."""
        names = Outcome.__dataclass_fields__
        return Outcome(**{name: np.concatenate([getattr(part, name) for part in parts]) for name in names})


@dataclass(frozen=True, kw_only=True, eq=False)
class Score:
    """Shares of one cell, by figure where an array (8,); nan where the truth has no such figure.

    `given`: records with an interval; `coverage` of those; `below`, `above`: records whose truth lies below or above
    the interval; `width`: median width over the truth (as it is, where the truth is 0); `efficiency` and its standard
    error (3,); `at_bound`: share of the records whose interval touches dead time 0 or the first-order limit.
    """

    records: int
    given: Array
    coverage: Array
    below: Array
    above: Array
    width: Array
    efficiency: Array
    efficiency_error: Array
    refused: float
    other_kind: float
    adequate: float
    at_bound: float

    @property
    def bound_active(self) -> bool:
        """Whether a bound shapes most of the intervals."""
        return self.at_bound > _AT_BOUND


def simulate(number: int, seed: int, first: int, last: int) -> Outcome:
    """Return the outcome of records `first` to `last` - 1 of a cell; each has a generator of its own."""
    import loopfit

    cell = CELLS[number]
    signal = "setpoint" if cell.record == "closed loop" else "output"
    count = last - first
    figures = np.full((count, len(FIGURES), 3), np.nan)
    efficient = np.full((count, len(WITH_BOUND)), np.nan)
    kinds, adequate = np.full(count, "refused", dtype="<U20"), np.zeros(count, dtype=bool)
    for i in range(count):
        measurement = cell.measurement(np.random.default_rng([seed, number, first + i]))
        if cell.bound is not None:
            efficient[i] = cell.bound[1] @ (measurement - cell.clean)
        analysis = loopfit.analyze(time=cell.time, measurement=measurement, **{signal: cell.input})
        model = analysis.model
        if model is None:
            continue
        kinds[i], adequate[i] = model.kind, model.adequate
        for k, name in enumerate(FIGURES):
            quantity = getattr(model if hasattr(model, name) else analysis.response, name, None)
            if quantity is not None:
                figures[i, k] = quantity.value, quantity.low, quantity.high
    return Outcome(figures=figures, kinds=kinds, adequate=adequate, efficient=efficient)


def score(cell: Cell, outcome: Outcome) -> Score:
    """Count the hits of a cell."""
    truth = np.array([cell.known.get(name, math.nan) for name in FIGURES])
    value, low, high = np.moveaxis(outcome.figures, 2, 0)
    there = ~np.isnan(value)
    given = there.sum(axis=0)
    below = np.where(np.isnan(truth), np.nan, ((truth < low) & there).sum(axis=0))
    above = np.where(np.isnan(truth), np.nan, ((truth > high) & there).sum(axis=0))
    with np.errstate(invalid="ignore", divide="ignore"):
        coverage = 1.0 - (below + above) / given
    width = np.array([_middle(high[there[:, k], k] - low[there[:, k], k]) for k in range(len(FIGURES))])
    efficiency, error = _efficiency(cell, outcome)
    dead, damping = FIGURES.index("dead_time_s"), FIGURES.index("damping_ratio")
    touching = (low[:, dead] <= 0.0) | (high[:, damping] == np.inf)
    has_model = outcome.kinds != "refused"
    return Score(
        records=outcome.kinds.size,
        given=given,
        coverage=coverage,
        below=below,
        above=above,
        width=width / np.where(truth == 0.0, 1.0, np.abs(truth)),
        efficiency=efficiency,
        efficiency_error=error,
        refused=float(np.mean(~has_model)),
        other_kind=float(np.mean(has_model & (outcome.kinds != "second_order"))),
        adequate=float(np.mean(outcome.adequate)),
        at_bound=float(np.mean(touching)),
    )


def _middle(widths: Array) -> float:
    """Return the median, infinite where half are."""
    return float(np.sort(widths)[(widths.size - 1) // 2]) if widths.size else math.nan


def _efficiency(cell: Cell, outcome: Outcome) -> tuple[Array, Array]:
    """Return variance / Cramer-Rao bound and its standard error (3,).

    Against the efficient estimator on the same noise, 1 + (variance - its variance) / bound, which scatters much less
    than the plain ratio (a control variate).
    """
    ratio = np.full((2, len(WITH_BOUND)), np.nan)
    if cell.bound is None:
        return ratio[0], ratio[1]
    for k, name in enumerate(WITH_BOUND):
        value = outcome.figures[:, FIGURES.index(name), 0]
        good = np.isfinite(value)
        if good.sum() < 2:
            continue
        error, best = value[good] - value[good].mean(), outcome.efficient[good, k]
        share = (error**2 - (best - best.mean()) ** 2) / cell.bound[0][name] ** 2
        ratio[:, k] = 1.0 + share.sum() / (good.sum() - 1), share.std() / math.sqrt(good.sum())
    return ratio[0], ratio[1]


def outcomes(
    numbers: list[int], *, seed: int, records: int, processes: int, progress: Callable[[int, int], None]
) -> Iterator[tuple[int, Outcome]]:
    """Yield the outcome of each cell when all its records are done."""
    jobs = [(number, first) for number in numbers for first in range(0, records, _BATCH)]
    parts: dict[int, dict[int, Outcome]] = {number: {} for number in numbers}
    each = math.ceil(records / _BATCH)
    with ProcessPoolExecutor(processes) as pool:
        futures: dict[Any, tuple[int, int]] = {
            pool.submit(simulate, number, seed, first, min(first + _BATCH, records)): (number, first)
            for number, first in jobs
        }
        for done, future in enumerate(as_completed(futures), start=1):
            number, first = futures[future]
            parts[number][first] = future.result()
            progress(done, len(jobs))
            if len(parts[number]) == each:
                yield number, Outcome.joined([part for _, part in sorted(parts.pop(number).items())])
