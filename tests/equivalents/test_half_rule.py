"""The half rule against the examples of its paper."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from loopfit.equivalents.half_rule import by_half_rule, half_rule
from loopfit.equivalents.system import RationalSystem
from loopfit.model.transfer import transfer_of

# S. Skogestad, Simple analytic rules for model reduction and PID controller tuning, J. Process Control 13, 2003, examples
# E2 to E13 (from memory); the last from Seborg, Edgar, Mellichamp, Process Dynamics and Control, 3rd ed. 2010, Example 6.5
# (from memory). Printed: gain factor, lags and dead time of first and of second order, each to half its last digit.
# The paper lists the second order's lags as they come; where the half makes the second the larger, they are sorted here.
E2 = {"lags": [2, 1, 0.4, 0.2, 0.05, 0.05, 0.05], "leads": [0.08], "inverse": [0.3]}
E3 = {"lags": [20, 1, 0.1, 0.1], "leads": [15]}
E6 = {"lags": [1, 1, 0.028], "leads": [0.34], "integrating": True}  # the paper takes (0.17 s + 1)^2 as 0.34 s + 1
E8 = {"lags": [1, 1], "integrating": True}
E11 = {"lags": [6, 2, 2], "inverse": [1], "dead_time": 1}
E12 = {"lags": [10, 8, 1], "leads": [6, 3], "dead_time": 0.3}
E13 = {"lags": [10, 0.5], "leads": [2], "dead_time": 1}
SEBORG = {"lags": [12, 3, 0.2, 0.05], "inverse": [1], "dead_time": 1}
PUBLISHED: list[tuple[str, dict[str, Any], int, list[tuple[float, float]]]] = [
    # value, half a unit of the last printed digit; in the order lags, dead time, gain
    ("E2", E2, 1, [(2.5, 0.05), (1.47, 0.005)]),
    ("E2", E2, 2, [(2, 0.5), (1.2, 0.05), (0.77, 0.005)]),
    ("E3", E3, 1, [(1.05, 0.005), (0.15, 0.005), (0.75, 0.025)]),  # k = 1.5 of 2
    ("E3", E3, 2, [(1, 0.5), (0.15, 0.005), (0.05, 0.005), (0.75, 0.025)]),
    ("E4", {"lags": [1] * 4}, 1, [(1.5, 0.05), (2.5, 0.05)]),
    ("E4", {"lags": [1] * 4}, 2, [(1.5, 0.05), (1, 0.5), (1.5, 0.05)]),
    ("E5", {"lags": [1, 0.2, 0.04, 0.008]}, 1, [(1.1, 0.05), (0.148, 0.0005)]),
    ("E5", {"lags": [1, 0.2, 0.04, 0.008]}, 2, [(1, 0.5), (0.22, 0.005), (0.028, 0.0005)]),
    ("E6 integrating", E6, 0, [(1.69, 0.005)]),
    ("E6 integrating", E6, 1, [(1.33, 0.005), (0.358, 0.0005)]),
    ("E7", {"lags": [1] * 3, "inverse": [2]}, 1, [(1.5, 0.05), (3.5, 0.05)]),
    ("E7", {"lags": [1] * 3, "inverse": [2]}, 2, [(1.5, 0.05), (1, 0.5), (2.5, 0.05)]),
    ("E8 integrating", E8, 0, [(2, 0.5)]),
    ("E8 integrating", E8, 1, [(1.5, 0.05), (0.5, 0.05)]),
    ("E9", {"lags": [1, 1], "dead_time": 1}, 1, [(1.5, 0.05), (1.5, 0.05)]),
    ("E9", {"lags": [1, 1], "dead_time": 1}, 2, [(1, 0.5), (1, 0.5), (1, 0.5)]),
    ("E10", {"lags": [20, 2], "dead_time": 1}, 1, [(21, 0.5), (2, 0.5)]),
    ("E10", {"lags": [20, 2], "dead_time": 1}, 2, [(20, 0.5), (2, 0.5), (1, 0.5)]),
    ("E11", E11, 1, [(7, 0.5), (5, 0.5)]),
    ("E11", E11, 2, [(6, 0.5), (3, 0.5), (3, 0.5)]),
    ("E12", E12, 1, [(1, 0.5), (0.3, 0.05), (0.225, 0.0005)]),
    ("E13", E13, 1, [(4.5, 0.05), (1.25, 0.005), (0.625, 0.0005)]),
    ("Seborg 6.5", SEBORG, 1, [(13.5, 0.05), (3.75, 0.005)]),
    ("Seborg 6.5", SEBORG, 2, [(12, 0.5), (3.1, 0.05), (2.15, 0.005)]),
]


@pytest.mark.parametrize(
    ("name", "plant", "order", "printed"), PUBLISHED, ids=[f"{r[0]}, order {r[2]}" for r in PUBLISHED]
)
def test_examples_as_published(
    name: str, plant: dict[str, Any], order: int, printed: list[tuple[float, float]]
) -> None:
    found = half_rule(order=order, **plant)
    assert found is not None
    values = (*found.lags, found.dead_time, found.gain)
    for value, (expected, half_digit) in zip(values, printed, strict=False):
        assert value == pytest.approx(expected, rel=0, abs=half_digit + 1e-9), name


def test_second_order_of_e13_takes_the_lead_as_the_first_order_does() -> None:
    """By hand from rule T3 with the effective dead time 1.25 of the first order: min(10, 6.25) = 6.25, so gain 0.625 and lag 4.25."""
    found = half_rule(order=2, **E13)
    assert found is not None
    assert (found.gain, *found.lags, found.dead_time) == pytest.approx((0.625, 4.25, 0.5, 1), rel=1e-12)


def test_a_smaller_lag_that_is_close_takes_the_lead() -> None:
    """Paper, below rule T3: the smaller neighbour when the ratio is under 1.6 and under that to the larger one."""
    close = half_rule([10, 1, 0.1], leads=[1.2])  # rule T1, gain 1.2, leaves 10 and 0.1
    assert close is not None
    assert (close.gain, *close.lags) == pytest.approx((1.2, 10, 0.1), rel=1e-12)
    far = half_rule([10, 1, 0.1], leads=[2.0])  # ratio 2 is not close: T2 against 10, gain 0.2, leaves 1 and 0.1
    assert far is not None
    assert (far.gain, *far.lags) == pytest.approx((0.2, 1, 0.1), rel=1e-12)


@pytest.mark.parametrize("order", [0, 1, 2])
@pytest.mark.parametrize("lags", [[3, 2, 1], [5, 5, 5, 1], [1, 0.1]])
def test_without_leads_the_first_moment_is_kept(lags: list[float], order: int) -> None:
    """Each lag is only moved or shared: lags and dead time have the same sum (paper, section 2)."""
    found = half_rule(lags, inverse=[0.5], dead_time=0.3, order=order)
    assert found is not None
    assert sum(found.lags) + found.dead_time == pytest.approx(sum(lags) + 0.8, rel=1e-12)


@pytest.mark.parametrize("name", ["E2", "E4", "E5", "E7", "E11"])
def test_coefficients_give_what_the_lags_give(name: str) -> None:
    plant, printed = next((p, printed) for n, p, order, printed in PUBLISHED if n == name and order == 2)
    top, bottom = np.ones(1), np.ones(1)
    for lag in plant["lags"]:
        bottom = np.convolve(bottom, [lag, 1])
    for lead in (*plant.get("leads", []), *(-lead for lead in plant.get("inverse", []))):
        top = np.convolve(top, [lead, 1])
    dead_time = plant.get("dead_time", 0.0)
    forms, reason = by_half_rule(RationalSystem(transfer_of(top.tolist(), bottom.tolist(), dead_time)))
    assert reason is None
    assert forms[0].lags is not None
    values = (*forms[0].lags, forms[0].dead_time + dead_time)
    for value, (expected, half_digit) in zip(values, printed, strict=False):
        assert value == pytest.approx(expected, rel=0, abs=half_digit + 1e-6)


def test_oscillating_poles_are_no_lags() -> None:
    forms, reason = by_half_rule(RationalSystem(transfer_of([1], [1, 1.4, 1.4, 1])))
    assert not forms
    assert reason is not None
    assert "real lags" in reason


def test_more_leads_than_lags_have_no_partner() -> None:
    assert half_rule([2.0], leads=[1.0, 0.5]) is None
