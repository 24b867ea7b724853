"""Settings that no controller has, each refused in one line that says why."""

from __future__ import annotations

import math
import pickle
from typing import Any

import numpy as np
import pytest

from loopfit.core.errors import LoopfitError, UsageError
from loopfit.loop.gains import Gains
from loopfit.loop.settings import Settings

PARALLEL = {"form": "parallel", "gain": 1.0}
RANGES = {"measurement_range": (0, 100), "output_range": (0, 100)}
REFUSED: list[tuple[dict[str, Any], str]] = [
    ({}, "the ideal form needs a gain or a proportional band"),
    ({"form": "series", "integral_time_s": 2.0}, "the series form needs a gain"),
    ({"form": "Ideal", "gain": 1.0}, "the form is one of ideal, parallel, series, not 'Ideal'"),
    ({"form": None, "gain": 1.0}, "the form is one of"),
    ({"gain": 0.0}, "gain is not 0: such a controller does nothing"),
    ({"gain": math.nan}, "gain is a finite number, not nan"),
    ({"gain": math.inf}, "gain is a finite number, not inf"),
    ({"gain": 10**400}, "gain is a finite number, not inf"),
    ({"gain": "2"}, "gain is a number, not '2'"),
    ({"gain": True}, "gain is a number, not True"),
    ({"gain": 2.0, "proportional_band_percent": 50.0}, "give a gain or a proportional band, not both"),
    ({"proportional_band_percent": 0.0}, "proportional_band_percent is above 0, not 0"),
    ({"proportional_band_percent": -40.0}, "a band has no sign; say direct action"),
    ({"proportional_band_percent": math.nan}, "finite number, not nan"),
    ({"proportional_band_percent": math.inf}, "finite number, not inf"),
    ({"proportional_band_percent": 5e-324}, "finite number, not inf"),
    ({"gain": -2.0, "action": "reverse"}, "gain is -2, but with reverse action given it is a magnitude"),
    ({"gain": -2.0, "action": "direct"}, "gain is -2, but with direct action given it is a magnitude"),
    ({"gain": 2.0, "action": "up"}, "the action is reverse or direct, not 'up'"),
    ({"gain": 2.0, "integral_time_s": 5.0, "integral_gain_per_s": 1.0}, "give one integral setting, not both"),
    ({"gain": 2.0, "derivative_time_s": 5.0, "derivative_gain_s": 1.0}, "give one derivative setting, not both"),
    ({"gain": 2.0, "integral_gain_per_s": 1.0}, "takes integral_time_s, not integral_gain_per_s: divide it out first"),
    ({"gain": 2.0, "derivative_gain_s": 1.0}, "takes derivative_time_s, not derivative_gain_s: divide it out first"),
    ({**PARALLEL, "integral_time_s": 1.0}, "takes integral_gain_per_s, not integral_time_s: whether"),
    ({**PARALLEL, "derivative_time_s": 1.0}, "takes derivative_gain_s, not derivative_time_s: whether"),
    ({**PARALLEL, "integral_gain_per_s": 0.0}, "integral_gain_per_s is not 0: leave it out"),
    ({**PARALLEL, "integral_gain_per_s": math.nan}, "integral_gain_per_s is a finite number"),
    ({**PARALLEL, "derivative_gain_s": 0.0}, "derivative_gain_s is not 0: leave it out"),
    ({**PARALLEL, "integral_gain_per_s": -1.0, "action": "direct"}, "integral_gain_per_s is -1, but with direct"),
    ({**PARALLEL, "derivative_gain_s": -1.0, "action": "reverse"}, "derivative_gain_s is -1, but with reverse"),
    ({**PARALLEL, "derivative_gain_s": -1.0}, "derivative_filter_s is needed"),
    ({"form": "parallel"}, "a controller needs a gain or an integral gain"),
    ({"form": "parallel", "derivative_gain_s": 1.0}, "a controller needs a gain or an integral gain"),
    ({"form": "parallel", "integral_gain_per_s": 1.0, "derivative_gain_s": 1.0}, "derivative_filter_s is needed"),
    ({"form": "parallel", "integral_gain_per_s": 1.0, "setpoint_weight": 1.0}, "setpoint_weight without a gain"),
    ({"gain": 1.0, "derivative_filter_s": 1.0}, "derivative_filter_s without a derivative"),
    ({"gain": 1.0, "setpoint_weight": -0.1}, "setpoint_weight is at least 0, not -0.1"),
    ({"gain": 1.0, "setpoint_weight": math.nan}, "setpoint_weight is a finite number"),
    ({"gain": 1.0, "derivative_on": "setpoint"}, "on the measurement or on the error, not 'setpoint'"),
    (
        {"form": "series", "gain": 1.0, "integral_time_s": 9.0, "derivative_time_s": 1.0, "derivative_on": "error",
         "setpoint_weight": 0.5},
        "such a controller is not covered",
    ),
    ({"gain": 1.0, "measurement_range": (0, 100)}, "measurement_range without output_range"),
    ({"gain": 1.0, "output_range": (0, 100)}, "output_range without measurement_range"),
    ({"proportional_band_percent": 50.0, "output_range": (0, 100)}, "output_range without measurement_range"),
    ({"gain": 1.0, **RANGES, "output_range": (100, 0)}, "output_range goes from low to high, not from 100 to 0"),
    ({"gain": 1.0, **RANGES, "measurement_range": (5, 5)}, "measurement_range goes from low to high"),
    ({"gain": 1.0, **RANGES, "measurement_range": (0, math.nan)}, "measurement_range (high) is a finite number"),
    ({"gain": 1.0, **RANGES, "measurement_range": 100}, "measurement_range is two numbers, low and high, not 100"),
    ({"gain": 1.0, **RANGES, "measurement_range": "01"}, "measurement_range is two numbers, low and high, not '01'"),
    ({"gain": 1.0, **RANGES, "measurement_range": (0, 1, 2)}, "measurement_range is two numbers"),
    ({"gain": 1.0, "output_limits": (100, 0)}, "output_limits goes from low to high"),
    ({"gain": 1.0, "output_limits": (0, "x")}, "output_limits (high) is a number, not 'x'"),
    (
        {"gain": 1.0, "measurement_range": (0, 400), "output_range": (4, 20), "output_limits": (0, 100)},
        "output_limits 0 to 100 lie outside output_range 4 to 20: give both in the output's own unit",
    ),
    ({"gain": 1.0, "integral_unit": "m"}, "integral_unit is one of ms, s, min, h, /s, /min, /h, not 'm'"),
    ({**PARALLEL, "integral_unit": "min"}, "integral_unit is one of /s, /min, /h, not 'min'"),
    ({"gain": 1.0, "derivative_unit": "/s"}, "derivative_unit is one of ms, s, min, h, not '/s'"),
    ({"gain": 1.0, "filter_unit": None}, "filter_unit is one of"),
    ({"gain": 1e300, "integral_time_s": 1e-300}, "ki is a finite number, not inf"),
]  # fmt: skip
TIMES = [
    {name: value, "gain": 1.0} | ({"derivative_time_s": 1.0} if name == "derivative_filter_s" else {})
    for name in ("integral_time_s", "derivative_time_s", "derivative_filter_s", "scan_s")
    for value in (0, -1.0, math.nan, math.inf, -math.inf, "5", False, np.float64("nan"))
]


def refused(text: str, **given: Any) -> None:
    with pytest.raises(UsageError) as caught:
        Settings(**given)
    message = str(caught.value)
    assert text in message
    assert "\n" not in message
    again = pickle.loads(pickle.dumps(caught.value))
    assert isinstance(again, LoopfitError)
    assert str(again) == message


@pytest.mark.parametrize(("given", "text"), REFUSED)
def test_refused(given: dict[str, Any], text: str) -> None:
    refused(text, **given)


@pytest.mark.parametrize("given", TIMES)
def test_times_are_above_zero(given: dict[str, Any]) -> None:
    name = next(iter(given))
    refused(f"{name} is ", **given)


@pytest.mark.parametrize("digits", [0, -1, 16, 2.0, True, "3"])
def test_digits(digits: Any) -> None:
    with pytest.raises(UsageError, match="digits is a whole number from 1 to 15"):
        Settings(gain=1.0).rounded(digits)


REVERSE = Settings(gain=1.0, action="reverse")
NO_SETTINGS: list[tuple[Gains, dict[str, Any], str]] = [
    (Gains(kp=-1.0), {"like": REVERSE}, "contradict the reverse action"),
    (Gains(kp=1.0), {"like": Settings(gain=1.0, action="direct")}, "contradict the direct action"),
    (Gains(kp=1.0, ki=-1.0), {"like": REVERSE, "form": "parallel"}, "contradict the reverse action"),
    (Gains(kp=1.0, ki=-1.0), {}, "no ideal form has a negative integral time"),
    (Gains(kp=1.0, ki=1.0, kd=0.5, filter_s=0.01), {"form": "series"}, "its zeros would be complex"),
    (Gains(kp=0.0, ki=1.0), {"form": "ideal"}, "without a proportional gain"),
    (Gains(kp=-1.0), {"like": Settings(proportional_band_percent=50.0)}, "a band has no sign; say direct action"),
    (
        Gains(kp=1.0, kd=1.0, filter_s=0.1, derivative_on_error=True),
        {"like": REVERSE},
        "the controller has it on the measurement",
    ),
    (Gains(kp=1.0, setpoint_weight=-1.0), {"like": Settings(gain=1.0, setpoint_weight=1.0)}, "at least 0, not -1"),
    (Gains(kp=1.0), {"form": "other"}, "the form is one of"),
]


@pytest.mark.parametrize(("gains", "how", "text"), NO_SETTINGS)
def test_gains_without_settings(gains: Gains, how: dict[str, Any], text: str) -> None:
    with pytest.raises(UsageError) as caught:
        Settings.from_gains(gains, **how)
    assert text in str(caught.value)
    assert "\n" not in str(caught.value)
    assert str(pickle.loads(pickle.dumps(caught.value))) == str(caught.value)
