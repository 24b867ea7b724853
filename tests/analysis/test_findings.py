"""Each finding on a record that was made to have it, and silence on one that was not.

The plants are simulated by solve_ivp or a fixed-step Euler loop, apart from loopfit's own formulas.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.integrate import solve_ivp

import loopfit

Array = NDArray[np.float64]
TIME = np.arange(900) * 0.05 - 5.0
STEP = (TIME >= 0.0).astype(float)


def noise(rms: float, seed: int = 7) -> Array:
    return np.random.default_rng(seed).normal(0.0, rms, TIME.size)


def oscillator(zeta: float, omega: float = 1.0, start: tuple[float, float] = (0.0, 0.0), level: float = 1.0) -> Array:
    """Step response of a mass on a spring with a damper, at rest until 0."""
    after = TIME[TIME >= 0.0]
    run = solve_ivp(
        lambda _, y: [y[1], omega**2 * (level - y[0]) - 2.0 * zeta * omega * y[1]],
        (0.0, after[-1]), start, t_eval=after, rtol=1e-9, atol=1e-11,
    )  # fmt: skip
    return np.concatenate([np.full(TIME.size - after.size, start[0]), run.y[0]])


def loop(
    rows: int, output_of: Callable[[float, float, float], float], *, slope: float = np.inf
) -> tuple[Array, Array, Array]:
    """A sampled PI loop on two lags (2 s and 1 s), 0.05 s scan, small Euler steps between scans."""
    setpoint = np.where(np.arange(rows) < 100, 0.0, 1.0)
    y1 = y2 = integral = last = 0.0
    measurement, output = np.zeros(rows), np.zeros(rows)
    for k in range(rows):
        error = setpoint[k] - y2
        integral += 0.05 * error
        wanted = output_of(error, integral, last)
        last = float(np.clip(wanted, last - slope * 0.05, last + slope * 0.05))
        measurement[k], output[k] = y2, last
        for _ in range(50):
            y1 += 0.001 * (last - y1) / 2.0
            y2 += 0.001 * (y1 - y2) / 1.0
    return setpoint, measurement, output


def codes(analysis: loopfit.Analysis) -> dict[str, str]:
    return {finding.code: finding.severity for finding in analysis.findings}


def test_a_clean_ringing_record_has_no_finding() -> None:
    analysis = loopfit.analyze(time=TIME, measurement=oscillator(0.3) + noise(0.02), setpoint=STEP)
    assert codes(analysis) == {}


def test_flat_top_is_a_saturated_measurement_and_its_rows_are_set_aside() -> None:
    measurement = np.minimum(oscillator(0.15) + noise(0.003), 1.25)
    analysis = loopfit.analyze(time=TIME, measurement=measurement, setpoint=STEP)
    assert codes(analysis)["measurement_saturated"] == "warning"
    assert analysis.model is not None
    assert analysis.model.damping_ratio is not None
    # without the clipped rows the damping is that of the plant; three half-widths, one record
    q = analysis.model.damping_ratio
    assert q.value == pytest.approx(0.15, abs=1.5 * (q.high - q.low))


def test_output_at_its_limit_is_named() -> None:
    setpoint, measurement, output = loop(600, lambda e, i, _: float(np.clip(8.0 * e + 1.5 * i, -0.2, 1.6)))
    rng = np.random.default_rng(7)
    seen = measurement + rng.normal(0.0, 0.002, 600)
    recorded = np.minimum(output + rng.normal(0.0, 1e-3, 600), 1.6)
    time = np.arange(600) * 0.05
    assert (
        codes(loopfit.analyze(time=time, measurement=seen, setpoint=setpoint, output=recorded))["output_clamped"]
        == "warning"
    )
    free = loop(600, lambda e, i, _: 1.5 * e + 0.6 * i)
    analysis = loopfit.analyze(
        time=time, measurement=free[1] + rng.normal(0.0, 0.002, 600), setpoint=free[0], output=free[2]
    )
    assert not {"output_clamped", "output_rate_limited"} & codes(analysis).keys()


def test_output_at_its_greatest_slope_is_named() -> None:
    setpoint, measurement, output = loop(600, lambda e, i, _: 4.0 * e + 1.0 * i, slope=0.8)
    rng = np.random.default_rng(7)
    analysis = loopfit.analyze(
        time=np.arange(600) * 0.05,
        measurement=measurement + rng.normal(0.0, 0.002, 600),
        setpoint=setpoint,
        output=output,
    )
    assert codes(analysis)["output_rate_limited"] == "warning"


@pytest.mark.parametrize("column", [None, "setpoint"])
def test_a_sustained_swing_is_a_limit_cycle_with_period_amplitude_and_the_test_in_manual(column: str | None) -> None:
    wave = 2.0 * np.sin(1.3 * TIME) + 5.0 + noise(0.02)
    options = {} if column is None else {column: np.full(TIME.size, 5.0)}
    analysis = loopfit.analyze(time=TIME, measurement=wave, **options)
    assert analysis.model is None
    (finding,) = (f for f in analysis.findings if f.code == "limit_cycle")
    assert "period 4.83 s" in finding.text  # 2 pi / 1.3
    assert "amplitude 2" in finding.text
    assert "manual" in finding.text


def test_a_growing_swing_sends_to_manual() -> None:
    analysis = loopfit.analyze(time=TIME, measurement=oscillator(-0.03) + noise(0.02), setpoint=STEP)
    assert analysis.model is None
    (finding,) = (f for f in analysis.findings if f.code == "growing_oscillation")
    assert "go to manual" in finding.text


def test_a_swing_before_the_step_is_named() -> None:
    time = np.arange(1200) * 0.05 - 30.0
    step = (time >= 0.0).astype(float)
    late = np.interp(time, TIME, oscillator(0.5))
    analysis = loopfit.analyze(
        time=time,
        measurement=late + 0.15 * np.sin(1.1 * time) + np.random.default_rng(7).normal(0, 0.01, 1200),
        setpoint=step,
    )
    assert codes(analysis)["swinging_before_step"] == "warning"


def friction_decay() -> Array:
    """Spring, mass and dry friction only: successive swings fall by equal steps (solve_ivp)."""
    after = TIME[TIME >= 0.0]
    run = solve_ivp(
        lambda _, y: [y[1], -y[0] - 0.06 * np.tanh(y[1] / 0.002)],
        (0.0, after[-1]), [1.5, 0.0], t_eval=after, max_step=0.01, rtol=1e-7, atol=1e-9,
    )  # fmt: skip
    return run.y[0]


def test_dry_friction_is_told_from_damping() -> None:
    after = TIME[TIME >= 0.0]
    rng = np.random.default_rng(7)
    dry = loopfit.analyze(time=after, measurement=friction_decay() + rng.normal(0.0, 0.005, after.size))
    assert codes(dry)["friction_like_decay"] == "warning"
    viscous = 1.5 - oscillator(0.03, level=1.5)[TIME >= 0.0]
    wet = loopfit.analyze(time=after, measurement=viscous + rng.normal(0.0, 0.005, after.size))
    assert "friction_like_decay" not in codes(wet)


def test_a_spring_that_stiffens_changes_its_frequency() -> None:
    after = TIME[TIME >= 0.0]
    run = solve_ivp(
        lambda _, y: [y[1], -y[0] - 0.8 * y[0] ** 3 - 0.08 * y[1]],
        (0.0, after[-1]), [1.5, 0.0], t_eval=after, rtol=1e-9, atol=1e-10,
    )  # fmt: skip
    rng = np.random.default_rng(7)
    analysis = loopfit.analyze(time=after, measurement=run.y[0] + rng.normal(0.0, 0.005, after.size))
    (finding,) = (f for f in analysis.findings if f.code == "frequency_changes")
    assert "slower" in finding.text  # the stiffening part fades with the amplitude


def test_outliers_are_named_set_aside_and_do_not_move_the_answer() -> None:
    wild = noise(0.01)
    rows = [120, 260, 420, 610, 780]
    wild[rows] += np.array([2.0, -1.5, 2.0, 1.0, -2.0])
    analysis = loopfit.analyze(time=TIME, measurement=oscillator(0.3) + wild, setpoint=STEP)
    (finding,) = (f for f in analysis.findings if f.code == "outliers")
    assert finding.text.startswith("5 rows")
    assert analysis.model is not None
    q = analysis.model.damping_ratio
    assert q is not None
    assert q.value == pytest.approx(0.3, abs=1.5 * (q.high - q.low))
    assert q.high - q.low < 0.02


def test_feedback_of_the_wrong_sign_is_refused() -> None:
    analysis = loopfit.analyze(time=TIME, measurement=-oscillator(0.6) + noise(0.01), setpoint=STEP)
    assert analysis.model is None
    assert codes(analysis)["wrong_sign"] == "error"


def test_a_response_too_small_is_refused_and_noise_alone_too() -> None:
    for size in (0.004, 0.0):
        analysis = loopfit.analyze(time=TIME, measurement=size * oscillator(0.3) + noise(0.05), setpoint=STEP)
        assert analysis.model is None
        assert "error" in codes(analysis).values()


def test_a_record_that_ends_early_says_how_much_longer() -> None:
    early = TIME < 2.0
    slow = oscillator(0.9, omega=0.5)
    analysis = loopfit.analyze(time=TIME[early], measurement=(slow + noise(0.002))[early], output=STEP[early])
    texts = [f.text for f in analysis.findings if f.code in ("record_too_short", "not_settled", "still_ramping")]
    assert texts


def test_little_decay_refuses_damping() -> None:
    few = TIME < 12.0
    analysis = loopfit.analyze(time=TIME[few], measurement=(oscillator(0.004) + noise(0.02))[few], setpoint=STEP[few])
    assert analysis.model is None
    assert {"too_little_decay", "limit_cycle"} & codes(analysis).keys()
