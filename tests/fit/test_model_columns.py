"""Columns of a model and their derivatives: rows and bin averages, in both charts."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from loopfit.core.arrays import Array
from loopfit.fit.columns import Columns, Input
from loopfit.fit.samples import Samples, gather, rows_as_samples
from loopfit.fit.separable import solve_linear
from loopfit.model.chart import LAGS, SWING, Chart

RNG = np.random.default_rng(12)
EVEN = np.linspace(0.0, 30.0, 901)
UNEVEN = np.sort(RNG.uniform(0.0, 30.0, 9000))
STAIRS = Input(times=np.array([3.0, 11.0, 12.5]), sizes=np.array([1.0, -0.4, 2.0]))
# dead time put so that no response begins within a row's interval of a row or an edge: there the derivatives jump
THETA = {
    "lags": np.array([[0.4, -1.2, 0.7111], [0.1, -0.2, 1.3111]]),
    "swing": np.array([[0.2, 0.3, 0.7111], [0.0, -0.02, 0.2]]),
}


def samples(kind: str) -> Samples:
    if kind == "rows":
        return rows_as_samples(EVEN[::5], np.zeros(EVEN[::5].size))
    if kind == "even bins":
        return gather(EVEN, np.zeros(EVEN.size), 0.19, 90, even=True)
    return gather(UNEVEN, np.zeros(UNEVEN.size), 0.19, 0, even=False)


def columns(kind: str, chart: Chart, rungs: tuple[int, ...], *, moving: bool = False) -> Columns:
    return Columns(samples=samples(kind), chart=chart, input=STAIRS, rungs=rungs, free_from=0.0 if moving else None)


@pytest.mark.parametrize("kind", ["rows", "even bins", "uneven bins"])
@pytest.mark.parametrize("rungs", [(1,), (1, 0), (2,)])
@pytest.mark.parametrize("chart", [LAGS, SWING], ids=lambda chart: chart.name)
def test_derivatives(chart: Chart, rungs: tuple[int, ...], kind: str) -> None:
    """Against differences of sixth order; samples within two steps of where a response begins are left out."""
    model = columns(kind, chart, rungs, moving=True)
    assert model.samples.binned == (kind != "rows")
    for theta in THETA[chart.name]:
        _, slopes = model.evaluate(theta[None])
        h = 1e-3
        begins = STAIRS.times + theta[2]
        reach = 5 * h + (np.max(model.samples.widths) if model.samples.binned else 0.0)
        clear = np.all(np.abs(model.samples.centres[:, None] - begins) > reach, axis=1)
        assert clear.mean() > 0.9
        for coordinate in range(3):
            step = h * np.eye(3)[coordinate]

            def moved(times: int, step: Array = step, theta: Array = theta) -> Array:
                whole, _ = model.evaluate((theta + times * step)[None], derivatives=False)
                out: Array = whole[0, : model.moving_count]
                return out

            numeric = (45 * (moved(1) - moved(-1)) - 9 * (moved(2) - moved(-2)) + (moved(3) - moved(-3))) / (60 * h)
            # rounding: eps / h times values of up to 1e3 (root of the count times a ramp); truncation h^6 / 140
            scale = 1.0 + np.max(np.abs(numeric))
            # the derivatives of bins leave out that of the midpoint's correction, (row interval / time scale)^2 / 24
            # times a third derivative of up to 1 / r^2, 14 and 40 times the first
            left_out = 2.0 * (model.samples.row_interval / chart.scale(theta[None])[0]) ** 2
            assert np.max(np.abs(slopes[0, coordinate] - numeric)[:, clear]) < (1e-9 + left_out) * scale, coordinate


@pytest.mark.parametrize("rungs", [(1,), (1, 0), (2,)])
@pytest.mark.parametrize("chart", [LAGS, SWING], ids=lambda chart: chart.name)
def test_bins_are_averages_of_rows(chart: Chart, rungs: tuple[int, ...]) -> None:
    """The model's value of a bin is the mean of its values at the rows in it (midpoint rule with its correction).

    What is left is of fourth order in the row interval, 0.0333 s, where the response is smooth, and of second where
    one begins in the bin.
    """
    binned = columns("even bins", chart, rungs)
    rows = replace(binned, samples=rows_as_samples(EVEN, np.zeros(EVEN.size)))
    theta = THETA[chart.name]
    values, _ = binned.evaluate(theta, derivatives=False)
    fine, _ = rows.evaluate(theta, derivatives=False)
    count = np.round(binned.samples.root_count**2).astype(int)
    starts = np.concatenate([[0], np.cumsum(count)[:-1]])
    means = np.add.reduceat(fine, starts, axis=2) / count
    error = np.abs(values / binned.samples.root_count - means)
    for i, at in enumerate(theta):
        begins = STAIRS.times + at[2]
        smooth = np.all(np.abs(binned.samples.centres[:, None] - begins) > np.max(binned.samples.widths), axis=1)
        interval = EVEN[1] - EVEN[0]
        assert np.max(error[i][:, smooth]) < 10 * interval**4
        assert np.max(error[i]) < 5 * interval  # rung 0 itself jumps in slope, rung 1 has a corner


def test_uneven_bins_are_averages_of_their_rows() -> None:
    """60 rows in each bin, at random: their mean is met to the spread of a mean of random rows, squared and beyond."""
    binned = columns("uneven bins", LAGS, (1,))
    rows = replace(binned, samples=rows_as_samples(UNEVEN, np.zeros(UNEVEN.size)))
    values, _ = binned.evaluate(THETA["lags"], derivatives=False)
    fine, _ = rows.evaluate(THETA["lags"], derivatives=False)
    count = np.round(binned.samples.root_count**2).astype(int)
    means = np.add.reduceat(fine, np.concatenate([[0], np.cumsum(count)[:-1]]), axis=2) / count
    error = np.abs(values / binned.samples.root_count - means)[:, 0]
    # equal mean and spread leave the third moment: at most width^3 / 12 times the third derivative, below 2 here;
    # where a response begins, width^2 / 8 times the jump of its bend, below 4
    width = float(np.max(binned.samples.widths))
    assert float(np.median(error)) < width**3
    assert float(np.max(error)) < width**2


def test_repeated_and_empty_columns_get_nothing() -> None:
    """A column that is empty, or a copy, must not spoil the others: normal equations on the rest (numpy's lstsq)."""
    t = np.linspace(0.0, 1.0, 50)
    target = 3.0 + 2.0 * t + np.sin(9.0 * t)
    wanted = np.linalg.lstsq(np.stack([np.ones(50), t], axis=1), target, rcond=None)
    for extra in (np.zeros(50), t):
        found = solve_linear(np.stack([np.ones(50), t, extra])[None], target)
        assert found.linear[0, 2] == pytest.approx(0.0, abs=1e-12)
        assert found.linear[0, :2] == pytest.approx(wanted[0], rel=1e-12)
        assert found.sse[0] == pytest.approx(wanted[1][0], rel=1e-12)
