"""Settings as they are keyed in: what a controller has is kept, what it has not is not invented."""

from __future__ import annotations

import pytest

from loopfit.loop.gains import Gains
from loopfit.loop.settings import Settings
from loopfit.tuning.entered import entered


@pytest.mark.parametrize("digits", [2, 3, 5])
def test_rounding_is_that_of_the_screen(digits: int) -> None:
    shown, keyed = entered(Gains(kp=1.23456, ki=0.0345678), Settings("ideal", gain=2.0, integral_time_s=30.0), digits)
    assert f"{shown.gain:.{digits}g}" == f"{1.23456:.{digits}g}"
    assert keyed == shown.gains
    assert keyed.kp == pytest.approx(1.23456, rel=0.5 * 10.0 ** (1 - digits))


def test_a_setpoint_weight_that_the_controller_has_is_proposed() -> None:
    like = Settings("ideal", gain=2.0, integral_time_s=30.0, setpoint_weight=0.0)
    shown, keyed = entered(Gains(kp=1.0, ki=0.1, setpoint_weight=0.7), like, None)
    assert shown.setpoint_weight == pytest.approx(0.7)
    assert keyed.setpoint_weight == pytest.approx(0.7)


def test_a_setpoint_weight_that_the_controller_lacks_is_not() -> None:
    like = Settings("ideal", gain=2.0, integral_time_s=30.0)
    shown, keyed = entered(Gains(kp=1.0, ki=0.1, setpoint_weight=0.7), like, None)
    assert shown.setpoint_weight is None
    assert keyed.setpoint_weight == 1.0


def test_form_units_and_action_are_kept() -> None:
    """Seborg, Edgar and Mellichamp write a direct-acting controller with a negative gain; its screen shows magnitudes."""
    like = Settings.from_entry("ideal", proportional_band_percent=50.0, integral="2 min", action="direct",
                               measurement_range=(0.0, 200.0), output_range=(0.0, 100.0))  # fmt: skip
    shown, keyed = entered(Gains(kp=-1.0, ki=-0.02), like, 4)
    assert shown.proportional_band_percent == pytest.approx(50.0)  # 1 %/unit is 2 %/% over 200 units
    assert shown.action == "direct"
    assert shown.as_entered()["integral_time_min"] == pytest.approx(50.0 / 60.0, rel=1e-3)
    assert keyed.kp == pytest.approx(-1.0)
