"""Quantities, plain data, errors and digits."""

from __future__ import annotations

import json
import math
import pickle

import pytest
from hypothesis import given
from hypothesis import strategies as st

import loopfit
from loopfit.core.errors import LoopfitError, RecordError, UsageError
from loopfit.core.plain import plain, to_json
from loopfit.core.quantity import Quantity
from loopfit.core.rounding import decimals_for, decimals_of, number


@pytest.mark.parametrize("bounds", [(1.0, 2.0, 3.0), (math.nan, 0.0, 1.0), (0.0, math.nan, 1.0), (0.0, 1.0, -1.0)])
def test_a_quantity_refuses_bounds_that_do_not_hold_its_value(bounds: tuple[float, float, float]) -> None:
    with pytest.raises(ValueError, match="out of order"):
        Quantity(*bounds)


@given(value=st.floats(-1e6, 1e6), below=st.floats(0, 1e3), above=st.floats(0, 1e3), factor=st.floats(-1e3, 1e3))
def test_scaling_keeps_the_interval_around_the_value(value: float, below: float, above: float, factor: float) -> None:
    scaled = Quantity(value, value - below, value + above).scaled(factor)
    assert scaled.low <= scaled.value <= scaled.high


def test_an_open_bound_is_null_in_json_and_no_nan_gets_through() -> None:
    document = json.loads(to_json({"zeta": Quantity(3.0, 1.5, math.inf), "none": None, "list": [1, 2.5, True]}))
    assert document == {"zeta": {"value": 3.0, "low": 1.5, "high": None}, "none": None, "list": [1, 2.5, True]}
    assert plain(math.nan) is None


def test_a_value_without_plain_form_is_refused() -> None:
    with pytest.raises(TypeError, match="no plain form"):
        plain(object())


@pytest.mark.parametrize(
    "error",
    [LoopfitError("text"), UsageError("text"), RecordError("a.csv", "why", 3, "PV"), RecordError("a.csv", "why")],
)
def test_errors_pickle_with_their_one_line(error: LoopfitError) -> None:
    again = pickle.loads(pickle.dumps(error))
    assert type(again) is type(error)
    assert str(again) == str(error)
    assert "\n" not in str(error)


def test_a_record_error_says_where() -> None:
    assert str(RecordError("a.csv", "not a number", 12, "PV")) == "a.csv, row 12, column 'PV': not a number"


@pytest.mark.parametrize(
    ("spread", "value", "decimals"),
    [(0.0047, 0.32, 3), (0.0013, 0.32, 4), (12.0, 500.0, 0), (0.0, 0.5, 4), (30.0, 1e4, -1)],
)
def test_an_interval_shows_one_figure_or_two_when_it_begins_with_1(spread: float, value: float, decimals: int) -> None:
    assert decimals_for(spread, value) == decimals


def test_numbers_are_printed_with_their_digits_and_without_minus_zero() -> None:
    assert number(0.31987, 3) == "0.320"
    assert number(-0.0001, 2) == "0.00"
    assert number(math.inf, 2) == "no bound"
    assert decimals_of(Quantity(5.0, 4.0, math.inf)) == 1


def test_public_names_are_those_that_are_promised() -> None:
    for name in loopfit.__all__:
        assert getattr(loopfit, name) is not None
    with pytest.raises(AttributeError, match="no attribute"):
        _ = loopfit.no_such_name
