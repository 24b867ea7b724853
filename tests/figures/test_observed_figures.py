"""Figures read from a record without a model: honest intervals, honest silence."""

from __future__ import annotations

import itertools
import math
import time as clock

import numpy as np
import pytest
from noisy_step import FINAL, StepTest, coverage

from loopfit.core.quantity import Quantity
from loopfit.figures.observed import Observed, observe
from loopfit.figures.smoothing import smooth
from loopfit.figures.unit_step import step_value

FIGURES = tuple(Observed.__dataclass_fields__)


def holds(quantity: Quantity | None, value: float) -> bool:
    return quantity is not None and quantity.low <= value <= quantity.high


def step_record(shape: float, noise: float, rows: int = 1200, end: float = 30.0) -> tuple[np.ndarray, np.ndarray]:
    time = np.linspace(-5, end, rows)
    return time, step_value(time, shape) + noise * np.random.default_rng(8).normal(size=rows)


def check_coverage(test: StepTest, repeats: int, seed: int) -> None:
    for name, (read, held, _) in coverage(test, repeats, np.random.default_rng(seed)).items():
        # 95 % is asked; at least 90 % must be had, less 3 standard deviations of this count
        least = 0.9 * read - 3 * math.sqrt(0.09 * read)
        assert held >= least, (name, held, read)


@pytest.mark.parametrize("colour", [0.0, 0.7])
@pytest.mark.parametrize(("rows", "signal_to_noise"), [(150, 200.0), (1000, 30.0)])
@pytest.mark.parametrize("damping", [0.15, 0.5, 0.8, 1.0, 2.0])
def test_intervals_hold(damping: float, rows: int, signal_to_noise: float, colour: float) -> None:
    check_coverage(StepTest(damping=damping, rows=rows, signal_to_noise=signal_to_noise, colour=colour), 25, 11)


@pytest.mark.study
@pytest.mark.parametrize("length", [1.6, 2.0, 4.0])
@pytest.mark.parametrize("colour", [0.0, 0.7])
@pytest.mark.parametrize("damping", [0.1, 0.2, 0.4, 0.7, 0.8, 1.0, 1.4, 2.0])
def test_intervals_hold_everywhere(damping: float, colour: float, length: float) -> None:
    for rows, signal_to_noise in itertools.product((100, 300, 1000, 3000), (10.0, 50.0, 200.0)):
        test = StepTest(damping=damping, rows=rows, signal_to_noise=signal_to_noise, colour=colour, length=length)
        check_coverage(test, 200, 7)


def test_a_good_record_is_read_closely() -> None:
    # zeta 0.5, tau 1: overshoot 16.3 %, decay ratio 0.0266, peak at pi/w = 3.6276 (identities); the widths are
    # what a person would read off the chart
    time, measurement = step_record(1.0, 0.005)
    observed = observe(time, measurement, 0.0, setpoint_after=1.0)
    overshoot, peak, decay = observed.overshoot_percent, observed.peak_time_s, observed.decay_ratio
    assert holds(overshoot, 16.3034)
    assert holds(peak, 3.6276)
    assert holds(decay, 0.02658)
    assert holds(observed.settling_time_s, 8.07635)
    assert holds(observed.rise_time_s, 1.63757)
    assert holds(observed.steady_state_deviation, 0.0)
    assert overshoot is not None
    assert overshoot.high - overshoot.low < 2
    assert peak is not None
    assert peak.high - peak.low < 1.2
    assert observed.settling_time_s is not None
    assert observed.settling_time_s.high < 10


@pytest.mark.parametrize("shape", [0.25, 0.1])
def test_noise_is_no_overshoot(shape: float) -> None:
    rng = np.random.default_rng(3)
    time = np.linspace(-5, 25, 900)
    seen = [observe(time, step_value(time, shape) + 0.05 * rng.normal(size=900), 0.0) for _ in range(40)]
    overshoots = [one.overshoot_percent for one in seen if one.overshoot_percent is not None]
    assert len(overshoots) >= 38
    assert all(0 <= one.low <= one.value <= one.high for one in overshoots)
    # noise 5 %, 26 rows to a unit of time: 3 standard errors of the mean of 10 to 30 rows are 3 to 5 %, top and tail
    assert 1 < np.median([one.high for one in overshoots]) < 15
    # one-sided error of a 95 % interval: 1 of 40 expected, 5 or more has a chance of 1 in 300
    assert sum(one.value > 0 for one in overshoots) < 5
    assert sum(one.peak_time_s is not None for one in seen) < 5


@pytest.mark.parametrize("end", [1.5, 2.5])
def test_a_record_that_still_moves_has_no_final_value(end: float) -> None:
    time, measurement = step_record(0.1, 0.005, end=end)
    observed = observe(time, measurement, 0.0, setpoint_after=1.0)
    assert holds(observed.initial_value, 0.0)
    assert all(getattr(observed, name) is None for name in FIGURES if name != "initial_value")


def test_a_ramp_has_no_final_value() -> None:
    time = np.linspace(-5, 30, 800)
    ramp = np.maximum(time, 0) + 0.05 * np.random.default_rng(1).normal(size=800)
    assert observe(time, ramp, 0.0).final_value is None


def test_noise_without_a_step_has_levels_but_no_figures() -> None:
    noise = np.random.default_rng(5).normal(size=800)
    observed = observe(np.arange(800.0), noise, 200.0)
    assert holds(observed.initial_value, 0.0)
    assert observed.overshoot_percent is None
    assert observed.settling_time_s is None


def test_a_step_between_two_rows_is_not_read_for_shape() -> None:
    time = np.arange(-50.0, 200.0)
    observed = observe(time, step_value(time, 0.5) * 1.0 + 0.01 * np.random.default_rng(2).normal(size=250), 0.0)
    jump = observe(time, (time > 0) + 0.01 * np.random.default_rng(2).normal(size=250), 0.0)
    assert observed.rise_time_s is not None
    assert holds(jump.final_value, 1.0)
    assert jump.overshoot_percent is None


def test_unit_offset_direction_and_clock_do_not_matter() -> None:
    time, measurement = step_record(1.0, 0.01)
    plain = observe(time, measurement, 0.0)
    other = observe(1e6 + 60 * time, 300 - 40 * measurement, 1e6)
    for name in ("rise_time_s", "settling_time_s", "delay_time_s", "peak_time_s"):
        one, two = getattr(plain, name), getattr(other, name)
        assert two.value == pytest.approx(60 * one.value, rel=1e-6), name  # a clock of 1e6 s keeps 10 digits of time
    for name in ("overshoot_percent", "decay_ratio"):
        one, two = getattr(plain, name), getattr(other, name)
        assert (two.value, two.low, two.high) == pytest.approx((one.value, one.low, one.high), rel=1e-5, abs=1e-6)
    assert plain.peak_value is not None
    assert other.peak_value is not None
    assert other.peak_value.low == pytest.approx(300 - 40 * plain.peak_value.high, rel=1e-6)


def test_more_confidence_wider_intervals() -> None:
    time, measurement = step_record(1.0, 0.02)
    usual, sure = (observe(time, measurement, 0.0, confidence=level) for level in (0.9, 0.99))
    for name in ("initial_value", "final_value", "overshoot_percent", "rise_time_s", "delay_time_s"):
        narrow, wide = getattr(usual, name), getattr(sure, name)
        assert wide.high - wide.low > narrow.high - narrow.low, name


def test_uneven_sampling_and_no_rows_before() -> None:
    rng = np.random.default_rng(9)
    time = np.sort(rng.uniform(0, 30, 900))
    observed = observe(time, step_value(time - 0.5, 1.0) + 0.01 * rng.normal(size=900), 0.0)
    assert holds(observed.initial_value, 0.0)
    assert holds(observed.overshoot_percent, 16.3034)
    assert holds(observed.delay_time_s, 0.5 + 1.29404)  # delay at zeta 0.5: 1.2940 tau (see published.toml)


def test_a_quantised_record_without_noise() -> None:
    # resolution 0.01 of the change scatters like 0.01/sqrt(12) (common practice)
    time, measurement = step_record(1.0, 0.0)
    observed = observe(time, np.round(measurement, 2), 0.0, noise_rms=0.01 / math.sqrt(12))
    assert holds(observed.overshoot_percent, 16.3034)
    assert holds(observed.settling_time_s, 8.07635)


def test_a_stuck_or_tiny_record_has_no_figures() -> None:
    time = np.arange(100.0)
    stuck = observe(time, np.full(100, 3.0), 20.0)
    assert stuck.overshoot_percent is None
    assert all(getattr(observe(time[:10], time[:10], 5.0), name) is None for name in FIGURES)


@pytest.mark.parametrize("colour", [0.0, 0.7])
def test_the_noise_is_told_from_the_curve(colour: float) -> None:
    test = StepTest(damping=0.3, rows=1500, signal_to_noise=40, colour=colour)
    time, step = test.times()
    rng = np.random.default_rng(4)
    after = time >= step
    found, off = [], []
    for _ in range(20):
        measurement = test.clean() + test.noise(rng)
        curve = smooth(time[after] - step, measurement[after], measurement[~after])
        found.append(curve.long_variance)
        truth = np.interp(curve.time, time[after] - step, test.clean()[after])
        off.append((curve.value - truth) / curve.error)
    # variance of a long mean x rows: sigma^2 (1 + c)/(1 - c) for first-order autoregressive noise (common practice);
    # the colours are a coarse list, hence 30 %
    assert np.median(found) == pytest.approx((2 / 40) ** 2 * (1 + colour) / (1 - colour), rel=0.3)
    assert 0.7 < np.sqrt(np.mean(np.square(off))) < 1.2


@pytest.mark.parametrize(("rows", "limit_ms"), [(1000, 3.0), (1_000_000, 300.0)])
def test_speed(rows: int, limit_ms: float) -> None:
    time, measurement = step_record(0.5, 0.03, rows)
    observe(time, measurement, 0.0)
    best = math.inf
    for _ in range(5):
        begin = clock.perf_counter()
        observe(time, measurement, 0.0)
        best = min(best, clock.perf_counter() - begin)
    assert 1e3 * best < 5 * limit_ms  # a busy machine is allowed for


def test_final_value_of_the_simulation() -> None:
    test = StepTest(damping=0.7, rows=800, signal_to_noise=100, length=4.0)
    time, step = test.times()
    observed = observe(time, test.clean() + test.noise(np.random.default_rng(1)), step, setpoint_after=FINAL + 0.25)
    assert holds(observed.final_value, FINAL)
    assert holds(observed.steady_state_deviation, 0.25)
