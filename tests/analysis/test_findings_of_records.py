"""Findings that a review of simulated records asked for, each with a record that has it and one that has not."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.signal import TransferFunction, step

import loopfit

TIME = np.arange(400) * 0.1
ROW = 50
STEP = (np.arange(400) >= ROW).astype(float)
SINCE = np.maximum(TIME - TIME[ROW], 0.0)
RNG = 7


def noise(rms: float) -> np.ndarray:
    return np.random.default_rng(RNG).normal(0.0, rms, 400)


def response(num: list[float], den: list[float]) -> np.ndarray:
    """Unit step response by scipy."""
    fine = np.linspace(0.0, 40.0, 8001)
    return np.asarray(np.interp(SINCE, fine, step(TransferFunction(num, den), T=fine)[1]))


def codes(analysis: loopfit.Analysis) -> set[str]:
    return {finding.code for finding in analysis.findings}


GOOD = response([1.0], [1.0, 0.8, 1.0])


def test_a_growing_swing_around_a_step_is_instability_whatever_its_sign() -> None:
    swing = 0.05 * np.exp(0.1 * SINCE) * np.sin(SINCE)
    analysis = loopfit.analyze(time=TIME, measurement=STEP + swing + noise(0.01), setpoint=STEP)
    assert analysis.model is None
    assert analysis.refusal is not None
    assert "The oscillation grows" in analysis.refusal


@pytest.mark.parametrize("row", [150, 300])
def test_one_wrong_setpoint_cell_is_no_pulse(row: int) -> None:
    setpoint = STEP.copy()
    setpoint[row] = 10.0
    clean = loopfit.analyze(time=TIME, measurement=GOOD + noise(0.01), setpoint=STEP)
    spoilt = loopfit.analyze(time=TIME, measurement=GOOD + noise(0.01), setpoint=setpoint)
    assert "one_row_change" in codes(spoilt) - codes(clean)
    assert clean.model is not None
    assert spoilt.model is not None
    assert spoilt.model.damping_ratio == clean.model.damping_ratio


def test_a_drift_of_the_settled_tail_is_said() -> None:
    still = loopfit.analyze(time=TIME, measurement=GOOD + noise(0.01), output=STEP)
    drifting = loopfit.analyze(time=TIME, measurement=GOOD + 0.06 * TIME / TIME[-1] + noise(0.01), output=STEP)
    assert "drifting_tail" not in codes(still)
    assert {"drifting_tail", "moving_before_step"} & codes(drifting)


def test_a_clamp_that_begins_with_the_step_is_named() -> None:
    """A PI loop on two lags whose kick is cut at 1.1; small Euler steps between scans."""
    slow = fast = integral = 0.0
    measurement, output = np.zeros(400), np.zeros(400)
    for k in range(400):
        error = STEP[k] - fast
        integral += 0.2 * error
        output[k], measurement[k] = min(2.0 * error + integral, 1.1), fast
        for _ in range(10):
            slow += 0.01 * (output[k] - slow)
            fast += 0.01 * (slow - fast) / 0.3
    analysis = loopfit.analyze(time=TIME, measurement=measurement + noise(0.005), setpoint=STEP, output=output)
    assert "output_clamped" in codes(analysis)


def test_pure_dead_time_is_told_no_closer_than_the_rows() -> None:
    analysis = loopfit.analyze(time=TIME, measurement=2.0 * (TIME >= 8.25) + noise(0.01), output=STEP)
    model, figures = analysis.model, analysis.response
    assert model is not None
    assert model.kind == "dead_time"
    assert model.dead_time_s is not None
    assert model.dead_time_s.low <= 3.25 <= model.dead_time_s.high
    assert figures is not None
    assert figures.overshoot_percent == loopfit.Quantity(0.0, 0.0, 0.0)
    assert figures.settling_time_s == figures.delay_time_s == model.dead_time_s
    assert "false_first_rows" not in codes(analysis)


def test_a_case_is_not_taken_for_a_record() -> None:
    with pytest.raises(loopfit.RecordError, match="a case, not a record"):
        loopfit.analyze("plant.toml")


def test_a_stated_step_of_the_setpoint_is_one_of_the_setpoint() -> None:
    stated = {"step_at_s": float(TIME[ROW]), "step_from": 0.0, "step_to": 1.0}
    analysis = loopfit.analyze(time=TIME, measurement=GOOD + noise(0.01), setpoint=STEP, output=3.0 - GOOD, **stated)
    assert analysis.step is not None
    assert analysis.step.signal == "setpoint"
    with pytest.raises(loopfit.UsageError, match="not both"):
        loopfit.analyze(time=TIME, measurement=GOOD, setpoint=STEP, step=1, **stated)


def test_figures_with_a_zero_hold_the_truth_as_often_as_they_say() -> None:
    """(4 s + 2) / (10 s^2 + 6 s + 2), a PI loop on a lag; 30 records, noise 0.01, truth from scipy on a fine grid."""
    fine = np.linspace(0.0, 60.0, 60001)
    exact = step(TransferFunction([4.0, 2.0], [10.0, 6.0, 2.0]), T=fine)[1]
    rise = fine[np.argmax(exact >= 0.9)] - fine[np.argmax(exact >= 0.1)]
    over = 100.0 * (exact.max() - 1.0)
    clean = np.interp(SINCE, fine, exact)
    held = {"rise": 0, "over": 0}
    for seed in range(30):
        measurement = clean + np.random.default_rng(seed).normal(0.0, 0.01, 400)
        figures = loopfit.analyze(time=TIME, measurement=measurement, setpoint=STEP).response
        assert figures is not None
        assert figures.rise_time_s is not None
        assert figures.overshoot_percent is not None
        held["rise"] += figures.rise_time_s.low - 2e-3 <= rise <= figures.rise_time_s.high + 2e-3
        held["over"] += figures.overshoot_percent.low <= over <= figures.overshoot_percent.high
    assert min(held.values()) >= 25, held  # binomial at 95 %: fewer than 25 of 30 in 0.3 % of studies


@pytest.mark.parametrize("zeta", [1.5, 3.0])
def test_an_overdamped_release_is_bounded_honestly(zeta: float) -> None:
    root = np.sqrt(zeta**2 - 1.0)
    slow, fast = zeta + root, zeta - root
    time = np.arange(400) * 0.06
    clean = (slow * np.exp(-time * fast) - fast * np.exp(-time * slow)) / (slow - fast)
    held = 0
    for seed in range(20):
        model = loopfit.analyze(time=time, measurement=clean + np.random.default_rng(seed).normal(0.0, 0.02, 400)).model
        assert model is not None
        assert model.damping_ratio is not None
        assert model.damping_ratio.low < model.damping_ratio.high
        held += model.damping_ratio.low <= zeta <= model.damping_ratio.high
    assert held >= 16  # binomial at 95 %: fewer than 16 of 20 in 0.3 % of studies
