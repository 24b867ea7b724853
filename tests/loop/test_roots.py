"""Rightmost roots against Lambert's W, printed limits of stability, Pade's approximation and laws of scale."""

from __future__ import annotations

import math
import warnings
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.special import lambertw

from loopfit.core.errors import UsageError
from loopfit.loop.gains import Gains
from loopfit.loop.plant import Plant
from loopfit.loop.roots import characteristic, rightmost_roots
from loopfit.model.transfer import transfer_of


def roots_of(plant: Plant, gains: Gains, count: int = 6) -> np.ndarray:
    return rightmost_roots(characteristic(plant, gains), count)


def rightmost_of(values: list[complex], count: int) -> np.ndarray:
    return np.array(sorted(values, key=lambda s: (-round(s.real, 9), -s.imag))[:count])


@pytest.mark.parametrize("dead_time", [1e-6, 0.01, 1.0, 30.0])
@pytest.mark.parametrize("product", [0.1, 0.3, 0.5, 1.0, 1.5, 4.0])
def test_proportional_on_integrator_is_lambert(product: float, dead_time: float) -> None:
    """s + k exp(-theta s) = 0: s theta = W(-k theta). Corless et al., On the Lambert W function, 1996."""
    plant = Plant(gain=1.0, integrating=True, dead_time_s=dead_time)
    mine = roots_of(plant, Gains(kp=product / dead_time)) * dead_time
    exact = rightmost_of([complex(lambertw(-product, k)) for k in range(-6, 6)], len(mine))
    assert np.abs(mine - exact).max() < 1e-12 * np.abs(exact).max()  # a few roundings of numbers of order 10


@pytest.mark.parametrize("dead_time", [1e-3, 0.3, 2.0, 30.0])
@pytest.mark.parametrize("gain", [-0.7, 0.2, 0.9, 2.5])
def test_proportional_on_a_lag_is_lambert(gain: float, dead_time: float) -> None:
    """T s + 1 + K exp(-theta s) = 0: s = W(-K theta / T exp(theta / T)) / theta - 1 / T; T = 5."""
    lag = 5.0
    mine = roots_of(Plant(gain=2.0, time_constants_s=(lag,), dead_time_s=dead_time), Gains(kp=gain / 2.0))
    inside = -gain * dead_time / lag * math.exp(dead_time / lag)
    exact = rightmost_of([complex(lambertw(inside, k)) / dead_time - 1.0 / lag for k in range(-8, 8)], len(mine))
    # W is taken off 1 / T: digits are lost in the reference where theta is small
    assert np.abs(mine - exact).max() < 1e-12 * np.abs(exact).max() + 1e-14 / dead_time


PRINTED = [
    (1.0, -0.318132, 1.337236, 6, "Corless et al., On the Lambert W function, 1996: W0(-1), from memory"),
    (0.5, -0.7940236, 0.7701118, 7, "identity: W0(-0.5), the loop of Skogestad (2003) on an integrator"),
]


@pytest.mark.parametrize(("gain", "real", "imaginary", "digits", "source"), PRINTED)
def test_printed_values_of_lambert(gain: float, real: float, imaginary: float, digits: int, source: str) -> None:
    root = roots_of(Plant(gain=1.0, integrating=True, dead_time_s=1.0), Gains(kp=gain))[0]
    assert root.real == pytest.approx(real, abs=0.5 * 10.0**-digits), source
    assert root.imag == pytest.approx(imaginary, abs=0.5 * 10.0**-digits), source


SEBORG = "Seborg, Edgar, Mellichamp, Process Dynamics and Control, 3rd ed. 2010"
ULTIMATE = [
    ([1.0], [1.0, 3.0, 3.0, 1.0], 0.0, 8.0, 0.5e-9, 3.628, 0.5e-3, "1/(s+1)^3: every text"),
    ([1.0], [1.0, 0.0], 1.0, 1.5708, 0.5e-4, 4.0, 0.5e-4, "exp(-s)/s: pi/2 and 4 theta, identity"),
    ([4.0], [7.0, 1.0], 3.5, 0.95, 0.5e-2, 12.0, 0.5, f"{SEBORG}, chapter 12, from memory"),
    ([1.0], [10.0, 17.0, 8.0, 1.0], 0.0, 12.6, 0.05, None, None, f"{SEBORG}, example 11.8, from memory"),
    ([1.0], [1.0, 6.0, 5.0, 0.0], 0.0, 30.0, 0.5, 2.8099, 0.5e-4,
     "Ogata, Modern Control Engineering, 5th ed. 2010, example 8-1, from memory"),
    ([1.0], [1.0, 1.0], 1.0, 2.261826, 0.5e-6, 3.097060, 0.5e-6, "tan w = -w, K = sqrt(1 + w^2), identity"),
]  # fmt: skip


@pytest.mark.parametrize(
    ("numerator", "denominator", "dead_time", "gain", "gain_digits", "period", "period_digits", "source"), ULTIMATE
)
def test_ultimate_gain_and_period(
    numerator: list[float],
    denominator: list[float],
    dead_time: float,
    gain: float,
    gain_digits: float,
    period: float | None,
    period_digits: float | None,
    source: str,
) -> None:
    plant = Plant.of_transfer(transfer_of(numerator, denominator, dead_time))
    low, high = 0.1 * gain, 10.0 * gain
    for _ in range(60):
        middle = 0.5 * (low + high)
        root = roots_of(plant, Gains(kp=middle))[0]
        low, high = (low, middle) if root.real > 0.0 else (middle, high)
    assert middle == pytest.approx(gain, abs=gain_digits), source
    if period is not None:
        assert 2.0 * math.pi / root.imag == pytest.approx(period, abs=period_digits), source


@pytest.mark.parametrize(
    ("product", "damping", "digits", "source"),
    [
        (0.6606, 0.5, 4, "identity: k theta = acos(z) / sqrt(1 - z^2) exp(-z acos(z) / sqrt(1 - z^2)), z = 0.5"),
        (1.0283, 0.2155, 4, "identity: quarter decay of the pair, z = 0.21545"),
        (0.5, 0.71783, 5, "identity: W0(-0.5)"),
        (1.0, 0.23144, 5, "identity: W0(-1)"),
        (0.36788, 1.0, 4, "identity: the pair becomes a double real root at 1/e"),
    ],
)
def test_damping_of_an_integrator_with_dead_time(product: float, damping: float, digits: int, source: str) -> None:
    root = roots_of(Plant(gain=1.0, integrating=True, dead_time_s=1.0), Gains(kp=product))[0]
    assert -root.real / abs(root) == pytest.approx(damping, abs=1.0 * 10.0**-digits), source


@given(gain=st.floats(0.01, 50.0), kp=st.floats(0.01, 20.0), ti=st.floats(0.01, 100.0))
def test_damping_of_pi_on_an_integrator(gain: float, kp: float, ti: float) -> None:
    """s^2 + k Kc s + k Kc / Ti: zeta = sqrt(k Kc Ti) / 2, wn = sqrt(k Kc / Ti). Skogestad (2003), section 4."""
    roots = roots_of(Plant(gain=gain, integrating=True), Gains(kp=kp, ki=kp / ti))
    assert len(roots) == 2
    damping = float(-roots.sum().real / (2.0 * math.sqrt((roots[0] * roots[1]).real)))
    assert damping == pytest.approx(math.sqrt(gain * kp * ti) / 2.0, rel=1e-7)
    if damping < 0.999:
        assert -roots[0].real / abs(roots[0]) == pytest.approx(damping, rel=1e-7)


def test_a_cancelled_lag_stays_a_root() -> None:
    """exp(-s) / (5 s + 1) with PI (2.5, 5): s + 0.5 exp(-s) = 0 and the lag itself, which a load excites."""
    roots = roots_of(Plant(gain=1.0, time_constants_s=(5.0,), dead_time_s=1.0), Gains(kp=2.5, ki=0.5))
    assert roots[0] == pytest.approx(-0.2, abs=1e-12)
    assert roots[1] == pytest.approx(complex(lambertw(-0.5)), abs=1e-12)


def test_a_triple_root_is_found_three_times() -> None:
    """(s + 1)^3 = s^3 + 3 s^2 + 3 s + 1: plant 1 / (s (s + 3)) with PI (3, 3)... 1 / 3 in time."""
    plant = Plant.of_transfer(transfer_of([1.0], [1.0, 3.0, 0.0]))
    roots = roots_of(plant, Gains(kp=3.0, ki=1.0))
    assert len(roots) == 3
    assert (
        np.abs(roots + 1.0).max() < 1e-4
    )  # the third root of the rounding of coefficients, 2e-16^(1/3) = 6e-6, with room


LOOPS_WITH_DELAY = [
    (Plant(gain=1.0, damping_ratio=0.4, natural_frequency_rad_s=1.0, dead_time_s=0.5), Gains(kp=0.4, ki=0.3)),
    (
        Plant(gain=2.0, time_constants_s=(3.0, 1.0), dead_time_s=1.0, zero_s=-0.5),
        Gains(kp=0.6, ki=0.2, kd=0.5, filter_s=0.2),
    ),
    (Plant(gain=0.5, integrating=True, time_constants_s=(1.0,), dead_time_s=0.8), Gains(kp=0.7, ki=0.05)),
    (Plant(gain=-1.0, time_constants_s=(2.0,), dead_time_s=1.5), Gains(kp=-0.9, ki=-0.4)),
]


@pytest.mark.parametrize(("plant", "gains"), LOOPS_WITH_DELAY)
def test_pade_loops_of_python_control_come_to_ours(plant: Plant, gains: Gains) -> None:
    import control

    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        controller = control.tf([gains.kp, gains.ki], [1.0, 0.0])
        if gains.kd != 0.0:
            controller = controller + control.tf([gains.kd, 0.0], [gains.filter_s, 1.0])
        errors = []
        mine = roots_of(plant, gains, 3)
        for order in (2, 4, 8):
            delay = control.tf(*control.pade(plant.dead_time_s, order))
            rational = control.tf(list(plant.numerator), list(plant.denominator))
            poles = control.zeros(1 + control.minreal(controller * rational * delay, verbose=False))
            errors.append(max(float(np.abs(poles - root).min()) for root in mine))
    assert errors[2] < errors[1] < errors[0]
    assert errors[2] < 1e-4  # Pade of order 8 at |s| theta of about 2


@settings(max_examples=60, deadline=None)
@given(
    case=st.sampled_from(LOOPS_WITH_DELAY[:2]),
    time=st.floats(1e-3, 1e4),
    unit=st.floats(1e-4, 1e4),
)
def test_roots_follow_the_units(case: tuple[Plant, Gains], time: float, unit: float) -> None:
    """Seconds `time` times as long: roots divided by that. Measurement in other units: roots as they are."""
    plant, gains = case
    lags = None if plant.time_constants_s is None else tuple(lag * time for lag in plant.time_constants_s)
    frequency = None if plant.natural_frequency_rad_s is None else plant.natural_frequency_rad_s / time
    other = replace(
        plant,
        gain=plant.gain * unit,
        time_constants_s=lags,
        natural_frequency_rad_s=frequency,
        dead_time_s=plant.dead_time_s * time,
        zero_s=None if plant.zero_s is None else plant.zero_s * time,
    )
    changed = Gains(
        kp=gains.kp / unit, ki=gains.ki / unit / time, kd=gains.kd / unit * time, filter_s=gains.filter_s * time
    )
    before, after = roots_of(plant, gains), roots_of(other, changed) * time
    assert np.abs(after - before).max() < 1e-9 * np.abs(before).max()


def test_pure_dead_time_with_proportional() -> None:
    """1 + K exp(-s) = 0: s = ln K + j pi (2 k + 1), slowest first."""
    roots = roots_of(Plant(gain=1.0, dead_time_s=1.0), Gains(kp=0.5))
    expected = math.log(0.5) + 1j * math.pi * np.array([1.0, -1.0, 3.0, -3.0, 5.0, -5.0])
    assert np.abs(roots - expected).max() < 1e-10


def test_value_and_scale_of_the_characteristic_function() -> None:
    plant, gains = LOOPS_WITH_DELAY[1]
    function = characteristic(plant, gains)
    s = np.array([[0.3 + 0.2j, -0.1 + 1j], [2.0 + 0j, -1.5 - 0.7j]])
    filtered = gains.filter_s * s + 1.0
    acts = gains.kp * s * filtered + gains.ki * filtered + gains.kd * s**2
    top = np.polyval(plant.numerator, s) * acts * np.exp(-plant.dead_time_s * s)
    written = np.polyval(plant.denominator, s) * s * filtered + top
    ratio = function(s) / written
    assert np.abs(ratio / ratio[0, 0] - 1.0).max() < 1e-12
    assert np.abs(function.coefficients[0]).max() < 1e3


REFUSED = [
    (Plant(gain=1.0, dead_time_s=1.0), Gains(kp=1.0), "infinitely many"),
    (Plant(gain=1.0, dead_time_s=1.0), Gains(kp=0.2, ki=0.1, kd=0.5, filter_s=0.1), "infinitely many"),
    (Plant(gain=2.0), Gains(kp=-0.6), "no solution"),
    (
        Plant(gain=1.0, time_constants_s=(1.0,), dead_time_s=1.0),
        Gains(kp=0.1, kd=1.1, filter_s=0.01),
        "higher frequencies",
    ),
]


@pytest.mark.parametrize(("plant", "gains", "word"), REFUSED)
def test_loops_without_meaning_are_refused_in_words(plant: Plant, gains: Gains, word: str) -> None:
    with pytest.raises(UsageError, match=word):
        characteristic(plant, gains)


@pytest.mark.parametrize(("filter_s", "unstable"), [(0.1, 2), (0.03, 6), (0.01, 14)])
def test_too_much_derivative_on_a_lag_grows_unstable_roots(filter_s: float, unstable: int) -> None:
    """Why it is refused: kd k / T = 1.1 has the more unstable roots the shorter the filter (neutral in the limit)."""
    from random_loops import count_in_rectangle

    plant = Plant(gain=1.0, time_constants_s=(1.0,), dead_time_s=1.0)
    gains = Gains(kp=1.1, ki=0.5, kd=1.1, filter_s=filter_s)
    assert count_in_rectangle(plant, gains, 0.0 + 1e-9) >= unstable
