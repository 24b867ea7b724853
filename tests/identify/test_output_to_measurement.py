"""Plants from closed-loop records with the output, against the plant that made the record."""

from __future__ import annotations

import numpy as np
import pytest
from recorded_loops import PLANTS, SETTINGS, automatic, by_runge_kutta, figures, record_of

from loopfit.identify.from_record import identify
from loopfit.identify.output_to_measurement import fitted, trace_of
from loopfit.identify.plants import plant_of
from loopfit.loop.gains import Gains
from loopfit.record.read import record_from_arrays


def inside(draws: np.ndarray, truth: np.ndarray) -> np.ndarray:
    """Whether the truth lies within the widest 99.6 % of the draws, stretched by a tenth."""
    low, high = draws.min(axis=0), draws.max(axis=0)
    slack = 0.1 * (high - low) + 1e-3 * np.abs(truth)
    return (truth >= low - slack) & (truth <= high + slack)


@pytest.mark.parametrize("name", PLANTS)
def test_setpoint_step(name: str) -> None:
    record = record_of(automatic(name, seed=1))
    found = identify(record, settings=SETTINGS[name])
    assert found.how == "output to measurement"
    assert found.refused is None
    assert found.plant.integrating == PLANTS[name].integrating
    truth = figures(PLANTS[name])
    assert inside(np.array([figures(draw) for draw in found.fresh]), truth)[[0, 3]].all()
    assert found.plant.gain == pytest.approx(truth[0], rel=0.02)  # noise 1 % of the step


@pytest.mark.parametrize("name", ["two lags", "integrating", "light damping"])
def test_a_record_that_begins_in_motion(name: str) -> None:
    record = record_of(automatic(name, seed=5, back=300), first=60)
    fit = fitted(trace_of(record, 150.0))
    assert fit.structure.moving_start
    assert figures(plant_of(fit))[[0, 3]] == pytest.approx(figures(PLANTS[name])[[0, 3]], rel=0.1)


def test_limits_of_the_output_drop_out() -> None:
    run = automatic("two lags", seed=3, limits=(0.0, 31.5))
    assert np.mean(run.output == 31.5) > 0.01
    found = identify(record_of(run))
    assert figures(found.plant) == pytest.approx(figures(PLANTS["two lags"]), rel=0.05)


@pytest.mark.parametrize(("zeta", "dead_time"), [(0.4, 0.5), (0.9, 1.2), (1.5, 0.3)])
def test_against_an_independent_simulation(zeta: float, dead_time: float) -> None:
    gains = Gains(kp=0.4, ki=0.2)
    scan, rows = 0.05, 800
    noise = 1e-6 * np.random.default_rng(8).normal(size=rows)
    r, y, u = by_runge_kutta(
        gains, zeta=zeta, omega=1.0, dead_time=dead_time, scan=scan, rows=rows, noise=noise, steps=10
    )
    record = record_from_arrays(
        time=scan * np.arange(rows), measurement=y, setpoint=r, output=u, interval_s=None, window_s=None
    )
    found = identify(record)
    # noise is 1e-6 of the step; without any the figures agree to 1e-10, and the largest error of a draw at 1e-4 is 2e-3
    assert figures(found.plant) == pytest.approx([1.0, zeta, 2.0 * zeta, dead_time], rel=2e-4)


def test_one_wild_row_changes_nothing() -> None:
    run = automatic("two lags", seed=6)
    values = run.measurement.copy()
    values[300] += 15.0
    record = record_from_arrays(
        time=run.time, measurement=values, setpoint=run.setpoint, output=run.output, interval_s=None, window_s=None
    )
    found = identify(record)
    assert "outliers" in [finding.code for finding in found.findings]
    clean = identify(record_of(run))
    assert figures(found.plant) == pytest.approx(figures(clean.plant), rel=2e-3)


def test_missing_rows_are_no_obstacle() -> None:
    run = automatic("two lags", seed=7)
    kept = np.delete(np.arange(run.time.size), [200, 201, 555])
    run_kept = record_from_arrays(
        time=run.time[kept],
        measurement=run.measurement[kept],
        setpoint=run.setpoint[kept],
        output=run.output[kept],
        interval_s=None,
        window_s=None,
    )
    found = identify(run_kept)
    assert "rows_filled" in [finding.code for finding in found.findings]
    assert figures(found.plant) == pytest.approx(figures(PLANTS["two lags"]), rel=0.05)
