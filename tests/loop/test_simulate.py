"""Simulated and exact responses against independent integration, printed values and laws."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import solve_ivp
from scipy.linalg import expm

from loopfit.core.errors import UsageError
from loopfit.loop.gains import Gains
from loopfit.loop.plant import Plant
from loopfit.loop.response import respond
from loopfit.loop.response_figures import load_figures, load_integrated_error, setpoint_figures
from loopfit.loop.sampled import sampled_roots
from loopfit.loop.simulate import simulate
from loopfit.loop.state_space import exponential
from loopfit.model.transfer import transfer_of

PLANT = Plant(gain=2.0, damping_ratio=0.6, natural_frequency_rad_s=1.0, dead_time_s=0.73)
GAINS = Gains(kp=0.3, ki=0.25, kd=0.3, filter_s=0.2)


def reference_scans(scans: int, h: float, r: float, d: float, low: float, high: float, rate: float) -> tuple[Any, Any]:
    """Return measurement and output of PLANT under GAINS, the plant integrated by scipy from event to event."""
    output = [0.0] * scans
    y, state, now = np.zeros(scans), np.zeros(2), 0.0
    integral = slope = last_y = u = 0.0

    def delayed(t: float) -> float:
        k = math.floor((t - PLANT.dead_time_s) / h)
        return output[k] + d if k >= 0 else 0.0

    for k in range(scans):
        for until in sorted({k * h, *(e for e in ((k - 1) * h + PLANT.dead_time_s % h,) if now < e < k * h)}):
            if until > now:
                held = delayed(0.5 * (now + until))

                def motion(_: float, x: Any, held: float = held) -> list[float]:
                    return [x[1], 2.0 * held - 1.2 * x[1] - x[0]]

                state = solve_ivp(motion, (now, until), state, method="DOP853", rtol=1e-12, atol=1e-14).y[:, -1]
                now = until
        y[k] = state[0]
        slope = (0.2 * slope - 0.3 * (y[k] - last_y)) / (0.2 + h)
        last_y = y[k]
        move = 0.25 * h * (r - y[k])
        integral += move
        wanted = 0.3 * (r - y[k]) + integral + slope
        top, bottom = min(high, u + rate * h), max(low, u - rate * h)
        if (wanted > top and move > 0) or (wanted < bottom and move <= 0):
            integral -= move
            wanted -= move
        u = min(max(wanted, bottom), top)
        output[k] = u
    return y, np.array(output)


@pytest.mark.parametrize("scan", [0.2, 0.73, 1.1])
def test_limits_and_rate_as_scipy(scan: float) -> None:
    high = 0.402 if scan < 1 else 0.36
    # dead time 3.65 scans, 1 scan, less than a scan
    y, u = reference_scans(60, scan, 1.0, 0.1, -0.1, high, 0.2)
    limits: dict[str, Any] = {"output_limits": (-0.1, high), "rate_limit": 0.2, "scan_s": scan, "scans": 60}
    found = simulate(PLANT, GAINS, setpoint=1.0, load=0.1, **limits)
    assert np.any(u == high)
    assert np.any(np.isclose(np.diff(u, prepend=0.0), 0.2 * scan))
    np.testing.assert_allclose(found.measurement, y, rtol=0, atol=1e-10)  # integrator: rtol 1e-12 a step
    np.testing.assert_allclose(found.output, u, rtol=0, atol=1e-10)


@pytest.mark.parametrize("lags", [(3.0,), (3.0, 1.0), (4.0, 2.0, 1.0, 0.2)])
def test_many_loops_are_one_loop_each(lags: tuple[float, ...]) -> None:
    rng = np.random.default_rng(7)
    plants = [Plant(gain=1.5, time_constants_s=lags, dead_time_s=delay) for delay in (0.0, 0.4, 1.23)] + [
        Plant(gain=-1.0, time_constants_s=(2.0,), zero_s=-0.5, integrating=True, dead_time_s=0.5)
    ]
    gains = [
        Gains(kp=0.8, ki=0.2),
        Gains(kp=0.5, ki=0.1, kd=0.4, filter_s=0.1, setpoint_weight=0.6, derivative_on_error=True),
        Gains(kp=0.7),
        Gains(kp=-0.2, ki=-0.02),
    ]
    for anti_windup in ("none", "conditional integration", "back calculation"):
        more: dict[str, Any] = {
            "scan_s": 0.3, "scans": 200, "setpoint": 51.0, "initial_measurement": 50.0, "initial_output": 30.0, "load": np.where(np.arange(200) < 100, 0.0, -1.0),
            "output_limits": (29.5, 31.2), "rate_limit": 0.5, "deadband": 0.1, "measurement_resolution": 0.01, "output_resolution": 0.02,
            "noise": 0.02 * rng.standard_normal(200), "anti_windup": anti_windup, "late": anti_windup == "none",
        }  # fmt: skip
        many = simulate(plants, gains, **more)
        assert many.measurement.shape == (200, 4)
        for i, (plant, one) in enumerate(zip(plants, gains, strict=True)):
            alone = simulate(plant, one, **more)
            # a value that rounds the other way by a last bit would show as a whole unit: none does
            np.testing.assert_allclose(many.measurement[:, i], alone.measurement, rtol=0, atol=1e-9)
            np.testing.assert_allclose(many.output[:, i], alone.output, rtol=0, atol=1e-9)


def test_manual_step_is_the_step_response() -> None:
    # 1 - (T1 e^{-t/T1} - T2 e^{-t/T2})/(T1 - T2) (Ogata, Modern Control Engineering, section 5-3), T 3 and 1 s, dead time 1.27 s
    found = simulate(
        Plant(gain=4.0, time_constants_s=(3.0, 1.0), dead_time_s=1.27), scan_s=0.5, scans=60,
        output=np.where(np.arange(60) >= 4, 42.0, 40.0), initial_measurement=100.0, initial_output=40.0,
    )  # fmt: skip
    t = np.maximum(found.time - 2.0 - 1.27, 0.0)
    exact = 100.0 + 8.0 * (1 - (3 * np.exp(-t / 3) - np.exp(-t)) / 2)
    np.testing.assert_allclose(found.measurement, exact, rtol=0, atol=1e-11)


def test_starts_at_rest_and_stays_there() -> None:
    for gains in (GAINS, Gains(kp=0.4)):
        found = simulate(
            PLANT, gains, scan_s=0.2, scans=50, initial_measurement=20.0, initial_output=35.0, initial_setpoint=20.0
        )
        np.testing.assert_allclose(found.measurement, 20.0, rtol=1e-13)
        np.testing.assert_allclose(found.output, 35.0, rtol=1e-13)


def test_lost_motion_swallows_a_reversal() -> None:
    # full width 1: from the middle the first 0.5 is lost, after a reversal 1 (the law of play, common practice)
    output = np.array([0.0, 0.4, 0.9, 2.0, 1.5, 1.0, 0.5, 0.0, 0.0])
    found = simulate(Plant(gain=1.0, dead_time_s=0.5), scan_s=1.0, scans=9, output=output, deadband=1.0)
    np.testing.assert_allclose(found.measurement[1:], [0.0, 0.0, 0.4, 1.5, 1.5, 1.5, 1.0, 0.5])


def test_resolution_rounds_to_whole_units() -> None:
    found = simulate(
        PLANT, GAINS, scan_s=0.1, scans=300, setpoint=1.0, measurement_resolution=0.05, output_resolution=0.125
    )
    for values, unit in ((found.measurement, 0.05), (found.output, 0.125)):
        np.testing.assert_allclose(values / unit, np.round(values / unit), atol=1e-9)


def test_anti_windup_shortens_the_recovery() -> None:
    plant, gains = Plant(gain=1.0, time_constants_s=(10.0, 2.0), dead_time_s=1.0), Gains(kp=3.0, ki=0.3)
    top = {
        scheme: float(simulate(plant, gains, scan_s=0.25, scans=800, setpoint=1.0, output_limits=(0.0, 1.1), anti_windup=scheme).measurement.max())
        for scheme in ("none", "conditional integration", "back calculation")
    }  # fmt: skip
    assert top["none"] > 1.04
    assert top["conditional integration"] < top["none"] - 0.02
    assert top["back calculation"] < top["none"] - 0.02


def test_late_output_is_one_scan_of_dead_time() -> None:
    more = Plant(gain=2.0, damping_ratio=0.6, natural_frequency_rad_s=1.0, dead_time_s=0.73 + 0.2)
    late = simulate(PLANT, GAINS, scan_s=0.2, scans=200, setpoint=1.0, load=0.0, late=True)
    np.testing.assert_allclose(
        late.measurement, simulate(more, GAINS, scan_s=0.2, scans=200, setpoint=1.0).measurement, atol=1e-11
    )


@pytest.mark.parametrize(
    "arguments",
    [
        {"scan_s": 0.0},
        {"scans": 0},
        {"setpoint": [1.0, 2.0]},
        {"noise": math.nan},
        {"output_limits": (1.0, 1.0)},
        {"anti_windup": "some"},
        {"output": 1.0},
        {"rate_limit": math.nan},
        {"deadband": -1.0},
    ],
)
def test_what_makes_no_sense_is_refused(arguments: dict[str, Any]) -> None:
    with pytest.raises(UsageError):
        simulate(PLANT, GAINS, **{"scan_s": 0.1, "scans": 10, **arguments})


def test_matrix_exponential_as_scipy() -> None:
    rng = np.random.default_rng(7)
    stack = rng.standard_normal((20, 4, 4)) * np.geomspace(1e-6, 30, 20)[:, None, None]
    for ours, theirs in zip(exponential(stack), expm(stack), strict=True):
        assert np.abs(ours - theirs).max() <= 1e-12 * np.abs(theirs).max()


@pytest.mark.parametrize("scan", [0.2, 0.3, 1.0])
def test_linear_scans_obey_the_sampled_roots(scan: float) -> None:
    # a linear sequence fades by the polynomial of its roots (Cayley and Hamilton); the roots come from another module
    roots = sampled_roots(PLANT, GAINS, scan)
    error = simulate(PLANT, GAINS, scan_s=scan, scans=60, setpoint=1.0).measurement - 1.0
    left = np.convolve(error, np.poly(roots).real)[roots.size + 6 : 60]
    assert np.abs(left).max() < 1e-10
    assert np.abs(error[10:]).max() > 1e-3


# continuous controller


def by_steps(plant: Plant, gains: Gains, r: float, d: float, intervals: int) -> Callable[[Any], Any]:
    """Return y(t) of a second-order PLANT-like loop by the method of steps with scipy's DOP853 and its dense output."""
    wn, zeta, delay = plant.natural_frequency_rad_s or 0, plant.damping_ratio or 0, plant.dead_time_s
    parts: list[Any] = []

    def inlet(i: int, t: float) -> float:
        if i == 0:
            return 0.0
        x, _, integral, smooth = parts[i - 1](t - delay)
        return gains.kp * (gains.setpoint_weight * r - x) + integral + gains.kd / gains.filter_s * (-x - smooth) + d

    state = np.zeros(4)
    for i in range(intervals):

        def motion(t: float, z: Any, i: int = i) -> list[float]:
            x, v, _, smooth = z
            return [
                v,
                wn**2 * (plant.gain * inlet(i, t) - x) - 2 * zeta * wn * v,
                gains.ki * (r - x),
                (-x - smooth) / gains.filter_s,
            ]

        solved = solve_ivp(
            motion, (i * delay, (i + 1) * delay), state, method="DOP853", rtol=1e-11, atol=1e-12, dense_output=True
        )
        parts.append(solved.sol)
        state = solved.y[:, -1]
    return lambda t: np.array([parts[min(int(one / delay), intervals - 1)](one)[0] for one in t])


def test_exact_response_as_scipy_by_steps() -> None:
    t = np.linspace(0.0, 14.0, 141)
    found = respond(PLANT, GAINS, time=t, setpoint_step=1.0, load_step=0.4)
    # dense output of DOP853 is of order 7: 1e-8 at these tolerances
    np.testing.assert_allclose(found.measurement, by_steps(PLANT, GAINS, 1.0, 0.4, 20)(t), rtol=0, atol=1e-8)


def test_exact_response_without_dead_time() -> None:
    # PI on an integrator, k = 1, kp = 2, ki = 1: (2 s + 1)/(s + 1)^2, by hand y = 1 + (t - 1) e^-t;
    # peak 1 + e^-2 at 2 s
    t = np.linspace(0.0, 20.0, 2001)
    found = respond(Plant(gain=1.0, integrating=True), Gains(kp=2.0, ki=1.0), time=t, setpoint_step=1.0)
    np.testing.assert_allclose(
        found.measurement, 1 + (t - 1) * np.exp(-t), rtol=0, atol=1e-10
    )  # degree 14 on pieces of 4 time constants
    figures = setpoint_figures(t, found.measurement, initial=0.0, final=1.0)
    assert figures.overshoot_percent == pytest.approx(100 * math.exp(-2), abs=1e-4)  # parabola, interval 0.01 s
    assert figures.peak_time_s == pytest.approx(2.0, abs=1e-4)
    assert figures.rise_time_s == pytest.approx(0.7295403627, abs=1e-4)  # (t - 1) e^-t = -0.1 and -0.9 by scipy brentq
    assert figures.settling_time_s == pytest.approx(5.391751018, abs=1e-4)  # (t - 1) e^-t = 0.02 likewise


def test_integral_loop_on_dead_time_by_hand() -> None:
    # y' = 0.5 (1 - y(t - 1)) from t = 1: 1/2 at 2, 7/8 at 3, 49/48 at 4 (polynomials by hand); Skogestad 2003 gives about
    # 4 % overshoot for it (from memory)
    plant, gains = Plant(gain=1.0, integrating=True, dead_time_s=1.0), Gains(kp=0.5)
    np.testing.assert_allclose(
        respond(plant, gains, time=[2, 3, 4], setpoint_step=1.0).measurement, [1 / 2, 7 / 8, 49 / 48], rtol=1e-12
    )
    t = np.linspace(0, 30, 3001)
    figures = setpoint_figures(t, respond(plant, gains, time=t, setpoint_step=1.0).measurement, initial=0.0, final=1.0)
    assert figures.overshoot_percent == pytest.approx(4.0, abs=0.5)
    # k theta = 1: 50 % at 3 dead times, a parabola there (by hand)
    fast = respond(plant, Gains(kp=1.0), time=t, setpoint_step=1.0)
    assert setpoint_figures(t, fast.measurement, initial=0.0, final=1.0).overshoot_percent == pytest.approx(
        50.0, abs=1e-7
    )  # the third derivative jumps there


def test_cancelled_lag_is_the_same_loop() -> None:
    # e^-s/(5 s + 1) with PI (2.5, 5): y is the integral loop of the test above
    t = np.linspace(0, 20, 201)
    found = respond(
        Plant(gain=1.0, time_constants_s=(5.0,), dead_time_s=1.0), Gains(kp=2.5, ki=0.5), time=t, setpoint_step=1.0
    )
    other = respond(Plant(gain=1.0, integrating=True, dead_time_s=1.0), Gains(kp=0.5), time=t, setpoint_step=1.0)
    np.testing.assert_allclose(found.measurement, other.measurement, rtol=0, atol=1e-10)


@pytest.mark.parametrize("delay", [0.0, 1e-3, 0.3, 2.0])
@pytest.mark.parametrize("lags", [(4.0,), (4.0, 1.5), (4.0, 1.5, 0.01)])
def test_integrated_error_is_one_over_ki(delay: float, lags: tuple[float, ...]) -> None:
    gains = Gains(kp=0.6, ki=0.12, kd=0.3, filter_s=0.1)
    t = np.linspace(0, 200, 40001)
    found = respond(Plant(gain=1.4, time_constants_s=lags, dead_time_s=delay), gains, time=t, load_step=2.0)
    law = load_integrated_error(gains, 2.0)
    assert law == -2.0 / 0.12
    figures = load_figures(t, found.measurement, 0.0)
    assert figures.integrated_error == pytest.approx(law, rel=1e-6)  # trapezia of 0.005 s
    assert figures.absolute_error >= abs(figures.integrated_error) * (1 - 1e-12)
    assert figures.peak > 0
    # the sampled loop keeps the law, with the sum over the scans
    sampled = simulate(
        Plant(gain=1.4, time_constants_s=lags, dead_time_s=delay), gains, scan_s=0.2, scans=2000, load=2.0
    )
    assert -0.2 * sampled.measurement.sum() == pytest.approx(law, rel=1e-9)


@settings(deadline=None, max_examples=40)
@given(
    a=st.floats(-5, 5), b=st.floats(-5, 5), delay=st.sampled_from([0.0]) | st.floats(0.01, 3), zeta=st.floats(0.1, 3)
)
def test_superposition(a: float, b: float, delay: float, zeta: float) -> None:
    plant = Plant(gain=2.0, damping_ratio=zeta, natural_frequency_rad_s=1.0, dead_time_s=delay)
    gains, t = Gains(kp=0.2, ki=0.1, kd=0.1, filter_s=0.1, setpoint_weight=0.7), np.linspace(0, 15, 40)
    both = respond(plant, gains, time=t, setpoint_step=a, load_step=b).measurement
    apart = (
        a * respond(plant, gains, time=t, setpoint_step=1.0).measurement
        + b * respond(plant, gains, time=t, load_step=1.0).measurement
    )
    np.testing.assert_allclose(both, apart, rtol=0, atol=1e-10)
    scans: dict[str, Any] = {"scan_s": 0.3, "scans": 50}
    both = simulate(plant, gains, setpoint=a, load=b, **scans).measurement
    apart = (
        a * simulate(plant, gains, setpoint=1.0, **scans).measurement
        + b * simulate(plant, gains, load=1.0, **scans).measurement
    )
    np.testing.assert_allclose(both, apart, rtol=0, atol=1e-10)


def test_scans_converge_to_the_continuous_controller() -> None:
    # backward differences and a hold: first order in the scan interval
    t = np.linspace(0, 30, 61)
    exact = respond(PLANT, GAINS, time=t, setpoint_step=1.0, load_step=0.3).measurement
    errors = []
    for per in (10, 20, 40):
        found = simulate(PLANT, GAINS, scan_s=0.5 / per, scans=60 * per + 1, setpoint=1.0, load=0.3).measurement[::per]
        errors.append(found - exact)
    assert np.abs(2 * errors[1] - errors[0]).max() < 0.2 * np.abs(errors[1]).max()
    assert np.abs(2 * errors[2] - errors[1]).max() < 0.1 * np.abs(errors[2]).max()


def test_short_and_stiff_dead_times_are_followed() -> None:
    t, gains = np.linspace(0, 30, 31), Gains(kp=0.6, ki=0.2, kd=0.3, filter_s=0.01)
    none = respond(Plant(gain=1.4, time_constants_s=(4.0, 1.5)), gains, time=t, setpoint_step=1.0)
    short = respond(Plant(gain=1.4, time_constants_s=(4.0, 1.5), dead_time_s=1e-6), gains, time=t, setpoint_step=1.0)
    np.testing.assert_allclose(
        short.measurement, none.measurement, rtol=0, atol=2e-6
    )  # the dead time times a slope below 1
    # a lag of 1e-5 s beside 4 s is not to be seen but for its own length in the dead time
    stiff = respond(
        Plant(gain=1.4, time_constants_s=(4.0, 1.5, 1e-5), dead_time_s=1.0), gains, time=t, setpoint_step=1.0
    )
    plain = respond(Plant(gain=1.4, time_constants_s=(4.0, 1.5), dead_time_s=1.0), gains, time=t, setpoint_step=1.0)
    np.testing.assert_allclose(stiff.measurement, plain.measurement, rtol=0, atol=2e-5)


def test_many_fast_swings_are_followed_or_refused() -> None:
    # a swing of 500 rad/s beside a lag of 4 s: to be seen only as the delay 2 zeta / wn that it adds
    fast = Plant.of_transfer(
        transfer_of([1.0], np.convolve([4.0, 1.0], [1 / 500**2, 2 * 0.05 / 500, 1.0]).tolist(), 1.0)
    )
    t, gains = np.linspace(0.0, 60.0, 61), Gains(kp=0.5, ki=0.1)
    found = respond(fast, gains, time=t, setpoint_step=1.0).measurement
    plain = respond(
        Plant(gain=1.0, time_constants_s=(4.0,), dead_time_s=1.0), gains, time=t, setpoint_step=1.0
    ).measurement
    np.testing.assert_allclose(
        found, plain, rtol=0, atol=1e-4
    )  # the mode delays by 2 zeta / wn = 2e-4 s, slope below 1/2
    with pytest.raises(UsageError, match="too fast"):
        respond(fast, gains, time=[1e5], setpoint_step=1.0)


def test_plant_with_direct_term() -> None:
    # P controller K = 0.5 on e^-s: staircase 0.5, 0.25, 0.375, ... (by hand: y_k = 0.5 (1 - y_{k-1}))
    found = respond(Plant(gain=1.0, dead_time_s=1.0), Gains(kp=0.5), time=[0.5, 1.5, 2.5, 3.5, 4.0], setpoint_step=1.0)
    np.testing.assert_allclose(found.measurement, [0, 0.5, 0.25, 0.375, 0.3125], rtol=0, atol=1e-13)
    with pytest.raises(UsageError, match="no solution"):
        respond(Plant.of_transfer(transfer_of([-1, 1], [1, 1])), Gains(kp=1.0), time=[1.0], setpoint_step=1.0)
