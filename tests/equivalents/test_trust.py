"""Poles and zeros that rounded coefficients tell only roughly: what the response is, and what is said."""

from __future__ import annotations

import numpy as np
import pytest

import loopfit
from loopfit.core.arrays import Array
from loopfit.equivalents.expression import system_of_expression
from loopfit.equivalents.factors import roots_of
from loopfit.equivalents.system import RationalSystem
from loopfit.equivalents.trust import moved_by_rounding, response_doubt, with_better_roots
from loopfit.model.transfer import transfer_of

TIME = np.linspace(0.0, 8.0, 300)


def text_of(count: int) -> str:
    return "+".join(f"{k}/(s+{k})" for k in range(1, count + 1))


def law(count: int) -> Array:
    """Return the unit step response of k/(s + k), k = 1 ... count, summed."""
    return np.sum([1.0 - np.exp(-k * TIME) for k in range(1, count + 1)], axis=0)


@pytest.mark.parametrize("count", [10, 29, 40])
def test_poles_of_a_sum_of_fractions_are_those_of_its_terms(count: int) -> None:
    system = system_of_expression(text_of(count))
    assert system.poles.imag == pytest.approx(0, abs=0)
    assert system.poles.real == pytest.approx(-np.arange(1.0, count + 1), rel=1e-12)
    assert system.step(TIME) == pytest.approx(law(count), rel=0, abs=1e-12 * count)  # rounding of `count` sections


def test_nothing_is_said_of_an_expression() -> None:
    reasons = loopfit.equivalent(text_of(29)).reasons
    assert not any("rounding" in reason for reason in reasons)


@pytest.mark.parametrize("count", [20, 29])
def test_coefficients_of_the_same_get_the_response_right_and_a_caution(count: int) -> None:
    exact = system_of_expression(text_of(count))
    found = loopfit.equivalent((exact.numerator, exact.denominator))
    # the roots of the rounded coefficients lie elsewhere, and answer alike: rounding of 1e-16 times at most 2^(n/2) here
    assert found.system.step(TIME) == pytest.approx(law(count), rel=0, abs=1e-9 * count)
    assert any("rounding in the last digit" in reason for reason in found.reasons)


@pytest.mark.parametrize("roots", [[-1.0, -2.0, -5.0], [-1.0] * 6, [-0.1 + 1j, -0.1 - 1j, -3.0]])
def test_nothing_is_said_of_coefficients_that_tell_their_roots(roots: list[complex]) -> None:
    found = loopfit.equivalent(([1.0], list(np.real(np.poly(roots)))))
    assert not any("rounding" in reason or "could not" in reason for reason in found.reasons)


@pytest.mark.parametrize("count", [6, 8, 10])
def test_rounding_moves_roots_as_far_as_it_is_said(count: int) -> None:
    """The largest move under random changes of the last digit is below the bound and above a hundredth of it."""
    rng = np.random.default_rng(7)
    values = np.poly(-np.arange(1.0, count + 1))
    said = float(moved_by_rounding(values.tolist(), -np.arange(1.0, count + 1) + 0j).max())
    bits = 2.0**10  # larger changes than rounding, so that the root finder's own does not show
    found = 0.0
    for _ in range(20):
        changed = values * (1.0 + bits * np.finfo(float).eps * rng.uniform(-1, 1, values.size))
        moved = np.sort(np.roots(changed).real)[::-1] / -np.arange(1.0, count + 1) - 1.0
        found = max(found, float(np.abs(moved).max()) / bits)
    assert 0.01 * said < found < 1.1 * said


def test_doubt_is_the_error_of_the_step_response() -> None:
    """One pole held 1 % too slow: the response e^-t - e^-1.01t is at most 0.01/e off, by hand; the estimate comes near."""
    system = RationalSystem(transfer_of([1.0], [1.0, 1.0]), known_poles=(-0.99 + 0j,), known_zeros=())
    doubt = response_doubt(system)
    assert doubt is not None
    assert 0.01 / np.e < doubt < 10 * 0.01
    better = with_better_roots(system)
    assert better.poles == pytest.approx(-1.0, rel=1e-15)
    assert (response_doubt(better) or 0.0) < 1e-12


def test_better_roots_are_taken_only_where_they_answer_better() -> None:
    system = RationalSystem(transfer_of([1.0], np.poly([-1.0, -2.0, -3.0]).tolist()))
    assert with_better_roots(system) is system
    assert system.poles == pytest.approx(roots_of(system.denominator), abs=0)
