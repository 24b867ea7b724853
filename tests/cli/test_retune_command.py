"""The command's own work: options and cases to arguments, exit statuses, what goes where."""

from __future__ import annotations

import json
import sys
from collections.abc import Callable
from pathlib import Path
from types import ModuleType, SimpleNamespace
from typing import Any

import pytest
from click.testing import Result
from typer.testing import CliRunner

import loopfit
from loopfit.cli.main import app

BELT = Path(__file__).resolve().parents[2] / "cases" / "belt-speed.csv"
CASE = """record = "heater.csv"
columns = { time = 1, measurement = "pv" }
step = 2
band_percent = 5

[controller]
proportional_band_percent = 50
integral = "2.5 min"
action = "direct"

[target]
damping_ratio = 0.7
at_most.gain = 3
at_most.integral_time_s = 500
nominal = true

[limits]
damping_ratio_min = 0.6
"""


def run(*arguments: str | Path) -> Result:
    return CliRunner().invoke(app, [str(argument) for argument in arguments])


def misused(result: Result, *words: str) -> None:
    """Exit 2, and the last line on standard error says why."""
    assert result.exit_code == 2, result.stderr
    assert result.stdout == ""
    for word in words:
        assert word in result.stderr.rstrip("\n").splitlines()[-1]


def refused(result: Result, *words: str) -> None:
    """Exit 3, one line on standard error."""
    assert result.exit_code == 3, result.stderr
    assert result.stderr.count("\n") == 1
    for word in words:
        assert word in result.stderr


@pytest.fixture
def asked(monkeypatch: pytest.MonkeyPatch) -> SimpleNamespace:
    """The design stands aside: it keeps what it was asked and answers what it is told to."""
    seen = SimpleNamespace(
        source=None,
        arguments=None,
        drawn=None,
        answer=SimpleNamespace(met=True, proposed="some", refused=None, obstacle=None, to_json=lambda: '{"a": 1}'),
    )

    def retune(source: Any, **arguments: Any) -> Any:
        seen.source, seen.arguments = source, arguments
        return seen.answer

    def stand_in(name: str, attribute: str, function: Callable[..., Any]) -> None:
        module = ModuleType(name)
        setattr(module, attribute, function)
        monkeypatch.setitem(sys.modules, name, module)

    stand_in("loopfit.tuning.retune", "retune", retune)
    stand_in("loopfit.report.retune_text", "page", lambda retuning: f"page, met {retuning.met}")
    stand_in("loopfit.report.retune_plot", "draw", lambda _, path: setattr(seen, "drawn", path))
    return seen


@pytest.fixture
def case(tmp_path: Path) -> Path:
    path = tmp_path / "loop.toml"
    path.write_text(CASE)
    return path


def test_nothing_but_a_record(asked: SimpleNamespace) -> None:
    """What was not said is left to the design's own defaults."""
    result = run("retune", "a.csv")
    assert (result.exit_code, result.stdout, result.stderr) == (0, "page, met True\n", "")
    assert asked.source == "a.csv"
    assert asked.arguments == {"settings": None}


def test_present_settings_with_units_and_signs(asked: SimpleNamespace) -> None:
    result = run(
        *("retune", "a.csv", "--gain", "-2", "--integral", "2.5min", "--derivative", "15", "--filter", "1500ms"),
        *("--setpoint-weight", "1", "--scan", "100ms", "--derivative-on", "error", "--output-limits", "-10", "10"),
    )
    assert result.exit_code == 0, result.stderr
    # 1 min = 60 s, 1 ms = 1e-3 s (SI Brochure, 9th edition)
    assert asked.arguments["settings"] == loopfit.Settings(
        gain=-2,
        integral_time_s=150,
        integral_unit="min",
        derivative_time_s=15,
        derivative_filter_s=1.5,
        filter_unit="ms",
        setpoint_weight=1,
        scan_s=0.1,
        derivative_on="error",
        output_limits=(-10, 10),
    )
    assert "settings: integral taken as 2.5 min = 150 s" in result.stderr
    assert run("retune", "a.csv", "--gain", "2", "--quiet").stderr == ""


def test_other_forms_and_scales(asked: SimpleNamespace) -> None:
    ranges = ("--measurement-range", "0", "200", "--output-range", "-50", "50")
    result = run("retune", "a.csv", "--proportional-band", "40", "--integral", "0.8/min", "--direct", *ranges)
    assert result.exit_code == 0, result.stderr
    settings = asked.arguments["settings"]
    # K = 100/40 %/%; over spans of 100 and 200; direct action turns the sign: common practice
    assert settings.gains.kp == pytest.approx(-2.5 * 100 / 200, rel=1e-12)
    assert settings.integral_time_s == pytest.approx(75.0, rel=1e-12)
    parallel = ("--form", "parallel", "--gain", "2", "--integral", "0.5", "--derivative", "-3", "--filter", "1")
    assert run("retune", "a.csv", *parallel).exit_code == 0
    assert asked.arguments["settings"].integral_gain_per_s == 0.5
    assert asked.arguments["settings"].derivative_gain_s == -3.0
    assert run("retune", "a.csv", "--gain", "2", "--reverse").exit_code == 0
    assert asked.arguments["settings"].action == "reverse"


def test_target_and_reading(asked: SimpleNamespace) -> None:
    result = run(
        *("retune", "a.csv", "b.csv", "--damping-ratio", "0.7", "--overshoot", "5", "--settling", "1.5min"),
        *("--max-sensitivity", "1.4", "--noise-gain", "8", "--controller", "pid", "--move", "gain"),
        *("--move", "integral", "--at-most", "gain=3", "--at-most", "integral_time_s=2min", "--at-least", "gain=0.1"),
        *("--digits", "3", "--confidence-of-target", "80", "--band", "5", "--confidence", "90", "--time", "1"),
        *(
            "--output",
            "op",
            "--interval",
            "0.5",
            "--from",
            "-3",
            "--step-at",
            "1",
            "--step-from",
            "-5",
            "--step-to",
            "0",
        ),
    )
    assert result.exit_code == 0, result.stderr
    assert asked.source == ["a.csv", "b.csv"]
    assert asked.arguments == {
        "settings": None,
        "damping_ratio": 0.7,
        "overshoot_percent": 5.0,
        "settling_s": 90.0,
        "max_sensitivity": 1.4,
        "noise_gain": 8.0,
        "controller": "PID",
        "move": ("gain", "integral"),
        "at_most": {"gain": 3.0, "integral_time_s": 120.0},
        "at_least": {"gain": 0.1},
        "digits": 3,
        "confidence_of_target_percent": 80.0,
        "band_percent": 5.0,
        "confidence_percent": 90.0,
        "columns": {"time": "1", "output": "op"},
        "interval_s": 0.5,
        "window_s": (-3.0, None),
        "step_at_s": 1.0,
        "step_from": -5.0,
        "step_to": 0.0,
    }
    run("retune", "a.csv", "--nominal")
    assert asked.arguments["confidence_of_target_percent"] is None


def test_a_case(asked: SimpleNamespace, case: Path) -> None:
    result = run("retune", case)
    assert result.exit_code == 0, result.stderr
    assert asked.source == str(case.parent / "heater.csv")
    settings = loopfit.Settings(proportional_band_percent=50, integral_time_s=150, integral_unit="min", action="direct")
    assert asked.arguments == {
        "settings": settings,
        "damping_ratio": 0.7,
        "at_most": {"gain": 3.0, "integral_time_s": 500.0},
        "confidence_of_target_percent": None,
        "columns": {"time": 1, "measurement": "pv"},
        "limits": {"damping_ratio_min": 0.6},
        "step": 2,
        "band_percent": 5.0,
    }


def test_options_override_the_case(asked: SimpleNamespace, case: Path) -> None:
    result = run(
        *("retune", case, "--gain", "4", "--integral", "off", "--damping-ratio", "0.8", "--at-most", "gain=9"),
        *("--confidence-of-target", "70", "--measurement", "2", "--band", "2", "--reverse"),
        *("--step-at", "1", "--step-from", "0", "--step-to", "2"),
    )
    assert result.exit_code == 0, result.stderr
    assert asked.arguments == {
        "limits": {"damping_ratio_min": 0.6},
        "settings": loopfit.Settings(gain=4, action="reverse"),
        "damping_ratio": 0.8,
        "at_most": {"gain": 9.0, "integral_time_s": 500.0},
        "confidence_of_target_percent": 70.0,
        "columns": {"time": 1, "measurement": "2"},
        "step_at_s": 1.0,
        "step_from": 0.0,
        "step_to": 2.0,
        "band_percent": 2.0,
    }


def test_without_the_derivative_of_the_case_its_filter_goes_too(asked: SimpleNamespace, case: Path) -> None:
    case.write_text(CASE.replace("integral =", 'derivative = "9 s"\nfilter = "1 s"\nintegral ='))
    assert run("retune", case).exit_code == 0
    assert asked.arguments["settings"].derivative_filter_s == 1.0
    assert run("retune", case, "--derivative", "off").exit_code == 0
    assert asked.arguments["settings"].derivative_filter_s is None


def test_a_target_not_met_is_still_shown(asked: SimpleNamespace, tmp_path: Path) -> None:
    asked.answer.met = False
    result = run("retune", "a.csv", "--plot", tmp_path / "a.png")
    assert (result.exit_code, result.stdout) == (1, "page, met False\n")
    assert asked.drawn == tmp_path / "a.png"
    result = run("retune", "a.csv", "--json")
    assert result.exit_code == 1
    assert json.loads(result.stdout) == {"a": 1}


def test_nothing_to_propose(asked: SimpleNamespace, tmp_path: Path) -> None:
    asked.answer.met, asked.answer.proposed, asked.answer.refused = False, None, "the valve sticks: make a staircase"
    result = run("retune", "a.csv", "--gain", "2", "--plot", tmp_path / "a.png")
    refused(result, "a.csv", "sticks")
    assert result.stdout == ""
    assert asked.drawn is None
    result = run("retune", "a.csv", "--json")
    refused(result, "sticks")
    assert json.loads(result.stdout) == {"a": 1}


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        ((), "RECORD-OR-CASE"),
        (("a.csv", "--gain", "0"), "gain is not 0"),
        (("a.csv", "--gain", "abc"), "--gain"),
        (("a.csv", "--gain", "2", "--proportional-band", "50"), "not both"),
        (("a.csv", "--gain", "2", "--integral", "0"), "off"),
        (("a.csv", "--gain", "2", "--integral", "2.5 fortnights"), "fortnights"),
        (("a.csv", "--gain", "2", "--measurement-range", "0", "10"), "output_range"),
        (("a.csv", "--gain", "2", "--form", "serial"), "series"),
        (("a.csv", "--form", "parallel", "--gain", "2", "--integral", "2min"), "gain per time"),
        (("a.csv", "--scan", "1"), "needs a gain"),
        (("a.csv", "--gain", "-2", "--direct"), "magnitude"),
        (("a.csv", "--output-limits", "3"), "--output-limits"),
        (("a.csv", "--settling", "off"), "--settling"),
        (("a.csv", "--settling", "2/min"), "--settling"),
        (("a.csv", "--controller", "PDI"), "P, PI, PD, PID"),
        (("a.csv", "--move", "gian"), "did you mean gain?"),
        (("a.csv", "--at-most", "gain"), "NAME=VALUE"),
        (("a.csv", "--at-most", "gian=3"), "did you mean gain?"),
        (("a.csv", "--at-least", "gain=3s"), "number"),
        (("a.csv", "--at-least", "integral_time_s=x"), "integral_time_s"),
        (("a.csv", "--nominal", "--confidence-of-target", "80"), "not both"),
        (("a.csv", "--plot", "a.bmp"), ".png"),
        (("a.csv", "b.toml"), "stands alone"),
        (("a.csv", "-"), "standard input"),
        (("a.csv", "--gian", "2"), "--gian"),
    ],
)
def test_wrong_usage(asked: SimpleNamespace, arguments: tuple[str, ...], words: str) -> None:
    misused(run("retune", *arguments), words)
    assert asked.arguments is None


def test_a_wrong_case_is_an_input_that_cannot_be_used(asked: SimpleNamespace, case: Path) -> None:
    case.write_text(CASE.replace('"2.5 min"', "2.5"))
    refused(run("retune", case), "loop.toml: controller.integral", "no unit")
    case.write_text(CASE.replace("proportional_band_percent = 50\n", ""))
    refused(run("retune", case), "loop.toml: controller", "needs a gain")
    assert asked.arguments is None
    assert run("retune", case, "--gain", "3").exit_code == 0
    case.write_text(CASE.replace("proportional_band_percent", "gain = 2\nproportional_band_percent"))
    refused(run("retune", case), "loop.toml: controller", "not both")
    refused(run("retune", case.parent / "none.toml"), "none.toml", "no such file")


def test_analyze_reads_the_record_of_a_case(tmp_path: Path) -> None:
    path = tmp_path / "belt.toml"
    path.write_text(f"record = '{BELT}'\nconfidence_percent = 90\n[limits]\ndamping_ratio_min = 0.5\n")
    result = run("analyze", path, "--json")
    assert result.exit_code == 0, result.stderr
    assert result.stdout == run("analyze", BELT, "--confidence", "90", "--json").stdout
    assert json.loads(run("analyze", path, "--confidence", "95", "--json").stdout)["confidence_percent"] == 95
    path.write_text("records = ['a.csv', 'b.csv']\n")
    misused(run("analyze", path), "2 records")
    path.write_text("record = 'missing.csv'\n")
    refused(run("analyze", path), "missing.csv", "no such file")
