"""Settings and the gains that they mean: there and back over forms, units, actions and ranges."""

from __future__ import annotations

import dataclasses
import pickle
from typing import Any

import control
import numpy as np
import pytest
from hypothesis import assume, example, given
from hypothesis import strategies as st

from loopfit.core.errors import UsageError
from loopfit.loop.gains import Gains
from loopfit.loop.settings import Settings

FORMS = ["ideal", "parallel", "series"]
TERMS = ["P", "PI", "PD", "PID"]
RANGES = [None, ((0.0, 400.0), (0.0, 100.0)), ((-50.0, 150.0), (4.0, 20.0)), ((0.0, 1.6), (0.0, 27648.0))]


def spread(low: float, high: float) -> st.SearchStrategy[float]:
    return st.floats(low, high).map(lambda power: 10.0**power)


@st.composite
def settings(draw: st.DrawFn) -> Settings:
    form, terms = draw(st.sampled_from(FORMS)), draw(st.sampled_from(TERMS))
    given: dict[str, Any] = {"action": draw(st.sampled_from([None, "reverse", "direct"]))}
    gain = draw(spread(-3, 3))
    if draw(st.booleans()):
        given["proportional_band_percent"] = 100.0 / gain
    else:
        given["gain"] = -gain if given["action"] is None and draw(st.booleans()) else gain
    signed = given.get("gain", gain)
    ti, ratio = draw(spread(-2, 4)), draw(spread(-3, 1))
    if "I" in terms:
        given["integral_unit"] = draw(st.sampled_from(["/s", "/min", "/h"] + ["s", "min", "h"] * (form != "parallel")))
        given |= {"integral_gain_per_s": signed / ti} if form == "parallel" else {"integral_time_s": ti}
    if "D" in terms:
        td = ti * ratio
        given["derivative_unit"] = draw(st.sampled_from(["s", "min", "ms"]))
        given |= {"derivative_gain_s": signed * td} if form == "parallel" else {"derivative_time_s": td}
        given["derivative_on"] = draw(st.sampled_from(["measurement", "error"]))
        if draw(st.booleans()):
            given["derivative_filter_s"] = td * draw(st.floats(0.01, 1.0))
            given["filter_unit"] = draw(st.sampled_from(["s", "min", "ms"]))
    weighs = form != "series" or given.get("derivative_on") != "error" or terms != "PID"
    given["setpoint_weight"] = draw(st.one_of(st.none(), st.floats(0.0, 1.5) if weighs else st.just(1.0)))
    if (ranges := draw(st.sampled_from(RANGES))) is not None:
        given["measurement_range"], given["output_range"] = ranges
    given["scan_s"] = draw(st.sampled_from([None, 0.25]))
    made = Settings(form, **given)
    if form == "series" and terms == "PID":
        assume(abs(ti - made.filter_s) > 1e-3 * ti)  # there nothing of the derivative is left
        # nearer than that the two times are told apart to fewer digits; equal ones are an example of their own
        assume(abs(ti - ratio * ti - made.filter_s) > 1e-3 * ti)
    return made


def same(found: Gains, wanted: Gains, rel: float = 1e-12) -> None:
    for field in dataclasses.fields(Gains):
        if field.name == "derivative_on_error":
            assert found.derivative_on_error == wanted.derivative_on_error
        else:
            assert getattr(found, field.name) == pytest.approx(getattr(wanted, field.name), rel=rel, abs=0), field.name


@given(made=settings())
@example(made=Settings("series", gain=2.0, integral_time_s=4.4, derivative_time_s=4.0))  # its two times are equal
@example(
    made=Settings("series", gain=2.0, integral_time_s=1.0, derivative_time_s=4.0)
)  # the longer is the derivative's
@example(
    made=Settings(  # the filter is longer than the integral time: kd has the other sign
        "series", gain=1.0, integral_time_s=1.0, derivative_time_s=9.0, derivative_filter_s=9.0, action="direct"
    )
)
def test_settings_to_gains_and_back(made: Settings) -> None:
    gains = made.gains
    back = Settings.from_gains(gains, like=made)
    same(back.gains, gains)
    before, after = made.as_entered(), back.as_entered()
    assert list(before) == list(after)
    for key, value in before.items():
        # 12 digits are shown; the time constants of a series form come from a root, hence the wider bound
        wanted = pytest.approx(value, rel=1e-8) if isinstance(value, float) else value
        assert after[key] == wanted, key
    assert pickle.loads(pickle.dumps(made)) == made


@given(made=settings())
def test_parallel_always_exists(made: Settings) -> None:
    same(Settings.from_gains(made.gains, form="parallel").gains, made.gains)


@given(made=settings(), form=st.sampled_from(FORMS), digits=st.integers(1, 6))
def test_another_form_says_the_same(made: Settings, form: str, digits: int) -> None:
    other = dataclasses.replace(made, setpoint_weight=1.0)
    if made.form == "series" and form == "series":
        form = "ideal"
    if made.gains.kd * made.gains.kp < 0 and form != "parallel":
        with pytest.raises(UsageError, match=r"no ideal form|contradict"):
            Settings.from_gains(made.gains, form="ideal", like=other)
        return
    try:
        changed = Settings.from_gains(made.gains, form=form, like=other)
    except UsageError as error:
        text = str(error)
        reasons = ("zeros would be complex", "positive times", "contradict", "not covered")
        assert any(reason in text for reason in reasons)
        g = made.gains
        if "positive times" in text:
            assert g.kp / g.ki < g.filter_s, "the sum of the two roots is negative"
        if "zeros would be complex" in text:
            assert (g.kp - g.ki * g.filter_s) ** 2 < 4 * g.ki * g.kd * (1 + 1e-9)
        return
    same(changed.gains, made.gains, rel=1e-9)
    assert changed.form == form
    assert changed.action == made.action
    assert changed.rounded(digits).form == form


@given(made=settings(), digits=st.integers(1, 8))
def test_rounded_to_what_the_screen_takes(made: Settings, digits: int) -> None:
    shown, full = made.rounded(digits).as_entered(), made.as_entered()
    for key, value in full.items():
        if not isinstance(value, float) or key == "scan_s":
            assert shown[key] == value
        elif not (key.startswith("derivative_filter") and made.derivative_filter_s is None):
            assert f"{shown[key]:.11e}" == f"{float(f'{shown[key]:.{digits - 1}e}'):.11e}", "no more digits than asked"
            # half a unit of the last digit is at most 0.5 / 10^(digits - 1) of the number; full itself shows 12 digits
            assert shown[key] == pytest.approx(value, rel=0.5001 * 10.0 ** (1 - digits))


def test_action_and_ranges() -> None:
    # e = setpoint - measurement: reverse acting is a positive gain, direct a negative one (interface and ISA usage)
    assert Settings(gain=2.0, action="reverse").gains.kp == 2.0
    assert Settings(gain=2.0, action="direct", integral_time_s=4.0).gains.ki == -0.5
    assert Settings(gain=-2.0).gains.kp == -2.0
    # 2 %/% from 0-400 to 4-20: 2 * 16 / 400
    wide = Settings("parallel", gain=2.0, integral_gain_per_s=0.5, derivative_gain_s=4.0, action="direct",
                    measurement_range=(0, 400), output_range=(4, 20))  # fmt: skip
    found = wide.gains
    assert (found.kp, found.ki, found.kd) == pytest.approx((-0.08, -0.02, -0.16), rel=1e-15)
    assert found.filter_s == pytest.approx(0.2, rel=1e-15), "a tenth of Kd/Kp = 2 s, whatever the units of the gain"


def test_default_filter_is_a_tenth() -> None:
    for form in ("ideal", "series"):
        assert Settings(form, gain=1.0, derivative_time_s=3.0).gains.filter_s == pytest.approx(0.3, rel=1e-15)
    assert Settings(gain=1.0, integral_time_s=3.0).gains.filter_s == 0.0


@pytest.mark.parametrize("on", ["measurement", "error"])
@pytest.mark.parametrize("form", FORMS)
def test_setpoint_and_feedback_paths_against_python_control(form: str, on: str) -> None:
    s, omega = control.tf("s"), 1j * np.logspace(-3, 3, 100)
    k, ti, td, tf = 2.0, 10.0, 1.6, 0.3
    b = 0.6 if (form, on) != ("series", "error") else 1.0
    times: dict[str, float] = {"integral_time_s": ti, "derivative_time_s": td}
    if form == "parallel":
        times = {"integral_gain_per_s": k / ti, "derivative_gain_s": k * td}
    gains = Settings(form, gain=k, derivative_filter_s=tf, setpoint_weight=b, derivative_on=on, **times).gains
    slope = td * s / (tf * s + 1)
    if (
        form == "series"
    ):  # the lead block, then proportional and integral: the setpoint passes the block only on the error
        feedback = k * (1 + 1 / (ti * s)) * (1 + slope)
        setpoint = k * (b + 1 / (ti * s)) * (1 + slope if on == "error" else 1)
    else:
        feedback = k * (1 + 1 / (ti * s) + slope)
        setpoint = k * (b + 1 / (ti * s) + (slope if on == "error" else 0))
    derivative = gains.kd * omega / (gains.filter_s * omega + 1)
    ours = gains.kp + gains.ki / omega + derivative
    path = gains.setpoint_weight * gains.kp + gains.ki / omega + gains.derivative_on_error * derivative
    assert np.allclose(ours, feedback(omega), rtol=1e-12, atol=0)
    assert np.allclose(path, setpoint(omega), rtol=1e-12, atol=0)


def test_a_controller_without_a_setpoint_weight_keeps_what_it_has() -> None:
    series = Settings("series", gain=10.0, integral_time_s=8.0, derivative_time_s=2.0)
    assert series.gains.setpoint_weight == pytest.approx(0.8, rel=1e-15), "K / kp = 10 / 12.5 (Skogestad 2003, E10)"
    assert series.own_weight(series.gains) == pytest.approx(0.8, rel=1e-12)
    assert Settings.from_gains(series.gains, like=series).setpoint_weight is None
    with pytest.raises(UsageError, match=r"no setpoint weight: its setpoint meets 0.8 of the proportional gain, not 1"):
        Settings.from_gains(dataclasses.replace(series.gains, setpoint_weight=1.0), like=series)
    with pytest.raises(UsageError, match="no setpoint weight"):
        Settings.from_gains(Gains(kp=1.0, setpoint_weight=0.5), like=Settings(gain=1.0))
    assert Settings(gain=1.0).own_weight(Gains(kp=2.0)) == 1.0
    given_as_one = Settings(gain=1.0, setpoint_weight=1)
    assert given_as_one.setpoint_weight is not None, "given, even as 1: the controller has one"
    assert Settings.from_gains(Gains(kp=1.0, setpoint_weight=0.5), like=given_as_one).setpoint_weight == 0.5


def test_integral_only_is_parallel() -> None:
    made = Settings("parallel", integral_gain_per_s=0.5)
    assert made.gains == Gains(kp=0.0, ki=0.5)
    assert Settings.from_gains(made.gains, like=made) == made
    assert made.as_entered()["gain"] is None
    with pytest.raises(UsageError, match="without a proportional gain"):
        made.to_dict()
    with pytest.raises(UsageError, match="without a proportional gain"):
        Settings.from_gains(made.gains, form="series")


def test_nothing_to_weigh_without_a_proportional_gain() -> None:
    weighed = Settings("parallel", gain=1.0, integral_gain_per_s=1.0, setpoint_weight=0.5)
    assert Settings.from_gains(Gains(kp=0.0, ki=0.5), like=weighed).setpoint_weight is None


def test_ideal_form_for_the_document() -> None:
    series = Settings("series", gain=10.0, integral_time_s=8.0, derivative_time_s=2.0, derivative_filter_s=1e-9)
    found = series.to_dict()
    assert found["form"] == "ideal"
    # Skogestad 2003, eq. 36: (10, 8, 2) = (12.5, 10, 1.6); the filter of 1e-9 s moves Td by 1e-9 / 8 of itself
    keys = ("gain", "integral_time_s", "derivative_time_s")
    assert [found[key] for key in keys] == pytest.approx([12.5, 10.0, 1.6], rel=1e-9)
    bare = Settings(gain=2.0, action="direct").to_dict()
    assert bare["gain"] == -2.0
    assert bare["integral_time_s"] is bare["derivative_time_s"] is bare["derivative_filter_s"] is None


def test_what_was_understood_is_said() -> None:
    assert "integral taken as 2.5 s = 0.0417 min" in Settings.from_entry(gain=1.0, integral="2.5").in_words()
    lines = Settings.from_entry(
        "series", proportional_band_percent=40.0, integral="0.8/min", derivative="0.25min", scan="500ms", action="direct",
        measurement_range=(0, 400), output_range=(4, 20), output_limits=(4, 20),
    ).in_words()  # fmt: skip
    assert lines == [
        "series form, direct acting: the output rises with the measurement",
        "proportional band 40 % taken as gain 2.5 %/% on 0 to 400 (measurement) and 4 to 20 (output) "
        "= 0.1 output units per measurement unit",
        "integral taken as 0.8 repeats per min = 75 s",
        "derivative taken as 0.25 min = 15 s, on the measurement",
        "derivative filter 1.5 s: none given, a tenth of the derivative time",
        "no setpoint weight; the derivative block is on the measurement alone: the setpoint meets K, 0.8333 of kp",
        "scan interval 0.5 s",
        "output limits 4 to 20 in the unit of the output",
    ]
    parallel = Settings.from_entry(
        "parallel", gain=-3.0, integral="-1.2/min", derivative="-0.5min", derivative_filter="0.1min", setpoint_weight=0
    ).in_words()
    assert parallel == [
        "parallel form, no action given: a positive gain is reverse acting, a negative one direct",
        "gain taken as -3 output units per measurement unit",
        "integral taken as -1.2 gain per min = -0.02 gain per s",
        "derivative taken as -0.5 gain min = -30 gain s, on the measurement",
        "derivative filter taken as 0.1 min = 6 s",
        "setpoint weight 0",
        "no scan interval given: taken as continuous",
    ]
    bare = Settings("parallel", integral_gain_per_s=1.0).in_words()
    assert bare[1:4] == ["no proportional gain", "integral taken as 1 gain per s = 60 gain per min", "no derivative"]


def test_as_entered_in_the_controllers_own_words() -> None:
    made = Settings.from_entry(
        "ideal", gain=2.0, integral="0.8/min", derivative="0.25min", derivative_filter="30ms", action="reverse"
    )
    assert made.as_entered() == {
        "form": "ideal", "action": "reverse", "gain": 2.0, "gain_unit": "output per measurement",
        "integral_repeats_per_min": 0.8, "derivative_time_min": 0.25, "derivative_filter_ms": 30.0,
        "derivative_on": "measurement", "setpoint_weight": None, "scan_s": None, "measurement_range": None,
        "output_range": None, "output_limits": None,
    }  # fmt: skip
    off = Settings.from_entry(gain=2.0, integral="off", derivative="off", derivative_filter="off", scan="off")
    assert off == Settings(gain=2.0)
    moved = Settings.from_gains(
        Gains(kp=2.0, ki=0.5), form="parallel", like=Settings.from_entry(gain=1.0, integral="3min")
    )
    assert moved.as_entered()["integral_gain_per_min"] == 30.0, "0.5 per s"
