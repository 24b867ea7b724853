"""The command `loopfit equivalent`: exit statuses, streams, the JSON document, files written."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from pathlib import Path
from typing import Any

import pytest
from click.testing import Result
from typer.testing import CliRunner

from loopfit.cli.main import app

THIRD = "2*exp(-0.5*s)/((3*s+1)*(s+1)*(0.5*s+1))"


def run(*arguments: str | Path) -> Result:
    return CliRunner().invoke(app, ["equivalent", *map(str, arguments)])


def document(*arguments: str | Path) -> dict[str, Any]:
    result = run(*arguments, "--json")
    assert result.exit_code == 0, result.stderr
    assert result.stderr == ""

    def no_constant(text: str) -> float:
        raise AssertionError(f"{text} is no JSON")

    out: dict[str, Any] = json.loads(result.stdout, parse_constant=no_constant)
    return out


def test_page() -> None:
    result = run(THIRD)
    assert result.exit_code == 0
    assert result.stdout.startswith("Damping ratio 1.")
    assert result.stderr == ""


EQUIVALENT = {
    *("method", "gain", "damping_ratio", "natural_frequency_rad_s", "dead_time_s", "time_constants_s"),
    *("step_error_max_percent", "step_error_rms_percent"),
}
RESPONSE = {
    *("overshoot_percent", "peak_time_s", "rise_time_s", "settling_time_s", "delay_time_s", "decay_ratio"),
}


def test_json_document() -> None:
    """Keys as promised to other people's scripts."""
    found = document(THIRD)
    assert (found["document"], found["version"]) == ("loopfit equivalent", 1)
    assert found.keys() >= {"system", "equivalents", "chosen", "adequate", "reasons", "response"}
    assert found["system"].keys() >= {"expression", "poles", "zeros", "dead_time_s"}
    assert found["system"]["expression"] == THIRD
    assert sorted(pole[0] for pole in found["system"]["poles"]) == pytest.approx([-2, -1, -1 / 3], rel=1e-9)
    assert found["system"]["dead_time_s"] == 0.5
    assert all(one.keys() >= EQUIVALENT for one in found["equivalents"])
    assert found["chosen"] in [one["method"] for one in found["equivalents"]]
    assert found["adequate"] is True
    assert found["response"].keys() >= RESPONSE
    for name in ("overshoot_percent", "rise_time_s", "settling_time_s", "delay_time_s"):
        quantity = found["response"][name]
        assert quantity["low"] == quantity["value"] == quantity["high"]
    assert found["response"]["peak_time_s"] is None


@pytest.mark.parametrize("text", ["1/(s*(s+1)*(s+2)^2)", "1/((s-1)*(s+2)^2)"])
def test_no_figures_without_a_final_value(text: str) -> None:
    found = document(text)
    assert all(found["response"][name] is None for name in RESPONSE)
    assert found["reasons"]


@pytest.mark.parametrize(
    "arguments",
    [("-2/(s+1)",), ("--json", "-2/(s+1)"), ("-s*2/(s*(s+1))",), ("--band", "3", "--", "-2/(s+1)"), ("-(2)/(s+1)",)],
)
def test_an_expression_may_begin_with_a_minus(arguments: tuple[str, ...]) -> None:
    options = () if "--json" in arguments else ("--json",)
    result = run(*options, *arguments)
    assert result.exit_code == 0, result.stderr
    assert json.loads(result.stdout)["equivalents"][0]["gain"] == -2.0


def test_options_after_the_expression() -> None:
    assert document("-2/(s+1)", "--dead-time", "3")["system"]["dead_time_s"] == 3.0
    assert document("1/(s+1)", "--band", "5")["band_percent"] == 5.0


@pytest.mark.parametrize("top", ["-2 1", "-2, 1", "[-2 1]", "-2e0\t1"])
def test_coefficients(top: str) -> None:
    found = document("--numerator", top, "--denominator", "1 3 2", "--dead-time", "0.25")
    assert found["system"]["zeros"] == [[0.5, 0.0]]
    assert found["system"]["dead_time_s"] == 0.25
    assert found["system"]["static_gain"] == 0.5


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        ((), "expression"),
        (("2s",), "at character 2: 2>s<"),
        (("2/(s+*1)",), "at character 6: 2/(s+>*<1)"),
        (("",), "empty"),
        (("-",), "at the end: -><"),
        (("1/s", "1/s"), "1/s"),
        (("1/s", "--numerator", "1", "--denominator", "1 1"), "one of the two"),
        (("--numerator", "1"), "both"),
        (("--numerator", "1,5", "--denominator", "1 1"), "is it 1.5 or 1 5?"),
        (("--numerator", "a", "--denominator", "1 1"), "'a' is no number"),
        (("--numerator", "nan", "--denominator", "1 1"), "finite"),
        (("1/(s+1)", "--band", "60"), "60"),
        (("1/(s+1)", "--band", "nan"), "nan"),
        (("1/(s+1)", "--dead-time", "nan"), "nan"),
        (("1/(s+1)", "--nonsense"), "--nonsense"),
    ],
)
def test_wrong_usage(arguments: tuple[str, ...], words: str) -> None:
    result = run(*arguments)
    assert result.exit_code == 2, result.stderr
    assert result.stdout == ""
    assert words in result.stderr.rstrip("\n").splitlines()[-1]


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (("s^2/(s+1)",), "differentiates"),
        (("exp(2*s)/(s+1)",), "predicts"),
        (("1/(s-s)",), "divides by zero"),
        (("(s+1)^61",), "degree 61"),
        (("--numerator", "1 0 0", "--denominator", "1 1"), "differentiates"),
        (("1/(s+1)", "--dead-time", "-1"), "predicts"),
        (("--numerator", "0", "--denominator", "1 1"), "zero"),
    ],
)
def test_unusable_system(arguments: tuple[str, ...], words: str, tmp_path: Path) -> None:
    result = run(*arguments, "--json", "--plot", tmp_path / "a.png")
    assert result.exit_code == 3, result.stderr
    assert result.stdout == ""
    assert result.stderr.count("\n") == 1
    assert words in result.stderr
    assert not list(tmp_path.iterdir())


def test_plot_writes_only_what_it_may(tmp_path: Path) -> None:
    old = tmp_path / "old.png"
    old.write_bytes(b"old")
    for path, words in ((old, "--force"), (tmp_path / "a.bmp", ".png"), (tmp_path / "no" / "a.png", "folder")):
        result = run(THIRD, "--plot", path)
        assert result.exit_code == 2
        assert words in result.stderr
        assert result.stdout == ""
    assert old.read_bytes() == b"old"
    result = run(THIRD, "--plot", old, "--force")
    assert result.exit_code == 0
    assert old.read_bytes().startswith(b"\x89PNG")
    assert "old.png" in result.stderr
    assert run(THIRD, "--plot", old, "--force", "--quiet").stderr == ""


def test_in_a_process_of_its_own(tmp_path: Path) -> None:
    """As a person runs it: warnings of libraries would show here."""
    done = subprocess.run(
        [sys.executable, "-m", "loopfit", "equivalent", "-1/(s+1)^4", "--plot", str(tmp_path / "a.svg"), "--quiet"],
        capture_output=True,
        text=True,
        check=False,
        env=os.environ | {"PYTHONWARNINGS": "default"},
    )
    assert (done.returncode, done.stderr) == (0, "")
    assert "gain -1" in done.stdout


def test_help_loads_no_numbers() -> None:
    code = (
        "import sys, loopfit.cli.main; "
        "assert not {'numpy', 'scipy', 'matplotlib', 'control'} & set(sys.modules), sorted(sys.modules)"
    )
    subprocess.run([sys.executable, "-c", code], check=True)


def test_loop_of_a_case_has_its_equivalent() -> None:
    """The ringing spray pressure: its damping as `analyze` finds it from the record, within the two intervals' reach."""
    root = Path(__file__).resolve().parents[2]
    result = CliRunner().invoke(app, ["equivalent", str(root / "cases" / "spray-pressure.toml"), "--json"])
    assert result.exit_code == 0, result.output
    document = json.loads(result.stdout)
    chosen = next(one for one in document["equivalents"] if one["method"] == document["chosen"])
    assert chosen["damping_ratio"] == pytest.approx(0.136, abs=0.03)
    assert document["adequate"] is True
