"""Poles and zeros from coefficients, repeated ones, and pairs that cancel."""

from __future__ import annotations

import numpy as np
import pytest

from loopfit.core.errors import UsageError
from loopfit.equivalents.factors import cancelled, roots_of
from loopfit.equivalents.system import RationalSystem
from loopfit.model.transfer import transfer_of


@pytest.mark.parametrize("times", [2, 3, 4, 6, 8, 12, 20, 40])
@pytest.mark.parametrize("rate", [1e-3, 1.0, 0.37])
def test_a_repeated_root_comes_out_as_one_value(times: int, rate: float) -> None:
    found = roots_of(np.real(np.poly([-rate] * times)))
    assert found == pytest.approx(np.full(times, -rate), rel=1e-9)


def test_repeated_pairs_and_single_roots_together() -> None:
    roots = [-1 + 2j, -1 - 2j] * 3 + [-0.2] * 2 + [-7.0, 0.5, 0.0]
    found = roots_of(np.real(np.poly(roots)))
    for root in roots:
        assert np.abs(found - root).min() < 1e-8, root
    assert found.size == len(roots)
    assert np.sum(found.imag) == 0


@pytest.mark.parametrize("apart", [1e-3, 1e-2, 0.1])
def test_near_roots_are_not_merged(apart: float) -> None:
    found = np.sort(roots_of(np.real(np.poly([-1.0, -1.0 - apart, -5.0]))).real)
    assert found == pytest.approx([-5.0, -1.0 - apart, -1.0], rel=1e-9)


def test_roots_far_apart_keep_their_digits() -> None:
    """By hand: (1e-30 s + 1)(s + 1)^2, whose slow part is untouched by the first coefficient."""
    found = roots_of([1e-30, 1.0, 2.0, 1.0])
    assert found == pytest.approx([-1.0, -1.0, -1e30], rel=1e-12)
    with pytest.raises(UsageError, match="too far apart"):
        roots_of([1e-310, 1.0])


def test_a_lag_too_fast_to_show_is_left_out_with_a_reason() -> None:
    less, reasons = RationalSystem(transfer_of([1e-20, 2.0], [1e-16, 1.0, 2.0, 1.0])).without_fast
    assert less.denominator == pytest.approx((1, 2, 1))
    assert less.numerator == pytest.approx((2,))
    assert "faster" in reasons[0]


def test_what_nearly_cancels_is_removed_with_a_reason() -> None:
    poles, zeros, reasons = cancelled(np.array([-1.0, -1.0005, -3.0]) + 0j, np.array([-1.0004]) + 0j)
    assert poles.real == pytest.approx([-1.0005, -3.0]) or poles.real == pytest.approx([-1.0, -3.0])
    assert zeros.size == 0
    assert "0.001" in reasons[0]


def test_the_near_cancellation_of_a_textbook_stays() -> None:
    # Nise, 6th ed. 2011, Example 4.10 C2: zero -4, pole -4.01 (0.25 % apart): its share is 4 % of the final value
    assert cancelled(np.array([-4.01, -5.0, -6.0]) + 0j, np.array([-4.0]) + 0j)[2] == ()


def test_an_unstable_pole_goes_only_with_a_zero_at_the_same_place() -> None:
    assert cancelled(np.array([1.0, -2.0]) + 0j, np.array([1.0001]) + 0j)[2] == ()
    reasons = cancelled(np.array([1.0, -2.0]) + 0j, np.array([1.0]) + 0j)[2]
    assert "not stable" in reasons[0]


def test_removal_keeps_the_gain_at_rest_and_changes_the_step_by_about_the_distance() -> None:
    whole = RationalSystem(
        transfer_of(np.convolve([1.0005, 1], [2, 5]).tolist(), np.poly([-1, -0.4, -3]).tolist(), 1.5)
    )
    less, reasons = whole.without_cancellations
    assert len(reasons) == 1
    assert less.order == 2
    assert less.dead_time_s == 1.5
    assert less.static_gain == pytest.approx(whole.static_gain, rel=1e-12)
    time = np.linspace(0, 20, 300)
    assert less.step(time) == pytest.approx(whole.step(time), rel=0, abs=1e-3 * abs(whole.static_gain or 0.0))
