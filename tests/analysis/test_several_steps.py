"""Several steps in one record: one model when they agree, a finding when they do not."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.integrate import solve_ivp

import loopfit

TIME = np.arange(1600) * 0.05
CHANGES = ((5.0, 1.0), (25.0, -2.0), (45.0, 1.5), (65.0, -0.5))


def setpoint(t: NDArray[np.float64] | float) -> NDArray[np.float64]:
    return np.sum([size * (np.asarray(t) >= at) for at, size in CHANGES], axis=0)


def respond(zeta_up: float, zeta_down: float) -> NDArray[np.float64]:
    """A unit-gain oscillator, omega_n = 1 rad/s, whose damping may depend on the way it goes (solve_ivp)."""
    parts, state, begin = [], [0.0, 0.0], 0.0
    for at in (*(at for at, _ in CHANGES), TIME[-1] + 0.05):
        inside = TIME[(TIME >= begin) & (TIME < at)]
        level = float(setpoint(begin))
        zeta = zeta_up if begin == 0.0 or dict(CHANGES)[begin] > 0 else zeta_down
        run = solve_ivp(
            lambda _, y, level=level, zeta=zeta: [y[1], level - y[0] - 2.0 * zeta * y[1]],
            (begin, at), state, t_eval=[*inside, at], rtol=1e-9, atol=1e-10,
        )  # fmt: skip
        parts.append(run.y[0, :-1])
        state, begin = list(run.y[:, -1]), at
    return np.concatenate(parts)


def test_steps_that_agree_are_fitted_together() -> None:
    rng = np.random.default_rng(7)
    measurement = respond(0.4, 0.4) + rng.normal(0.0, 0.02, TIME.size)
    # one record, so 99 %: over 100 seeds the 95 % interval of this record held the truth 95 times
    analysis = loopfit.analyze(time=TIME, measurement=measurement, setpoint=setpoint(TIME), confidence_percent=99)
    assert [step.used for step in analysis.steps] == [True] * 4
    assert "several_steps" in {finding.code for finding in analysis.findings}
    model = analysis.model
    assert model is not None
    assert model.damping_ratio is not None
    assert model.damping_ratio.low <= 0.4 <= model.damping_ratio.high
    alone = [row.damping_ratio for row in analysis.per_step]
    assert all(q is not None and model.damping_ratio.high - model.damping_ratio.low < q.high - q.low for q in alone)


def test_steps_that_differ_by_direction_are_told_apart() -> None:
    rng = np.random.default_rng(7)
    measurement = respond(0.3, 0.6) + rng.normal(0.0, 0.02, TIME.size)
    analysis = loopfit.analyze(time=TIME, measurement=measurement, setpoint=setpoint(TIME))
    (finding,) = (f for f in analysis.findings if f.code == "depends_on_step")
    assert finding.severity == "warning"
    assert "damping ratio" in finding.text
    assert "higher on the way down" in finding.text
    assert [step.used for step in analysis.steps] == [True, False, False, False]
    for row, truth in zip(analysis.per_step, (0.3, 0.6, 0.3, 0.6), strict=True):
        assert row.damping_ratio is not None
        # five half-widths: four steps at 95 %
        half = (row.damping_ratio.high - row.damping_ratio.low) / 2
        assert row.damping_ratio.value == pytest.approx(truth, abs=2.5 * half)


def test_one_step_can_be_chosen() -> None:
    rng = np.random.default_rng(7)
    measurement = respond(0.3, 0.6) + rng.normal(0.0, 0.02, TIME.size)
    second = loopfit.analyze(time=TIME, measurement=measurement, setpoint=setpoint(TIME), step=2)
    assert second.step is not None
    assert second.step.time_s == 25.0
    assert second.model is not None
    assert second.model.damping_ratio is not None
    assert second.model.damping_ratio.low <= 0.6 <= second.model.damping_ratio.high
    with pytest.raises(loopfit.RecordError, match="there is no step 5: the record holds 4"):
        loopfit.analyze(time=TIME, measurement=measurement, setpoint=setpoint(TIME), step=5)
