"""Plants from records in which a load moved the loop."""

from __future__ import annotations

import numpy as np
import pytest
from recorded_loops import PLANTS, SETTINGS, automatic, figures, record_of

from loopfit.identify.from_record import identify
from loopfit.identify.load_step import load_fitted


@pytest.mark.parametrize(
    ("name", "setpoint"),
    [
        ("two lags", True),
        ("two lags", False),
        ("light damping", True),
        ("one lag", True),
        ("integrating", False),
        ("level", True),
    ],
)
def test_a_load_tells_the_plant(name: str, setpoint: bool) -> None:
    run = automatic(name, seed=11, step=0.0, load=1.0, noise=0.005)
    found = identify(record_of(run, setpoint=setpoint), settings=SETTINGS[name])
    assert found.how == "load"
    assert found.refused is None
    truth = figures(PLANTS[name])
    draws = np.array([figures(draw) for draw in found.fresh])
    low, high = draws.min(axis=0), draws.max(axis=0)
    slack = 0.1 * (high - low) + 0.01 * np.abs(truth)
    assert (truth >= low - slack)[[0, 3]].all()
    assert (truth <= high + slack)[[0, 3]].all()


def test_the_load_itself() -> None:
    fit = load_fitted(record_of(automatic("two lags", seed=12, step=0.0, load=1.5, noise=0.005)))
    assert fit.load == pytest.approx(1.5, rel=0.02)
    assert fit.theta[3] == pytest.approx(38.5 + 2.2, abs=0.5)  # row 77 and the dead time; one row


def test_without_a_load_nothing_is_claimed() -> None:
    found = identify(record_of(automatic("two lags", seed=13, step=0.0, load=0.0)))
    assert found.refused is not None
    assert "step the setpoint" in found.refused
