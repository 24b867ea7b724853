"""Published rules against the settings and margins printed with them."""

from __future__ import annotations

import math

import pytest

from loopfit.core.errors import UsageError
from loopfit.loop.gains import Gains
from loopfit.loop.margins import margins_of
from loopfit.loop.plant import Plant
from loopfit.loop.settings import Settings
from loopfit.model.transfer import transfer_of
from loopfit.tuning.rules import (
    SOURCES,
    compared,
    lambda_pi,
    lambda_pi_integrating,
    lambda_pid,
    simc_double_integrating,
    simc_pi,
    simc_pid,
    ultimate_of,
    ultimate_p,
    ultimate_pi,
    ultimate_pid,
)

# simc: Skogestad, J. Process Control 13, 2003, table of examples E1 to E15, from memory
SEBORG = "Seborg, Edgar and Mellichamp, Process Dynamics and Control, 3rd ed. 2010, example 12.1, from memory"


def printed(value: float | None, text: str) -> None:
    """Assert that a value rounds to the printed figure."""
    digits = len(text.partition(".")[2])
    assert value == pytest.approx(float(text), rel=0.0, abs=0.5000001 * 10.0**-digits)


@pytest.mark.parametrize(
    ("gain", "lag", "dead_time", "kc", "ti"),
    [
        (1.0, 1.1, 0.1, "5.5", "0.8"),  # E1
        (1.0, 2.5, 1.47, "0.85", "2.5"),  # E2
        (1.5, 1.05, 0.15, "2.33", "1.05"),  # E3
        (1.0, 1.5, 2.5, "0.30", "1.5"),  # E4
        (1.0, 1.1, 0.148, "3.72", "1.1"),  # E5
        (1.0, 1.5, 1.5, "0.50", "1.5"),  # E9
        (1.0, 21.0, 2.0, "5.25", "16"),  # E10
        (1.0, 7.0, 5.0, "0.70", "7.0"),  # E11
        (0.625, 4.5, 1.25, "2.88", "4.5"),  # E13
        (1.0, 1.0, 1.0, "0.50", "1.0"),  # E15
    ],
)
def test_simc_pi_as_printed(gain: float, lag: float, dead_time: float, kc: str, ti: str) -> None:
    settings = simc_pi(gain, lag, dead_time)
    printed(settings.gain, kc)
    printed(settings.integral_time_s, ti)


@pytest.mark.parametrize(("dead_time", "kc", "ti"), [(1.688, "0.296", "13.5"), (2.0, "0.25", "16")])  # E6, E8
def test_simc_pi_of_an_integrating_plant_as_printed(dead_time: float, kc: str, ti: str) -> None:
    settings = simc_pi(1.0, 0.0, dead_time, integrating=True)
    printed(settings.gain, kc)
    printed(settings.integral_time_s, ti)


@pytest.mark.parametrize(
    ("lags", "dead_time", "integrating", "kc", "ti", "td"),
    [
        ((2.0, 1.2), 0.77, False, "1.30", "2.0", "1.2"),  # E2
        ((1.5, 1.0), 1.5, False, "0.50", "1.5", "1.0"),  # E4
        ((1.0, 0.22), 0.028, False, "17.9", "0.224", "0.22"),  # E5
        ((0.0, 1.33), 0.358, True, "1.40", "2.86", "1.33"),  # E6
        ((1.0, 1.5), 2.5, False, "0.30", "1.5", "1.0"),  # E7: the larger lag is the first
        ((0.0, 1.5), 0.5, True, "1.00", "4.0", "1.5"),  # E8
        ((1.0, 1.0), 1.0, False, "0.50", "1.0", "1.0"),  # E9
        ((20.0, 2.0), 1.0, False, "10.0", "8.0", "2.0"),  # E10
        ((6.0, 3.0), 3.0, False, "1.00", "6.0", "3.0"),  # E11
    ],
)
def test_simc_pid_as_printed(
    lags: tuple[float, float], dead_time: float, integrating: bool, kc: str, ti: str, td: str
) -> None:
    settings = simc_pid(1.0, lags, dead_time, integrating=integrating)
    assert settings.form == "series"
    printed(settings.gain, kc)
    printed(settings.integral_time_s, ti)
    printed(settings.derivative_time_s, td)


def test_simc_of_a_double_integration_as_printed() -> None:
    # Kc 1 / (16 theta^2), Ti = Td = 8 theta: Skogestad (2003), from memory
    settings = simc_double_integrating(1.0, 1.0)
    printed(settings.gain, "0.0625")
    printed(settings.integral_time_s, "8")
    printed(settings.derivative_time_s, "8")


def test_simc_margins_as_printed() -> None:
    """Skogestad (2003), table 1, closed-loop time equal to the dead time, from memory."""
    lag = margins_of(Plant(gain=1.0, time_constants_s=(5.0,), dead_time_s=1.0), simc_pi(1.0, 5.0, 1.0).gains)
    integrating = margins_of(
        Plant(gain=1.0, integrating=True, dead_time_s=1.0), simc_pi(1.0, 0.0, 1.0, integrating=True).gains
    )
    for margins, gain, phase, sensitivity in ((lag, "3.14", "61.4", "1.59"), (integrating, "2.96", "46.9", "1.70")):
        printed(margins.gain_margin, gain)
        printed(margins.phase_margin_deg, phase)
        printed(margins.max_sensitivity, sensitivity)


def test_simc_sensitivity_of_examples_as_printed() -> None:
    """E1, E9 with PI: Skogestad (2003), from memory. The process itself, not the model that the settings come from."""
    first = Plant(gain=1.0, time_constants_s=(1.0, 0.2))
    ninth = Plant(gain=1.0, time_constants_s=(1.0, 1.0), dead_time_s=1.0)
    printed(margins_of(first, simc_pi(1.0, 1.1, 0.1).gains).max_sensitivity, "1.56")
    printed(margins_of(ninth, simc_pi(1.0, 1.5, 1.5).gains).max_sensitivity, "1.61")


@pytest.mark.parametrize(
    ("gain", "closed_loop", "kc"),
    [(2.0, 1.0, "3.75"), (2.0, 3.0, "1.88"), (2.0, 10.0, "0.682"), (0.9, 1.0, "8.33"), (0.9, 3.0, "4.17")],
)
def test_direct_synthesis_as_printed(gain: float, closed_loop: float, kc: str) -> None:
    """2 exp(-s) / ((10 s + 1) (5 s + 1)), the model's gain also taken as 0.9: Seborg et al., example 12.1."""
    settings = lambda_pid(gain, 15.0 / (2.0 * math.sqrt(50.0)), 1.0 / math.sqrt(50.0), 1.0, closed_loop)
    assert settings.form == "ideal", SEBORG
    printed(settings.gain, kc)
    printed(settings.integral_time_s, "15")
    printed(settings.derivative_time_s, "3.33")


def test_an_oscillating_plant_gives_settings_without_series_form() -> None:
    # zeta 0.6, t 3, k 2, th 0.5, tc 1: Rivera, Morari and Skogestad (1986), from memory
    settings = lambda_pid(2.0, 0.6, 1.0 / 3.0, 0.5, 1.0)
    printed(settings.gain, "1.2")
    printed(settings.integral_time_s, "3.6")
    printed(settings.derivative_time_s, "2.5")
    with pytest.raises(UsageError):
        Settings.from_gains(settings.gains, form="series")


@pytest.mark.parametrize(
    ("closed_loop", "kc", "ti", "sensitivity"),
    [(1.0, "0.75", "3", 3.291772), (2.0, "0.5556", "5", 1.953825), (3.0, "0.4375", "7", 1.612762), (5.0, "0.3056", "11", 1.361753)],
)  # fmt: skip
def test_lambda_on_an_integration(closed_loop: float, kc: str, ti: str, sensitivity: float) -> None:
    """Chien and Fruehauf (1990), from memory; sensitivities on a dense grid by another program, six decimals."""
    settings = lambda_pi_integrating(1.0, 1.0, closed_loop)
    printed(settings.gain, kc)
    printed(settings.integral_time_s, ti)
    margins = margins_of(Plant(gain=1.0, integrating=True, dead_time_s=1.0), settings.gains)
    assert margins.max_sensitivity == pytest.approx(sensitivity, abs=1e-6)


def test_lambda_cancels_the_lag_so_the_loop_is_a_delayed_integration() -> None:
    # open loop exp(-th s) / ((tc + th) s): phase margin 90 - 57.3 th / (tc + th) degrees, by hand
    plant = Plant(gain=3.0, time_constants_s=(4.0,), dead_time_s=1.0)
    margins = margins_of(plant, lambda_pi(3.0, 4.0, 1.0, 2.0).gains)
    assert margins.phase_margin_deg == pytest.approx(90.0 - math.degrees(1.0 / 3.0), abs=1e-6)
    assert margins.gain_margin == pytest.approx(math.pi / 2.0 * 3.0, rel=1e-9)


def test_ultimate_gain_and_rule_of_three_lags() -> None:
    """1 / (s + 1)^3 has Ku = 8, Pu = 2 pi / sqrt(3), by hand.

    Printed with it (Astrom and Hagglund, PID Controllers, 2nd ed. 1995, from memory): K 4.8, Ti 1.81, Td 0.44. The
    last disagrees with the rule that it illustrates: Pu / 8 = 0.453.
    """
    found = ultimate_of(Plant(gain=1.0, time_constants_s=(1.0, 1.0, 1.0)))
    assert found == pytest.approx((8.0, 2.0 * math.pi / math.sqrt(3.0)), rel=1e-8)
    assert found is not None
    pid = ultimate_pid(*found)
    printed(pid.gain, "4.8")
    printed(pid.integral_time_s, "1.81")
    assert pid.derivative_time_s == pytest.approx(2.0 * math.pi / math.sqrt(3.0) / 8.0, rel=1e-8)
    assert abs(pid.derivative_time_s - 0.44) > 0.01  # the printed figure does not follow from the rule
    assert ultimate_p(found[0]).gain == pytest.approx(4.0, rel=1e-8)
    pi = ultimate_pi(*found)
    assert (pi.gain, pi.integral_time_s) == pytest.approx((3.6, 2.0 * math.pi / math.sqrt(3.0) / 1.2), rel=1e-8)


def test_ultimate_gain_of_a_delayed_integration() -> None:
    # k exp(-th s) / s: Ku = pi / (2 k th), Pu = 4 th, by hand; a negative gain asks for a negative one
    found = ultimate_of(Plant(gain=-2.0, integrating=True, dead_time_s=3.0))
    assert found == pytest.approx((-math.pi / 12.0, 12.0), rel=1e-8)


def test_no_ultimate_gain_without_a_limit_of_stability() -> None:
    assert ultimate_of(Plant(gain=1.0, time_constants_s=(1.0, 0.2))) is None


def test_compared_gives_what_is_defined() -> None:
    lags = Plant(gain=2.0, time_constants_s=(5.0, 1.0), dead_time_s=1.0)
    assert set(compared(lags)) == set(SOURCES)
    assert set(compared(Plant(gain=2.0, damping_ratio=0.3, natural_frequency_rad_s=1.0, dead_time_s=1.0))) == {
        "lambda_pid", "ultimate_pi", "ultimate_pid",
    }  # fmt: skip
    assert set(compared(Plant(gain=2.0, time_constants_s=(1.0,)))) == set()
    integrating = compared(Plant(gain=1.0, time_constants_s=(1.0,), integrating=True, dead_time_s=1.0))
    assert set(integrating) == set(SOURCES) - {"lambda_pid"}
    # two lags by the half rule: lag 5.5, dead time 1.5 (Skogestad 2003, section 2)
    assert compared(lags)["simc_pi"] == simc_pi(2.0, 5.5, 1.5)


def test_settings_turn_with_the_sign_of_the_plant() -> None:
    up, down = (compared(Plant(gain=k, time_constants_s=(5.0, 1.0), dead_time_s=1.0)) for k in (2.0, -2.0))
    for name, settings in up.items():
        other: Gains = down[name].gains
        assert other.kp == pytest.approx(-settings.gains.kp, rel=1e-9)
        assert other.ki == pytest.approx(-settings.gains.ki, rel=1e-9)


@pytest.mark.parametrize(
    "wrong", [lambda: simc_pi(1.0, 5.0, 0.0), lambda: simc_pi(1.0, 0.0, 1.0), lambda: simc_pid(1.0, (5.0, 0.0), 1.0), lambda: lambda_pid(1.0, 0.0, 1.0, 1.0, 1.0)],
)  # fmt: skip
def test_rules_refuse_what_they_are_not_for(wrong: object) -> None:
    with pytest.raises(UsageError):
        wrong()  # type: ignore[operator]


def test_a_transfer_function_has_ultimate_settings_only() -> None:
    plant = Plant.of_transfer(transfer_of([1.0], [1.0, 3.0, 3.0, 1.0]))
    made = compared(plant)
    assert set(made) == {"ultimate_pi", "ultimate_pid"}
    assert all(isinstance(settings, Settings) for settings in made.values())
