"""The command `loopfit analyze`: exit statuses, what goes to which stream, the JSON document, files written."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from click.testing import Result
from typer.testing import CliRunner

from loopfit.cli.main import app

BELT = Path(__file__).resolve().parents[2] / "cases" / "belt-speed.csv"


def run(*arguments: str | Path, stdin: str | None = None) -> Result:
    return CliRunner().invoke(app, ["analyze", *map(str, arguments)], input=stdin)


def refused(result: Result, *words: str) -> None:
    """Exit 3, nothing on standard output, one line on standard error."""
    assert result.exit_code == 3, result.stderr
    assert result.stdout == ""
    assert result.stderr.count("\n") == 1
    assert result.stderr.endswith("\n")
    for word in words:
        assert word in result.stderr


def misused(result: Result, *words: str) -> None:
    """Exit 2, and the last line on standard error says why."""
    assert result.exit_code == 2, result.stderr
    assert result.stdout == ""
    last = result.stderr.rstrip("\n").splitlines()[-1]
    for word in words:
        assert word in last


@pytest.fixture
def silent(tmp_path: Path) -> Path:
    """A record in which the output steps and the measurement is noise."""
    noise = np.random.default_rng(1).standard_normal(100)
    rows = [f"{i},{int(i > 20)},{noise[i]:.4f}" for i in range(100)]
    path = tmp_path / "silent.csv"
    path.write_text("\n".join(["time (s),output,measurement", *rows]) + "\n")
    return path


def test_page() -> None:
    result = run(BELT)
    assert result.exit_code == 0
    assert result.stdout.startswith("Underdamped, damping ratio 0.3")
    assert result.stderr == ""


def test_record_from_standard_input() -> None:
    result = run("-", stdin=BELT.read_text(encoding="utf-8"))
    assert result.exit_code == 0
    assert "damping ratio" in result.stdout


CONTENTS = {
    "empty": ("", ["empty"]),
    "header only": ("time,setpoint,measurement\n", ["no rows of numbers"]),
    "no numbers": ("time,measurement\n" + "a,b\n" * 20, ["no rows of numbers"]),
    "two rows": ("time,measurement,setpoint\n0,1,2\n1,2,3\n", ["2 rows"]),
    "no step": ("time,output,measurement\n" + "".join(f"{i},5,{i * 7919 % 101}\n" for i in range(100)), ["no step"]),
    "clock back": ("time,output,measurement\n" + "".join(f"{99 - i},{i // 50},{i % 7}\n" for i in range(99)), ["back"]),
}


@pytest.mark.parametrize("name", CONTENTS)
def test_unusable_file(name: str, tmp_path: Path) -> None:
    content, words = CONTENTS[name]
    path = tmp_path / "record.csv"
    path.write_text(content)
    refused(run(path), "record.csv", *words)
    assert list(tmp_path.iterdir()) == [path]


def test_missing_file_and_folder(tmp_path: Path) -> None:
    refused(run(tmp_path / "missing.csv"), "missing.csv", "no such file")
    refused(run(tmp_path), "folder")
    refused(run(tmp_path / "missing.csv", "--json"), "no such file")


def test_unknown_column_names_those_there_are() -> None:
    refused(run(BELT, "--measurement", "nonsense"), "'nonsense'", "drive output")
    refused(run(BELT, "--setpoint", "99"), "99", "1 to 4")


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (("--nonsense",), "--nonsense"),
        (("--band", "abc"), "--band"),
        (("--band", "-3"), "-3"),
        (("--band", "50"), "50"),
        (("--confidence", "nan"), "nan"),
        (("--confidence", "100"), "100"),
        (("--step", "0"), "0"),
        (("--step-at", "1"), "--step-from"),
        (("--step-at", "0.2", "--step-from", "5", "--step-to", "5"), "same"),
        (("--interval", "0"), "above 0"),
        (("--from", "2", "--to", "1"), "window"),
        (("another.csv",), "another.csv"),
    ],
)
def test_wrong_usage(arguments: tuple[str, ...], words: str) -> None:
    misused(run(BELT, *arguments), words)


def test_no_record_named() -> None:
    misused(run(), "record")


def test_leading_minus_is_a_number() -> None:
    """The step is the one of the record, said in other numbers: the levels lie 605 lower."""
    plain = json.loads(run(BELT, "--json").stdout)["model"]
    result = run(BELT, "--step-at", "0.2", "--step-from", "-5", "--step-to", "195", "--from", "-1", "--json")
    assert result.exit_code == 0, result.stderr
    document = json.loads(result.stdout)
    assert document["step"]["from"] == -5.0
    assert document["step"]["to"] == 195.0
    # the same rows and the same step of 200
    assert document["model"]["damping_ratio"]["value"] == pytest.approx(plain["damping_ratio"]["value"], rel=1e-4)
    misused(run(BELT, "--step-from", "-5"), "--step-at")


def test_plot_writes_only_what_it_may(tmp_path: Path, silent: Path) -> None:
    old = tmp_path / "old.png"
    old.write_bytes(b"old")
    misused(run(BELT, "--plot", old), "old.png", "--force")
    assert old.read_bytes() == b"old"
    misused(run(BELT, "--plot", tmp_path / "picture.bmp"), "picture.bmp", ".png")
    misused(run(BELT, "--plot", tmp_path / "nowhere" / "picture.png"), "folder")
    misused(run(BELT, "--plot", tmp_path), tmp_path.name)
    refused(run(silent, "--plot", tmp_path / "new.png"))
    assert not (tmp_path / "new.png").exists()
    result = run(BELT, "--plot", old, "--force")
    assert result.exit_code == 0
    assert old.read_bytes().startswith(b"\x89PNG")
    assert "old.png" in result.stderr
    assert run(BELT, "--plot", old, "--force", "--quiet").stderr == ""


def no_constant(text: str) -> float:
    raise AssertionError(f"{text} is no JSON")


def parsed(text: str) -> dict[str, Any]:
    document: dict[str, Any] = json.loads(text, parse_constant=no_constant)
    return document


QUANTITIES_OF_RESPONSE = {
    "overshoot_percent",
    "peak_time_s",
    "rise_time_s",
    "settling_time_s",
    "delay_time_s",
    "decay_ratio",
}
KEYS = {
    "": {
        *("document", "version", "loopfit", "record", "step", "steps", "observed", "model", "response"),
        "confidence_percent",
    },
    "record": {
        *("file", "rows", "rows_used", "columns", "duration_s", "sample_interval_s", "noise_rms", "findings"),
    },
    "step": {"signal", "time_s", "from", "to"},
    "observed": {"initial_value", "final_value", "peak_value", "steady_state_deviation", *QUANTITIES_OF_RESPONSE},
    "model": {
        *("kind", "gain", "damping_ratio", "natural_frequency_rad_s", "damped_frequency_rad_s", "damped_period_s"),
        *("dead_time_s", "time_constants_s", "zero_s", "regime", "residual_rms", "r_squared", "adequate", "reasons"),
    },
    "response": QUANTITIES_OF_RESPONSE,
}


def test_json_document() -> None:
    """Keys as promised to other people's scripts; every quantity has value, low and high in order."""
    result = run(BELT, "--json")
    assert result.exit_code == 0
    assert result.stderr == ""
    document = parsed(result.stdout)
    assert document["document"] == "loopfit analysis"
    assert document["version"] == 1
    for part, keys in KEYS.items():
        assert keys <= (document[part] if part else document).keys(), part
    assert document["record"]["columns"].keys() == {"time", "measurement", "setpoint", "output"}
    assert document["steps"][0].keys() >= {"signal", "time_s", "from", "to", "used"}
    assert (document["step"]["signal"], document["step"]["from"], document["step"]["to"]) == ("setpoint", 600, 800)
    plain = {"kind", "regime", "residual_rms", "r_squared", "adequate", "reasons", "time_constants_s"}
    quantities = [
        *(document["observed"].values()),
        *(document["response"].values()),
        *(value for name, value in document["model"].items() if name not in plain),
        *(document["model"]["time_constants_s"] or ()),
    ]
    for quantity in quantities:
        if quantity is None:
            continue
        assert quantity.keys() == {"value", "low", "high"}
        low = -np.inf if quantity["low"] is None else quantity["low"]
        high = np.inf if quantity["high"] is None else quantity["high"]
        assert low <= quantity["value"] <= high


def test_json_of_a_refused_record(silent: Path) -> None:
    """The document is printed with model null, and the line on standard error says why."""
    result = run(silent, "--json")
    assert result.exit_code == 3
    assert result.stderr.count("\n") == 1
    document = parsed(result.stdout)
    assert document["model"] is None
    assert document["response"] is None
    errors = [finding for finding in document["record"]["findings"] if finding["severity"] == "error"]
    assert errors
    assert errors[0]["text"] in result.stderr
    assert KEYS["observed"] <= document["observed"].keys()


def test_text_of_a_refused_record(silent: Path) -> None:
    refused(run(silent), "silent.csv")


def test_one_line_in_a_process_of_its_own(tmp_path: Path) -> None:
    """As a person runs it: warnings of libraries would show here."""
    noise = np.random.default_rng(2).standard_normal(200)
    time = np.linspace(-3.0, 24.0, 200)
    row = int(np.searchsorted(time, 0.0))
    rows = [f"{float(time[i])!r},{int(i >= row)},{float(noise[i])!r}" for i in range(200)]
    path = tmp_path / "noise.csv"
    path.write_text("\n".join(["time (s),output,measurement", *rows]) + "\n")
    done = subprocess.run(
        [sys.executable, "-m", "loopfit", "analyze", str(path)],
        capture_output=True,
        text=True,
        check=False,
        env=os.environ | {"PYTHONWARNINGS": "default"},
    )
    assert done.returncode == 3
    assert done.stdout == ""
    assert done.stderr.count("\n") == 1, done.stderr
