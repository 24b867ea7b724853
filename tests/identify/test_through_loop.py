"""Plants from closed-loop records without the output, through the simulated loop."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from recorded_loops import PLANTS, SETTINGS, automatic, by_runge_kutta, figures, record_of

from loopfit.identify.from_record import identify
from loopfit.loop.gains import Gains
from loopfit.loop.settings import Settings
from loopfit.record.read import record_from_arrays


@pytest.mark.parametrize("name", ["two lags", "one lag", "integrating", "level"])
def test_with_the_settings_that_were_in_it(name: str) -> None:
    found = identify(record_of(automatic(name, seed=21), output=False), settings=SETTINGS[name])
    assert found.how == "through the loop"
    assert found.refused is None
    assert "settings_not_checked" in [finding.code for finding in found.findings]
    truth = figures(PLANTS[name])
    assert found.plant.integrating == PLANTS[name].integrating
    assert found.plant.gain == pytest.approx(truth[0], rel=0.03)
    draws = np.array([figures(draw) for draw in found.fresh])
    slack = 0.1 * np.ptp(draws, axis=0) + 1e-3 * np.abs(truth)
    assert (truth >= draws.min(axis=0) - slack)[[0, 3]].all()
    assert (truth <= draws.max(axis=0) + slack)[[0, 3]].all()


def test_an_output_logged_slower_than_the_scan_is_not_taken_for_the_input() -> None:
    run = automatic("two lags", seed=22)
    found = identify(record_of(run, every=5), settings=SETTINGS["two lags"])
    assert found.how == "through the loop"
    assert "output_slower_than_scan" in [finding.code for finding in found.findings]
    assert figures(found.plant) == pytest.approx(figures(PLANTS["two lags"]), rel=0.08)


def test_limits_in_the_loop() -> None:
    limits = (0.0, 31.5)
    run = automatic("two lags", seed=23, limits=limits)
    assert np.mean(run.output == 31.5) > 0.01
    found = identify(
        record_of(run, every=2), settings=replace(SETTINGS["two lags"], output_limits=limits), draws=5, fresh=5
    )
    assert found.how == "through the loop"
    assert figures(found.plant) == pytest.approx(figures(PLANTS["two lags"]), rel=0.06)


def test_against_an_independent_simulation() -> None:
    gains = Gains(kp=0.4, ki=0.2)
    noise = 1e-4 * np.random.default_rng(8).normal(size=800)
    r, y, _ = by_runge_kutta(gains, zeta=0.7, omega=1.0, dead_time=0.8, scan=0.05, rows=800, noise=noise, steps=10)
    record = record_from_arrays(time=0.05 * np.arange(800), measurement=y, setpoint=r, interval_s=None, window_s=None)
    found = identify(record, settings=Settings(gain=0.4, integral_time_s=2.0, scan_s=0.05), draws=5, fresh=5)
    # noise is 1e-4 of the step: a hundredth of the errors at 1 % noise
    assert figures(found.plant) == pytest.approx([1.0, 0.7, 1.4, 0.8], rel=2e-3)


def test_gains_typed_too_large_give_a_plant_too_small() -> None:
    record = record_of(automatic("two lags", seed=24), output=False)
    right = identify(record, settings=SETTINGS["two lags"], draws=5, fresh=5)
    typed = replace(SETTINGS["two lags"], gain=1.5 * 1.2)
    wrong = identify(record, settings=typed, draws=5, fresh=5)
    # the loop depends on the product alone: exactly the same fit
    assert wrong.plant.gain == pytest.approx(right.plant.gain / 1.5, rel=1e-3)
