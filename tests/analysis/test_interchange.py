"""A fitted model as a python-control system: its step response is the fitted curve."""

from __future__ import annotations

import control
import numpy as np
import pytest

import loopfit

TIME = np.linspace(-2.0, 18.0, 400)
STEP = np.where(TIME >= 0.0, 3.0, 1.0)


def record(dead_time: float) -> loopfit.Analysis:
    system = control.tf([2.0], [1.0, 0.8, 1.0])
    late = np.where(TIME >= dead_time, 2.0, 0.0)
    clean = control.forced_response(system, TIME - TIME[0], late).outputs
    noise = np.random.default_rng(7).normal(0.0, 0.02, TIME.size)
    return loopfit.analyze(time=TIME, measurement=5.0 + clean + noise, output=STEP)


def test_transfer_function_answers_like_the_fitted_curve() -> None:
    analysis = record(1.5)
    curve = analysis.curve
    assert curve is not None
    assert analysis.step is not None
    system = loopfit.to_control(analysis, pade_order=8)
    begin = float(analysis.step.time_s)
    after = np.linspace(0.0, 16.0, 801)
    response = control.step_response(system, after).outputs * 2.0 + curve.value[0]
    drawn = np.interp(begin + after, curve.time, curve.value)
    # an eighth-order Pade approximation of 1.5 s rings by under 2 % of the change near the dead time
    assert response[after > 3.0] == pytest.approx(drawn[after > 3.0], abs=0.04)


def test_a_dead_time_is_not_dropped_in_silence() -> None:
    with pytest.raises(loopfit.UsageError, match="dead time"):
        loopfit.to_control(record(1.5))


def test_a_release_has_no_transfer_function() -> None:
    after = TIME[TIME >= 0.0]
    swing = np.exp(-0.2 * after) * np.cos(after) + np.random.default_rng(7).normal(0.0, 0.01, after.size)
    with pytest.raises(loopfit.UsageError, match="only the model of a step test"):
        loopfit.to_control(loopfit.analyze(time=after, measurement=swing))
