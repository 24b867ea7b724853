"""What a record says against its own plant: levels at rest against typed settings, steps that disagree."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from recorded_loops import PLANTS, SCAN, SETTINGS, automatic, record_of

from loopfit.identify.from_record import identify
from loopfit.identify.protections import levels_gain
from loopfit.loop.simulate import simulate
from loopfit.record.read import record_from_arrays

SLOW_LOG = 4  # rows of the controller for one of the record


def test_levels_at_rest_tell_the_gain() -> None:
    # at rest y = gain * u: 2.0 by the plant's own definition; noise .02 on a step of 2, means of 10 rows and more
    found = levels_gain(record_of(automatic("two lags", seed=61), every=SLOW_LOG))
    assert found is not None
    gain, half = found
    assert abs(gain - 2.0) < 2.0 * half
    assert half < 0.1


def test_no_levels_where_the_record_ends_before_rest() -> None:
    run = automatic("two lags", seed=61, rows=60)  # 10 s after the step, lags of 11 s
    assert levels_gain(record_of(run)) is None


def test_no_levels_without_output_or_second_rest() -> None:
    run = automatic("two lags", seed=61)
    assert levels_gain(record_of(run, output=False)) is None
    assert levels_gain(record_of(run, setpoint=False)) is None


def test_settings_typed_wrongly_are_refused_by_the_levels() -> None:
    record = record_of(automatic("two lags", seed=62), every=SLOW_LOG)
    right = identify(record, settings=SETTINGS["two lags"], draws=20, fresh=20)
    assert right.how == "through the loop"
    assert right.refused is None
    assert {finding.code for finding in right.findings} & {"levels_agree", "levels_differ"}
    # the loop depends on controller gain times plant gain alone: typed twice too large gives a plant of half the gain
    typed = replace(SETTINGS["two lags"], gain=2.0 * 1.2)
    wrong = identify(record, settings=typed, draws=20, fresh=20)
    assert wrong.refused is not None
    assert wrong.plant.gain == pytest.approx(1.0, rel=0.1)
    assert "not those in the controller" in wrong.refused
    assert f"{wrong.plant.gain:.3g}" in wrong.refused
    levels = levels_gain(record)
    assert levels is not None
    assert f"{levels[0]:.3g}" in wrong.refused


def test_draws_hold_both_gains_where_the_levels_differ_a_little() -> None:
    record = record_of(automatic("two lags", seed=62), every=SLOW_LOG)
    # plant gain through settings typed 1.2 times too large: 2.0 / 1.2, within the 30 % that pass
    found = identify(record, settings=replace(SETTINGS["two lags"], gain=1.2 * 1.2), draws=60, fresh=60)
    assert found.refused is None
    text = next(finding.text for finding in found.findings if finding.code == "levels_differ")
    assert f"{found.plant.gain:.3g}" in text
    for plants in (found.draws, found.fresh):
        low, high = np.quantile([plant.gain for plant in plants], [0.025, 0.975])
        assert low < 2.0 / 1.2 * 1.02
        assert high > 2.0 * 0.98


def test_an_integrating_plant_rests_at_any_output() -> None:
    record = record_of(automatic("integrating", seed=63), every=SLOW_LOG)
    found = identify(record, settings=SETTINGS["integrating"], draws=5, fresh=5)
    assert found.plant.integrating
    assert not {finding.code for finding in found.findings} & {"levels_agree", "levels_differ"}


def two_steps(gains: tuple[float, float]) -> object:
    """A plant in manual whose gain is another on the way back: two simulated steps joined where the first has settled."""
    rows = 300
    rng = np.random.default_rng(64)
    parts, start = [], 50.0
    for gain, levels in zip(gains, ((30.0, 34.0), (34.0, 30.0)), strict=True):
        run = simulate(
            replace(PLANTS["two lags"], gain=gain),
            scan_s=SCAN,
            scans=rows,
            output=np.where(np.arange(rows) < 40, *levels),
            noise=0.02 * rng.normal(size=rows),
            initial_measurement=start,
            initial_output=levels[0],
        )
        parts.append((run.measurement, run.output))
        start += gain * (levels[1] - levels[0])
    measurement, output = (np.concatenate([part[i] for part in parts]) for i in (0, 1))
    return record_from_arrays(
        time=SCAN * np.arange(2 * rows), measurement=measurement, output=output, interval_s=None, window_s=None
    )


def test_steps_that_disagree_each_give_plants() -> None:
    found = identify(two_steps((2.0, 4.0)))  # type: ignore[arg-type]
    codes = [finding.code for finding in found.findings]
    assert "depends_on_step" in codes
    assert "every_step_counts" in codes
    for plants in (found.draws, found.fresh):
        gains = np.array([plant.gain for plant in plants])
        # two steps in turn: half each; noise is .02 of a change of 8 and more
        assert np.mean(np.abs(gains - 2.0) < 0.2) == pytest.approx(0.5, abs=0.05)
        assert np.mean(np.abs(gains - 4.0) < 0.4) == pytest.approx(0.5, abs=0.05)


def test_steps_that_agree_are_one_plant() -> None:
    found = identify(two_steps((2.0, 2.0)))  # type: ignore[arg-type]
    assert "every_step_counts" not in [finding.code for finding in found.findings]
    assert np.ptp([plant.gain for plant in found.fresh]) < 0.2
