"""A resonance under a second-order fit: found in two masses on a shaft, not in tanks and heaters."""

from __future__ import annotations

import numpy as np
import pytest
from recorded_plants import Recorded, closed_record, linear_record, many_lags, open_record, plain_fit, two_masses
from scipy.signal import lsim

from loopfit.identify.held_course import held_answer, lags_and_pair
from loopfit.identify.resonance import resonance_of
from loopfit.loop.gains import Gains
from loopfit.loop.plant import Plant
from loopfit.model.transfer import transfer_of


def found_in(record: Recorded) -> Plant | None:
    plain, left = plain_fit(record)
    return resonance_of(record.time, record.output, record.measurement, plain, left)


def shaft_records(rng: np.random.Generator) -> tuple[Plant, list[Recorded]]:
    """Two masses with a pair of damping below .12, an open step and a closed setpoint record of them."""
    while True:
        plant = two_masses(
            motor=1.0, load=float(rng.uniform(0.3, 2.0)), stiffness=float(np.exp(rng.uniform(2.0, 5.0))),
            shaft_damping=float(rng.uniform(0.02, 0.2)), friction=0.5,
        )  # fmt: skip
        scan = 0.25 / float(np.abs(plant.transfer.poles).max())
        closed = closed_record(plant, Gains(kp=0.3, ki=0.15), scan_s=scan, scans=1500, rng=rng)
        if np.abs(closed.measurement).max() < 3.0:
            return plant, [open_record(plant, scan_s=scan, scans=1500, rng=rng), closed]


def test_two_masses_on_a_shaft() -> None:
    """The pair's frequency is that of the equations of motion to 1 %; its damping, .02 to .12, to a fifth."""
    rng = np.random.default_rng(1)
    plant, records = shaft_records(rng)
    true = max(plant.transfer.poles, key=lambda pole: pole.imag)
    for record in records:
        found = found_in(record)
        assert found is not None
        pair = max(found.transfer.poles, key=lambda pole: pole.imag)
        assert abs(pair) == pytest.approx(abs(true), rel=0.01)
        assert pair.real == pytest.approx(true.real, rel=0.2)
        assert found.gain == pytest.approx(plant.gain, rel=0.05)


def test_tanks_have_no_resonance() -> None:
    rng = np.random.default_rng(2)
    plant, total = many_lags(rng)
    record = closed_record(plant, Gains(kp=0.5, ki=0.5 / total), scan_s=total / 40.0, scans=600, rng=rng)
    assert found_in(record) is None


def test_a_servo_that_integrates() -> None:
    rng = np.random.default_rng(3)
    shaft = transfer_of([1.0], np.polymul([1.0, 0.0], [1.0 / 64.0, 2.0 * 0.05 / 8.0, 1.0]))
    record = closed_record(Plant.of_transfer(shaft), Gains(kp=0.4), scan_s=0.03, scans=1500, rng=rng)
    plain, left = plain_fit(record, integrating=True)
    found = resonance_of(record.time, record.output, record.measurement, plain, left)
    assert found is not None
    assert found.integrating
    assert np.abs(found.transfer.poles).max() == pytest.approx(8.0, rel=0.01)
    assert found.gain == pytest.approx(1.0, rel=0.05)


@pytest.mark.study
def test_study_of_resonance() -> None:
    """All of 40 records of two masses; of 300 linear records without a resonance at most 3."""
    rng = np.random.default_rng(4)
    assert all(found_in(record) is not None for _ in range(20) for record in shaft_records(rng)[1])
    taken = [found_in(linear_record(rng, k)) is not None for k in range(300)]
    assert sum(taken) <= 3


@pytest.mark.parametrize("dead_scans", [0.0, 0.4, 3.0])
@pytest.mark.parametrize("poles", [(-1.0, -0.3), (-0.5, -0.4 + 3.0j, -0.4 - 3.0j), (0.0, -2.0)])
def test_the_answer_to_a_held_output(poles: tuple[complex, ...], dead_scans: float) -> None:
    """scipy's lsim on a grid five times as fine, on which the dead time is whole; both are exact for held inputs."""
    every, fine = 0.1, 5
    output = np.cumsum(np.random.default_rng(5).standard_normal(200))
    transfer = lags_and_pair(poles, 0.0)
    held = np.repeat(output - output[0], fine)
    delay = round(dead_scans * fine)
    late = np.concatenate((np.zeros(delay), held[: len(held) - delay]))
    exact = lsim((transfer.numerator, transfer.denominator), late, every / fine * np.arange(len(held)), interp=False)[
        1
    ][::fine]
    mine = held_answer(lags_and_pair(poles, dead_scans * every), every, output)
    assert mine == pytest.approx(exact, abs=1e-8 * np.abs(exact).max())
