"""The family that doubts the second order, against scipy's step response of the same transfer function."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.optimize import least_squares
from scipy.signal import TransferFunction, step
from scipy.special import gammainc

import loopfit
from loopfit.figures.sampled import sampled_figures
from loopfit.figures.unit_step import overshoot, rise_time, settling_time
from loopfit.fit.third_figures import third_figures
from loopfit.fit.third_lag import third_order

X = np.linspace(0.0, 30.0, 301)


@pytest.mark.parametrize(("r", "beta"), [(0.3, 0.2), (0.1, 0.6), (1.0, 0.08), (5.0, 1.5), (0.01, 0.3)])
def test_third_order_response_is_that_of_its_transfer_function(r: float, beta: float) -> None:
    rungs = third_order(X[None], np.array([r]), np.array([beta / np.sqrt(r + 0.03)]), 2, lowest=0)
    integral, response, slope = (rungs[k][0] for k in (2, 1, 0))
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


@pytest.mark.parametrize("highest", [1, 2])
def test_derivatives_of_the_rungs_are_those_of_central_differences(highest: int) -> None:
    """In the second coordinate log(r + 0.03) and in the logarithm of the third lag; differences of 1e-6 err by 1e-9."""
    rng = np.random.default_rng(3)
    x = np.linspace(-0.5, 8.0, 60)[None]

    def rungs(u: float, v: float) -> dict[int, tuple[np.ndarray, ...]]:
        return third_order(x, np.exp([u]) - 0.03, np.exp([v]), highest)

    for u, v in zip(rng.uniform(np.log(0.04), 2.0, 50), rng.uniform(-3.0, 2.0, 50), strict=True):
        here = rungs(u, v)
        for k in (highest - 1, highest):
            for part, (up, down) in (
                (1, (rungs(u + 1e-6, v), rungs(u - 1e-6, v))),
                (2, (rungs(u, v + 1e-6), rungs(u, v - 1e-6))),
            ):
                slope = (up[k][0] - down[k][0]) / 2e-6
                assert here[k][part] == pytest.approx(slope, rel=1e-3, abs=1e-4), (u, v, k, part)


def test_gradients_of_the_figures_are_those_of_central_differences() -> None:
    """Figures are read off 320 samples and one step of Newton's: differences of 1e-3 scatter by a few per cent."""
    rng = np.random.default_rng(4)
    for _ in range(40):
        point = np.array(
            [0.0, rng.uniform(-2.0, 0.5), rng.uniform(0, 0.5), rng.uniform(-2.0, 0.5), 2.0, rng.uniform(-0.5, 1.0)]
        )
        figures, gradients = third_figures(point[None], 8.0, 0.02, gradients=True)
        for j, unit in enumerate(np.eye(6)):
            up, down = (third_figures((point + h * unit)[None], 8.0, 0.02, gradients=False)[0] for h in (1e-3, -1e-3))
            for name in ("rise_time_s", "delay_time_s", "overshoot_percent"):
                slope = (up[name][0] - down[name][0]) / 2e-3
                if figures["overshoot_percent"][0] < 0.1 and name == "overshoot_percent":
                    continue
                assert gradients[name][0, j] == pytest.approx(slope, rel=0.05, abs=0.02), (name, j, point)


@pytest.mark.parametrize("count", [3, 5])
@pytest.mark.parametrize("noise", [0.0, 1e-4])
def test_nearly_noise_free_record_of_many_lags_is_no_ringing_loop(count: int, noise: float) -> None:
    """Equal lags never overshoot (incomplete gamma function): what a second order cannot follow is not coloured noise."""
    time = np.arange(-20.0, 60.0, 0.2)
    values = gammainc(count, np.maximum(time, 0.0)) + noise * np.random.default_rng(1).standard_normal(time.size)
    analysis = loopfit.analyze(time=time, measurement=values, output=(time >= 0).astype(float))
    assert analysis.response is not None
    assert analysis.response.overshoot_percent.low == 0.0
    assert analysis.response.overshoot_percent.value < 3.0

    def left(p: np.ndarray) -> np.ndarray:
        late = np.maximum(time - p[3], 0.0)
        swing = p[2] * np.sqrt(1.0 - p[1] ** 2 + 0j)
        response = 1.0 - np.exp(-p[1] * p[2] * late) * (
            np.cos(swing * late) + p[1] * p[2] * np.sin(swing * late) / swing
        )
        return p[0] * response.real + p[4] - values

    nearest = least_squares(left, [1.0, 0.85, 2.0 / count, 0.3 * count, 0.0], xtol=1e-12, ftol=1e-12).x
    assert analysis.model.damping_ratio.value == pytest.approx(nearest[1], rel=1e-3)
    assert "beyond_second_order" in {finding.code for finding in analysis.findings}
