"""Records whose truth is known, simulated by scipy's integrator and by python-control, through the whole analysis."""

from __future__ import annotations

import math

import control
import numpy as np
import pytest
from simulated_records import Truth, bound_of, integrated, unit_response

import loopfit
from loopfit.core.arrays import Array
from loopfit.core.quantity import Quantity

# Rows up to 260 are fitted one by one: what is left is the integrator's error (1e-12) and the solver's stop.
# Longer records are averaged in bins, and a response that begins inside a bin costs some (bin / time constant)^2.
BY_ROWS = 1e-8
IN_BINS = 1e-4


def holds(found: Quantity, truth: float, slack: float) -> bool:
    return found.low - slack <= truth <= found.high + slack


def mass_on_spring(mass: float, damper: float, spring: float, force: float, delay: float, time: Array) -> Array:
    """Position of m x'' + c x' + k x = F, the force on from `delay` after time 0 (Newton's second law)."""
    return integrated(lambda _, x: [x[1], (force - damper * x[1] - spring * x[0]) / mass], delay, [0.0, 0.0], time)[0]


MECHANISMS = [
    # mass kg, damper N s/m, spring N/m, zeta = c / (2 sqrt(k m)): c as for zeta 0.05, 0.3, 0.7, 1, 1.4, 2.5
    pytest.param(2.0, 0.05 * 2 * math.sqrt(2.0 * 50.0), 50.0, id="0.05"),
    pytest.param(2.0, 0.3 * 2 * math.sqrt(2.0 * 50.0), 50.0, id="0.3"),
    pytest.param(0.4, 0.7 * 2 * math.sqrt(0.4 * 9.0), 9.0, id="0.7"),
    pytest.param(1.0, 2.0, 1.0, id="critical"),
    pytest.param(1.5, 1.4 * 2 * math.sqrt(1.5 * 6.0), 6.0, id="1.4"),
    pytest.param(1.0, 5.0, 1.0, id="2.5"),
]


def manual_test(mass: float, damper: float, spring: float, delay: float, rows: int) -> tuple[Truth, dict[str, Array]]:
    zeta, omega = damper / (2.0 * math.sqrt(mass * spring)), math.sqrt(spring / mass)
    truth = Truth(gain=1.0 / spring, zeta=zeta, omega=omega, dead_time=delay)
    span = 6.0 * max(truth.slowest, 1.0 / omega) + delay
    time = np.linspace(-0.15 * span, span, rows)
    row = int(np.searchsorted(time, 0.0))
    force = np.where(np.arange(rows) < row, 10.0, 25.0)
    position = 0.2 + mass_on_spring(mass, damper, spring, 15.0, delay, time - time[row])
    return truth, {"time": time + 100.0, "measurement": position, "output": force}


@pytest.mark.parametrize("rows", [240, 600])
@pytest.mark.parametrize("delay", [0.0, 0.35])
@pytest.mark.parametrize(("mass", "damper", "spring"), MECHANISMS)
def test_record_without_noise_gives_the_truth(
    mass: float, damper: float, spring: float, delay: float, rows: int
) -> None:
    truth, signals = manual_test(mass, damper, spring, delay, rows)
    analysis = loopfit.analyze(**signals)
    model = analysis.model
    assert model is not None
    rel = BY_ROWS if rows <= 260 else IN_BINS
    assert model.damping_ratio.value == pytest.approx(truth.zeta, rel=rel)
    assert model.natural_frequency_rad_s.value == pytest.approx(truth.omega, rel=rel)
    assert model.gain.value == pytest.approx(truth.gain, rel=rel)
    assert model.dead_time_s.value == pytest.approx(delay, rel=0, abs=rel / truth.omega)
    assert model.adequate
    if truth.zeta < 1:
        # a textbook identity: exp(-pi zeta / sqrt(1 - zeta^2)) (Ogata, Modern Control Engineering, 5th ed., 5-3)
        overshoot = 100.0 * math.exp(-math.pi * truth.zeta / math.sqrt(1.0 - truth.zeta**2))
        assert analysis.response.overshoot_percent.value == pytest.approx(overshoot, rel=10 * rel)
        peak = delay + math.pi / (truth.omega * math.sqrt(1.0 - truth.zeta**2))
        assert analysis.response.peak_time_s.value == pytest.approx(peak, rel=10 * rel)


@pytest.mark.parametrize("delay", [0.0, 0.35])
@pytest.mark.parametrize(("mass", "damper", "spring"), MECHANISMS)
def test_noisy_record_holds_the_truth_in_an_interval_near_the_bound(
    mass: float, damper: float, spring: float, delay: float
) -> None:
    """Signal to noise 50, 12 records: widths against the Cramer-Rao bound, 2 x 1.96 standard deviations.

    The truth may lie outside 95 % intervals in 3 of 12 records at most (binomial: 0.2 % chance of more than that).
    """
    rng = np.random.default_rng(11)
    truth, signals = manual_test(mass, damper, spring, delay, 300)
    noise = 15.0 * truth.gain / 50.0
    step = int(np.argmax(signals["output"] > 10.0))
    # a record does not say that there is no dead time: the bound is the one with a dead time to be found
    near = Truth(gain=truth.gain, zeta=truth.zeta * 1.0001, omega=truth.omega, dead_time=max(delay, 1e-4))
    bound = bound_of(near, 15.0, signals["time"] - signals["time"][step], noise)
    inside = {"zeta": 0, "omega": 0, "gain": 0, "lags": 0}
    widths: dict[str, list[float]] = {name: [] for name in inside}
    for _ in range(12):
        noisy = signals["measurement"] + noise * rng.standard_normal(300)
        model = loopfit.analyze(**(signals | {"measurement": noisy})).model
        assert model is not None
        for name, found, wanted in (
            ("zeta", model.damping_ratio, truth.zeta),
            ("omega", model.natural_frequency_rad_s, truth.omega),
            ("gain", model.gain, truth.gain),
            ("lags", model.lag_plus_dead_time_s, 2.0 * truth.zeta / truth.omega + delay),
        ):
            inside[name] += holds(found, wanted, 0.0)
            widths[name].append((found.high - found.low) / (2.0 * 1.96 * bound.get(name, math.inf)))
    assert all(count >= 9 for count in inside.values()), inside
    # r = 1 / 4 zeta^2 cannot be told from 0 where its bound reaches that far; zeta is then open upwards
    open_above = 0.25 / truth.zeta**2 < 1.96 * bound["zeta"] / (2.0 * truth.zeta**3)
    assert open_above == (truth.zeta > 2.0)
    if open_above:
        assert np.mean(np.isinf(widths["zeta"])) > 0.5
        return
    for name in ("zeta", "omega", "gain"):
        middle = float(np.median(widths[name]))
        # with none there, half of the intervals of the dead time are cut at 0, which narrows the others
        assert (0.8 if delay else 0.4) < middle < 1.3, (name, middle)


def test_series_circuit_overdamped() -> None:
    """Charge in L q'' + R q' + q / C = V (Kirchhoff): two real lags."""
    inductance, resistance, capacitance = 0.5, 30.0, 0.004
    slow, fast = sorted(-1.0 / np.roots([inductance, resistance, 1.0 / capacitance]), reverse=True)
    time = np.linspace(-0.05, 0.9, 250)
    row = int(np.searchsorted(time, 0.0))
    charge = integrated(
        lambda _, x: [x[1], (12.0 - resistance * x[1] - x[0] / capacitance) / inductance],
        float(time[row]),
        [0.0, 0.0],
        time,
    )[0]
    model = loopfit.analyze(time=time, measurement=charge, output=np.where(time >= time[row], 12.0, 0.0)).model
    assert model.regime == "overdamped"
    assert [lag.value for lag in model.time_constants_s] == pytest.approx([slow, fast], rel=BY_ROWS)
    assert model.gain.value == pytest.approx(capacitance, rel=BY_ROWS)


@pytest.mark.parametrize("proportional", [0.6, 2.5, 12.0])
def test_servo_in_automatic(proportional: float) -> None:
    """A drive with a lag under proportional position control: T y'' + y' + K y = K r, setpoint stepped.

    omega = sqrt(K / T), zeta = 1 / (2 sqrt(K T)) by comparing coefficients. The output column moves all the time.
    """
    lag = 0.4
    time = np.linspace(-2.0, 18.0, 250)
    row = int(np.searchsorted(time, 0.0))
    at = float(time[row])
    setpoint = np.where(np.arange(time.size) < row, 5.0, 7.5)
    states = integrated(lambda _, x: [x[1], (proportional * (7.5 - x[0]) - x[1]) / lag], at, [5.0, 0.0], time)
    output = proportional * (setpoint - states[0])
    analysis = loopfit.analyze(time=time, measurement=states[0], setpoint=setpoint, output=output)
    assert analysis.step.signal == "setpoint"
    assert analysis.model.natural_frequency_rad_s.value == pytest.approx(math.sqrt(proportional / lag), rel=BY_ROWS)
    assert analysis.model.damping_ratio.value == pytest.approx(0.5 / math.sqrt(proportional * lag), rel=BY_ROWS)
    assert analysis.model.gain.value == pytest.approx(1.0, rel=BY_ROWS)


@pytest.mark.parametrize("zeta", [0.04, 0.4, 1.0, 1.8])
@pytest.mark.parametrize("push", [0.0, -1.5, 2.0])
def test_release_with_and_without_a_push(zeta: float, push: float) -> None:
    """A mass let go from 3 with initial speed push, spring and damper about the rest value 20."""
    omega = 2.0
    slowest = Truth(zeta=zeta * 1.0001, omega=omega).slowest
    time = np.linspace(0.0, 6.0 * slowest, 250)
    motion = integrated(
        lambda _, x: [x[1], -(omega**2) * x[0] - 2 * zeta * omega * x[1]], 0.0, [3.0, push * 3.0 * omega], time
    )[0]
    analysis = loopfit.analyze(time=time + 7.0, measurement=20.0 + motion)
    assert analysis.step is None
    assert analysis.model.damping_ratio.value == pytest.approx(zeta, rel=10 * BY_ROWS)
    assert analysis.model.natural_frequency_rad_s.value == pytest.approx(omega, rel=10 * BY_ROWS)
    rng = np.random.default_rng(5)
    noisy = loopfit.analyze(time=time + 7.0, measurement=20.0 + motion + 0.03 * rng.standard_normal(time.size)).model
    # one record of 12 cells: a miss by up to half an interval beyond its end is still 95 % intervals' behaviour
    found = noisy.damping_ratio
    reach = min(found.high, 10.0) - found.value + found.value - found.low
    assert holds(found, zeta, 0.5 * reach)


@pytest.mark.parametrize("step", [1, 2, 3])
@pytest.mark.parametrize("zeta", [0.2, 0.6, 1.3])
def test_staircase_by_python_control(zeta: float, step: int) -> None:
    """A setpoint in three stairs with dead time of 7 rows, by forced_response (exact for a held input).

    The first step is exact; of a later one the tail of the step before may be left out, 2 % at most here (that of
    zeta 0.2 after 200 rows, exp(-0.2 x 1.1 x 20), and twice the size).
    """
    omega, interval, delay = 1.1, 0.1, 7
    system = control.TransferFunction([3.0 * omega**2], [1.0, 2.0 * zeta * omega, omega**2])
    discrete = control.sample_system(control.tf2ss(system), interval, method="zoh")
    rows = np.arange(750)
    levels = np.select([rows < 50, rows < 300, rows < 500], [0.0, 1.0, 2.5], 1.0)
    held = np.concatenate([np.zeros(delay), levels[:-delay]])
    response = control.forced_response(discrete, rows * interval, held)
    model = loopfit.analyze(
        time=rows * interval, measurement=40.0 + response.outputs, output=levels + 30.0, step=step
    ).model
    rel = IN_BINS if step == 1 else 0.02
    for found, truth in (
        (model.damping_ratio, zeta),
        (model.natural_frequency_rad_s, omega),
        (model.gain, 3.0),
        (model.dead_time_s, delay * interval),
    ):
        assert found.value == pytest.approx(truth, rel=0, abs=rel * max(truth, 1.0))
        assert holds(found, truth, 1e-3)


@pytest.mark.parametrize("zeta", [0.25, 1.5])
def test_uneven_sampling(zeta: float) -> None:
    """Rows at random instants, as from a logger that writes on change; dead time between rows."""
    rng = np.random.default_rng(8)
    truth = Truth(gain=-2.0, zeta=zeta, omega=0.7, dead_time=1.234)
    time = np.sort(np.concatenate([rng.uniform(-10.0, 60.0, 220), [0.0]]))
    clean = unit_response(truth, time)
    output = np.where(time >= 0, 4.0, 3.0)
    model = loopfit.analyze(time=time, measurement=clean, output=output).model
    assert model.damping_ratio.value == pytest.approx(zeta, rel=BY_ROWS)
    assert model.dead_time_s.value == pytest.approx(1.234, rel=BY_ROWS)
    noisy = loopfit.analyze(time=time, measurement=clean + 0.02 * rng.standard_normal(time.size), output=output).model
    assert holds(noisy.damping_ratio, zeta, 0.0)
    assert holds(noisy.dead_time_s, 1.234, 0.0)


@pytest.mark.parametrize("even", [True, False])
def test_long_record_agrees_with_its_thinned_self(even: bool) -> None:
    """100,000 rows: an interval near the Cramer-Rao bound holds the truth; that of 1 row in 100 holds the value."""
    rng = np.random.default_rng(21)
    truth = Truth(gain=5.0, zeta=0.45, omega=0.05, dead_time=11.0)
    rows = 100_000
    time = np.linspace(-100.0, 500.0, rows) if even else np.sort(rng.uniform(-100.0, 500.0, rows))
    row = int(np.searchsorted(time, 0.0))
    noise = 0.1
    values = unit_response(truth, time - time[row]) + noise * rng.standard_normal(rows)
    output = np.where(np.arange(rows) < row, 0.0, 1.0)
    long = loopfit.analyze(time=time, measurement=values, output=output).model
    bound = bound_of(truth, 1.0, time - time[row], noise)
    for name, found in (
        ("zeta", long.damping_ratio),
        ("omega", long.natural_frequency_rad_s),
        ("gain", long.gain),
        ("dead_time", long.dead_time_s),
    ):
        assert holds(found, getattr(truth, name), 0.0), name
        # bins lose at most 0.1 % of the information, rounding of the walk some per cent
        assert (found.high - found.low) / (2 * 1.96 * bound[name]) == pytest.approx(1.0, abs=0.1), name
    keep = np.union1d(np.arange(row % 100, rows, 100), [row])
    thin = loopfit.analyze(time=time[keep], measurement=values[keep], output=output[keep]).model
    for name in ("damping_ratio", "natural_frequency_rad_s", "gain", "dead_time_s"):
        assert holds(getattr(thin, name), getattr(long, name).value, 0.0), name
