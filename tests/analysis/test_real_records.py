"""Ten real recordings and what an honest analysis says of each.

Sources and licences: tests/data/real. The expected ranges come from careful fits made apart from loopfit and from
nameplates, rod stiffness and gains stated in the repositories, widened by judgement.
"""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest

import loopfit

REAL = Path(__file__).parents[1] / "data" / "real"
STATED = {"step_at_s": 0.0, "step_from": 0.0, "step_to": 50.0}


def analyze(name: str, **options: Any) -> loopfit.Analysis:
    return loopfit.analyze(REAL / name, **options)


def codes(analysis: loopfit.Analysis, severity: str = "warning") -> set[str]:
    return {finding.code for finding in analysis.findings if finding.severity == severity}


def assert_in(quantity: loopfit.Quantity | None, low: float, high: float) -> None:
    assert quantity is not None
    assert low <= quantity.value <= high


def test_motor_with_two_false_rows_is_not_taken_for_ringing() -> None:
    analysis = analyze("r03.csv")
    assert "false_first_rows" in codes(analysis)
    assert "step_at_end" in codes(analysis, "note")
    model = analysis.model
    assert model is not None
    assert_in(model.gain, 1.22, 1.31)
    assert model.damping_ratio is not None
    assert model.damping_ratio.low >= 0.8
    assert model.time_constants_s is not None
    assert_in(model.time_constants_s[0], 0.055, 0.22)


def test_seismometer_decay_fits_once_the_hand_has_left() -> None:
    analysis = analyze("r04.txt", window_s=(8.0, 52.6))
    assert codes(analysis) == set()
    assert analysis.model is not None
    assert analysis.model.adequate
    assert_in(analysis.model.damping_ratio, 0.105, 0.125)
    assert_in(analysis.model.natural_frequency_rad_s, 0.70, 0.73)


def test_seismometer_with_the_hand_in_it_is_doubted() -> None:
    model = analyze("r04.txt").model
    assert model is not None
    assert not model.adequate


@pytest.mark.parametrize("name", ["r06.txt", "r15.txt"])
def test_a_push_and_a_noise_watch_are_refused(name: str) -> None:
    analysis = analyze(name)
    assert analysis.model is None
    assert codes(analysis, "error")
    assert analysis.refusal is not None


def test_torsion_rod_decay_has_the_damping_of_its_careful_fit() -> None:
    analysis = analyze("r07.csv")
    assert codes(analysis) == set()
    model = analysis.model
    assert model is not None
    assert_in(model.damping_ratio, 0.0148, 0.0157)
    assert_in(model.natural_frequency_rad_s, 14.86, 14.97)
    # rod stiffness 11.70 N m/rad and the inertia between m R^2 / 4 and m R^2 / 2
    assert_in(model.natural_frequency_rad_s, 11.56, 16.36)


def test_second_heater_in_the_window_is_named_and_the_constant_setpoint_is_not_the_input() -> None:
    analysis = analyze("r12.txt", window_s=(0.0, 200.0))
    assert {"record_too_short", "other_input_moved"} <= codes(analysis)
    assert analysis.step is not None
    assert analysis.step.signal == "output"
    assert analysis.record.output is not None
    assert analysis.record.output.name == "Heater 1 (%)"
    assert analysis.model is not None
    assert_in(analysis.model.gain, 0.38, 0.75)


def test_heater_whose_step_is_not_in_the_record_asks_for_it() -> None:
    with pytest.raises(loopfit.RecordError, match="no step in the output; state where it began with --step-at"):
        analyze("r13.csv")


def test_heater_with_its_step_stated_fits() -> None:
    analysis = analyze("r13.csv", **STATED)
    assert codes(analysis) == set()
    model = analysis.model
    assert model is not None
    assert model.adequate
    assert_in(model.gain, 0.84, 0.86)
    assert_in(model.damping_ratio, 1.25, 1.50)
    assert_in(model.dead_time_s, 0.0, 4.0)
    assert_in(model.lag_plus_dead_time_s, 165.0, 182.0)
    assert model.time_constants_s is not None
    assert_in(model.time_constants_s[0], 135.0, 158.0)


def test_rate_loop_damping_is_only_bounded_below() -> None:
    analysis = analyze("r17.csv", interval_s=0.1, window_s=(130.6, 149.5))
    assert codes(analysis) == set()
    model = analysis.model
    assert model is not None
    assert_in(model.gain, 0.99, 1.03)
    assert model.damping_ratio is not None
    assert model.damping_ratio.low >= 1.3
    assert model.damping_ratio.high == float("inf")
    assert model.time_constants_s is not None
    assert_in(model.time_constants_s[0], 2.2, 2.8)
    assert_in(model.lag_plus_dead_time_s, 2.3, 2.9)


def test_rate_loop_with_all_its_steps_is_warned_of() -> None:
    analysis = analyze("r17.csv", interval_s=0.1)
    assert len(analysis.steps) == len(analysis.per_step) == 8
    assert "depends_on_step" in codes(analysis)


def test_angle_loop_with_a_drifting_standing_error_is_warned_of() -> None:
    analysis = analyze("r18.csv", interval_s=0.1, window_s=(61.0, 90.0))
    assert "shaped_residual" in codes(analysis)
    model = analysis.model
    assert model is not None
    assert_in(model.gain, 1.0, 1.2)
    assert model.time_constants_s is not None
    assert_in(model.time_constants_s[0], 1.3, 2.8)


def test_a_steady_sine_is_refused() -> None:
    assert analyze("r20.csv").model is None
