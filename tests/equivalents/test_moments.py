"""Time moments against the response's own integrals and values computed elsewhere."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from loopfit.equivalents.moments import by_moments, dead_time_match, series_of, zero_match
from loopfit.equivalents.system import RationalSystem
from loopfit.model.transfer import transfer_of

BENCHMARK = ([1.0, 7.0, 24.0, 24.0], [1.0, 10.0, 35.0, 50.0, 24.0])
# no printed source: computed to full precision apart from this code; g of 1/(s+1)^n is (-1)^k binomial(n+k-1, k)
EXACT = [
    (
        *BENCHMARK,
        (1, -1.0833333333333333, 1.0902777777777777, -1.0665509259259258),
        (0.39930555555555, 1.375, 0.29166666666667, 1),
    ),
    ([1.0], [1.0, 4.0, 6.0, 4.0, 1.0], (1, -4, 10, -20), (10 / 3, 10 / 3, -2 / 3, 1)),
    ([1.0], np.poly([-1.0] * 8).tolist(), (1, -8, 36, -120), (12, 6, -2, 1)),
]


@pytest.mark.parametrize(("numerator", "denominator", "series", "model"), EXACT)
def test_four_moments_with_a_zero(
    numerator: list[float], denominator: list[float], series: tuple[float, ...], model: tuple[float, ...]
) -> None:
    found = series_of(np.array(numerator), np.array(denominator), 4)
    assert found == pytest.approx(series, rel=1e-12)
    assert zero_match(found) == pytest.approx(model, rel=1e-10)


@given(damping=st.floats(0.2, 5), wn=st.floats(0.01, 100), share=st.floats(0, 3))
def test_dead_time_match_finds_a_second_order_with_dead_time_again(damping: float, wn: float, share: float) -> None:
    """exp(-th s) / (a2 s^2 + a1 s + 1), its series by multiplication with that of exp."""
    a1, a2 = 2 * damping / wn, 1 / wn**2
    dead_time = share * a1
    plain = series_of(np.ones(1), np.array([a2, a1, 1.0]), 4)
    late = [(-dead_time) ** k / math.factorial(k) for k in range(4)]
    series = np.convolve(plain, late)[:4]
    found = dead_time_match(series)
    assert found is not None
    # the third cumulant is a difference of terms (1 + share)^3 larger, and a2 half of a difference: some 1e-16 of those
    assert found == pytest.approx((a2, a1, dead_time), rel=1e-6, abs=1e-6 * a1)


@given(damping=st.floats(0.2, 5), wn=st.floats(0.01, 100), zero=st.floats(-3, 3), gain=st.sampled_from([-2.0, 1.0]))
def test_a_second_order_with_a_zero_comes_back_as_itself(damping: float, wn: float, zero: float, gain: float) -> None:
    lag = 2 * damping / wn
    b1 = zero * lag
    series = series_of(np.array([gain * b1, gain]), np.array([wn**-2, lag, 1.0]), 4)
    # pole and zero apart: where they cancel, the moments fit many models
    apart = abs(b1**2 - lag * b1 + wn**-2) / (b1**2 + wn**-2)
    if apart > 1e-3:
        found = zero_match(series)
        assert found is not None
        assert found == pytest.approx((wn**-2, lag, gain * b1, gain), rel=1e-7, abs=1e-7 * lag)


def test_moments_are_integrals_of_the_step_response() -> None:
    """-g1/g0 is the area above the response, and g2 - g1^2 ... follow: checked on the area and the first moment of it."""
    system = RationalSystem(transfer_of(*BENCHMARK))
    time = np.linspace(0, 40, 200001)
    left = 1 - system.step(time)
    series = series_of(np.array(BENCHMARK[0]), np.array(BENCHMARK[1]), 3)
    assert np.trapezoid(left, time) == pytest.approx(-series[1], rel=1e-7)
    assert np.trapezoid(left * time, time) == pytest.approx(series[2], rel=1e-7)


def test_an_inverse_response_that_the_moments_find_may_become_dead_time() -> None:
    forms, _ = by_moments(RationalSystem(transfer_of(*EXACT[2][:2])))
    assert any(form.dead_time == pytest.approx(2, rel=1e-9) and form.zero == 0 for form in forms)
    assert all(form.gain == pytest.approx(1, rel=1e-12) for form in forms)
