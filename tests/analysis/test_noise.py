"""The noise of a record: white or coloured, how many rows are independent, the grid of its values."""

from __future__ import annotations

import json

import numpy as np
import pytest
from scipy.signal import lfilter
from simulated_records import Truth, unit_response

import loopfit
from loopfit.analysis.noise import Noise
from loopfit.report.text import page


def record_of(rows: int, rho: float, seed: int, grid: float = 0.0) -> loopfit.Analysis:
    """Analyse a step response over 14 s with noise of 0.02 rms whose neighbours correlate by rho."""
    t = np.linspace(-2.0, 12.0, rows)
    e = np.random.default_rng(seed).normal(size=rows) * np.sqrt(1.0 - rho**2)
    e[0] /= np.sqrt(1.0 - rho**2)
    y = 20.0 + unit_response(Truth(zeta=0.6, omega=1.0, dead_time=0.4), t) + 0.02 * lfilter([1.0], [1.0, -rho], e)
    y = np.round(y / grid) * grid if grid else y
    return loopfit.analyze(time=t - t[0], measurement=y, setpoint=np.where(t >= 0, 21.0, 20.0))


def noises(rows: int, rho: float) -> list[Noise]:
    return [record_of(rows, rho, seed).noise for seed in range(9)]


@pytest.mark.parametrize("rows", [240, 6000])
def test_white_noise_is_mostly_called_white(rows: int) -> None:
    """Akaike's criterion takes white noise for coloured about one time in six: of nine records, four at most (1 %)."""
    found = noises(rows, 0.0)
    assert sum(noise.colour == "coloured" for noise in found) <= 4
    # 1 / sqrt(rows compared), 500 pairs at most; a median of nine varies by 0.4 of that, three times it is allowed
    assert np.median([noise.correlation for noise in found]) == pytest.approx(0.0, abs=1.3 / np.sqrt(min(rows, 500)))
    assert all(noise.rows_per_independent == 1.0 and noise.order == 0 for noise in found if noise.colour == "white")


@pytest.mark.parametrize(("rows", "rho"), [(240, 0.5), (6000, 0.5), (6000, 0.8)])
def test_coloured_noise_counts_its_independent_rows(rows: int, rho: float) -> None:
    """(1 + rho) / (1 - rho) rows of a first-order autoregression tell a mean as well as one of white noise."""
    found = noises(rows, rho)
    assert all(noise.colour == "coloured" for noise in found)
    # less what the fit takes out of the residuals: 5 parameters in `rows / independent` rows
    assert np.median([noise.correlation for noise in found]) == pytest.approx(rho, abs=0.08)
    # a spectrum at its lowest frequency is told by some 150 bins to about 20 %, a median of nine to 10 %, twice it
    assert np.median([noise.rows_per_independent for noise in found]) == pytest.approx((1 + rho) / (1 - rho), rel=0.25)


def test_the_resolution_is_told_where_it_shows() -> None:
    assert record_of(1000, 0.0, 1, grid=0.01).noise.resolution == 0.01
    assert record_of(1000, 0.0, 1).noise.resolution is None


def test_document_and_page_say_it() -> None:
    analysis = record_of(240, 0.6, 2, grid=0.01)
    record = json.loads(analysis.to_json())["record"]
    noise = analysis.noise
    assert record["noise_rms"] == analysis.noise_rms == noise.rms
    assert record["noise_colour"] == "coloured"
    assert record["noise_correlation"] == noise.correlation
    assert record["noise_order"] == noise.order
    assert record["noise_rows_per_independent"] == noise.rows_per_independent
    assert record["resolution"] == 0.01
    (line,) = (row for row in page(analysis).split("\n\n") if "\nnoise " in row)
    assert f"neighbouring rows correlate {noise.correlation:.2f}" in " ".join(line.split())
    assert "resolution 0.01" in " ".join(line.split())
