"""The demo records: made again they are the committed bytes, and their plant obeys its physics."""

from __future__ import annotations

import math
import subprocess
import sys
from importlib import import_module
from pathlib import Path
from types import ModuleType

import pytest

ROOT = Path(__file__).resolve().parents[2]


@pytest.fixture
def plant(monkeypatch: pytest.MonkeyPatch) -> ModuleType:
    monkeypatch.syspath_prepend(str(ROOT / "cases"))
    return import_module("plant")


@pytest.fixture
def simulation(plant: ModuleType) -> ModuleType:  # noqa: ARG001 - for its path
    return import_module("simulation")


def test_records_made_again_are_the_same_bytes(tmp_path: Path) -> None:
    subprocess.run([sys.executable, str(ROOT / "scripts/make-cases"), "--to", str(tmp_path)], check=True)
    committed = {path.name: path.read_bytes() for path in (ROOT / "cases").glob("*.csv")}
    made = {path.name: path.read_bytes() for path in tmp_path.iterdir()}
    assert made.keys() == committed.keys()
    for name, content in made.items():
        assert content == committed[name], name


@pytest.mark.parametrize(
    ("name", "level"),
    [("Belt", 700.0), ("RinseHeater", 31.0), ("WashTank", 420.0), ("SprayHeader", 3.2)],
)
def test_plant_at_rest_stays_at_rest(plant: ModuleType, name: str, level: float) -> None:
    mechanism = getattr(plant, name)()
    state, output = mechanism.rest(level)
    acting = plant.Acting(output=output, arriving=mechanism.leaving(state), chance=0.0)
    slope = list(mechanism.slope(state, acting))
    if name == "Belt":
        assert slope.pop(0) == level  # the belt travels at its speed
    # rounding only: some 1e-16 of the terms that cancel (at most 1e5 per second here)
    assert slope == pytest.approx([0.0] * len(slope), abs=1e-10)


def test_beam_without_friction_keeps_its_period(plant: ModuleType, simulation: ModuleType) -> None:
    """A mass on a spring returns after 2 pi sqrt(m/k) (law of the harmonic oscillator)."""
    beam = plant.SaltBeam(dashpot_n_s_per_mm=0.0, drag_n_s2_per_mm2=0.0)
    period = 2 * math.pi * math.sqrt(beam.carried_kg / (1000 * beam.spring_n_per_mm))
    state, output = beam.rest(25.0)
    acting = plant.Acting(output=output, arriving=0.0, chance=0.0)
    for _ in range(500):
        state = simulation.advance(beam, state, acting, period / 500)
    # fourth-order rule: phase error of one period is 2 pi (2 pi / 500)^4 / 120, 1.3e-9 rad
    amplitude = 25.0 - beam.load_n / beam.spring_n_per_mm
    assert state[0] == pytest.approx(25.0, abs=1e-8 * amplitude)
    assert state[1] == pytest.approx(0.0, abs=1e-8 * amplitude * 2 * math.pi / period)


@pytest.mark.parametrize(
    ("case", "gain", "integral_time_s", "overshoot", "damping"),
    [("rinse-heater", 2.07, 116.0, 5.0, 0.8), ("spray-pressure", 4.59, 0.672, 10.0, 0.6)],
)
def test_story_from_ringing_to_calm(
    case: str, gain: float, integral_time_s: float, overshoot: float, damping: float
) -> None:
    """The record made with the proposed settings meets the case's limits; the proposal is the one it was made with."""
    import loopfit
    from loopfit.case.arguments import settings_of, target_arguments
    from loopfit.case.load import load_case

    job = load_case(ROOT / "cases" / f"{case}.toml")
    found = loopfit.retune(job.records[0], settings=settings_of(job.controller), **target_arguments(job.target))
    assert found.met
    # rounding in the last digits of another machine may move the search by a step of the settings' grid
    assert found.proposed.settings.gain == pytest.approx(gain, rel=0.03)
    assert found.proposed.settings.integral_time_s == pytest.approx(integral_time_s, rel=0.03)
    after = loopfit.analyze(ROOT / "cases" / f"{case}-after.csv")
    assert after.model.damping_ratio.value >= damping
    assert after.response.overshoot_percent.value <= overshoot
    assert job.limits["overshoot_percent_max"] == overshoot
    predicted = found.proposed.figures.overshoot_percent
    assert after.response.overshoot_percent.low <= predicted.high + 5.0  # the plant is not linear
    assert after.response.overshoot_percent.high >= predicted.low - 5.0
