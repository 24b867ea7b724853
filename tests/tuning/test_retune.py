"""From record to settings, judged on the plant that made the record."""

from __future__ import annotations

import json

import numpy as np
import pytest

import loopfit
from loopfit.loop.gains import Gains
from loopfit.loop.plant import Plant
from loopfit.loop.settings import Settings
from loopfit.loop.simulate import simulate
from loopfit.loop.visible import swing_of

PLANT = Plant(gain=2.0, time_constants_s=(8.0, 3.0), dead_time_s=1.5)
SCAN = 0.2


def open_step(plant: Plant, *, noise: float, seed: int, rows: int = 400, scan: float = SCAN) -> dict[str, np.ndarray]:
    output = np.where(np.arange(rows) < 40, 30.0, 40.0)
    made = simulate(plant, None, scan_s=scan, scans=rows, output=output, initial_output=30.0, initial_measurement=50.0,
                    noise=noise * np.random.default_rng(seed).standard_normal(rows))  # fmt: skip
    return {"time": made.time, "measurement": made.measurement, "output": made.output}


def closed_step(plant: Plant, gains: Gains, *, noise: float, seed: int, rows: int = 500) -> dict[str, np.ndarray]:
    setpoint = np.where(np.arange(rows) < 40, 50.0, 55.0)
    made = simulate(plant, gains, scan_s=SCAN, scans=rows, setpoint=setpoint, initial_setpoint=50.0, initial_output=30.0,
                    initial_measurement=50.0, noise=noise * np.random.default_rng(seed).standard_normal(rows))  # fmt: skip
    return {"time": made.time, "measurement": made.measurement, "output": made.output, "setpoint": setpoint}


@pytest.mark.parametrize("terms", ["PI", "PID"])
@pytest.mark.parametrize("damping", [1.0, 0.7])
def test_open_record_gives_settings_that_hold_on_the_true_plant(terms: str, damping: float) -> None:
    record = loopfit.analyze(**open_step(PLANT, noise=0.4, seed=3))  # signal to noise 50
    found = loopfit.retune(record, damping_ratio=damping, controller=terms)
    assert found.met
    assert found.proposed is not None
    assert found.proposed.probability_of_target >= 0.9
    swing = swing_of(PLANT, found.proposed.gains)
    if damping == 1.0:
        assert swing.visible_swing <= 0.02
    else:
        assert swing.visible_damping >= 0.65


def test_ringing_loop_is_retuned_from_its_own_record() -> None:
    present = Settings("ideal", gain=1.0, integral_time_s=5.0, scan_s=SCAN)
    data = closed_step(PLANT, present.gains, noise=0.1, seed=4)
    analysis = loopfit.analyze(**data)
    found = loopfit.retune(analysis, settings=present, damping_ratio=0.7)
    assert found.identified.how == "output to measurement"
    assert found.typed.verdict == "agree"
    assert found.met
    assert found.current.figures.damping_ratio.value == pytest.approx(
        swing_of(PLANT, present.gains).visible_damping, abs=0.06
    )
    assert swing_of(PLANT, found.proposed.gains).visible_damping >= 0.65
    assert found.moves
    assert found.moves[-1].side.settings == found.proposed.settings


def test_minutes_typed_for_seconds_are_called_so() -> None:
    present = Settings("ideal", gain=1.0, integral_time_s=5.0, scan_s=SCAN)
    data = closed_step(PLANT, present.gains, noise=0.05, seed=5)
    found = loopfit.retune(
        loopfit.analyze(**data),
        settings=Settings.from_entry("ideal", gain=1.0, integral="5 min", scan_s=SCAN),
        damping_ratio=0.7,
    )
    assert found.typed.verdict == "differ"
    assert "minutes" in found.typed.text or "min" in found.typed.text
    assert "typed_settings_differ" in {finding.code for finding in found.findings}


def test_document_is_as_promised() -> None:
    """Keys of the document; numbers finite; cautions with every proposal."""
    found = loopfit.retune(
        PLANT, settings=Settings("series", gain=0.5, integral_time_s=10.0, derivative_time_s=1.0), damping_ratio=0.7
    )
    document = json.loads(found.to_json())
    assert document["document"] == "loopfit retune"
    assert {"plant", "target", "current", "proposed", "moves", "cautions"} <= document.keys()
    assert document["proposed"]["settings"]["form"] == "ideal"
    assert document["proposed"]["as_entered"]["form"] == "series"
    for name in ("damping_ratio", "overshoot_percent", "settling_time_s", "rise_time_s", "max_sensitivity", "gain_margin",
                 "phase_margin_deg", "delay_margin_s", "load_integrated_error"):  # fmt: skip
        assert name in document["current"], name
        assert name in document["proposed"], name
    words = " ".join(document["cautions"])
    for wanted in (
        "model first",
        "small stages",
        "in manual",
        "Protective functions",
        "Site procedure",
        "licensed engineer",
    ):
        assert wanted in words
    assert document["target"]["met"] is True


def test_not_met_gives_the_best_attainable_and_the_reason() -> None:
    found = loopfit.retune(Plant(gain=1.0, damping_ratio=0.2, natural_frequency_rad_s=1.0, dead_time_s=0.2))
    assert not found.met
    assert found.proposed is not None
    assert found.obstacle
    assert found.attainable_damping_ratio < 0.6
    assert found.cautions


def test_wrong_sign_is_refused() -> None:
    with pytest.raises(loopfit.UsageError, match="feed back positively"):
        loopfit.retune(PLANT, settings=Settings("ideal", gain=-1.0, integral_time_s=10.0))


def test_overshoot_as_the_target_limits_the_overshoot() -> None:
    found = loopfit.retune(PLANT, overshoot_percent=5.0)
    assert found.met
    assert found.proposed.figures.overshoot_percent.value <= 5.1  # settings are rounded to four digits


def test_the_same_record_gives_the_same_settings() -> None:
    record = loopfit.analyze(**open_step(PLANT, noise=0.4, seed=8))
    first, second = (loopfit.retune(record, damping_ratio=0.7) for _ in range(2))
    assert first.to_json() == second.to_json()


def test_reverse_and_direct_plants_get_the_same_magnitudes() -> None:
    one = loopfit.retune(
        PLANT, damping_ratio=0.7, settings=Settings("ideal", gain=0.5, integral_time_s=10.0, action="reverse")
    )
    other = loopfit.retune(
        Plant(gain=-2.0, time_constants_s=(8.0, 3.0), dead_time_s=1.5), damping_ratio=0.7,
        settings=Settings("ideal", gain=0.5, integral_time_s=10.0, action="direct"),
    )  # fmt: skip
    assert one.proposed.settings.gain == pytest.approx(other.proposed.settings.gain, rel=1e-9)
    assert one.proposed.gains.kp == pytest.approx(-other.proposed.gains.kp, rel=1e-9)
