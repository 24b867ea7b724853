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
