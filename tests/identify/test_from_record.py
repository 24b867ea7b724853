"""Which way a record is taken, and what is said of records that tell no plant."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from recorded_loops import PLANTS, SCAN, SETTINGS, automatic, figures, record_of

from loopfit.analysis.analyze import analyze, analyze_record
from loopfit.core.errors import RecordError
from loopfit.core.finding import Finding
from loopfit.identify.from_record import identify
from loopfit.loop.simulate import simulate
from loopfit.record.read import record_from_arrays


def manual(name: str, rows: int = 300) -> object:
    return simulate(
        PLANTS[name],
        scan_s=SCAN,
        scans=rows,
        output=np.where(np.arange(rows) < 40, 30.0, 32.0),
        noise=0.02 * np.random.default_rng(31).normal(size=rows),
        initial_measurement=50.0,
        initial_output=30.0,
    )


@pytest.mark.parametrize("name", PLANTS)
def test_a_step_of_the_output(name: str) -> None:
    run = manual(name)
    record = record_of(run, setpoint=False)  # type: ignore[arg-type]
    found = identify(record)
    assert found.how == "open step"
    assert found.refused is None
    assert found.analysis is not None
    assert found.plant.integrating == PLANTS[name].integrating
    assert found.plant.gain == pytest.approx(PLANTS[name].gain, rel=0.05)
    again = identify(analyze_record(record))
    assert again.plant == found.plant
    assert again.draws == found.draws


def test_a_setpoint_that_follows_the_measurement_in_manual() -> None:
    run = manual("two lags")
    record = record_from_arrays(
        time=run.time,  # type: ignore[attr-defined]
        measurement=run.measurement,  # type: ignore[attr-defined]
        setpoint=run.measurement,  # type: ignore[attr-defined]
        output=run.output,  # type: ignore[attr-defined]
        interval_s=None,
        window_s=None,
    )
    assert identify(record).how == "open step"


def test_a_step_that_the_user_states() -> None:
    run = manual("two lags")
    given = analyze(time=run.time, measurement=run.measurement, step_at_s=20.0, step_from=30.0, step_to=32.0)  # type: ignore[attr-defined]
    found = identify(given)
    assert found.how == "open step"
    assert figures(found.plant) == pytest.approx(figures(PLANTS["two lags"]), rel=0.05)
    closed = automatic("two lags", seed=32)
    given = analyze(time=closed.time, measurement=closed.measurement, step_at_s=20.0, step_from=50.0, step_to=52.0)
    found = identify(given, settings=SETTINGS["two lags"], draws=5, fresh=5)
    assert found.how == "through the loop"
    assert figures(found.plant) == pytest.approx(figures(PLANTS["two lags"]), rel=0.1)


def test_two_sets_of_draws_that_repeat_and_differ() -> None:
    record = record_of(automatic("two lags", seed=33))
    one, two = identify(record, draws=30, fresh=40), identify(record, draws=30, fresh=40)
    assert (len(one.draws), len(one.fresh)) == (30, 40)
    assert one.draws == two.draws
    assert one.fresh == two.fresh
    assert not set(one.draws) & set(one.fresh)
    assert identify(record, draws=30, seed=5).draws != one.draws


def test_closed_without_output_and_settings() -> None:
    with pytest.raises(RecordError, match="settings of the controller"):
        identify(record_of(automatic("two lags", seed=34), output=False))


def test_nothing_that_moves_the_plant() -> None:
    with pytest.raises(RecordError, match="record the controller's output"):
        identify(record_of(automatic("two lags", seed=34, step=0.0), output=False), settings=SETTINGS["two lags"])


def test_an_output_that_stands_still() -> None:
    run = automatic("two lags", seed=34)
    record = record_from_arrays(
        time=run.time,
        measurement=run.measurement,
        setpoint=run.setpoint,
        output=np.full(run.time.size, 30.0),
        interval_s=None,
        window_s=None,
    )
    with pytest.raises(RecordError, match="in manual"):
        identify(record)


def test_uneven_rows() -> None:
    run = automatic("two lags", seed=34)
    time = run.time + np.random.default_rng(3).uniform(-0.2, 0.2, size=run.time.size)
    record = record_from_arrays(
        time=time, measurement=run.measurement, setpoint=run.setpoint, output=run.output, interval_s=None, window_s=None
    )
    with pytest.raises(RecordError, match="uneven times"):
        identify(record)


def test_too_few_rows() -> None:
    with pytest.raises(RecordError, match="too few"):
        identify(record_of(automatic("two lags", seed=34), every=30))


def test_settings_of_the_other_action() -> None:
    record = record_of(automatic("two lags", seed=35))
    found = identify(record, settings=replace(SETTINGS["two lags"], action="direct"))
    assert found.refused is not None
    assert "direct or reverse" in found.refused


def test_rows_that_do_not_fit_the_scan() -> None:
    record = record_of(automatic("two lags", seed=36), output=False)
    with pytest.raises(RecordError, match="whole multiple"):
        identify(record, settings=replace(SETTINGS["two lags"], scan_s=0.3))


def test_what_the_analysis_warned_of_is_carried_over() -> None:
    analysis = analyze_record(record_of(manual("two lags", rows=75), setpoint=False))  # type: ignore[arg-type]
    warned = [finding for finding in analysis.findings if finding.severity != "note"]
    assert warned  # the record ends 17 s after the step, the lags are 11 s
    found = identify(analysis)
    assert all(finding in found.findings for finding in warned)


def test_a_measurement_at_the_end_of_its_range() -> None:
    record = record_of(automatic("two lags", seed=37))
    assert record.measurement is not None
    top = 50.0 + 0.9 * np.ptp(record.measurement.values)
    flat = replace(record.measurement, values=np.minimum(record.measurement.values, top))
    found = identify(replace(record, measurement=flat), draws=5, fresh=5)
    assert "measurement_saturated" in [finding.code for finding in found.findings]
    assert "measurement_saturated" not in [finding.code for finding in identify(record, draws=5, fresh=5).findings]


@pytest.mark.parametrize(("told", "severity"), [(True, "note"), (False, "warning")])
def test_an_output_at_its_limit(told: bool, severity: str) -> None:
    limits = (0.0, 31.5)
    record = record_of(automatic("two lags", seed=38, limits=limits), every=2)
    settings = replace(SETTINGS["two lags"], output_limits=limits if told else None)
    found = identify(record, settings=settings, draws=5, fresh=5)
    assert found.how == "through the loop"
    assert [finding.severity for finding in found.findings if finding.code == "output_clamped"] == [severity]


def test_what_reading_warned_of_is_carried_over() -> None:
    warning = Finding(code="doubtful", severity="warning", text="Something was odd.")
    note = Finding(code="harmless", severity="note", text="Something was usual.")
    record = replace(record_of(automatic("two lags", seed=39)), findings=(warning, note))
    found = identify(record, draws=5, fresh=5)
    assert warning in found.findings
    assert note not in found.findings


def test_what_is_said_without_a_scan_interval() -> None:
    found = identify(record_of(automatic("two lags", seed=40)), draws=5, fresh=5)
    text = next(finding.text for finding in found.findings if finding.code == "output_once_a_row")
    assert "taken as continuous" in text  # as the settings are echoed
    assert "once a row" not in text


def test_figures_of_a_known_plant() -> None:
    # (8 s + 1)(3 s + 1): sum 11, omega_n^2 = 1/24, zeta = 11 / (2 sqrt(24))
    assert figures(PLANTS["two lags"]) == pytest.approx([2.0, 11 / (2 * 24**0.5), 11.0, 2.2])
