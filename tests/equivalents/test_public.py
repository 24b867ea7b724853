"""loopfit.equivalent: every way to say a system gives the same answer; wrong arguments are told in words."""

from __future__ import annotations

from types import SimpleNamespace

import control
import numpy as np
import pytest

import loopfit
from loopfit.core.errors import RecordError, UsageError
from loopfit.equivalents.system import RationalSystem
from loopfit.model.transfer import transfer_of

TEXT = "2*exp(-0.5*s)/((3*s+1)*(s+1)*(0.5*s+1))"
TOP, BOTTOM = [2.0], [1.5, 5.0, 4.5, 1.0]  # (3 s^2 + 4 s + 1)(0.5 s + 1)


class Own:
    """A system that shows poles and a step response, and no transfer function."""

    known = RationalSystem(transfer_of(TOP, BOTTOM, 0.5))
    numerator = denominator = None

    def __getattr__(self, name: str) -> object:
        if name == "transfer":
            raise AttributeError(name)
        return getattr(self.known, name)


WAYS = {
    "expression": lambda: loopfit.equivalent(TEXT),
    "pair": lambda: loopfit.equivalent((TOP, BOTTOM), dead_time_s=0.5),
    "coefficients": lambda: loopfit.equivalent(coefficients=(np.array(TOP), np.array(BOTTOM)), dead_time_s=0.5),
    "expression and dead time": lambda: loopfit.equivalent("2/((3*s+1)*(s+1)*(0.5*s+1))", dead_time_s=0.5),
    "transfer": lambda: loopfit.equivalent(transfer_of(TOP, BOTTOM, 0.5)),
    "something with a transfer": lambda: loopfit.equivalent(SimpleNamespace(transfer=transfer_of(TOP, BOTTOM, 0.5))),
    "a system of its own": lambda: loopfit.equivalent(RationalSystem(transfer_of(TOP, BOTTOM, 0.5))),
    "control transfer function": lambda: loopfit.equivalent(control.tf(TOP, BOTTOM), dead_time_s=0.5),
    "control state space": lambda: loopfit.equivalent(control.ss(control.tf(TOP, BOTTOM)), dead_time_s=0.5),
}


@pytest.mark.parametrize("way", WAYS)
def test_every_way_says_the_same(way: str) -> None:
    plain, other = WAYS["expression"](), WAYS[way]()
    assert other.chosen == plain.chosen
    for one, same in zip(plain.equivalents, other.equivalents, strict=True):
        assert one.exists == same.exists
        if one.gain is not None:
            assert same.gain == pytest.approx(one.gain, rel=1e-6)
            assert same.damping_ratio == pytest.approx(one.damping_ratio, rel=1e-4)
    if other.expression is not None:
        assert loopfit.equivalent(other.expression).chosen == plain.chosen


WRONG = [
    ({}, "one of them"),
    ({"system": "1/s", "coefficients": ([1], [1])}, "one of them"),
    ({"system": 3.0}, "float is no system"),
    ({"system": ([1], [1, 2], [3])}, "a pair"),
    ({"coefficients": "1/s"}, "a pair"),
    ({"coefficients": (["a"], [1])}, "real numbers"),
    ({"coefficients": ([[1.0, 2.0]], [1])}, "one list"),
    ({"coefficients": ([], [1])}, "one list"),
    ({"coefficients": ([1.0], [float("nan"), 1])}, "not a finite number"),
    ({"coefficients": ([1j], [1])}, "real numbers"),
    ({"system": "1/(s+1)", "dead_time_s": float("nan")}, "finite"),
    ({"system": "1/(s+1)", "dead_time_s": "soon"}, "number"),
    ({"system": "1/(s+1)", "band_percent": 50}, "below 50"),
    ({"system": "1/(s+1)", "band_percent": float("nan")}, "below 50"),
    ({"system": "1/(s+1)", "band_percent": "2"}, "a number"),
    ({"system": Own(), "dead_time_s": 1.0}, "its own dead time"),
]


@pytest.mark.parametrize(("arguments", "words"), WRONG)
def test_wrong_usage(arguments: dict[str, object], words: str) -> None:
    with pytest.raises(UsageError, match=words):
        loopfit.equivalent(**arguments)  # type: ignore[arg-type]


UNUSABLE = [
    ({"coefficients": ([1.0, 0, 0], [1.0, 1])}, "differentiates"),
    ({"coefficients": ([0.0], [1.0, 1])}, "numerator is zero"),
    ({"coefficients": ([1.0], [0.0, 0])}, "denominator is zero"),
    ({"system": "1/(s+1)", "dead_time_s": -1}, "predicts"),
    ({"coefficients": ([1.0], [1.0] * 62)}, "degree 61"),
]


@pytest.mark.parametrize(("arguments", "words"), UNUSABLE)
def test_unusable(arguments: dict[str, object], words: str) -> None:
    with pytest.raises(RecordError, match=words):
        loopfit.equivalent(**arguments)  # type: ignore[arg-type]


def test_a_system_that_is_no_rational_function() -> None:
    """Its slowest poles, -1/3 and -1, of which the residues are kept: lags of 3 and 1 s."""
    result = loopfit.equivalent(Own())
    assert result.expression is None
    dominant = result.equivalents[0]
    assert dominant.time_constants_s == pytest.approx((3.0, 1.0), rel=1e-9)
    assert result.adequate


def test_plant_and_public_names() -> None:
    plant = loopfit.Plant(gain=2.0, time_constants_s=(3.0, 1.0, 0.5), dead_time_s=0.5)
    assert loopfit.equivalent(plant).chosen == loopfit.equivalent(TEXT).chosen
    assert sorted(loopfit.__all__) == loopfit.__all__ == sorted(loopfit._HOMES)


def test_coefficients_of_few_digits_are_the_decimals_that_were_written() -> None:
    """(s + 0.1)^3 (s + 0.2), multiplied out by hand, whose last digits no float has; and (s + 1) ... (s + 14)."""
    found = loopfit.equivalent(([0.0002], [1.0, 0.5, 0.09, 0.007, 0.0002]))
    assert found.system.poles == pytest.approx(np.array([-0.1, -0.1, -0.1, -0.2]), rel=3e-16)
    assert found.expression == "(0.0002)/(s^4+0.5*s^3+0.09*s^2+0.007*s+0.0002)"
    whole = np.poly(-np.arange(1.0, 15.0))  # whole numbers below 2^53: exact
    found = loopfit.equivalent(([0.0, 1.0], whole.tolist()))
    assert found.system.poles == pytest.approx(-np.arange(1.0, 15.0), rel=3e-16)
    assert not any("rounding" in reason for reason in found.reasons)


def test_cancelled_factors_of_s_in_coefficients() -> None:
    found = loopfit.equivalent(([0.0, 1.0, 2.0, 0.0], [1.0, 4.0, 3.0, 0.0]))
    assert found.system.poles == pytest.approx(np.array([-1.0, -3.0]), rel=1e-12)
    assert found.system.zeros == pytest.approx(np.array([-2.0]), rel=1e-12)
