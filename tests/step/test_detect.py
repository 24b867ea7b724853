"""Steps in a column: how many, when, how large."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from loopfit.step.detect import column_noise, find_steps
from loopfit.step.noise import noise_rms, resolution
from loopfit.step.release import release_row

TIME = np.arange(400) * 0.5


@settings(max_examples=60)
@given(
    row=st.integers(1, 398),
    low=st.floats(-1e3, 1e3),
    size=st.floats(1e-3, 1e3),
    up=st.booleans(),
)
def test_a_clean_step_is_found_exact_to_the_row(row: int, low: float, size: float, up: bool) -> None:
    to = low + (size if up else -size)
    found = find_steps(TIME, np.where(np.arange(400) < row, low, to), "setpoint")
    (step,) = found.steps
    assert (step.row, step.time_s) == (row, TIME[row])
    assert (step.from_, step.to) == pytest.approx((low, to), rel=1e-12, abs=1e-12)


@pytest.mark.parametrize("noise", [0.001, 0.02, 0.05])
@pytest.mark.parametrize("row", [12, 200, 385])
def test_noise_on_the_output_does_not_hide_its_step(noise: float, row: int) -> None:
    rng = np.random.default_rng(7)
    values = np.where(np.arange(400) < row, 30.0, 31.0) + rng.normal(0.0, noise, 400)
    (step,) = find_steps(TIME, values, "output").steps
    assert step.row == row
    # the level is a mean of at least 12 rows: 5 standard errors of it
    assert step.size == pytest.approx(1.0, abs=5 * noise * np.sqrt(1 / 12 + 1 / 15))


def test_noise_alone_is_no_step() -> None:
    rng = np.random.default_rng(7)
    for _ in range(50):
        assert find_steps(TIME, 30.0 + rng.normal(0.0, 0.3, 400), "output").steps == ()


def test_an_output_under_control_is_always_moving() -> None:
    rng = np.random.default_rng(7)
    wander = np.cumsum(rng.normal(0.0, 1.0, 400))
    found = find_steps(TIME, wander, "output")
    assert found.steps == ()
    assert found.always_moving


def test_a_staircase_is_several_steps_and_a_ramp_is_one_move() -> None:
    rows = np.arange(400)
    stairs = 1.0 * (rows >= 50) + 2.0 * (rows >= 150) - 1.5 * (rows >= 300)
    assert [(s.row, s.size) for s in find_steps(TIME, stairs, "setpoint").steps] == [(50, 1.0), (150, 2.0), (300, -1.5)]
    ramp = np.clip((rows - 100) / 20.0, 0.0, 1.0)
    (move,) = find_steps(TIME, ramp, "setpoint").steps
    assert (move.row, move.last_row) == (101, 120)
    assert move.size == pytest.approx(1.0)


def test_a_constant_column_has_no_step() -> None:
    assert find_steps(TIME, np.full(400, 40.0), "setpoint").steps == ()


def test_column_noise_ignores_a_step_and_is_zero_when_clean() -> None:
    rng = np.random.default_rng(7)
    step = np.where(np.arange(4000) < 2000, 0.0, 100.0)
    assert column_noise(step) == 0.0
    # standard error of a median absolute difference of 4000 rows is near 1.5 %; 5 of them
    assert column_noise(step + rng.normal(0.0, 0.3, 4000)) == pytest.approx(0.3, rel=0.08)


def test_noise_of_a_smooth_signal_comes_from_second_differences() -> None:
    rng = np.random.default_rng(7)
    smooth = 50.0 * np.sin(np.arange(4000) / 200.0)
    assert noise_rms(smooth + rng.normal(0.0, 0.2, 4000)) == pytest.approx(0.2, rel=0.08)


@pytest.mark.parametrize("grid", [0.1, 0.32, 2.0])
def test_resolution_is_the_grid_of_a_coarse_measurement(grid: float) -> None:
    smooth = 20.0 * (1.0 - np.exp(-np.arange(400) / 80.0))
    assert resolution(np.round(smooth / grid) * grid) == pytest.approx(grid, rel=1e-6)
    assert resolution(smooth) == 0.0


def test_a_release_begins_where_the_held_level_ends() -> None:
    t = np.arange(300) * 0.1
    rng = np.random.default_rng(7)
    swing = np.where(t < 5.0, 1.0, np.cos(2.0 * (t - 5.0)) * np.exp(-0.2 * np.maximum(t - 5.0, 0.0)))
    row = release_row(swing + rng.normal(0.0, 0.005, 300), 0.005)
    assert 49 <= row <= 52  # the swing leaves the noise within two rows
    assert release_row(swing[50:] + rng.normal(0.0, 0.005, 250), 0.005) == 0
