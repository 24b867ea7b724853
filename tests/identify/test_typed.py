"""Typed settings against a recorded output: agreement, each kind of mix-up by its name, and what cannot be checked."""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
from loops_on_record import OnRecord, loop_on_record

from loopfit.core.errors import UsageError
from loopfit.identify.typed import check_typed
from loopfit.loop.settings import Settings

Make = Callable[[OnRecord], Settings]


def typed_as(loop: OnRecord, **changes: Any) -> Settings:
    """The controller of the record in the ideal form, with what is changed."""
    fields: dict[str, Any] = {
        "gain": loop.gain,
        "integral_time_s": loop.integral_s,
        "scan_s": loop.scan_s,
        "output_limits": loop.limits,
    }
    if loop.derivative_s > 0.0:
        fields |= {"derivative_time_s": loop.derivative_s, "derivative_filter_s": loop.filter_s}
    form = changes.pop("form", "ideal")
    fields |= changes
    return Settings(form, **{name: value for name, value in fields.items() if value is not None})


def series_typed(loop: OnRecord) -> Settings:
    """Numbers of the series form that acts, typed as ideal: made so that the record's controller is their series form.

    K' = K Ti'/Ti; Ti' and Td' are the roots of x^2 - Ti x + Ti Td (no filter), by the algebra of a textbook.
    """
    with_filter = loop.integral_s - loop.filter_s
    root = math.sqrt(max(with_filter**2 - 4.0 * loop.integral_s * loop.derivative_s, 0.0))
    long, short = 0.5 * (with_filter + root) + loop.filter_s, 0.5 * (with_filter - root)
    return typed_as(loop, gain=loop.gain * long / loop.integral_s, integral_time_s=long, derivative_time_s=short)


def ideal_typed_as_series(loop: OnRecord) -> Settings:
    return typed_as(loop, form="series")


def parallel(loop: OnRecord, kp: float, ki: float, kd: float) -> Settings:
    return typed_as(
        loop, form="parallel", gain=kp, integral_time_s=None, derivative_time_s=None, integral_gain_per_s=ki,
        derivative_gain_s=kd,
    )  # fmt: skip


PID: dict[str, Any] = {"derivative": True}
PI: dict[str, Any] = {"derivative": False}

KINDS: dict[str, tuple[dict[str, Any], Make, str]] = {
    "integral in minutes typed as seconds": (
        PID, lambda x: typed_as(x, integral_time_s=x.integral_s / 60.0), "integral .*minutes, typed as seconds"),
    "integral in seconds typed as minutes": (
        PI, lambda x: typed_as(x, integral_time_s=x.integral_s * 60.0, integral_unit="min"),
        "integral .*seconds, typed as minutes"),
    "derivative in minutes typed as seconds": (
        PID, lambda x: typed_as(x, derivative_time_s=x.derivative_s / 60.0, derivative_filter_s=x.filter_s),
        "derivative .*minutes, typed as seconds"),
    "derivative in seconds typed as minutes": (
        PID, lambda x: typed_as(x, derivative_time_s=x.derivative_s * 60.0, derivative_unit="min"),
        "derivative .*seconds, typed as minutes"),
    "both times in minutes typed as seconds": (
        PID, lambda x: typed_as(x, derivative_time_s=x.derivative_s / 60.0, integral_time_s=x.integral_s / 60.0),
        "integral .*minutes, typed as seconds.*derivative .*minutes, typed as seconds"),
    "band typed as gain": (
        PID, lambda x: typed_as(x, gain=100.0 / x.gain), "proportional band typed as a gain"),
    "gain typed as band": (
        PI, lambda x: typed_as(x, gain=None, proportional_band_percent=x.gain), "gain typed as a proportional band"),
    "engineering units typed as %/%": (
        PID, lambda x: typed_as(x, measurement_range=(0.0, 350.0), output_range=(-1e4, 1e4), output_limits=None),
        "engineering units, not in %/%"),
    "repeats per minute typed as minutes": (
        PI, lambda x: typed_as(x, integral_time_s=3600.0 / x.integral_s, integral_unit="min"),
        "repeats per min, typed as a time in minutes"),
    "repeats per second typed as seconds": (
        PID, lambda x: typed_as(x, integral_time_s=1.0 / x.integral_s), "repeats per s, typed as a time in seconds"),
    "minutes typed as repeats per minute": (
        PID, lambda x: typed_as(x, integral_time_s=3600.0 / x.integral_s, integral_unit="/min"),
        "a time in minutes, typed as repeats per min"),
    "series typed as ideal": (PID, series_typed, "act in the series form"),
    "ideal typed as series": (PID, ideal_typed_as_series, "act in the ideal form"),
    "parallel typed as ideal": (
        PID, lambda x: typed_as(x, integral_time_s=x.integral_s / x.gain, derivative_time_s=x.derivative_s * x.gain),
        "act in the parallel form"),
    "ideal typed as parallel": (
        PID, lambda x: parallel(x, x.gain, 1.0 / x.integral_s, x.derivative_s), "act in the ideal form"),
    "integral gain typed as integral time": (
        PI, lambda x: typed_as(x, integral_time_s=x.gain / x.integral_s), "integral gain per s, typed as an integral time"),
    "integral time typed as integral gain": (
        PID, lambda x: parallel(x, x.gain, x.integral_s, x.gain * x.derivative_s), "integral time in seconds, typed as an integral gain"),
    "derivative gain typed as derivative time": (
        PID, lambda x: typed_as(x, derivative_time_s=x.derivative_s * x.gain),
        "derivative gain in seconds, typed as a derivative time"),
    "wrong sign": (PID, lambda x: typed_as(x, gain=-x.gain), "wrong sign"),
    "wrong action": (PI, lambda x: typed_as(x, action="direct"), "action is the other one"),
    "derivative on the error": (
        {"derivative": True, "on_error": True}, lambda x: typed_as(x), "derivative acts on the error"),
    "derivative on the measurement": (
        PID, lambda x: typed_as(x, derivative_on="error"), "derivative acts on the measurement"),
    "setpoint weight of 0.3": (
        {"derivative": True, "weight": 0.3}, lambda x: typed_as(x), "setpoint weight that acts is 0.[23]"),
    "derivative off": (PI, lambda x: typed_as(x, derivative_time_s=x.integral_s * 0.2), "derivative does not act"),
    "derivative acts though typed off": (
        PID, lambda x: typed_as(x, derivative_time_s=None, derivative_filter_s=None), "derivative of .* acts, typed was none"),
    "another filter": (
        {"derivative": True, "filter_share": 0.2}, lambda x: typed_as(x, derivative_filter_s=x.derivative_s * 0.05),
        "derivative filter that acts"),
    "scan twice as long": (
        {"derivative": True, "rows_a_scan": 2, "rows": 1000}, lambda x: typed_as(x, scan_s=x.scan_s / 2.0), "scan interval that acts"),
    "integral and derivative swapped": (
        PID, lambda x: typed_as(x, integral_time_s=x.derivative_s, derivative_time_s=x.integral_s), "swapped"),
    "gain a tenth": (PI, lambda x: typed_as(x, gain=x.gain / 10.0), "gain .*: ten times it"),
    "integral a hundred times": (
        PID, lambda x: typed_as(x, integral_time_s=x.integral_s * 100.0), "integral .*: a hundredth of it"),
    "integral off": (
        PI, lambda x: typed_as(x, integral_time_s=None), "integral of .* acts, typed was none"),
    "gain 30 % high": (PID, lambda x: typed_as(x, gain=x.gain * 1.3), r"the gain that acts is .*: 0\.7[67]\d* times"),
}  # fmt: skip


def means_something_else(loop: OnRecord, typed: Settings) -> bool:
    """Whether the typed gains differ from the true ones by more than a tenth: else there is no mix-up to find."""
    true = np.array([loop.gain, loop.gain / loop.integral_s, loop.gain * loop.derivative_s])
    got = np.array([typed.gains.kp, typed.gains.ki, typed.gains.kd])
    return bool(np.any(np.abs(got - true) > 0.1 * np.abs(true)))


OTHERWISE = (
    "derivative on the error",
    "derivative on the measurement",
    "setpoint weight of 0.3",
    "another filter",
    "scan twice as long",
)


def recognised(kind: str, rng: np.random.Generator) -> tuple[bool, str]:
    options, make, pattern = KINDS[kind]
    while True:
        loop = loop_on_record(rng, **options)
        typed = make(loop)
        if (
            kind == "series typed as ideal"
            and (loop.integral_s - loop.filter_s) ** 2 < 4.2 * loop.integral_s * loop.derivative_s
        ):
            continue  # no series form has these gains
        if kind in OTHERWISE or means_something_else(loop, typed):
            break
    check = check_typed(*loop.columns, typed)
    import re

    right = check.verdict == "differ" and re.search(pattern, check.text) is not None
    return right, f"{check.verdict}: {check.text}"


def agreed(rng: np.random.Generator, j: int) -> str:
    """Verdict on settings that are right: PI and PID, the derivative on either, with and without setpoint weight."""
    weight, on_error = (0.4, 1.0, 1.0)[j % 3], j % 4 == 3
    loop = loop_on_record(rng, derivative=bool(j % 2), on_error=on_error, weight=weight)
    typed = typed_as(
        loop, setpoint_weight=None if weight == 1.0 else weight, derivative_on="error" if on_error else "measurement"
    )
    return check_typed(*loop.columns, typed).verdict


@pytest.mark.parametrize("kind", KINDS)
def test_a_mix_up_is_named(kind: str) -> None:
    rng = np.random.default_rng([7, list(KINDS).index(kind)])
    for _ in range(2):
        right, text = recognised(kind, rng)
        assert right, text


def test_right_settings_agree() -> None:
    rng = np.random.default_rng(8)
    assert [agreed(rng, j) for j in range(12)] == ["agree"] * 12


@pytest.mark.study
@pytest.mark.parametrize("kind", KINDS)
def test_study_of_a_mix_up(kind: str) -> None:
    """The figure asked for: at least 95 % of 50 loops."""
    rng = np.random.default_rng([9, list(KINDS).index(kind)])
    results = [recognised(kind, rng) for _ in range(50)]
    assert sum(right for right, _ in results) >= 48, [text for right, text in results if not right]


@pytest.mark.study
def test_study_of_false_alarms() -> None:
    """At most 2 % of right settings may be said to differ; nearly all are to be said to agree."""
    rng = np.random.default_rng(10)
    verdicts = [agreed(rng, j) for j in range(400)]
    assert verdicts.count("differ") <= 8
    assert verdicts.count("agree") >= 380


def spoiled(loop: OnRecord, how: str, rng: np.random.Generator) -> tuple[np.ndarray, ...]:
    """The record after a recorder thinned it, or ran a first-order filter of three scans over a column."""
    from scipy.signal import lfilter

    time, setpoint, measurement, output = loop.columns
    if how == "every fifth row":
        return tuple(column[::5] for column in loop.columns)
    if how == "every second row":
        return tuple(column[::2] for column in loop.columns)
    if how == "noisy output":
        return time, setpoint, measurement, output + 0.003 * np.ptp(output) * rng.standard_normal(len(time))
    column = measurement if how == "filtered measurement" else output
    smooth = column[0] + lfilter([0.25], [1.0, -0.75], column - column[0])
    return (time, setpoint, smooth, output) if how == "filtered measurement" else (time, setpoint, measurement, smooth)


SPOILED = ("every fifth row", "every second row", "filtered measurement", "filtered output", "noisy output")


def wrongly_blamed(how: str, rng: np.random.Generator, count: int) -> list[str]:
    """Sentences on right settings that say they differ."""
    out = []
    for j in range(count):
        loop = loop_on_record(rng, derivative=bool(j % 2))
        check = check_typed(*spoiled(loop, how, rng), typed_as(loop))
        out += [check.text] if check.verdict == "differ" else []
    return out


@pytest.mark.parametrize("how", SPOILED)
def test_a_spoiled_record_blames_no_settings(how: str) -> None:
    assert wrongly_blamed(how, np.random.default_rng(11), 6) == []


@pytest.mark.study
@pytest.mark.parametrize("how", SPOILED)
def test_study_of_spoiled_records(how: str) -> None:
    blamed = wrongly_blamed(how, np.random.default_rng(12), 100)
    assert len(blamed) <= 4, blamed


def test_what_was_found_is_in_the_form_that_was_typed() -> None:
    loop = loop_on_record(np.random.default_rng(3))
    check = check_typed(*loop.columns, typed_as(loop, integral_time_s=loop.integral_s / 60.0))
    assert isinstance(check.found, Settings)
    # the recorder's rounding, a thousandth of the step, over the scans of a record: well within 1 %
    assert check.found.gain == pytest.approx(loop.gain, rel=0.01)
    assert check.found.integral_time_s == pytest.approx(loop.integral_s, rel=0.01)
    assert check.found.derivative_time_s == pytest.approx(loop.derivative_s, rel=0.01)
    assert check.filter_s == pytest.approx(loop.filter_s, rel=0.1)
    assert check.lag_scans == 0


@pytest.mark.parametrize("lag", [-3, -1, 1, 2])
def test_an_output_stored_some_scans_apart(lag: int) -> None:
    loop = loop_on_record(np.random.default_rng(4))
    time, setpoint, measurement, output = loop.columns
    shifted = np.roll(output, lag)[3:-3]
    check = check_typed(time[3:-3], setpoint[3:-3], measurement[3:-3], shifted, typed_as(loop))
    assert check.verdict == "agree"
    assert check.lag_scans == lag


def test_manual_cannot_be_checked() -> None:
    loop = loop_on_record(np.random.default_rng(5))
    still = np.full(len(loop.time), 3.0)
    check = check_typed(loop.time, loop.setpoint, loop.measurement, still, typed_as(loop))
    assert check.verdict == "cannot be checked"
    assert "manual" in check.text
    assert check.found is None


def test_an_output_that_obeys_something_else_cannot_be_checked() -> None:
    loop = loop_on_record(np.random.default_rng(6))
    other = np.cumsum(np.random.default_rng(1).standard_normal(len(loop.time)))
    check = check_typed(loop.time, loop.setpoint, loop.measurement, other, typed_as(loop))
    assert check.verdict == "cannot be checked"


def test_rows_that_cannot_be_used() -> None:
    loop = loop_on_record(np.random.default_rng(5))
    time = loop.time.copy()
    time[7] += 0.4 * loop.scan_s
    with pytest.raises(UsageError, match="even in time"):
        check_typed(time, loop.setpoint, loop.measurement, loop.output, typed_as(loop))
    with pytest.raises(UsageError, match="one length"):
        check_typed(loop.time[1:], loop.setpoint, loop.measurement, loop.output, typed_as(loop))
    hole = np.where(np.arange(len(loop.time)) == 5, np.nan, loop.measurement)
    with pytest.raises(UsageError, match="finite"):
        check_typed(loop.time, loop.setpoint, hole, loop.output, typed_as(loop))
    short = [column[:10] for column in loop.columns]
    assert check_typed(*short, typed_as(loop)).verdict == "cannot be checked"
