"""Margins against printed values, laws, and independent computations."""

from __future__ import annotations

import math

import control
import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from loopfit.loop.gains import Gains
from loopfit.loop.margins import Margins, margins_of
from loopfit.loop.open_loop import open_loop
from loopfit.loop.plant import Plant
from loopfit.model.transfer import transfer_of

SIMC = "S. Skogestad, Simple analytic rules for model reduction and PID controller tuning, J. Process Control 13, 2003; from memory"
LIBRARY = "python-control 0.10.2, control/tests/margin_test.py (BSD-3-Clause)"
NEAR_IDEAL = 1e-9  # filter of a derivative that the source has without one, s; moves the figures by less than 1e-7


def pi(gain: float, integral: float) -> Gains:
    return Gains(kp=gain, ki=gain / integral)


def series(gain: float, integral: float, derivative: float) -> Gains:
    # K (1 + 1/(Ti s)) (1 + Td s): common practice
    return Gains(kp=gain * (1 + derivative / integral), ki=gain / integral, kd=gain * derivative, filter_s=NEAR_IDEAL)


def loop(
    numerator: list[float], denominator: list[float], dead_time: float = 0.0, gains: Gains | None = None
) -> Margins:
    return margins_of(Plant.of_transfer(transfer_of(numerator, denominator, dead_time)), gains or Gains(kp=1.0))


PRINTED = [  # numerator, denominator, dead time, gains, {field: (printed, tolerance: half the last digit)}, source
    (
        [1],
        [1],
        1.0,
        Gains(kp=0.0, ki=0.5),
        {
            "gain_margin": (3.14, 0.005),
            "phase_margin_deg": (61.4, 0.05),
            "max_sensitivity": (1.59, 0.005),
            "max_complementary_sensitivity": (1.00, 0.005),
            "delay_margin_s": (2.14, 0.005),
        },
        SIMC + ", table 1",
    ),
    (
        [1],
        [5, 1],
        1.0,
        pi(2.5, 5),
        {"gain_margin": (3.14, 0.005), "phase_margin_deg": (61.4, 0.05), "max_sensitivity": (1.59, 0.005)},
        SIMC + ", table 1",
    ),
    (
        [1],
        [1, 0],
        1.0,
        pi(0.5, 8),
        {
            "gain_margin": (2.96, 0.005),
            "phase_margin_deg": (46.9, 0.05),
            "max_sensitivity": (1.70, 0.005),
            "max_complementary_sensitivity": (1.30, 0.005),
            "delay_margin_s": (1.59, 0.005),
        },
        SIMC + ", table 1",
    ),
    ([1], [1, 0, 0], 1.0, series(0.0625, 8, 8), {"max_sensitivity": (1.96, 0.005)}, SIMC),
    ([1], [0.2, 1.2, 1], 0.0, pi(5.5, 0.8), {"max_sensitivity": (1.56, 0.005)}, SIMC + ", example E1"),
    (
        [30, 2],
        [0.2, 4.21, 24.21, 21.2, 1],
        0.0,
        pi(7 / 3, 1.05),
        {"max_sensitivity": (1.55, 0.005)},
        SIMC + ", example E3",
    ),
    ([1], [1, 2, 1], 1.0, pi(0.5, 1.5), {"max_sensitivity": (1.61, 0.005)}, SIMC + ", example E9"),
    ([-1, 1], [1, 0], 0.0, pi(0.5, 8), {"max_sensitivity": (2.0, 0.05)}, SIMC + ", example E14"),
    ([-1, 1], [1, 1], 0.0, pi(0.5, 1), {"max_sensitivity": (2.0, 0.05)}, SIMC + ", example E15"),
    ([1], [1, 2, 1], 1.0, series(0.5, 1, 1), {"max_sensitivity": (1.59, 0.005)}, SIMC + ", example E9, series PID"),
    ([1], [40, 22, 1], 1.0, series(10, 8, 2), {"max_sensitivity": (1.65, 0.005)}, SIMC + ", example E10, series PID"),
    (
        [-2, 1],
        [1, 3, 3, 1],
        0.0,
        series(0.3, 1.5, 1),
        {"max_sensitivity": (1.85, 0.005)},
        SIMC + ", example E7, series PID",
    ),
    (
        [6],
        [1, 4, 6, 4],
        0.0,
        None,
        {"phase_margin_deg": (67.7, 0.05)},
        "N. Nise, Control Systems Engineering, 6th ed. 2011, section 10.6; from memory",
    ),
    ([1], [1, 2, 3, 4], 0.0, None, {"gain_margin": (2.0, 0.05), "max_sensitivity_at_rad_s": (1.6620, 5e-5)}, LIBRARY),
    (
        [-0.01, 0.1],
        [1, 3, 2],
        0.0,
        None,
        {"gain_margin": (300.0, 0.05), "max_sensitivity_at_rad_s": (2.3171, 5e-5)},
        LIBRARY,
    ),
    (
        [35, 3.5, 8.75],
        [1, 1.03, 101.1862, 23.81176, 100.228, 1],
        0.0,
        None,
        {"gain_margin": (2.2716, 5e-5), "max_sensitivity_at_rad_s": (9.9918, 5e-5)},
        LIBRARY,
    ),
    # the library interpolates on a grid: its own tests allow 0.01 on the figures below
    ([2], [1, 3, 3, 1], 0.0, None, {"gain_margin": (4.0, 0.01), "phase_margin_deg": (67.6058, 0.01)}, LIBRARY),
    ([1, 0.1], [1, 1, 0, 0], 0.0, None, {"phase_margin_deg": (44.4594, 0.01), "gain_margin": (math.inf, 0)}, LIBRARY),
    (
        [1, 0.2, 0.01],
        [1, 1, 0, 0, 0],
        0.0,
        None,
        {"phase_margin_deg": (37.1748, 0.01), "gain_reduction_margin": (0.0626, 0.01)},
        LIBRARY,
    ),
    (
        [35, 3.5, 8.75],
        [1, 1.03, 101.1862, 23.81176, 100.228, 1],
        0.0,
        None,
        {"phase_margin_deg": (97.5941, 0.01)},
        LIBRARY,
    ),
]


@pytest.mark.parametrize(("numerator", "denominator", "dead_time", "gains", "printed", "source"), PRINTED)
def test_margins_as_printed(numerator, denominator, dead_time, gains, printed, source) -> None:  # type: ignore[no-untyped-def]
    found = loop(numerator, denominator, dead_time, gains)
    assert found.stable
    for name, (value, tolerance) in printed.items():
        assert getattr(found, name) == pytest.approx(value, rel=0, abs=tolerance), (name, source)


LAWS = [  # numerator, denominator, dead time, gains, {field: exact}, where from
    # L = e^-s / (2 s): |L| = 1 at 1/2, phase -180 deg at pi/2
    (
        [1],
        [1],
        1.0,
        Gains(kp=0, ki=0.5),
        {"gain_margin": math.pi, "phase_margin_deg": 90 - math.degrees(0.5), "delay_margin_s": math.pi - 1},
        "by hand",
    ),
    ([1], [1, 3, 3, 1], 0.0, None, {"gain_margin": 8.0}, "1/(s+1)^3 becomes unstable at 8: every text"),
    (
        [10],
        [1, 6, 5, 0],
        0.0,
        None,
        {"gain_margin": 3.0},
        "s (s+1)(s+5) + K: Routh gives K = 30 (Ogata, 5th ed., Example 8-1; from memory)",
    ),
    (
        [1],
        [10, 17, 8, 1],
        0.0,
        None,
        {"gain_margin": 12.6},
        "Seborg, Edgar, Mellichamp, 3rd ed., Example 11.8, by Routh; from memory",
    ),
    ([6], [1, 4, 6, 4], 0.0, None, {"gain_margin": 10 / 3}, "Routh: 4 * 6 = 4 + 6 K"),
    ([1], [0.2, 1.2, 1, 0], 0.0, None, {"gain_margin": 6.0}, "Routh"),
    (
        [1, 0.2, 0.01],
        [1, 1, 0, 0, 0],
        0.0,
        None,
        {"gain_reduction_margin": 1 / 16},
        "Routh: k 0.2 k = (0.2 k)^2 + 0.01 k",
    ),
    # an inverting plant: the coefficient of s^2 in s^2 (1 - k/2) + ... turns at k = 2, a root passes through infinity
    ([-1, 1], [1, 0], 0.0, pi(0.5, 8), {"gain_margin": 2.0, "max_sensitivity": 2.0}, "by hand"),
    (
        [2],
        [1, -1],
        0.0,
        None,
        {"gain_reduction_margin": 0.5, "phase_margin_deg": 60.0},
        "2/(s-1): pole 1 - 2 k; |L| = 1 at sqrt 3",
    ),
    (
        [0.5],
        [1],
        2.0,
        None,
        {"gain_margin": 2.0, "max_sensitivity": 2.0, "delay_margin_s": math.inf, "phase_margin_deg": math.inf},
        "0.5 e^-2s",
    ),
]


@pytest.mark.parametrize(("numerator", "denominator", "dead_time", "gains", "exact", "source"), LAWS)
def test_margins_by_law(numerator, denominator, dead_time, gains, exact, source) -> None:  # type: ignore[no-untyped-def]
    found = loop(numerator, denominator, dead_time, gains)
    assert found.stable
    for name, value in exact.items():
        assert getattr(found, name) == pytest.approx(value, rel=1e-9), (name, source)


def test_chart_readings_are_not_exact() -> None:
    # Ogata, 5th ed., Example 7-20 reads 8 dB and 21 deg off an asymptotic plot, 100: -12 dB, -30 deg; Dorf and Bishop,
    # 12th ed., section 9.4: 15 dB (both from memory). Routh gives 3, 0.3 and 6 exactly.
    assert 20 * math.log10(loop([10], [1, 6, 5, 0]).gain_margin or 0) == pytest.approx(20 * math.log10(3), abs=1e-9)
    unstable = loop([100], [1, 6, 5, 0])
    assert not unstable.stable
    assert unstable.gain_reduction_margin == pytest.approx(0.3, rel=1e-9)
    assert unstable.phase_margin_deg is not None
    assert unstable.phase_margin_deg == pytest.approx(-23.65, abs=0.005)  # atan(w) + atan(w/5) at |L| = 1, w = 3.90728
    assert (unstable.max_sensitivity, unstable.delay_margin_s, unstable.bandwidth_rad_s) == (None, None, None)


@pytest.mark.parametrize("damping", [0.2, 0.5, 0.8])
def test_phase_margin_and_bandwidth_of_second_order(damping: float) -> None:
    # Ogata, 5th ed., sections 7-7 and 8-2; "100 zeta" is a rule of thumb: 51.8 deg at 0.5, 69.9 deg at 0.8
    found = loop([1], [1, 2 * damping, 0])
    inner = math.sqrt(math.sqrt(4 * damping**4 + 1) - 2 * damping**2)
    assert found.phase_margin_deg == pytest.approx(math.degrees(math.atan(2 * damping / inner)), rel=1e-10)
    c = 1 - 2 * damping**2
    assert found.bandwidth_rad_s == pytest.approx(math.sqrt(c + math.sqrt(c * c + 1)), rel=1e-10)
    peak = 1 / (2 * damping * math.sqrt(1 - damping**2)) if damping < 0.5**0.5 else 1.0
    assert found.max_complementary_sensitivity == pytest.approx(peak, rel=1e-10)


def test_all_crossovers_of_a_resonant_loop() -> None:
    # three gain crossovers, 97.6, -157.8 and 134.7 deg (library test above); the last two limit the delay
    found = loop([35, 3.5, 8.75], [1, 1.03, 101.1862, 23.81176, 100.228, 1])
    angles = control.TransferFunction([35, 3.5, 8.75], [1, 1.03, 101.1862, 23.81176, 100.228, 1])
    for w in found.gain_crossovers_rad_s:
        assert abs(angles(1j * w)) == pytest.approx(1.0, abs=1e-9)
    assert len(found.gain_crossovers_rad_s) == 3
    lags = [(np.angle(angles(1j * w)) + np.pi) % (2 * np.pi) / w for w in found.gain_crossovers_rad_s]
    assert found.delay_margin_s == pytest.approx(min(lags), rel=1e-9)


def test_wrong_sign_is_said() -> None:
    found = margins_of(Plant(gain=2.0, time_constants_s=(5.0,), dead_time_s=1.0), Gains(kp=-1.0, ki=-0.1))
    assert found.positive_feedback
    assert not found.stable
    assert "positive feedback" in found.sentence
    assert not margins_of(
        Plant(gain=-2.0, time_constants_s=(5.0,), dead_time_s=1.0), Gains(kp=-0.5, ki=-0.1)
    ).positive_feedback
    assert not loop([2], [1, -1]).positive_feedback


def test_positive_feedback_below_one_is_stable() -> None:
    found = loop([-0.5], [3, 1])
    assert found.stable
    assert found.positive_feedback
    assert found.gain_margin == pytest.approx(2.0)
    assert found.phase_crossovers_rad_s[0] == 0.0


plants = st.builds(
    lambda lags, zero, delay, integrating, zeta: Plant(
        gain=1.0, dead_time_s=delay, zero_s=zero, integrating=integrating,
        **({"time_constants_s": tuple(lags)} if zeta is None else {"damping_ratio": zeta, "natural_frequency_rad_s": 0.3}),
    ),
    st.lists(st.floats(0.3, 20), min_size=1, max_size=3), st.none() | st.floats(0.1, 3) | st.floats(-3, -0.1), st.sampled_from([0.0]) | st.floats(0.1, 5),
    st.booleans(), st.none() | st.floats(0.05, 2),
)  # fmt: skip
controllers = st.builds(
    lambda kp, ki, kd: Gains(kp=kp, ki=ki, kd=kd, filter_s=0.2),
    st.floats(0.05, 3),
    st.sampled_from([0.0]) | st.floats(0.01, 1),
    st.sampled_from([0.0]) | st.floats(0.1, 2),
)


@settings(deadline=None, max_examples=150)
@given(plant=plants, gains=controllers)
def test_bounds_by_sensitivity(plant: Plant, gains: Gains) -> None:
    # Skogestad and Postlethwaite, 2nd ed., section 2.4: GM >= Ms/(Ms-1), PM >= 2 asin(1/(2 Ms)) >= 1/Ms,
    # GM >= 1 + 1/Mt, PM >= 2 asin(1/(2 Mt)); reduction margin <= Ms/(Ms+1)
    found = margins_of(plant, gains)
    assume(found.stable)
    assert found.max_sensitivity is not None
    assert found.max_complementary_sensitivity is not None
    assert found.gain_margin is not None
    assert found.phase_margin_deg is not None
    ms, mt, slack = found.max_sensitivity, found.max_complementary_sensitivity, 1 - 1e-9
    direct = open_loop(plant, gains).at_infinity
    if direct == 0.0 or plant.dead_time_s > 0:
        assert ms >= slack  # the sensitivity tends to 1 at infinity
    assert found.gain_margin >= slack * (ms / (ms - 1) if ms > 1 + 1e-9 else 1.0)
    assert found.gain_margin >= slack * (1 + 1 / mt)
    assert found.phase_margin_deg >= slack * math.degrees(2 * math.asin(min(1.0, 0.5 / ms)))
    assert found.phase_margin_deg >= slack * math.degrees(2 * math.asin(min(1.0, 0.5 / mt)))
    if found.gain_reduction_margin is not None:
        assert found.gain_reduction_margin <= (ms / (ms + 1)) / slack
    # against brute force on a dense grid: no value on it lies beyond the peak
    w = np.geomspace(1e-3, 1e2, 4000)
    L = plant.transfer(1j * w) * (gains.kp + gains.ki / (1j * w) + gains.kd * 1j * w / (gains.filter_s * 1j * w + 1))
    assert np.max(np.abs(1 / (1 + L))) <= ms / slack
    assert np.max(np.abs(L / (1 + L))) <= mt / slack
    assert np.count_nonzero(np.diff(np.sign(np.log(np.abs(L))))) <= len(found.gain_crossovers_rad_s)


@settings(deadline=None, max_examples=100)
@given(plant=plants, gains=controllers)
def test_stability_as_the_closed_polynomial(plant: Plant, gains: Gains) -> None:
    # without dead time the closed-loop poles are roots of D + N
    still = Plant.of_transfer(transfer_of(plant.numerator, plant.denominator))
    chain = open_loop(still, gains)
    poles = np.roots(np.polyadd(chain.denominator, chain.numerator))
    assume(poles.size > 0 and np.abs(poles.real).min() > 1e-6)
    assume(abs(1 + chain.at_infinity) > 1e-6)
    assert margins_of(still, gains).stable == bool(np.all(poles.real < 0))


@settings(deadline=None, max_examples=40)
@given(plant=plants, gains=controllers)
def test_margins_are_where_the_loop_turns_unstable(plant: Plant, gains: Gains) -> None:
    found = margins_of(plant, gains)
    assume(found.stable)

    def stable(factor: float, more: float = 0.0) -> bool:
        other = Plant.of_transfer(transfer_of(plant.numerator, plant.denominator, plant.dead_time_s + more))
        return margins_of(
            other, Gains(kp=factor * gains.kp, ki=factor * gains.ki, kd=factor * gains.kd, filter_s=gains.filter_s)
        ).stable

    assert found.gain_margin is not None
    assert found.delay_margin_s is not None
    if found.gain_margin < 1e6:
        assert stable(0.999 * found.gain_margin)
        assert not stable(1.001 * found.gain_margin)
    if found.gain_reduction_margin is not None and found.gain_reduction_margin > 1e-6:
        assert stable(1.001 * found.gain_reduction_margin)
        assert not stable(0.999 * found.gain_reduction_margin)
    if 0 < found.delay_margin_s < 1e3:
        assert stable(1.0, 0.999 * found.delay_margin_s)
        assert not stable(1.0, 1.001 * found.delay_margin_s)


@pytest.mark.parametrize("seed", range(12))
def test_delay_free_loops_as_python_control(seed: int) -> None:
    rng = np.random.default_rng(seed)
    top = [rng.uniform(0.2, 3), 1.0]
    bottom = np.poly(-rng.uniform(0.2, 3, 4))
    gain = rng.uniform(0.2, 1.0) * bottom[-1]
    found = loop((gain * np.array(top)).tolist(), bottom.tolist())
    gm, _, _, w180, wc, _ = control.stability_margins(
        control.TransferFunction(gain * np.array(top), bottom), returnall=True
    )
    assert found.stable
    finite = [w for w in found.phase_crossovers_rad_s if 0 < w < math.inf]
    # the library lists every crossing of the real axis left of 0
    np.testing.assert_allclose(finite, sorted(w180), rtol=1e-7)
    np.testing.assert_allclose(found.gain_crossovers_rad_s, sorted(wc), rtol=1e-7)
    assert found.gain_margin == pytest.approx(min((g for g in gm if g > 1), default=math.inf), rel=1e-7)


def test_rational_delays_converge_to_the_exact_margins() -> None:
    plant, gains = (
        Plant(gain=2.0, time_constants_s=(8.0, 3.0), dead_time_s=2.5),
        Gains(kp=0.9, ki=0.09, kd=2.0, filter_s=0.3),
    )
    exact = margins_of(plant, gains)
    errors = []
    for order in (1, 2, 4):
        chain = open_loop(plant, gains)
        top, bottom = control.pade(plant.dead_time_s, order)
        system = control.TransferFunction(np.convolve(chain.numerator, top), np.convolve(chain.denominator, bottom))
        gm, pm, sm, *_ = control.stability_margins(system)
        assert exact.max_sensitivity is not None
        errors.append(
            [abs(gm - exact.gain_margin), abs(pm - exact.phase_margin_deg), abs(1 / sm - exact.max_sensitivity)]
        )
    # an (n, n) rational delay is exact to order 2 n in w theta (Baker and Graves-Morris, Pade approximants, 1996)
    assert np.all(np.diff(errors, axis=0) < 0)
    assert np.all(np.array(errors[-1]) < [1e-4, 1e-6, 1e-3])


@settings(deadline=None, max_examples=60)
@given(
    plant=plants,
    gains=controllers,
    slower=st.sampled_from([1e-5, 1e-2, 1e3, 1e6]),
    stronger=st.sampled_from([-1e4, -1e-3, 1e5]),
)
def test_units_do_not_matter(plant: Plant, gains: Gains, slower: float, stronger: float) -> None:
    # another unit of time divides all frequencies, another unit of the measurement (or its sign) changes nothing
    chain = np.array(plant.denominator) * slower ** np.arange(len(plant.denominator) - 1.0, -1.0, -1.0)
    top = stronger * np.array(plant.numerator) * slower ** np.arange(len(plant.numerator) - 1.0, -1.0, -1.0)
    factor = 1 / slower if plant.integrating else 1.0
    other = Plant.of_transfer(transfer_of((top / factor).tolist(), chain.tolist(), plant.dead_time_s * slower))
    there = Gains(
        kp=gains.kp / stronger,
        ki=gains.ki / stronger / slower,
        kd=gains.kd / stronger * slower,
        filter_s=gains.filter_s * slower,
    )
    if plant.integrating:
        there = Gains(
            kp=there.kp * factor * slower,
            ki=there.ki * factor * slower,
            kd=there.kd * factor * slower,
            filter_s=there.filter_s,
        )
        other = Plant.of_transfer(
            transfer_of((top / slower).tolist(), (chain / slower).tolist(), plant.dead_time_s * slower)
        )
    one, two = margins_of(plant, gains), margins_of(other, there)
    assert one.stable == two.stable
    for name, power in (
        ("gain_margin", 0),
        ("phase_margin_deg", 0),
        ("delay_margin_s", 1),
        ("max_sensitivity", 0),
        ("max_complementary_sensitivity", 0),
        ("bandwidth_rad_s", -1),
    ):
        a, b = getattr(one, name), getattr(two, name)
        assert (a is None) == (b is None)
        if a is not None and a < 1e9:
            assert b == pytest.approx(a * slower**power, rel=1e-7), name
