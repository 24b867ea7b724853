"""What everyone who tunes loops knows about second-order responses (common practice), through the analysis."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from simulated_records import Truth, integrated, unit_response

import loopfit
from loopfit.core.arrays import Array
from loopfit.figures.release import release_crossings, release_settling_time, release_value


def release(zeta: float, time: Array, *, speed: float = 0.0) -> Array:
    """Motion of y'' + 2 zeta y' + y = 0 from 1, by integration."""
    return integrated(lambda _, x: [x[1], -x[0] - 2.0 * zeta * x[1]], 0.0, [1.0, speed], time)[0]


def lags(zeta: float) -> tuple[float, float]:
    """Sum of the time constants in units of 1 / omega, and r."""
    return 2.0 * zeta, 0.25 / zeta**2


@pytest.mark.parametrize("band", [0.001, 0.02, 0.05])
def test_critical_damping_is_the_fastest_return_without_oscillation(band: float) -> None:
    """Common practice; for one omega, among all dampings that do not cross the rest value."""
    dampings = np.concatenate([[1.0], np.geomspace(1.001, 30.0, 200)])
    T, r = 2.0 * dampings, 0.25 / dampings**2
    settled = T * release_settling_time(r, band)
    assert np.all(np.diff(settled) > 0)
    assert np.all(release_crossings(r) == 0)
    assert release_crossings(0.25 / 0.999**2) > 0
    # and at every instant the critically damped one is nearer to rest
    time = np.linspace(0.01, 20.0, 200)
    critical = release_value(time / 2.0, 0.25)
    for zeta in (1.01, 1.5, 4.0):
        assert np.all(release(zeta, time) > critical)
    # the same by analysis of simulated releases
    found = {}
    for zeta in (1.0, 1.2, 2.0):
        time = np.linspace(0.0, 14.0 * zeta, 220)
        analysis = loopfit.analyze(time=time, measurement=release(zeta, time))
        assert analysis.response is not None
        assert analysis.response.rest_crossings.value == 0
        found[zeta] = analysis.response.settling_time_s.value
    assert found[1.0] < found[1.2] < found[2.0]


@given(zeta=st.floats(1.0, 6.0), speed=st.floats(-20.0, 20.0))
@settings(max_examples=25, deadline=None)
def test_overdamped_release_crosses_rest_at_most_once(zeta: float, speed: float) -> None:
    """Common practice: two real exponentials have at most one zero. Counted on a simulation and by the figure."""
    T, r = lags(zeta)
    time = np.linspace(0.0, 40.0 * zeta, 4000)
    motion = release(zeta, time, speed=speed)
    seen = np.abs(motion) > 1e-9  # the integrator's error
    signs = np.sign(motion[seen])
    crossings = int(np.sum(signs[1:] != signs[:-1]))
    assert crossings <= 1
    # y = (1 - g) + ratio h, slope at 0 is ratio / r / T: h' = 1 / r at the start
    figure = float(release_crossings(r, speed * r * T))
    assert figure <= 1
    faster = speed < -(zeta + math.sqrt(zeta**2 - 1.0))
    if abs(speed + zeta + math.sqrt(zeta**2 - 1.0)) > 1e-2:
        assert figure == crossings == faster


@pytest.mark.parametrize("zeta", [0.02, 0.1, 0.3, 0.6, 0.9])
def test_underdamped_response_stays_inside_its_envelope(zeta: float) -> None:
    """Common practice: 1 ± exp(-zeta omega t) / sqrt(1 - zeta^2) (Ogata, Modern Control Engineering, 5th ed., 5-3)."""
    truth = Truth(gain=1.0, zeta=zeta, omega=1.0)
    time = np.linspace(-2.0, 4.0 / zeta, 400)
    row = int(np.searchsorted(time, 0.0))
    analysis = loopfit.analyze(
        time=time, measurement=unit_response(truth, time - time[row]), output=np.where(np.arange(400) < row, 0.0, 1.0)
    )
    model, curve = analysis.model, analysis.curve
    since = curve.time - time[row]
    decay = np.exp(-model.damping_ratio.value * model.natural_frequency_rad_s.value * since)
    envelope = decay / math.sqrt(1.0 - model.damping_ratio.value**2)
    after = since >= 0
    assert np.all(np.abs(curve.value - 1.0)[after] <= envelope[after] + 1e-9)
    # and it touches: the swings come within 1 - zeta^2 or so of it
    assert np.max((np.abs(curve.value - 1.0) / envelope)[after]) > math.sqrt(1.0 - zeta**2) - 0.01


def test_quarter_decay() -> None:
    """Common practice (after Ziegler & Nichols 1942): each swing a quarter of the one before, zeta 0.21545.

    ln 4 = 2 pi zeta / sqrt(1 - zeta^2) gives 0.2154537.
    """
    truth = Truth(gain=3.0, zeta=0.21545, omega=2.0, dead_time=0.3)
    time = np.linspace(-2.0, 18.0, 250)
    row = int(np.searchsorted(time, 0.0))
    analysis = loopfit.analyze(
        time=time, measurement=unit_response(truth, time - time[row]), setpoint=np.where(np.arange(250) < row, 0.0, 1.0)
    )
    # half a unit of the last digit of 0.21545 moves the ratio by 3.5e-5
    assert analysis.response.decay_ratio.value == pytest.approx(0.25, rel=0, abs=3.5e-5)
    assert analysis.model.damping_ratio.value == pytest.approx(0.21545, rel=0, abs=1e-7)


def test_two_per_cent_settling_is_quickest_near_0_78() -> None:
    """Common practice has 0.76 to 0.78; exactly where the first overshoot equals the band: 0.7797.

    ln 50 = pi zeta / sqrt(1 - zeta^2). The rule 4 / (zeta omega) knows no such place.
    """
    settled = []
    for zeta in (0.70, 0.77, 0.7797, 0.79, 0.9, 1.0):
        truth = Truth(gain=1.0, zeta=zeta * 1.0000001, omega=1.0)
        time = np.linspace(-1.0, 14.0, 250)
        row = int(np.searchsorted(time, 0.0))
        analysis = loopfit.analyze(
            time=time,
            measurement=unit_response(truth, time - time[row]),
            output=np.where(np.arange(250) < row, 0.0, 1.0),
        )
        settled.append(analysis.response.settling_time_s.value)
    assert min(settled) in (settled[2], settled[3])
    assert settled[3] < settled[4] < settled[5]
    exact = math.log(50.0) / math.hypot(math.pi, math.log(50.0))
    assert exact == pytest.approx(0.7797, abs=5e-5)
