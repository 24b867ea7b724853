"""Controllers and plants through python-control and back."""

from __future__ import annotations

import control
import numpy as np
import pytest

from loopfit.core.errors import UsageError
from loopfit.loop.gains import Gains
from loopfit.loop.interchange import (
    controller_to_control,
    gains_from_control,
    plant_from_control,
    plant_to_control,
    setpoint_path_to_control,
)
from loopfit.loop.plant import Plant

OMEGA = 1j * np.logspace(-3, 3, 200)
GAINS = [
    Gains(kp=2.0),
    Gains(kp=-2.0, ki=-0.3),
    Gains(kp=2.0, ki=0.3, setpoint_weight=0.0),
    Gains(kp=2.0, kd=3.0, filter_s=0.1),
    Gains(kp=2.0, kd=3.0, filter_s=0.1, setpoint_weight=0.0),
    Gains(kp=2.0, ki=0.3, kd=3.0, filter_s=0.1, setpoint_weight=0.7),
    Gains(kp=2.0, ki=0.3, kd=3.0, filter_s=0.1, setpoint_weight=0.7, derivative_on_error=True),
    Gains(kp=1.0, ki=0.5, kd=-0.2, filter_s=2.0),
    Gains(kp=0.0, ki=0.5),
    Gains(kp=0.0, ki=0.5, kd=2.0, filter_s=0.4),
]


@pytest.mark.parametrize("gains", GAINS)
def test_gains_there_and_back(gains: Gains) -> None:
    controller, path = controller_to_control(gains), setpoint_path_to_control(gains)
    derivative = gains.kd * OMEGA / (gains.filter_s * OMEGA + 1)
    written = gains.kp + gains.ki / OMEGA + derivative
    assert np.allclose(controller(OMEGA), written, rtol=1e-12, atol=0)
    setpoint = gains.setpoint_weight * gains.kp + gains.ki / OMEGA + gains.derivative_on_error * derivative
    assert np.allclose(path(OMEGA), setpoint, rtol=1e-12, atol=1e-15)
    found = gains_from_control(controller, path)
    for name in ("kp", "ki", "kd", "filter_s", "setpoint_weight"):
        assert getattr(found, name) == pytest.approx(getattr(gains, name), rel=1e-12, abs=1e-15), name
    assert found.derivative_on_error == gains.derivative_on_error


def test_controller_written_as_a_product() -> None:
    s = control.tf("s")
    series = 10 * (1 + 1 / (8 * s)) * (1 + 2 * s / (0.2 * s + 1))
    found = gains_from_control(series)
    # partial fractions by hand: K (1 + Td/Ti), K/Ti, K Td (1 - Tf/Ti)
    assert (found.kp, found.ki, found.kd, found.filter_s) == pytest.approx((12.5, 1.25, 19.5, 0.2), rel=1e-12)
    assert found.derivative_on_error, "one path for the error means the derivative on the error"
    filtered = (2 * s + 0.3) / (s * (0.5 * s + 1))  # a PI controller behind a filter is a PID of negative kd
    found = gains_from_control(filtered)
    assert np.allclose(controller_to_control(found)(OMEGA), filtered(OMEGA), rtol=1e-12, atol=0)
    assert gains_from_control(control.ss(series)).ki == pytest.approx(1.25, rel=1e-9)


def test_no_controller() -> None:
    s = control.tf("s")
    for system, text in (
        (1 / (s**2 + s + 1), "more than an integral and one filter"),
        (1 / s**2, "more than an integral and one filter"),
        (1 / (s - 1), "more than an integral and one filter"),
        (1 / (s * (s + 1) * (s + 2)), "more than an integral and one filter"),
        (1 + s, "no such system exists"),
        (control.tf([1.0], [1.0, 1.0], 0.1), "sampled"),
        (control.ss(np.eye(1), np.ones((1, 2)), np.ones((1, 1)), np.zeros((1, 2))), "more than one input"),
        (3.0, "a python-control system, not float"),
        (0 * s, "does nothing"),
    ):
        with pytest.raises(UsageError, match=text):
            gains_from_control(system)
    pid = controller_to_control(GAINS[5])
    for path in (
        controller_to_control(Gains(kp=2.0, ki=0.4)),
        controller_to_control(Gains(kp=2.0, ki=0.3, kd=1.0, filter_s=0.1)),
    ):
        with pytest.raises(UsageError, match="of this controller"):
            gains_from_control(pid, path)
    with pytest.raises(UsageError, match="of this controller"):
        gains_from_control(controller_to_control(Gains(kp=0.0, ki=0.5)), controller_to_control(Gains(kp=1.0, ki=0.5)))


PLANTS = [
    Plant(gain=2.0, time_constants_s=(8.0, 3.0), dead_time_s=1.5),
    Plant(gain=-0.5, damping_ratio=0.4, natural_frequency_rad_s=2.0, zero_s=-0.3),
    Plant(gain=0.1, time_constants_s=(4.0,), integrating=True, dead_time_s=0.5),
    Plant(gain=3.0, dead_time_s=2.0),
]


@pytest.mark.parametrize("plant", PLANTS)
def test_plants_there_and_back(plant: Plant) -> None:
    order = None if plant.dead_time_s == 0.0 else 6
    system = plant_to_control(plant, pade_order=order)
    slow = OMEGA[abs(OMEGA) * plant.dead_time_s < 1.0]
    # a sixth-order Pade approximation of e^-x is within 1e-12 of it up to |x| = 1: (6!)^2 / (12! 13!) = 1.7e-13
    assert np.allclose(system(slow), plant.transfer(slow), rtol=1e-11, atol=0)
    rational = control.tf(list(plant.numerator), list(plant.denominator))
    back = plant_from_control(rational, dead_time_s=plant.dead_time_s)
    assert np.allclose(back.transfer(OMEGA), plant.transfer(OMEGA), rtol=1e-12, atol=0)
    assert (back.gain, back.integrating) == (pytest.approx(plant.gain, rel=1e-12), plant.integrating)


def test_a_dead_time_is_not_dropped_in_silence() -> None:
    with pytest.raises(UsageError, match=r"dead time of 1.5 s: give pade_order"):
        plant_to_control(PLANTS[0])
    for order in (0, -1, 2.0, True):
        with pytest.raises(UsageError, match="pade_order is a whole number above 0"):
            plant_to_control(PLANTS[0], pade_order=order)  # type: ignore[arg-type]
    with pytest.raises(UsageError, match="dead time"):
        plant_from_control(control.tf([1.0], [1.0, 1.0]), dead_time_s=-1.0)
