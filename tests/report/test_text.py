"""The page says what the analysis says, each number in its own row."""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np
import pytest

import loopfit
from loopfit.core.quantity import Quantity
from loopfit.core.rounding import decimals_of, number
from loopfit.report.text import in_words, page

CASES = Path(__file__).parents[2] / "cases"
ROWS = {
    "damping ratio": ("model", "damping_ratio"),
    "natural frequency": ("model", "natural_frequency_rad_s"),
    "damped period": ("model", "damped_period_s"),
    "gain": ("model", "gain"),
    "dead time": ("model", "dead_time_s"),
    "time constants + dead time": ("model", "lag_plus_dead_time_s"),
    "overshoot": ("response", "overshoot_percent"),
    "rise time": ("response", "rise_time_s"),
    "delay time": ("response", "delay_time_s"),
    "peak time": ("response", "peak_time_s"),
    "settling time": ("response", "settling_time_s"),
    "decay ratio": ("response", "decay_ratio"),
}


def row_of(text: str, name: str) -> str:
    (row,) = (line for line in text.splitlines() if re.match(rf"{re.escape(name)}\s\s|{re.escape(name)} \(", line))
    return row


@pytest.fixture(scope="module")
def belt() -> loopfit.Analysis:
    return loopfit.analyze(CASES / "belt-speed.csv")


@pytest.mark.parametrize("name", ROWS)
def test_each_row_shows_its_own_figure(belt: loopfit.Analysis, name: str) -> None:
    part, key = ROWS[name]
    quantity: Quantity = getattr(getattr(belt, part), key)
    places = decimals_of(quantity)
    row = row_of(page(belt), name)
    shown = f"{number(quantity.value, places)}  {number(quantity.low, places)} to {number(quantity.high, places)}"
    assert shown in re.sub(r"\s{2,}", "  ", row)


def test_observed_figures_stand_in_the_last_column(belt: loopfit.Analysis) -> None:
    seen = belt.observed.final_value
    assert seen is not None
    assert number(seen.value, decimals_of(seen)) in row_of(page(belt), "final value")


def test_the_answer_comes_first_and_settles_in_the_record(belt: loopfit.Analysis) -> None:
    first, second = page(belt).splitlines()[:2]
    assert first.startswith("Underdamped, damping ratio 0.3")
    assert "settled within ±2 % after" in second
    assert belt.settles_in_record


def test_settling_beyond_the_record_is_said_to_be_so() -> None:
    belt = loopfit.analyze(CASES / "belt-speed.csv", window_s=(0.0, 0.55))
    assert not belt.settles_in_record
    assert "would settle, after the end of the record" in page(belt)


def test_an_open_interval_is_a_bound_and_an_empty_overshoot_is_none() -> None:
    assert in_words(Quantity(4.0, 2.5, np.inf)) == "at least 2.5"
    assert in_words(Quantity(11.0, 11.0, np.inf)) == "at least 11"  # a bound that is the value itself: two figures
    heater = page(loopfit.analyze(CASES / "rinse-heater.csv"))
    assert heater.splitlines()[1].startswith("No overshoot")


def test_lines_fit_a_terminal_where_words_allow(belt: loopfit.Analysis) -> None:
    assert all(len(line) <= 125 for line in page(belt).splitlines())
