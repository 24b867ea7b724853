"""Equivalents of a loop: its way from setpoint to measurement, rational without dead time and exact with one."""

from __future__ import annotations

import json

import control
import numpy as np
import pytest

import loopfit

GAINS = loopfit.Gains(kp=1.5, ki=0.4)


def test_a_loop_without_dead_time_is_its_closed_transfer_function() -> None:
    """1/(1 + C G) by python-control, apart from this code."""
    loop = loopfit.Loop(loopfit.Plant(gain=2.0, time_constants_s=(5.0, 1.0)), GAINS)
    found = loopfit.equivalent(loop)
    closed = control.feedback(control.tf([1.5, 0.4], [1, 0]) * control.tf([2.0], [5.0, 6.0, 1.0]))
    assert np.sort_complex(found.system.poles) == pytest.approx(np.sort_complex(closed.poles()), rel=1e-9)
    assert found.system.zeros == pytest.approx(closed.zeros(), rel=1e-9)
    assert found.system.static_gain == pytest.approx(1.0, rel=1e-12)
    assert found.expression is not None
    assert found.best is not None
    assert loopfit.equivalent(loop.closed).to_json() == found.to_json()


def test_a_loop_with_dead_time_has_the_dominant_poles_of_its_characteristic_equation() -> None:
    plant = loopfit.Plant(gain=2.0, time_constants_s=(5.0, 1.0), dead_time_s=0.8)
    found = loopfit.equivalent(loopfit.Loop(plant, GAINS))
    dominant = found.equivalents[0]
    assert dominant.damping_ratio is not None
    assert dominant.natural_frequency_rad_s is not None
    zeta, wn = dominant.damping_ratio, dominant.natural_frequency_rad_s
    s = complex(-zeta * wn, wn * np.sqrt(1 - zeta**2))
    carried = (1.5 + 0.4 / s) * 2.0 * np.exp(-0.8 * s) / ((5 * s + 1) * (s + 1))
    assert abs(1.0 + carried) < 1e-8  # the law of a root, by hand
    assert found.adequate
    assert found.response.overshoot_percent is not None
    assert json.loads(found.to_json())["system"]["stable"] is True


def test_a_loop_has_its_own_dead_time() -> None:
    plant = loopfit.Plant(gain=2.0, time_constants_s=(5.0,), dead_time_s=0.8)
    with pytest.raises(loopfit.UsageError, match="its own dead time"):
        loopfit.equivalent(loopfit.Loop(plant, GAINS), dead_time_s=1.0)


@pytest.mark.parametrize("dead_time", [0.0, 0.8])
def test_of_a_sampled_loop_it_is_said_that_it_was_taken_as_continuous(dead_time: float) -> None:
    plant = loopfit.Plant(gain=2.0, time_constants_s=(5.0,), dead_time_s=dead_time)
    settings = loopfit.Settings(form="ideal", gain=1.0, integral_time_s=5.0, scan_s=0.25)
    found = loopfit.equivalent(loopfit.Loop(plant, settings))
    assert "scan interval of 0.25 s" in found.reasons[0]
    plain = loopfit.equivalent(loopfit.Loop(plant, settings.gains))
    assert plain.equivalents == found.equivalents
    assert not any("scan" in reason for reason in plain.reasons)
