"""Which structure a record asks for, where the noise wanders and where the plant does."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from scipy.signal import lfilter

from loopfit.core.arrays import Array
from loopfit.fit.choose import choose, clear_trend, evidence, moves_before_step
from loopfit.fit.columns import Input
from loopfit.fit.estimate import Structure, Trace, fit_trace
from loopfit.fit.warranted import warranted

ROWS, STEP_ROW, INTERVAL = 240, 40, 0.1
TIME = (np.arange(ROWS) - STEP_ROW) * INTERVAL
PLAIN, DRIFT, MOVING = Structure(), Structure(drift=True), Structure(moving_start=True)


def response(time: Array, zeta: float = 0.6, omega: float = 1.0) -> Array:
    """Step response of second order (common practice: any textbook on feedback)."""
    t = np.maximum(time, 0.0)
    damped = omega * math.sqrt(1.0 - zeta**2)
    inside = np.cos(damped * t) + zeta * omega / damped * np.sin(damped * t)
    out: Array = 1.0 - np.exp(-zeta * omega * t) * inside
    return out


def wander(seed: int, phi: float, rows: int = ROWS) -> Array:
    """First-order autoregressive noise of rms 1, by scipy's lfilter, its start thrown away."""
    source = np.random.default_rng(seed).standard_normal(rows + 500)
    out: Array = lfilter([math.sqrt(1.0 - phi**2)], [1.0, -phi], source)[500:]
    return out


def trace(values: Array) -> Trace:
    step = Input(times=np.array([0.0]), sizes=np.array([1.0]))
    return Trace(time=TIME, values=values, input=step, begins=0.0, step_row=STEP_ROW)


def fast(values: Array) -> float:
    """White noise of a row, from second differences (common practice)."""
    return float(np.std(np.diff(values, 2))) / math.sqrt(6.0)


def test_wandering_noise_is_no_drift_and_no_moving_start() -> None:
    """AR(1) 0.9 at a fiftieth of the change; the test allows one false movement in a thousand, of 40 records one at most."""
    false = 0
    for seed in range(40):
        record = trace(response(TIME) + 0.02 * wander(seed, 0.9))
        plain = fit_trace(record, PLAIN)
        false += any(warranted(fit_trace(record, structure), plain) for structure in (DRIFT, MOVING))
    assert false <= 1


def test_a_wander_that_looks_like_a_trend_before_the_step_is_not_believed() -> None:
    """Of 3,000 records of this noise, those whose rows before the step seem to have a trend: each comes out plain."""
    seeming = []
    for seed in range(3000):
        record = trace(response(TIME) + 0.03 * wander(seed, 0.9))
        if moves_before_step(record, fast(record.values)):
            seeming.append(record)
        if len(seeming) == 5:
            break
    assert seeming
    for record in seeming:
        assert choose(record, fast(record.values), noise_floor=0.0).structure == PLAIN


@pytest.mark.parametrize("phi", [0.0, 0.7])
@pytest.mark.parametrize("seed", [1, 2, 3])
def test_a_drift_is_found_under_white_and_coloured_noise(phi: float, seed: int) -> None:
    """A line of half the change over the record, fifty times the rms of the noise."""
    record = trace(response(TIME) + 0.5 * TIME / np.ptp(TIME) + 0.01 * wander(seed, phi))
    assert warranted(fit_trace(record, DRIFT), fit_trace(record, PLAIN))
    assert choose(record, fast(record.values), noise_floor=0.0).structure == DRIFT


@pytest.mark.parametrize("phi", [0.0, 0.7])
@pytest.mark.parametrize("seed", [1, 2, 3])
def test_the_tail_of_an_earlier_movement_is_found(phi: float, seed: int) -> None:
    """The response to a step of -1 made 1.5 s before the record begins is still under way."""
    earlier = 1.0 - response(TIME - TIME[0] + 1.5)
    record = trace(response(TIME) + earlier + 0.01 * wander(seed, phi))
    assert warranted(fit_trace(record, MOVING), fit_trace(record, PLAIN))
    assert choose(record, fast(record.values), noise_floor=0.0).structure == MOVING


def test_evidence_does_not_depend_on_the_unit() -> None:
    """A factor on the measurement, and 0.1 % for where two searches end."""
    values = response(TIME) + 0.5 * TIME / np.ptp(TIME) + 0.02 * wander(4, 0.9)
    found = []
    for unit in (1.0, 1e3, 1e-3):
        record = trace(unit * values)
        found.append(evidence(fit_trace(record, DRIFT), fit_trace(record, PLAIN)))
    assert found[1] == pytest.approx(found[0], rel=1e-3)
    assert found[2] == pytest.approx(found[0], rel=1e-3)
    assert found[0] > 0.0


def test_uneven_rows_have_no_colour_to_test_with() -> None:
    values = response(TIME) + 0.02 * wander(5, 0.0)
    uneven = np.sort(TIME + INTERVAL * np.random.default_rng(6).uniform(-0.4, 0.4, ROWS))
    record = replace(trace(values), time=uneven)
    assert warranted(fit_trace(record, DRIFT), fit_trace(record, PLAIN))


def test_a_trend_of_coloured_noise_is_seldom_clear() -> None:
    """Five standard errors of 48 rows of AR(1) 0.8: with a known correlation 6 in 10 million, with this one below 1 in 100."""
    time = np.arange(48.0)
    seen = [clear_trend(time, wander(seed, 0.8, 48), 0.5) is not None for seed in range(1000)]
    assert sum(seen) <= 10
    assert clear_trend(time, time + wander(1, 0.8, 48), 0.5) is not None
