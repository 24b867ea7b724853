"""The response to a recorded output by convolution, against the direct sum over its changes."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from loopfit.fit import convolution
from loopfit.fit.columns import Columns, Input
from loopfit.fit.samples import Samples, gather, rows_as_samples
from loopfit.model.chart import LAGS, SWING, Chart


def made(samples: Samples, time: np.ndarray, chart: Chart, rungs: tuple[int, ...]) -> Columns:
    sizes = np.random.default_rng(7).normal(size=time.size)
    return Columns(samples=samples, chart=chart, input=Input(times=time, sizes=sizes), rungs=rungs)


@pytest.mark.parametrize("chart", [LAGS, SWING])
@pytest.mark.parametrize("rungs", [(1,), (1, 0), (2,)])
@pytest.mark.parametrize("dead", [0.0, 0.731, 2.25])
def test_same_as_the_direct_sum(
    chart: Chart, rungs: tuple[int, ...], dead: float, monkeypatch: pytest.MonkeyPatch
) -> None:
    time = 3.0 + 0.5 * np.arange(200)
    theta = np.array([[1.3, 0.2, dead + 1e-6], [0.4, 0.05, dead + 1e-6]])
    fast = made(rows_as_samples(time, np.zeros(200)), time, chart, rungs)
    columns, slopes = fast.evaluate(theta)
    assert fast._recorded is not None
    monkeypatch.setattr(convolution, "_MANY", 10_000)
    direct = replace(fast)
    wanted, wanted_slopes = direct.evaluate(theta)
    assert direct._recorded is None
    # 1e-10 of the largest value: the rounding of a transform of 400 points is about 1e-15 of it
    for got, want in ((columns, wanted), (slopes, wanted_slopes)):
        assert np.abs(got - want).max() <= 1e-10 * np.abs(want).max()


def test_bins_are_averages_of_their_rows() -> None:
    time = 0.1 * np.arange(2000)
    values = np.random.default_rng(5).normal(size=2000)
    theta = np.array([[1.0, -1.0, 0.317]])
    binned = gather(time, values, 1.0, 13, even=True)
    assert binned.binned
    by_bins = made(binned, time, LAGS, (1,)).evaluate(theta)[0][0, 0] / binned.root_count
    by_rows = made(rows_as_samples(time, values), time, LAGS, (1,)).evaluate(theta)[0][0, 0]
    first = np.round(np.cumsum(binned.root_count**2) - binned.root_count**2).astype(int)
    for i in (0, 1, 57, first.size - 1):
        rows = by_rows[first[i] : first[i + 1] if i + 1 < first.size else None]
        assert by_bins[i] == pytest.approx(rows.mean(), rel=1e-9, abs=1e-12)


def test_changes_before_the_first_row_and_after_the_last() -> None:
    time = np.arange(100.0)
    changes = np.concatenate([np.arange(-20.0, 0.0), [50.0, 130.0]])
    sizes = np.random.default_rng(3).normal(size=changes.size)
    samples = rows_as_samples(time, np.zeros(100))
    theta = np.array([[2.0, -1.5, 1.4]])
    columns = Columns(samples=samples, chart=LAGS, input=Input(times=changes, sizes=sizes), rungs=(1,))
    total = sum(
        size
        * Columns(
            samples=samples, chart=LAGS, input=Input(times=np.array([at]), sizes=np.array([1.0])), rungs=(1,)
        ).evaluate(theta)[0][0, 0]
        for at, size in zip(changes, sizes, strict=True)
    )
    assert columns.evaluate(theta)[0][0, 0] == pytest.approx(total, abs=1e-10)


def test_derivatives_with_a_load_and_an_unknown_level() -> None:
    time = 0.5 * np.arange(120)
    sizes = np.random.default_rng(2).normal(size=120)
    columns = Columns(
        samples=rows_as_samples(time, np.zeros(120)),
        chart=LAGS,
        input=Input(times=time, sizes=sizes, unknown_from=0.0),
        rungs=(1,),
        free_from=0.0,
        load=True,
    )
    theta = np.array([0.9, -1.1, 0.83, 20.21])
    assert columns.moving_count == 5
    slopes = columns.evaluate(theta[None])[1][0]
    step = 1e-6
    for i in range(4):
        ends = [columns.evaluate((theta + sign * step * np.eye(4)[i])[None])[0][0, :5] for sign in (1, -1)]
        # central differences: error about step^2 times the third derivative, and rounding over the step
        assert slopes[i] == pytest.approx((ends[0] - ends[1]) / (2 * step), abs=1e-6), i
