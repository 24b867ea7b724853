"""Several records: one plant where they agree, all of them where they do not."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from recorded_loops import PLANTS, SETTINGS, automatic, figures, record_of

from loopfit.core.errors import UsageError
from loopfit.identify.from_record import identify
from loopfit.identify.identified import Identified
from loopfit.identify.several import together


def closed(name: str, seed: int, gain: float = 1.0) -> Identified:
    run = automatic(name, seed=seed)
    record = record_of(run)
    if gain != 1.0:  # the same loop, its measurement in other units from 50 on: a plant of another gain
        assert record.measurement is not None
        other = replace(record.measurement, values=50.0 + gain * (record.measurement.values - 50.0))
        record = replace(record, measurement=other)
    return identify(record)


@pytest.mark.parametrize("name", ["two lags", "integrating", "light damping"])
def test_two_records_of_one_plant(name: str) -> None:
    alone = [closed(name, seed) for seed in (41, 42)]
    found = together(alone)
    assert "records_agree" in [finding.code for finding in found.findings]
    truth = figures(PLANTS[name])
    assert found.plant.gain == pytest.approx(truth[0], rel=0.02)
    spread = [np.std([draw.gain for draw in one.fresh]) for one in (*alone, found)]
    # twice the information: sqrt(1/2) of the spread, each known from 200 draws to 5 %
    assert spread[2] < 0.9 * max(spread[:2])
    assert len(found.draws) == len(alone[0].draws)


def test_a_plant_that_depends_on_where_it_runs() -> None:
    found = together([closed("two lags", 43), closed("two lags", 44, gain=1.6)])
    assert "plant_depends_on_record" in [finding.code for finding in found.findings]
    gains = np.array([draw.gain for draw in found.draws])
    assert np.mean(np.abs(gains - 2.0) < 0.1) == pytest.approx(0.5, abs=0.05)
    assert np.mean(np.abs(gains - 3.2) < 0.1) == pytest.approx(0.5, abs=0.05)


def test_records_that_cannot_be_fitted_together() -> None:
    through = identify(record_of(automatic("two lags", seed=45), output=False), settings=SETTINGS["two lags"])
    found = together([closed("two lags", 46), through])
    assert "records_side_by_side" in [finding.code for finding in found.findings]


def test_one_that_was_refused_is_left_out() -> None:
    good = closed("two lags", 47)
    found = together([good, replace(good, refused="It tells nothing.")])
    assert found.plant == good.plant
    assert "Record 2 is left out: It tells nothing." in [finding.text for finding in found.findings]


def test_gains_of_both_signs() -> None:
    with pytest.raises(UsageError, match="both signs"):
        together([closed("two lags", 48), closed("light damping", 48)])


def test_one_record_is_itself() -> None:
    one = closed("one lag", 49)
    assert together([one]) is one
    with pytest.raises(UsageError):
        together([])
