"""The family that doubts the second order, against scipy's step response of the same transfer function."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.signal import TransferFunction, step

import loopfit
from loopfit.figures.sampled import sampled_figures
from loopfit.figures.unit_step import overshoot, rise_time, settling_time
from loopfit.fit.third_lag import third_order

X = np.linspace(0.0, 30.0, 301)


@pytest.mark.parametrize(("r", "beta"), [(0.3, 0.2), (0.1, 0.6), (1.0, 0.08), (5.0, 1.5), (0.01, 0.3)])
def test_third_order_response_is_that_of_its_transfer_function(r: float, beta: float) -> None:
    integral, response, slope = third_order(X[None], np.array([r]), np.array([beta / np.sqrt(r + 0.03)]))
    system = np.convolve([r, 1.0, 1.0], [beta, 1.0])
    assert response[0] == pytest.approx(step(TransferFunction([1.0], system), T=X)[1], abs=1e-9)
    assert slope[0] == pytest.approx(step(TransferFunction([1.0, 0.0], system), T=X)[1], abs=1e-9)
    fine = np.linspace(0.0, 30.0, 30001)
    truth = np.concatenate([[0.0], np.cumsum(0.5 * 1e-3 * (step(TransferFunction([1.0], system), T=fine)[1][1:] * 2))])
    assert integral[0, -1] == pytest.approx(truth[-1], abs=2e-3)  # rectangles of 0.001


@pytest.mark.parametrize("r", [0.1, 0.5, 3.0])
def test_figures_read_off_samples_are_the_exact_ones(r: float) -> None:
    x = np.linspace(0.0, 60.0, 60001)
    response = step(TransferFunction([1.0], [r, 1.0, 1.0]), T=x)[1]
    figures = sampled_figures(x, response[None], 0.02)
    assert figures["overshoot_percent"][0] == pytest.approx(100 * float(overshoot(r)), abs=1e-3)
    assert figures["rise_time_s"][0] == pytest.approx(float(rise_time(r)), abs=1e-4)
    assert figures["settling_time_s"][0] == pytest.approx(float(settling_time(r)), abs=1e-3)


def test_three_lags_widen_the_response_and_say_so() -> None:
    """1 / ((s + 1)(0.6 s + 1)(0.4 s + 1)), signal to noise 100: the true figures lie in the widened intervals."""
    system = TransferFunction([1.0], np.convolve([1.0, 1.0], np.convolve([0.6, 1.0], [0.4, 1.0])))
    time = np.linspace(-1.0, 12.0, 1000)
    fine = np.linspace(0.0, 40.0, 40001)
    truth = step(system, T=fine)[1]
    row = int(np.searchsorted(time, 0.0))
    rng = np.random.default_rng(7)
    measurement = np.interp(time - time[row], fine, truth, left=0.0) + rng.normal(0.0, 0.01, 1000)
    analysis = loopfit.analyze(time=time, measurement=measurement, output=(np.arange(1000) >= row).astype(float))
    exact = sampled_figures(fine, truth[None], 0.02)
    assert analysis.response is not None
    for name in ("rise_time_s", "settling_time_s", "delay_time_s"):
        found = getattr(analysis.response, name)
        assert found.low <= exact[name][0] <= found.high, name
