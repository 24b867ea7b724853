"""The page of equivalents says what the result says, each number in its own row."""

from __future__ import annotations

import re
from functools import cache

import numpy as np
import pytest

import loopfit
from loopfit.equivalents.result import Equivalents
from loopfit.report.equivalent_text import answer, page, pole_words

SYSTEMS = {
    "lags": "-2/(s+1)^5",
    "itself": "2*exp(-0.5*s)/((3*s+1)*(s+1))",
    "swing": "(s+2)/((s^2+0.4*s+1)*(s+3)*(s+5))",
    "first order": "3/(4*s+1)",
    "dead time": "exp(-2*s)",
    "gain": "3",
    "right zero": "(1-s)/((s+1)^3*(s+20))",
    "not adequate": "(s^2+0.01*s+1)/((s^2+0.1*s+0.5)*(s^2+0.2*s+3))",
    "integrating": "1/(s*(s+1)*(s+2)*(s+5))",
    "twice integrating": "1/(s^2*(s+1))",
    "unstable": "1/((s-1)*(s+1)*(s+4))",
    "growing swing": "1/(s^2-0.2*s+1)",
    "no gain": "s/(s+1)^2",
    "biproper": "(2*s+1)/(s+1)*exp(-s)",
    "many": "1/(s+1)^40",
    "large and small": "1e-9/((1e5*s+1)*(2e5*s+1)*(3e4*s+1))",
    "long": "+".join(f"{k}/(s+{k})" for k in range(1, 30)),
}


@cache
def result_of(name: str) -> Equivalents:
    return loopfit.equivalent(SYSTEMS[name])


@pytest.mark.parametrize("name", SYSTEMS)
def test_every_kind_has_a_page(name: str) -> None:
    result = result_of(name)
    text = page(result)
    assert all(reason in " ".join(text.split()) for reason in result.reasons)
    assert all(one.method in text for one in result.equivalents)
    assert not re.search(r"\b(nan|inf|None)\b", text)
    assert all(len(line) <= 125 for line in text.splitlines() if SYSTEMS[name] not in line)
    assert not any(line != line.rstrip() for line in text.splitlines())


@pytest.mark.parametrize("name", SYSTEMS)
def test_the_answer_comes_first_and_does_not_flatter(name: str) -> None:
    result = result_of(name)
    words = answer(result)
    assert " ".join(page(result).split()).startswith(" ".join(words.split()))
    if result.chosen is None:
        assert words.startswith("No equivalent")
    else:
        assert ("NOT adequate" in words) is not result.adequate


def test_rows_show_their_own_figures() -> None:
    result = result_of("lags")
    best = result.best
    assert best is not None
    assert best.damping_ratio is not None
    (row,) = [line for line in page(result).splitlines() if line.startswith("* ")]
    assert best.method in row
    cells = row.split(best.method)[1].split()
    shown = [float(cell) for cell in cells if cell != "-"]
    wanted = [best.damping_ratio, best.natural_frequency_rad_s, best.gain, best.dead_time_s]
    assert shown[:4] == pytest.approx(wanted, rel=5e-4)  # four figures
    assert shown[-2:] == pytest.approx([best.step_error_max_percent, best.step_error_rms_percent], rel=0.05)  # two
    settling = result.response.settling_time_s
    assert settling is not None
    (row,) = [line for line in page(result).splitlines() if line.startswith("settling time (±2 %)")]
    assert float(row.split()[-2]) == pytest.approx(settling.value, rel=5e-4)


def test_figures_of_the_equivalent_stand_beside_the_exact_ones() -> None:
    """A system that is its own equivalent has the same figures twice."""
    for name in ("itself", "first order", "dead time"):
        rows = [
            line.split()
            for line in page(result_of(name)).splitlines()
            if re.match(r"(overshoot|rise time|delay time|settling time|final value)\s", line)
        ]
        assert len(rows) == 5
        assert all(row[-1] == row[-2] for row in rows)


def test_unstable_and_integrating_are_said_to_be_so() -> None:
    assert "UNSTABLE" in page(result_of("unstable"))
    assert answer(result_of("growing swing")).startswith("Unstable")
    assert answer(result_of("integrating")).startswith("Integrating")
    assert "per s" in answer(result_of("integrating"))
    assert "figures of a unit step" not in page(result_of("unstable"))


def test_poles_in_words() -> None:
    assert pole_words(np.array([-1, -1, -1, -0.5 + 2j, -0.5 - 2j], complex)) == "-1 (3 times), -0.5 ± 2j"
    assert pole_words(np.array([-1, -2 + 1j, -2 - 1j, -2 + 1j, -2 - 1j], complex)) == "-1, -2 ± 1j (2 times)"
    assert pole_words(np.empty(0, complex)) == "none"
    assert pole_words(-np.arange(1, 21).astype(complex)).endswith("-12, and 8 more")


def test_a_peak_that_no_recorder_shows_has_no_time() -> None:
    """Its equivalent has an overshoot of exp(-pi 0.976/0.218) = 1e-6 and less: a peak in name only."""
    lines = page(loopfit.equivalent("(1-2*s)/((s+1)*(3*s+1)*(5*s+1))*exp(-1.5*s)")).split("\n")
    row = next(line for line in lines if line.startswith("overshoot"))
    assert row.split()[-2:] == ["<", "0.01"]
    assert not any(line.startswith("peak time") for line in lines)


def test_an_undamped_pair_is_called_so() -> None:
    assert "NOT STABLE: undamped" in page(loopfit.equivalent("1/(s^2+1)"))
    assert "UNSTABLE" in page(loopfit.equivalent("1/(s^2-0.1*s+1)"))


def test_large_errors_have_no_exponent() -> None:
    assert "e+0" not in page(loopfit.equivalent("100*(s+0.01)/((s+1)*(s+2)*(s+3))"))


def test_a_model_that_is_not_adequate_is_called_so_at_once() -> None:
    assert answer(loopfit.equivalent("(s^2+3*s+1)/(s^2+1.2*s+1)")).startswith(
        "NOT adequate; the nearest: damping ratio"
    )
    assert answer(loopfit.equivalent("1/(s+1)^8")).startswith("Damping ratio")


def test_of_a_loop_with_dead_time_not_all_poles_are_shown() -> None:
    loop = loopfit.Loop(
        loopfit.Plant(gain=2.0, time_constants_s=(5.0, 1.0), dead_time_s=0.8), loopfit.Gains(kp=1.5, ki=0.4)
    )
    assert "infinitely many" in " ".join(page(loopfit.equivalent(loop)).split())
