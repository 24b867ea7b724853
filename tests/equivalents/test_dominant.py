"""Dominant poles: what is kept is exact."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from loopfit.equivalents.choose import DOMINANT, equivalents_of
from loopfit.equivalents.course import course_of
from loopfit.equivalents.dominant import by_dominant_poles
from loopfit.equivalents.form import Form
from loopfit.equivalents.system import RationalSystem
from loopfit.model.transfer import transfer_of


def models(system: RationalSystem) -> list[Form]:
    assert system.static_gain is not None
    return by_dominant_poles(system, course_of(system, system.static_gain))[0]


@given(
    damping=st.floats(0.05, 3),
    wn=st.floats(0.01, 100),
    lead=st.one_of(st.just(0.0), st.floats(0.01, 3), st.floats(-3, -0.01)),
    gain=st.sampled_from([-2.0, 1.0]),
)
def test_second_order_comes_back_as_itself(damping: float, wn: float, lead: float, gain: float) -> None:
    if abs(damping - 1) < 1e-3 or abs(lead**2 - 2 * damping * lead + 1) < 1e-2:
        return  # a double pole has no residues; a zero on a pole has none to keep
    system = RationalSystem(transfer_of([gain * lead / wn, gain], [wn**-2, 2 * damping / wn, 1.0]))
    wanted = (gain, 2 * damping, 1, lead, 0)
    found = [(f.gain, f.a1 * wn, f.a2 * wn**2, f.zero * wn, f.dead_time * wn) for f in models(system)]
    assert any(one == pytest.approx(wanted, rel=1e-6, abs=1e-6) for one in found)


@pytest.mark.parametrize("small", [0.02, 0.05, 0.1])
def test_late_response_is_the_exact_one(small: float) -> None:
    """With both residues kept, what is left of the error is the small lag's mode alone, exp(-t / small): a law of residues.

    By the series in the small lag, a dead time and a zero can do that for (1 - a T s)/(1 + T s) when a is at least 1.
    """
    bottom = np.polymul([2.0, 3.0, 1.0], [small, 1.0]).tolist()
    system = RationalSystem(transfer_of([-2.0 * small, 1.0], bottom))
    time = np.linspace(16 * small, 16 * small + 6, 50)  # exp(-16) is 1e-7
    errors = [np.abs(form.step(time) - system.step(time)).max() for form in models(system) if form.note is None]
    assert min(errors) < 1e-7


def test_dead_time_stands_for_the_small_lag() -> None:
    """1/((s + 1)(0.2 s + 1)(T s + 1)) for small T: both modes are late by T to the first order in T."""
    small = 1e-3
    system = RationalSystem(transfer_of([1.0], np.polymul([0.2, 1.2, 1.0], [small, 1.0]).tolist()))
    best = min(models(system), key=lambda form: abs(form.dead_time - small) + abs(form.zero))
    assert best.dead_time == pytest.approx(small, rel=0.02)
    assert best.lags == pytest.approx((1, 0.2), rel=1e-9)


def test_repeated_poles_have_no_residues() -> None:
    found = equivalents_of(RationalSystem(transfer_of([1], [1, 4, 6, 4, 1])))
    one = next(each for each in found.equivalents if each.method == DOMINANT)
    assert not one.exists
    assert one.reason is not None
    assert "repeated" in one.reason


def test_a_pole_near_a_zero_is_not_dominant() -> None:
    """(s + 0.1) / (s + 0.1004): the slow pole has 0.4 % of the response; the pair behind it is kept."""
    bottom = np.polymul([1 / 0.1004, 1.0], [1.0, 0.8, 1.0]).tolist()
    found = equivalents_of(RationalSystem(transfer_of([10.0, 1.0], np.polymul(bottom, [0.1, 1]).tolist())))
    one = next(each for each in found.equivalents if each.method == DOMINANT)
    assert one.damping_ratio == pytest.approx(0.4, rel=1e-6)


def test_a_fast_single_pole_does_not_stand_for_slow_repeated_ones() -> None:
    system = RationalSystem(transfer_of([1.0], np.poly([-1.0] * 4 + [-20.0]).tolist()))
    forms, reason = by_dominant_poles(system, course_of(system, system.static_gain or 0.0))
    assert forms == []
    assert reason is not None
    assert "the slowest poles are repeated" in reason
