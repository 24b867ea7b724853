"""Lost motion and sticking refused and named; linear plants let pass, also noisy and coarse ones."""

from __future__ import annotations

import numpy as np
import pytest
from recorded_plants import Recorded, closed_record, linear_record, many_lags, plain_fit, sticking_record

from loopfit.identify.lost_motion import LostMotion, element_course, holding_time_s, lost_motion_of, staircase_test
from loopfit.loop.gains import Gains
from loopfit.loop.plant import Plant
from loopfit.loop.simulate import simulate


def seen_in(record: Recorded) -> LostMotion:
    plain, left = plain_fit(record)
    return lost_motion_of(record.time, record.output, record.measurement, plain, left)


def valve_record(rng: np.random.Generator, kind: str) -> Recorded:
    """A loop on a plant of several lags, whose valve has lost motion or sticks by 8 to 40 % of the output's range."""
    while True:
        plant, total = many_lags(rng)
        kp = float(rng.uniform(0.3, 1.2))
        gains = Gains(kp=kp, ki=kp / (total * float(rng.uniform(0.4, 1.0))))
        scan, noise = total / float(rng.uniform(25.0, 50.0)), float(np.exp(rng.uniform(np.log(1e-3), np.log(1e-2))))
        width = float(rng.uniform(0.08, 0.4))
        if kind == "deadband":
            record = closed_record(plant, gains, scan_s=scan, scans=800, rng=rng, noise=noise, deadband=width)
        else:
            jump = width * float(rng.uniform(0.6, 1.0))
            record = sticking_record(plant, gains, scan_s=scan, scans=800, rng=rng, stuck=width, jump=jump, noise=noise)
        if np.abs(record.measurement).max() < 3.0:
            return record


@pytest.mark.parametrize("kind", ["deadband", "sticking"])
def test_a_bad_valve_is_refused(kind: str) -> None:
    rng = np.random.default_rng(1)
    for _ in range(2):
        seen = seen_in(valve_record(rng, kind))
        assert seen.refused
        assert seen.text is not None
        assert "staircase" in seen.text


def test_linear_plants_pass() -> None:
    rng = np.random.default_rng(2)
    assert not any(seen_in(linear_record(rng, k)).refused for k in range(6))


@pytest.mark.study
def test_study_of_linear_records() -> None:
    """No false refusal in 300 linear records."""
    rng = np.random.default_rng(3)
    assert [k for k in range(300) if seen_in(linear_record(rng, k)).refused] == []


@pytest.mark.study
@pytest.mark.parametrize("kind", ["deadband", "sticking"])
def test_study_of_bad_valves(kind: str) -> None:
    """At most one in 40 passes as linear; the cause right in most: a jump of a part of the sticking is like lost motion."""
    rng = np.random.default_rng(4)
    causes = [seen_in(valve_record(rng, kind)).cause for _ in range(40)]
    assert causes.count(None) <= 1
    assert causes.count(kind) >= 28


def test_a_width_that_is_known() -> None:
    """Lost motion of .3 with hardly any noise on a plant of second order: found to a tenth, and named."""
    plant = Plant(gain=1.0, damping_ratio=1.2, natural_frequency_rad_s=1.0, dead_time_s=0.3)
    record = closed_record(
        plant, Gains(kp=0.8, ki=0.4), scan_s=0.1, scans=800, rng=np.random.default_rng(5), noise=1e-3, deadband=0.3
    )
    seen = seen_in(record)
    assert seen.cause == "deadband"
    assert seen.width == pytest.approx(0.3, rel=0.1)


def test_play_as_the_simulated_valve_has_it() -> None:
    """An integrating plant sums the element's position, so its increments are the position of `simulate`'s element."""
    output = 3.0 * np.sin(0.21 * np.arange(200)) * np.linspace(0.2, 1.0, 200)
    run = simulate(Plant(gain=1.0, integrating=True), output=output, scan_s=1.0, scans=200, deadband=1.1)
    assert element_course(output, 1.1, 0.0)[:-1] == pytest.approx(np.diff(run.controlled), abs=1e-9)


def test_a_valve_that_sticks_rests_and_jumps() -> None:
    ramp = np.linspace(0.0, 3.0, 301)
    course = element_course(ramp, 1.0, 1.0)
    jumps = np.diff(course)[np.diff(course) != 0.0]
    assert jumps == pytest.approx(0.5, abs=0.011)  # a row of the ramp is .01
    assert len(jumps) == 5


def test_the_staircase_that_is_asked_for() -> None:
    """A quarter of the range of 4, above three widths of .2; dead time 1 and four times the lags of 2 and 3."""
    plant = Plant(gain=1.0, time_constants_s=(2.0, 3.0), dead_time_s=1.0)
    assert holding_time_s(plant) == pytest.approx(21.0)
    text = staircase_test(plant, [0.0, 4.0], 0.2)
    assert "+1, +2, +1, 0" in text
    assert "held for 21 s" in text
    assert "+1.5, +3, +1.5, 0" in staircase_test(plant, [0.0, 4.0], 0.5)
