"""Figures do not depend on units, offsets, signs, the clock or the order of columns (laws of linear systems)."""

from __future__ import annotations

from itertools import permutations
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, example, given, settings
from hypothesis import strategies as st
from simulated_records import Truth, unit_response

import loopfit
from loopfit.analysis.result import Analysis
from loopfit.core.quantity import Quantity

# The search stops when a step promises less than 1e-7 / n of the sum of squares: sqrt(1e-7) = 3e-4 of a standard
# deviation, a quarter of an interval. Starts differ by rounding only, so most agree far better.
OF_WIDTH = 1e-3

SECONDS = ("dead_time_s", "lag_plus_dead_time_s", "damped_period_s")
RESPONSE_SECONDS = ("rise_time_s", "delay_time_s", "settling_time_s", "peak_time_s")
PER_SECOND = ("natural_frequency_rad_s", "damped_frequency_rad_s")
FAST = settings(max_examples=8, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])

ROWS = 200


def record(zeta: float, *, size: float = 1.0, dead_time: float = 0.6) -> dict[str, np.ndarray]:
    truth = Truth(gain=2.0, zeta=zeta, omega=1.0, dead_time=dead_time)
    time = np.linspace(-3.0, 24.0, ROWS)
    row = int(np.searchsorted(time, 0.0))
    noise = 0.02 * np.random.default_rng(4).standard_normal(ROWS)
    return {
        "time": time,
        "measurement": size * unit_response(truth, time - time[row]) + noise,
        "output": np.where(np.arange(ROWS) < row, 0.0, size),
    }


DAMPINGS = pytest.mark.parametrize("zeta", [0.06, 0.4, 1.02, 1.6])


def same(found: Quantity | None, wanted: Quantity | None, factor: float = 1.0) -> None:
    assert (found is None) == (wanted is None)
    if found is None or wanted is None:
        return
    scaled = wanted.scaled(factor)
    width = scaled.high - scaled.low
    slack = OF_WIDTH * (width if np.isfinite(width) else abs(scaled.value)) + 1e-9 * abs(scaled.value)
    assert found.value == pytest.approx(scaled.value, rel=0, abs=slack)
    for end, other in ((found.low, scaled.low), (found.high, scaled.high)):
        # the walkers stop within 4 % of the threshold, 2 % of half the width; from the same start they stop alike
        assert end == other or end == pytest.approx(other, rel=0, abs=10 * slack)


def same_analysis(found: Analysis, wanted: Analysis, *, gain: float = 1.0, seconds: float = 1.0) -> None:
    assert found.model is not None
    assert wanted.model is not None
    assert found.response is not None
    assert wanted.response is not None
    assert found.model.kind == wanted.model.kind
    assert found.model.regime == wanted.model.regime
    same(found.model.damping_ratio, wanted.model.damping_ratio)
    same(found.model.gain, wanted.model.gain, gain)
    for name in SECONDS:
        same(getattr(found.model, name), getattr(wanted.model, name), seconds)
    for name in PER_SECOND:
        same(getattr(found.model, name), getattr(wanted.model, name), 1.0 / seconds)
    for name in RESPONSE_SECONDS:
        same(getattr(found.response, name), getattr(wanted.response, name), seconds)
    same(found.response.overshoot_percent, wanted.response.overshoot_percent)
    same(found.response.decay_ratio, wanted.response.decay_ratio)
    assert [finding.code for finding in found.findings] == [finding.code for finding in wanted.findings]


@DAMPINGS
@given(
    unit=st.floats(-6.0, 6.0).map(lambda power: 10.0**power),
    sign=st.sampled_from([-1.0, 1.0]),
    offset=st.floats(-1e3, 1e3),
)
@example(unit=1.0, sign=-1.0, offset=0.0)
@FAST
def test_units_offset_and_sign_of_the_measurement(zeta: float, unit: float, sign: float, offset: float) -> None:
    base = record(zeta)
    plain = loopfit.analyze(**base)
    factor = sign * unit
    changed = loopfit.analyze(**(base | {"measurement": factor * (base["measurement"] + offset)}))
    same_analysis(changed, plain, gain=factor)


@DAMPINGS
@given(
    unit=st.floats(-6.0, 6.0).map(lambda power: 10.0**power),
    sign=st.sampled_from([-1.0, 1.0]),
    offset=st.floats(-1e3, 1e3),
)
@FAST
def test_units_offset_and_sign_of_the_output(zeta: float, unit: float, sign: float, offset: float) -> None:
    base = record(zeta)
    factor = sign * unit
    changed = loopfit.analyze(**(base | {"output": factor * (base["output"] + offset)}))
    same_analysis(changed, loopfit.analyze(**base), gain=1.0 / factor)


@DAMPINGS
@given(unit=st.floats(-5.0, 5.0).map(lambda power: 10.0**power), origin=st.floats(-1e4, 1e4))
@FAST
def test_time_unit_and_origin(zeta: float, unit: float, origin: float) -> None:
    base = record(zeta)
    changed = loopfit.analyze(**(base | {"time": unit * (base["time"] + origin)}))
    same_analysis(changed, loopfit.analyze(**base), seconds=unit)


@DAMPINGS
@given(times=st.floats(0.5, 8.0))
@example(times=2.0)
@FAST
def test_larger_step_leaves_damping_unchanged(zeta: float, times: float) -> None:
    """The plant is linear: the response grows with the step, the noise does not, and intervals narrow with it."""
    one, more = (loopfit.analyze(**record(zeta, size=size)).model for size in (1.0, times))
    assert one is not None
    assert more is not None
    for name in ("damping_ratio", "natural_frequency_rad_s", "gain"):
        first, second = getattr(one, name), getattr(more, name)
        assert first.low < second.high
        assert second.low < first.high
        if np.isfinite(first.high) and np.isfinite(second.high) and times > 1.5:
            assert second.high - second.low < first.high - first.low


def test_setpoint_in_place_of_output_gives_the_same_model() -> None:
    """A closed loop and a plant of the same equation move alike; only the name of the stepped signal differs."""
    base = record(0.4)
    loop = loopfit.analyze(time=base["time"], measurement=base["measurement"], setpoint=base["output"])
    plant = loopfit.analyze(**base)
    assert loop.model is not None
    assert plant.model is not None
    same(loop.model.damping_ratio, plant.model.damping_ratio)
    same(loop.model.gain, plant.model.gain)


@pytest.mark.parametrize("order", list(permutations(["time", "measurement", "setpoint", "output"]))[::3])
def test_order_of_columns(order: tuple[str, ...], tmp_path: Path) -> None:
    base = record(0.4)
    loop = {"time": base["time"], "measurement": base["measurement"], "setpoint": 2.0 * base["output"]}
    columns = loop | {"output": 50.0 + 10.0 * (loop["setpoint"] - loop["measurement"])}
    titles = {"time": "time (s)", "measurement": "measurement", "setpoint": "setpoint", "output": "output"}
    lines = [",".join(titles[name] for name in order)]
    lines += [",".join(repr(float(columns[name][i])) for name in order) for i in range(ROWS)]
    path = tmp_path / "record.csv"
    path.write_text("\n".join(lines) + "\n")
    same_analysis(loopfit.analyze(path), loopfit.analyze(**columns))
