from __future__ import annotations

import pickle
from pathlib import Path
from typing import Any

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

import loopfit
from loopfit.case.arguments import reading_arguments, settings_of, target_arguments
from loopfit.case.load import is_case, load_case
from loopfit.case.schema import CASE, CONTROLLER, LIMITS, TARGET
from loopfit.case.words import CaseError

WHOLE = """
record = "heater.csv"
columns = { time = 1, measurement = "pv", output = 4 }
interval_s = 0.5
from_s = -10
to_s = 400
step = 2
band_percent = 5
confidence_percent = 90

[controller]
form = "series"
proportional_band_percent = 40
integral = "2.5 min"
derivative = "15 s"
filter = "1500 ms"
scan = "0.5 s"
action = "direct"
derivative_on = "error"
measurement_range = [0, 200]
output_range = [0.0, 100.0]
output_limits = [5, 95]

[target]
damping_ratio = 0.7
overshoot_percent = 5
settling_s = 90
max_sensitivity = 1.5
noise_gain = 10
controller = "PID"
move = ["gain", "integral"]
at_most.gain = 3
at_least = { integral_time_s = 20 }
digits = 3
confidence_of_target_percent = 80

[limits]
damping_ratio_min = 0.6
overshoot_percent_max = 8
"""


def written(folder: Path, content: str | bytes) -> Path:
    path = folder / "loop.toml"
    path.write_bytes(content.encode() if isinstance(content, str) else content)
    return path


def test_everything_a_case_holds(tmp_path: Path) -> None:
    case = load_case(written(tmp_path, WHOLE))
    assert case.records == (str(tmp_path / "heater.csv"),)
    assert reading_arguments(case.reading) == {
        "columns": {"time": 1, "measurement": "pv", "output": 4},
        "interval_s": 0.5,
        "window_s": (-10.0, 400.0),
        "step": 2,
        "band_percent": 5.0,
        "confidence_percent": 90.0,
    }
    assert target_arguments(case.target) == {
        "damping_ratio": 0.7,
        "overshoot_percent": 5.0,
        "settling_s": 90.0,
        "max_sensitivity": 1.5,
        "noise_gain": 10.0,
        "controller": "PID",
        "move": ("gain", "integral"),
        "at_most": {"gain": 3.0},
        "at_least": {"integral_time_s": 20.0},
        "digits": 3,
        "confidence_of_target_percent": 80.0,
    }
    assert case.limits == {"damping_ratio_min": 0.6, "overshoot_percent_max": 8.0}


def test_the_settings_are_those_of_the_screen(tmp_path: Path) -> None:
    made = settings_of(load_case(written(tmp_path, WHOLE)).controller)
    # unit conversions: 1 min = 60 s, 1 ms = 1e-3 s (SI Brochure, 9th edition)
    assert made == loopfit.Settings(
        "series",
        proportional_band_percent=40,
        integral_time_s=150.0,
        derivative_time_s=15.0,
        derivative_filter_s=1.5,
        scan_s=0.5,
        action="direct",
        derivative_on="error",
        measurement_range=(0, 200),
        output_range=(0, 100),
        output_limits=(5, 95),
        integral_unit="min",
        filter_unit="ms",
    )


@pytest.mark.parametrize(
    ("typed", "seconds"),
    [("2.5 min", 150.0), ("2.5/min", 24.0), ("90 s", 90.0), ("0.01 /s", 100.0), ("off", None), ("0.5 h", 1800.0)],
)
def test_the_integral_keeps_its_unit(tmp_path: Path, typed: str, seconds: float | None) -> None:
    """Repeats per minute are 60 / repeats in seconds: common practice."""
    path = written(tmp_path, f'record = "a.csv"\n[controller]\ngain = 2\nintegral = "{typed}"\n')
    made = settings_of(load_case(path).controller)
    assert made is not None
    assert made.integral_time_s == (None if seconds is None else pytest.approx(seconds, rel=1e-12))


def test_a_short_case(tmp_path: Path) -> None:
    case = load_case(
        written(tmp_path, b"\xef\xbb\xbfrecords = ['low.csv', 'sub/high.csv']\r\n[target]\r\nnominal = true\r\n")
    )
    assert case.records == (str(tmp_path / "low.csv"), str(tmp_path / "sub" / "high.csv"))
    assert settings_of(case.controller) is None
    assert reading_arguments(case.reading) == {}
    assert target_arguments(case.target) == {"confidence_of_target_percent": None}
    assert target_arguments({"nominal": False}) == {}


def test_a_record_elsewhere(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    (tmp_path / "job").mkdir()
    path = written(tmp_path / "job", f"records = ['../a.csv', '{tmp_path / 'b.csv'}']\n")
    monkeypatch.chdir(tmp_path)
    assert load_case("job/loop.toml").records == ("job/../a.csv", str(tmp_path / "b.csv"))
    assert load_case(path).file == str(path)


def test_which_paths_are_cases() -> None:
    assert is_case("a.toml")
    assert is_case(Path("A.TOML"))
    assert not is_case("toml.csv")
    assert not is_case("-")
    assert not is_case(None)


REFUSED = [
    # syntax: the words of the reader, and how to mend it
    ('record = "a.csv\n', "line 1", ["TOML"]),
    ("record = a.csv\n", "line 1", ["quotes"]),
    ('record = "a.csv"\n[controller]\ngain = 2,5\n', "line 3", ["2.5"]),
    ('record = "C:\\data\\a.csv"\n', "line 1", ["single quotes"]),
    ('record = "a.csv"\nrecord = "b.csv"\n', "line 2", ["TOML"]),
    ("a = " + "[" * 5000, "", ["deep"]),
    ("record = 1" + "0" * 5000, "", ["TOML"]),
    (b'record = "\xe4.csv"\n', "", ["UTF-8"]),
    # records
    ("", "record", ["missing", "step.csv"]),
    ('record = ""', "record", ["name of a file"]),
    ("record = 3", "record", ["name of a file"]),
    ("record = ['a.csv', 'b.csv']", "record", ["a list of 2"]),
    ("records = []", "records", ["empty"]),
    ("record = 'a.csv'\nrecords = ['b.csv']", "records", ["one of the two"]),
    ("record = '-'", "record", ["standard input"]),
    ("record = 'other.toml'", "record", ["other.toml", "case"]),
    # keys
    ("recrod = 'a.csv'", "recrod", ["did you mean record?"]),
    ("zzz = 1", "zzz", ["there are record,"]),
    ("[controler]\ngain = 1", "controler", ["did you mean controller?"]),
    ("[controller]\nintegal = '2.5 min'", "controller.integal", ["did you mean integral?"]),
    ("[controller]\nproportional_band = 50", "controller.proportional_band", ["proportional_band_percent"]),
    ("[controller]\ngain = 1\nrecord = 'a.csv'", "controller.record", ["top of the file"]),
    ("[target]\ndigits = 3\n[controller]\nmax_sensitivity = 1.6", "controller.max_sensitivity", ["[target]"]),
    ("overshoot_percent = 3", "overshoot_percent", ["[target]"]),
    ("[limits]\nsettling_time_max = 3", "limits.settling_time_max", ["did you mean settling_time_s_max?"]),
    ("[columns]\nmeasurment = 2", "columns.measurment", ["did you mean measurement?"]),
    ("controller = 'PI'", "controller", ["[controller]"]),
    # values
    ("interval_s = '0.5'", "interval_s", ["0.5, without quotes"]),
    ("interval_s = 0", "interval_s", ["above 0"]),
    ("interval_s = nan", "interval_s", ["finite"]),
    ("interval_s = true", "interval_s", ["true"]),
    ("interval_s = 2024-05-01", "interval_s", ["a date"]),
    ("from_s = 9\nto_s = 3", "to_s", ["3 s", "9 s"]),
    ("step = 1.5", "step", ["whole number"]),
    ("step = 0", "step", ["whole number"]),
    ("step = 1\nstep_at_s = 3", "step_at_s", ["one of the two"]),
    ("step_at_s = 3\nstep_to = 4", "step_from", ["missing"]),
    ("band_percent = 50", "band_percent", ["below 50"]),
    ("confidence_percent = 40", "confidence_percent", ["at least 50"]),
    ("[columns]\ntime = 0", "columns.time", ["from 1"]),
    ("[columns]\ntime = true", "columns.time", ["true"]),
    ("[controller]\ngain = '2,5'", "controller.gain", ["2.5, without quotes"]),
    ("[controller]\ngain = 'two'", "controller.gain", ['the text "two"']),
    ("[controller]\ngain = 0", "controller.gain", ["not 0"]),
    ("[controller]\ngain = 1e400", "controller.gain", ["finite"]),
    ("[controller]\nproportional_band_percent = -20", "controller.proportional_band_percent", ["above 0"]),
    ("[controller]\nintegral = 2.5", "controller.integral", ["no unit", '"2.5 min"']),
    ("[controller]\nintegral = '2.5'", "controller.integral", ["no unit", '"2.5 min"']),
    ("[controller]\nintegral = 0", "controller.integral", ['"off"']),
    ("[controller]\nintegral = '0 s'", "controller.integral", ["off"]),
    ("[controller]\nintegral = false", "controller.integral", ['"off"']),
    ("[controller]\nintegral = '2.5 fortnights'", "controller.integral", ["fortnights", "min"]),
    ("[controller]\nform = 'parallel'\nintegral = '2.5 min'", "controller.integral", ["gain per time"]),
    ("[controller]\nderivative = '2/min'", "controller.derivative", ["not a rate"]),
    ("[controller]\nscan = '-1 s'", "controller.scan", ["above 0"]),
    ("[controller]\nform = 'idael'", "controller.form", ["did you mean ideal?"]),
    ("[controller]\naction = 'inverse'", "controller.action", ["did you mean reverse?"]),
    ("[controller]\noutput_limits = [100, 0]", "controller.output_limits", ["low to high"]),
    ("[controller]\noutput_limits = 100", "controller.output_limits", ["[low, high]"]),
    ("[controller]\noutput_limits = [0, '100']", "controller.output_limits", ["100, without quotes"]),
    ("[target]\ndamping_ratio = 1.5", "target.damping_ratio", ["at most 1", "1.5"]),
    ("[target]\ndamping_ratio = 0", "target.damping_ratio", ["above 0"]),
    ("[target]\novershoot_percent = -1", "target.overshoot_percent", ["above 0"]),
    ("[target]\nmax_sensitivity = 0.9", "target.max_sensitivity", ["0.9"]),
    ("[target]\ncontroller = 'PDI'", "target.controller", ["one of P, PI, PD, PID", 'the text "PDI"']),
    ("[target]\nmove = ['gian']", "target.move", ["did you mean gain?"]),
    ("[target]\nat_most.gain = 'x'", "target.at_most.gain", ["number"]),
    ("[target]\nat_most.integral = 3", "target.at_most.integral", ["did you mean integral_time_s?"]),
    ("[target]\nat_most.gain = 1\nat_least.gain = 2", "target.at_most.gain", ["1", "2"]),
    ("[target]\ndigits = 16", "target.digits", ["1 to 15"]),
    ("[target]\nconfidence_of_target_percent = 100", "target.confidence_of_target_percent", ["below 100"]),
    ("[target]\nnominal = true\nconfidence_of_target_percent = 80", "target.nominal", ["one of the two"]),
    ("[target]\nnominal = 'yes'", "target.nominal", ["true or false"]),
    ("[limits]\ndamping_ratio_min = '0.7'", "limits.damping_ratio_min", ["0.7, without quotes"]),
    ("[limits]\ndamping_ratio_min = 0.8\ndamping_ratio_max = 0.7", "limits.damping_ratio_max", ["0.8"]),
]


@pytest.mark.parametrize(("content", "place", "words"), REFUSED, ids=[str(r[0])[:50] for r in REFUSED])
def test_refused_with_file_place_and_remedy(tmp_path: Path, content: str | bytes, place: str, words: list[str]) -> None:
    whole = content
    if isinstance(content, str) and "record" not in content and not content.startswith("a =") and content:
        whole = f"record = 'a.csv'\n{content}"
    path = written(tmp_path, whole)
    with pytest.raises(CaseError) as caught:
        load_case(path)
    message = str(caught.value)
    assert message.startswith(f"{path}: {place}")
    assert caught.value.place.startswith(place)
    assert "\n" not in message
    assert len(message) < len(str(path)) + 400
    for word in words:
        assert word in message, message


@given(
    at=st.integers(0, len(WHOLE)),
    gone=st.integers(0, 12),
    put=st.sampled_from(
        ["", "=", "[", '"', "'", "0", "-1", "1e999", "nan", "true", "{}", "[]", "\n", "\0", "é", "1979-05-27"]
    ),
)
@settings(max_examples=200, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
def test_a_damaged_case_is_read_or_refused_in_one_line(tmp_path: Path, at: int, gone: int, put: str) -> None:
    path = written(tmp_path, WHOLE[:at] + put + WHOLE[at + gone :])
    try:
        settings_of(load_case(path).controller)
    except loopfit.LoopfitError as problem:
        assert "\n" not in str(problem)  # noqa: PT017 - either outcome is right


def test_no_case_to_read(tmp_path: Path) -> None:
    with pytest.raises(CaseError, match="no such file"):
        load_case(tmp_path / "missing.toml")
    (tmp_path / "folder.toml").mkdir()
    with pytest.raises(CaseError, match="folder"):
        load_case(tmp_path / "folder.toml")


def test_the_error_pickles_and_is_ours() -> None:
    error = CaseError("a.toml", "controller.gain", "wrong")
    again = pickle.loads(pickle.dumps(error))
    assert str(again) == str(error) == "a.toml: controller.gain: wrong"
    assert isinstance(error, loopfit.LoopfitError)


def test_contradicting_settings_in_the_words_of_the_case() -> None:
    with pytest.raises(loopfit.UsageError, match="not both"):
        settings_of({"gain": 2.0, "proportional_band_percent": 50.0})
    with pytest.raises(loopfit.UsageError, match="filter without a derivative"):
        settings_of({"gain": 2.0, "filter": "1 s"})
    with pytest.raises(loopfit.UsageError, match="output_range"):
        settings_of({"gain": 2.0, "measurement_range": (0.0, 1.0)})


def test_names_are_those_that_the_functions_take() -> None:
    """Whatever passes the reader is a name that the design and the settings know."""
    from loopfit.tuning.goal import LIMITED, SETTINGS

    bounds: Any = TARGET["at_most"]
    assert tuple(bounds) == LIMITED
    move: Any = TARGET["move"]
    assert move(list(SETTINGS)) == SETTINGS
    assert {"controller", "target", "limits"} <= CASE.keys()
    assert not CONTROLLER.keys() & LIMITS.keys()
