"""Routh approximations against published reduced models."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from loopfit.equivalents.routh import array_rows, by_routh, by_routh_array, routh_approximation
from loopfit.equivalents.system import RationalSystem
from loopfit.model.transfer import transfer_of

BENCHMARK = ([1.0, 7.0, 24.0, 24.0], [1.0, 10.0, 35.0, 50.0, 24.0])


def test_routh_array_as_published() -> None:
    # V. Krishnamurthy and V. Seshadri, Model reduction using the Routh stability criterion, IEEE Trans. Automatic Control 23,
    # 1978, on the 4th-order benchmark: (20.5714 s + 24) / (30 s^2 + 42 s + 24) (from memory)
    top, bottom = array_rows(np.array(BENCHMARK[0]), 1), array_rows(np.array(BENCHMARK[1]), 2)
    assert top is not None
    assert bottom is not None
    assert top == pytest.approx([20.5714, 24], rel=0, abs=5e-5)
    assert bottom == pytest.approx([30, 42, 24], rel=1e-12)


def test_routh_approximation_as_published() -> None:
    # Hutton and Friedland's method on the same benchmark, as the literature on reduction prints it:
    # (0.7947 s + 0.7947) / (s^2 + 1.6556 s + 0.7947) (from memory; by hand alpha1 = 24/50, alpha2 = 50/30.2)
    top, bottom = routh_approximation(*map(np.array, BENCHMARK))
    assert top == pytest.approx([0.7947, 0.7947], rel=0, abs=5e-5)
    assert bottom == pytest.approx([1, 1.6556, 0.7947], rel=0, abs=5e-5)
    assert bottom == pytest.approx([1, 50 / 30.2, 24 / 30.2], rel=1e-12)


@given(
    lags=st.lists(st.floats(0.1, 10), max_size=3),
    pairs=st.lists(st.tuples(st.floats(0.02, 0.95), st.floats(0.2, 5)), min_size=1, max_size=3),
    leads=st.lists(st.floats(-3, 3), max_size=2),
)
def test_stable_systems_give_stable_models_of_the_same_gain(
    lags: list[float], pairs: list[tuple[float, float]], leads: list[float]
) -> None:
    """What both methods are known for (the papers' titles): the reduced denominator has no pole on the right."""
    bottom, top = np.ones(1), np.array([2.0])
    for lag in lags:
        bottom = np.convolve(bottom, [lag, 1.0])
    for damping, wn in pairs:
        bottom = np.convolve(bottom, [wn**-2, 2 * damping / wn, 1.0])
    for lead in leads[: bottom.size - 2]:
        top = np.convolve(top, [lead, 1.0])
    system = RationalSystem(transfer_of(top.tolist(), bottom.tolist()))
    for method in (by_routh, by_routh_array):
        forms, reason = method(system)
        assert forms or reason == "a pivot of the Routh array of the numerator is 0"
        for form in forms:
            assert form.a1 > 0
            assert form.a2 > 0
            if method is by_routh:
                assert form.gain == pytest.approx(2, rel=1e-9)


@given(damping=st.floats(0.05, 5), wn=st.floats(0.01, 100), lead=st.floats(-3, 3))
def test_second_order_comes_back_as_itself(damping: float, wn: float, lead: float) -> None:
    system = RationalSystem(transfer_of([3 * lead / wn, 3.0], [wn**-2, 2 * damping / wn, 1.0], 0.4))
    for method in (by_routh, by_routh_array):
        form = method(system)[0][0]
        found = (form.gain, form.a1 * wn, form.a2 * wn**2, form.zero * wn)
        assert found == pytest.approx((3, 2 * damping, 1, lead), rel=1e-9, abs=1e-9)
