"""The sampled loop: exact roots against python-control, against a scan-by-scan simulation, and laws."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from random_loops import Loop, random_loops

import loopfit.loop.sampled as sampled
from loopfit.core.errors import UsageError
from loopfit.loop.gains import Gains
from loopfit.loop.plant import Plant
from loopfit.loop.sampled import sampled_roots, sampled_swing, scan_matters, with_scan
from loopfit.loop.visible import swing_of

LAG = Plant(gain=1.5, time_constants_s=(2.0,), dead_time_s=0.7)
SECOND = Plant(gain=1.0, damping_ratio=0.5, natural_frequency_rad_s=1.0, dead_time_s=1.05)
INTEGRATING = Plant(gain=0.4, integrating=True, time_constants_s=(0.5,), dead_time_s=0.3)
CASES = [
    (LAG, Gains(kp=1.2, ki=0.7), 0.2),
    (LAG, Gains(kp=1.0, ki=0.5, kd=0.3, filter_s=0.1), 0.2),
    (SECOND, Gains(kp=0.5, ki=0.4, kd=0.4, filter_s=0.15), 0.3),
    (SECOND, Gains(kp=0.5), 0.3),
    (INTEGRATING, Gains(kp=1.5, ki=0.3), 0.4),
    (Plant(gain=1.0, time_constants_s=(1.0, 0.5), dead_time_s=0.0, zero_s=-0.2), Gains(kp=1.0, ki=1.0), 0.25),
]


def run(plant: Plant, gains: Gains, scan_s: float, scans: int, *, late: bool = False, sub: int = 40) -> np.ndarray:
    """Measurement at each scan after a unit load: plant by Runge-Kutta in `sub` steps a scan, controller line by line.

    The dead time is a whole number of those steps.
    """
    from scipy.signal import tf2ss

    a, b, c, d = tf2ss(plant.numerator, plant.denominator)
    assert not d.any()
    h = scan_s / sub
    delay = round(plant.dead_time_s / h)
    assert delay * h == pytest.approx(plant.dead_time_s, abs=1e-12)
    x = np.zeros(len(a))
    integral = filtered = previous = waiting = 0.0
    stored = [0.0] * delay
    course = np.zeros(scans)
    for k in range(scans):
        y = float(c[0] @ x)
        course[k] = y
        integral -= gains.ki * scan_s * y
        if gains.kd != 0.0:
            filtered = (gains.filter_s * filtered - gains.kd * (y - previous)) / (gains.filter_s + scan_s)
        previous = y
        fresh = -gains.kp * y + integral + filtered
        u, waiting = (waiting, fresh) if late else (fresh, fresh)
        for _ in range(sub):
            stored.append(u)
            held = b[:, 0] * (stored.pop(0) + 1.0)
            k1 = a @ x + held
            k2 = a @ (x + 0.5 * h * k1) + held
            k3 = a @ (x + 0.5 * h * k2) + held
            k4 = a @ (x + h * k3) + held
            x = x + h / 6.0 * (k1 + 2.0 * k2 + 2.0 * k3 + k4)
    return course


@pytest.mark.parametrize(("plant", "gains", "scan"), CASES)
@pytest.mark.parametrize("late", [False, True])
def test_a_simulated_loop_decays_as_the_roots_say(plant: Plant, gains: Gains, scan: float, late: bool) -> None:
    """The simulated course obeys the recurrence of all the roots that have not died out: product of (q - z) y = 0."""
    z = sampled_roots(plant, gains, scan, late=late)
    course = run(plant, gains, scan, 90, late=late)
    slow = z[np.abs(z) > 1e-7]
    if gains.ki == 0.0:
        course = np.diff(course)  # comes to rest elsewhere
    dead = len(z) - len(slow)
    start = 2 + dead + int(plant.dead_time_s / scan)
    recurrence = np.poly(slow).real
    left = np.convolve(course[start:], recurrence, mode="valid")
    assert len(left) > 50
    # Runge-Kutta in 40 steps a scan: 1e-9 of the course
    assert np.abs(left).max() < 1e-7 * np.abs(course).max() * np.abs(recurrence).sum()


@pytest.mark.parametrize(("plant", "gains", "scan"), [(LAG, Gains(kp=1.0, ki=1.0), 0.2), *CASES[2:3], CASES[4]])
def test_the_tail_of_a_simulated_loop(plant: Plant, gains: Gains, scan: float) -> None:
    """The tail is the slowest one or two roots: coefficients of its recurrence by least squares are theirs."""
    z = sampled_roots(plant, gains, scan)
    last = 1 if z[0].imag == 0.0 and z[1].imag != 0.0 else 2
    wait = int(math.log(1e-6) / math.log(abs(z[last]) / abs(z[last - 1])))  # until the next is a millionth
    tail = run(plant, gains, scan, wait + 30)[wait:]
    before = np.column_stack([tail[last - 1 - k : len(tail) - 1 - k] for k in range(last)])
    fit = np.linalg.lstsq(before, -tail[last:], rcond=None)[0]
    assert fit == pytest.approx(np.poly(z[:last]).real[1:], abs=2e-5)


@pytest.mark.parametrize("dead_scans", [0, 1, 5])
@pytest.mark.parametrize("gains", [Gains(kp=0.8, ki=0.5), Gains(kp=0.8, ki=0.5, kd=0.3, filter_s=0.1), Gains(kp=0.6)])
def test_poles_of_python_control(dead_scans: int, gains: Gains) -> None:
    """Zero-order hold and closed loop by python-control; the controller's backward differences as a function of z."""
    import control

    scan = 0.3
    plant = Plant(gain=1.0, damping_ratio=0.6, natural_frequency_rad_s=1.0, dead_time_s=dead_scans * scan)
    held = control.sample_system(control.tf(list(plant.numerator), list(plant.denominator)), scan, "zoh")
    loop = control.tf([gains.kp], [1.0], scan)
    if gains.ki != 0.0:
        loop = loop + control.tf([gains.ki * scan, 0.0], [1.0, -1.0], scan)
    if gains.kd != 0.0:
        loop = loop + control.tf([gains.kd, -gains.kd], [gains.filter_s + scan, -gains.filter_s], scan)
    opened = held * loop
    delay = np.append(1.0, np.zeros(dead_scans))
    expected = np.roots(np.polyadd(np.convolve(opened.den[0][0], delay), opened.num[0][0]))
    mine = sampled_roots(plant, gains, scan)
    mine = mine[np.abs(mine) > 1e-7]
    expected = expected[np.abs(expected) > 1e-7]
    assert len(mine) == len(expected)
    assert np.abs(np.sort_complex(mine) - np.sort_complex(expected)).max() < 1e-8


@pytest.mark.parametrize(("plant", "gains", "scan"), CASES)
def test_late_output_is_one_scan_more_of_dead_time(plant: Plant, gains: Gains, scan: float) -> None:
    later = replace(plant, dead_time_s=plant.dead_time_s + scan)
    late, more = sampled_roots(plant, gains, scan, late=True), sampled_roots(later, gains, scan)
    assert np.abs(np.sort(np.abs(late)) - np.sort(np.abs(more))).max() < 1e-7


def seen_at_scans(course: np.ndarray) -> float:
    """Damping of second order with the largest swing back after the peak (see the test of the continuous loop)."""
    top = int(np.abs(course).argmax())
    after = np.append(course[top:] / course[top], 0.0)
    rise = float((after - np.minimum.accumulate(after)).max())
    swing = 0.5 * (math.sqrt(1.0 + 4.0 * rise) - 1.0)
    return 1.0 if swing < 1e-12 else -math.log(swing) / math.hypot(math.pi, math.log(swing))


def test_peak_of_simulated_loops() -> None:
    for plant, gains, scan in CASES:
        if gains.ki != 0.0:
            swing = sampled_swing(plant, gains, scan)
            course = run(plant, gains, scan, 120)
            top = int(np.abs(course).argmax())
            assert swing.peak == pytest.approx(abs(course[top]), rel=1e-6)
            assert swing.peak_time_s == pytest.approx(top * scan)


def test_visible_damping_of_simulated_sampled_loops() -> None:
    """As close as for continuous loops, where the study had a median of .020; peaks fall between scans here."""
    looked, said = [], []
    for plant, gains in stable_loops(33, 30):
        plant = replace(plant, dead_time_s=round(plant.dead_time_s * 80) / 80)  # whole steps of the simulation
        swing = sampled_swing(plant, gains, 0.1)
        if swing.stable:
            said.append(swing.visible_damping)
            looked.append(seen_at_scans(run(plant, gains, 0.1, 400, sub=8)))
    error = np.abs(np.array(said) - looked)
    assert len(error) > 15
    assert np.median(error) < 0.03
    assert not ((np.array(said) > 0.75) & (np.array(looked) < 0.5)).any()


def test_a_tiny_scan_leaves_the_continuous_loop() -> None:
    for plant, gains, _ in CASES:
        continuous, fast = swing_of(plant, gains), sampled_swing(plant, gains, 1e-3)
        assert fast.visible_damping == pytest.approx(continuous.visible_damping, abs=5e-3)
        assert fast.design_damping == pytest.approx(continuous.design_damping, abs=5e-3)
        if len(plant.denominator) - len(plant.numerator) > 1 or gains.ki != 0.0:
            assert fast.peak == pytest.approx(continuous.peak, rel=5e-3)


def stable_loops(seed: int, count: int) -> list[Loop]:
    return [loop for loop in random_loops(seed, count) if swing_of(*loop).stable]


@pytest.mark.parametrize(("scan", "stand_in"), [(0.1, 0.008), (0.2, 0.014)])
def test_the_stand_in_is_closer_than_the_loop_without_scan(scan: float, stand_in: float) -> None:
    """Medians of a study of 150 loops for a scan of .1 and .2 of the dominant root's time; here each loop's own."""
    without, with_half = [], []
    for plant, gains in stable_loops(31, 50):
        continuous = swing_of(plant, gains)
        dominant = continuous.roots[int(continuous.weights.argmax())]
        h = scan / abs(dominant)
        exact = sampled_swing(plant, gains, h)
        if exact.stable:
            without.append(abs(continuous.visible_damping - exact.visible_damping))
            with_half.append(abs(swing_of(*with_scan(plant, gains, h)).visible_damping - exact.visible_damping))
    assert len(with_half) > 20
    assert np.median(with_half) < stand_in
    assert np.median(with_half) < 0.7 * np.median(without)


def test_a_long_dead_time_by_newton_as_by_eigenvalues(monkeypatch: pytest.MonkeyPatch) -> None:
    for plant, gains in [*stable_loops(32, 12), (LAG, Gains(kp=1.0, ki=0.5, kd=0.3, filter_s=0.1))]:
        if plant.dead_time_s < 0.3:
            continue
        scan = plant.dead_time_s / 61.3
        monkeypatch.setattr(sampled, "_LONG", 1000)
        eigen, eigen_swing = sampled_roots(plant, gains, scan), sampled_swing(plant, gains, scan)
        monkeypatch.setattr(sampled, "_LONG", 60)
        newton, newton_swing = sampled_roots(plant, gains, scan), sampled_swing(plant, gains, scan)
        assert len(newton) < len(eigen)
        assert newton_swing.complete
        first = np.log(newton[np.abs(newton) > abs(newton[0]) ** 2]) / scan
        assert len(first) > 0
        for root in first:
            assert np.abs(np.log(eigen[np.abs(eigen) > 0.0]) / scan - root).min() < 1e-6 * abs(root)
        assert newton_swing.visible_damping == pytest.approx(eigen_swing.visible_damping, abs=3e-3)
        assert newton_swing.peak == pytest.approx(eigen_swing.peak, rel=5e-3)  # some modes are left out


def test_a_double_root_with_a_long_dead_time() -> None:
    """exp(-s) / s at K = 1 / e: with a scan the limit lies a little lower, and beside it the pair becomes two reals."""
    plant = Plant(gain=1.0, integrating=True, dead_time_s=1.0)
    for gain in np.linspace(0.98, 1.0, 15) / math.e:
        exact = sampled_swing(plant, Gains(kp=float(gain)), 0.01)
        assert exact.complete
        assert exact.visible_swing < 0.005


def test_a_root_next_to_a_pole_of_the_plant() -> None:
    """exp(-20 s) / (s - 1) with a gain of 0.1: s = 1 - 0.1 exp(-20 s), 2e-10 from the pole, unstable with any scan."""
    from loopfit.model.transfer import transfer_of

    plant = Plant.of_transfer(transfer_of([-1.0], [-1.0, 1.0], 20.0))
    for scan in (0.1, 0.5):  # 200 and 40 scans of dead time: both ways
        swing = sampled_swing(plant, Gains(kp=-0.1), scan)
        assert not swing.stable
        assert swing.complete
        assert swing.roots[0] == pytest.approx(1.0, abs=1e-6)


def test_an_integrator_with_pi_in_scans() -> None:
    """(z - 1)^2 + k h (kp (z - 1) + ki h z) = 0 for k / s without dead time; by hand from the backward difference."""
    k, kp, ki, h = 0.7, 0.9, 0.5, 0.4
    z = sampled_roots(Plant(gain=k, integrating=True), Gains(kp=kp, ki=ki), h)
    expected = np.roots([1.0, -2.0 + k * h * (kp + ki * h), 1.0 - k * h * kp])
    assert np.sort_complex(z[:2]) == pytest.approx(np.sort_complex(expected), abs=1e-9)
    assert np.abs(z[2:]).max(initial=0.0) < 1e-7


@pytest.mark.parametrize("scans", [0, 3, 80])
def test_integral_action_on_pure_dead_time_in_scans(scans: int) -> None:
    """u[k] = u[k-1] - ki h y[k], y[k] = u[k-1-m]: z^m (z - 1) + ki h = 0, by hand."""
    gain = 0.4 / (scans + 1)
    plant, gains = Plant(gain=1.0, dead_time_s=0.5 * scans), Gains(kp=0.0, ki=gain / 0.5)
    expected = np.roots([1.0, -1.0, *np.zeros(scans - 1), gain]) if scans else np.array([1.0 - gain])
    expected = expected[np.argsort(-np.abs(expected), kind="stable")]
    z = sampled_roots(plant, gains, 0.5)
    for root in expected[:3]:
        assert np.abs(z - root).min() < 1e-8
    assert sampled_swing(plant, gains, 0.5).stable


def test_a_loop_that_only_its_scan_makes_unstable() -> None:
    """k / s without dead time: stable for any gain without scans, for k kp h < 2 with them."""
    plant = Plant(gain=1.0, integrating=True)
    assert swing_of(plant, Gains(kp=2.1)).stable
    assert not sampled_swing(plant, Gains(kp=2.1), 1.0).stable
    ringing = sampled_swing(plant, Gains(kp=1.9), 1.0)
    assert ringing.stable
    assert ringing.visible_damping < 0.05  # z = -0.9, from scan to scan


def test_the_stand_in() -> None:
    plant, gains = with_scan(LAG, Gains(kp=1.0, ki=0.5, kd=0.3, filter_s=0.1), 0.2)
    assert (plant.dead_time_s, gains.filter_s) == pytest.approx((0.8, 0.2))
    plant, gains = with_scan(LAG, Gains(kp=1.0), 0.2, late=True)
    assert (plant.dead_time_s, gains.filter_s) == pytest.approx((1.0, 0.0))
    rational = with_scan(Plant.of_transfer(LAG.transfer), Gains(kp=1.0), 0.2)[0]
    assert rational.transfer.dead_time_s == rational.dead_time_s == pytest.approx(0.8)
    assert rational.rational is not None
    assert rational.rational.dead_time_s == rational.dead_time_s


@pytest.mark.parametrize(("scan", "word"), [(0.1, "small"), (0.2, "noticeable"), (0.3, "large")])
def test_when_the_scan_matters(scan: float, word: str) -> None:
    effect = scan_matters(LAG, Gains(kp=1.0), scan)  # dead time and lag 2.7 s
    assert effect.word == word
    assert effect.share == pytest.approx(scan / 2.7)
    assert f"{100 * scan / 2.7:.2g} %" in effect.sentence


def test_when_the_scan_matters_to_an_integrator() -> None:
    assert scan_matters(Plant(gain=0.1, integrating=True), Gains(kp=1.0), 0.2).word == "small"
    assert scan_matters(Plant(gain=1.0, integrating=True), Gains(kp=5.0), 0.2).word == "large"


@pytest.mark.parametrize("scan", [0.0, -1.0, math.nan, math.inf])
def test_no_scan_interval(scan: float) -> None:
    for function in (sampled_roots, sampled_swing, with_scan, scan_matters):
        with pytest.raises(UsageError, match="scan interval"):
            function(LAG, Gains(kp=1.0), scan)
