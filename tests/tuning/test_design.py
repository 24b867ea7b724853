"""Designs against theory, python-control's poles, and a general-purpose optimiser."""

from __future__ import annotations

import math

import control
import numpy as np
import pytest
from scipy.optimize import differential_evolution

from loopfit.core.errors import UsageError
from loopfit.loop.gains import Gains
from loopfit.loop.margins import margins_of
from loopfit.loop.plant import Plant
from loopfit.loop.sampled import sampled_swing
from loopfit.loop.visible import swing_of
from loopfit.tuning import family
from loopfit.tuning.design import design
from loopfit.tuning.goal import Goal
from loopfit.tuning.search import Search, counted_damping

PLANTS = [
    Plant(gain=2.0, time_constants_s=(8.0, 3.0), dead_time_s=1.5),
    Plant(gain=1.0, time_constants_s=(1.0,), dead_time_s=0.5),
    Plant(gain=-0.05, time_constants_s=(2.0,), dead_time_s=1.0, integrating=True),
    Plant(gain=1.0, damping_ratio=0.7, natural_frequency_rad_s=1.0, dead_time_s=1.0),
    Plant(gain=300.0, damping_ratio=1.6, natural_frequency_rad_s=40.0, dead_time_s=0.004),
]


def test_proportional_control_of_an_integrator_with_dead_time() -> None:
    """k kp exp(-th s) / s: two real roots meet at k kp th = 1 / e (Lambert W, branch point)."""
    found = design(Plant(gain=1.0, integrating=True, dead_time_s=1.0), Goal(terms="P", max_sensitivity=3.0))
    assert found.met
    assert found.gains is not None
    # a damping of 0.98 lies a little above the branch point, the knob moves in steps of 4 %
    assert found.gains.kp == pytest.approx(1.0 / math.e, rel=0.05)


@pytest.mark.parametrize("plant", PLANTS)
@pytest.mark.parametrize("terms", ["PI", "PID"])
@pytest.mark.parametrize("damping", [1.0, 0.7])
def test_what_is_said_to_be_met_is_met(plant: Plant, terms: str, damping: float) -> None:
    """Every limit, recomputed by the exact loop."""
    goal = Goal(damping_ratio=damping, terms=terms)
    found = design(plant, goal)
    assert found.gains is not None
    swing = swing_of(plant, found.gains)
    assert swing.stable
    margins = margins_of(plant, found.gains)
    assert margins.max_sensitivity <= 1.6 * 1.002
    assert not margins.positive_feedback
    if found.met:
        assert counted_damping(swing) >= damping - 0.021
        assert goal.met_by(swing)
    else:
        assert found.obstacle
        assert found.attainable_damping_ratio < damping


def test_units_of_time_and_gain_do_not_matter() -> None:
    """A plant a thousand times slower and of seven times the gain: settings scaled the same way."""
    one = design(Plant(gain=2.0, time_constants_s=(8.0, 3.0), dead_time_s=1.5), Goal(damping_ratio=0.7))
    other = design(Plant(gain=14.0, time_constants_s=(8e3, 3e3), dead_time_s=1.5e3), Goal(damping_ratio=0.7))
    assert one.gains is not None
    assert other.gains is not None
    # the search ends with steps of 0.2 % of the objective, along which the gain may be a few per cent off
    assert other.gains.ki * 7e3 == pytest.approx(one.gains.ki, rel=5e-3)
    assert other.gains.kp * 7.0 == pytest.approx(one.gains.kp, rel=3e-2)


def test_placed_poles_are_where_python_control_finds_them() -> None:
    """A plant without dead time: the closed loop's poles include the pair that was placed."""
    plant = Plant(gain=1.5, time_constants_s=(4.0, 1.0))
    search = Search(plant, Goal(damping_ratio=0.7))
    w, shape = np.array([0.3, 0.5]), np.array([0.7, 0.9])
    for row, frequency, zeta in zip(family.at(plant, search.knobs, w, shape, np.zeros(2)).gains, w, shape, strict=True):
        loop = control.tf([1.5], np.convolve([4.0, 1.0], [1.0, 1.0])) * control.tf([row[0], row[1]], [1.0, 0.0])
        poles = control.poles(control.feedback(loop, 1))
        wanted = frequency * (-zeta + 1j * math.sqrt(1 - zeta**2))
        assert np.min(np.abs(poles - wanted)) < 1e-9


def test_double_real_poles_under_pi_on_a_lag() -> None:
    """k / (T s + 1) under PI is exactly second order: zeta = (1 + k kp) / (2 sqrt(k ki T)) (textbook)."""
    plant = Plant(gain=2.0, time_constants_s=(5.0,))
    found = design(plant, Goal(noise_gain=8.0))
    assert found.met
    assert found.gains is not None
    zeta = (1.0 + 2.0 * found.gains.kp) / (2.0 * math.sqrt(2.0 * found.gains.ki * 5.0))
    assert zeta >= 0.979
    assert 2.0 * found.gains.kp == pytest.approx(8.0, rel=0.02)  # the noise limit is what holds it back


def test_derivative_on_an_inertia_has_the_poles_that_python_control_finds() -> None:
    """k / (s (T s + 1)) under PD with its filter: every pole that counts is damped as asked."""
    plant = Plant(gain=1.0, time_constants_s=(1e3,), integrating=True)
    found = design(plant, Goal(damping_ratio=0.7, terms="PD", noise_gain=2e4), filter_s=1.0)
    assert found.met
    assert found.gains is not None
    kp, kd = found.gains.kp, found.gains.kd
    controller = control.tf([kp + kd, kp], [1.0, 1.0])
    poles = control.poles(control.feedback(controller * control.tf([1.0], [1e3, 1.0, 0.0]), 1))
    assert np.min(-poles.real / np.abs(poles)) >= 0.68
    # without the filter this plant under PD is exactly second order (textbook)
    bare = control.poles(control.feedback(control.tf([kd, kp], [1.0]) * control.tf([1.0], [1e3, 1.0, 0.0]), 1))
    natural = math.sqrt(kp / 1e3)
    assert np.min(-bare.real / np.abs(bare)) == pytest.approx((1.0 + kd) / (2e3 * natural), rel=1e-9)


def test_only_the_gain_moves() -> None:
    """The integral time stays as it is; the gain falls until the damping is there."""
    plant = Plant(gain=1.0, time_constants_s=(10.0, 2.0), dead_time_s=1.0)
    present = Gains(kp=6.0, ki=6.0 / 8.0)
    found = design(plant, Goal(damping_ratio=0.7, move=frozenset({"gain"})), present=present)
    assert found.met
    assert found.gains is not None
    assert found.gains.kp / found.gains.ki == pytest.approx(8.0, rel=1e-9)
    assert found.gains.kp < 6.0
    with pytest.raises(UsageError, match="give the present ones"):
        design(plant, Goal(move=frozenset({"gain"})))


def test_bounds_are_kept() -> None:
    plant = Plant(gain=1.0, time_constants_s=(10.0, 2.0), dead_time_s=1.0)
    found = design(plant, Goal(damping_ratio=0.7, at_least={"integral_time_s": 20.0}, at_most={"gain": 1.5}))
    assert found.gains is not None
    assert found.gains.kp / found.gains.ki >= 20.0 * (1 - 1e-9)
    assert found.gains.kp <= 1.5 * (1 + 1e-9)


def test_oscillating_plant_under_pi_attains_less_and_says_why() -> None:
    found = design(Plant(gain=1.0, damping_ratio=0.2, natural_frequency_rad_s=1.0, dead_time_s=0.2), Goal())
    assert not found.met
    assert 0.05 < found.attainable_damping_ratio < 0.5
    assert found.obstacle


@pytest.mark.parametrize("share", [0.05, 0.2])
def test_scan_interval_is_designed_for(share: float) -> None:
    """The sampled loop, by its own eigenvalues, is as damped as was asked."""
    plant = Plant(gain=1.0, time_constants_s=(5.0, 1.0), dead_time_s=1.0)
    scan = share * 6.0
    found = design(plant, Goal(damping_ratio=0.7), scan_s=scan)
    assert found.gains is not None
    assert sampled_swing(plant, found.gains, scan).visible_damping >= 0.65


@pytest.mark.parametrize("wrong", [0.0, -1.0, 1.1, math.nan])
def test_target_out_of_range(wrong: float) -> None:
    with pytest.raises(UsageError, match="damping ratio"):
        Goal(damping_ratio=wrong)


@pytest.mark.study
@pytest.mark.parametrize("number", range(16))
def test_no_better_settings_by_differential_evolution(number: int) -> None:
    """scipy's differential_evolution on the same objective and limits finds at most 10 % more integral gain (PI and PID)."""
    rng = np.random.default_rng([41, number])
    plant = Plant(
        gain=1.0, damping_ratio=float(rng.uniform(0.6, 2.5)), natural_frequency_rad_s=1.0,
        dead_time_s=float(rng.choice([0.0, *rng.uniform(0.1, 2.0, 3)])),
    )  # fmt: skip
    goal = Goal(damping_ratio=float(rng.choice([0.7, 1.0])), terms=str(rng.choice(["PI", "PID"])))
    found = design(plant, goal)
    search = Search(plant, goal)
    free = 3 if goal.derivative else 2

    def loss(x: np.ndarray) -> float:
        row = np.zeros(3)
        row[:free] = np.exp(x)
        swing = search.swing(row)
        if swing is None or not swing.stable:
            return 10.0
        short = max(goal.design_damping - counted_damping(swing), 0.0)
        if short > 0:
            return 5.0 + short
        return -math.log(row[1]) if search.passes(row, goal.design_damping) else 4.0

    best = differential_evolution(loss, [(-5, 3)] * free, seed=number, maxiter=60, popsize=12, tol=1e-6)
    if best.fun < 3.0:
        assert found.met
        assert found.worth >= 0.9 * math.exp(-best.fun)
