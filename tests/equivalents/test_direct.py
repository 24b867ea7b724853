"""The model of smallest step error finds a second order again, and is below all others."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import minimize

from loopfit.equivalents.choose import DIRECT, DIRECT_ZERO, equivalents_of
from loopfit.equivalents.course import course_of
from loopfit.equivalents.direct import by_step_error
from loopfit.equivalents.distance import errors_of
from loopfit.equivalents.form import Form
from loopfit.equivalents.system import RationalSystem
from loopfit.model.transfer import transfer_of


@settings(max_examples=25)
@given(
    damping=st.floats(0.1, 4),
    wn=st.sampled_from([1e-3, 1.0, 50.0]),
    dead_time=st.floats(0, 2),
    gain=st.sampled_from([-3.0, 1.0]),
)
def test_second_order_with_dead_time_comes_back_as_itself(
    damping: float, wn: float, dead_time: float, gain: float
) -> None:
    system = RationalSystem(transfer_of([gain], [wn**-2, 2 * damping / wn, 1.0], dead_time / wn))
    course = course_of(system, gain)
    form = by_step_error(system, course, [], zero=False)
    late = Form(gain=form.gain, a1=form.a1, a2=form.a2, dead_time=form.dead_time + dead_time / wn)
    assert errors_of(late, course)[1] < 1e-3
    assert form.a1 * wn == pytest.approx(2 * damping, rel=1e-3)
    assert form.dead_time * wn == pytest.approx(0, abs=1e-3 * (1 + damping))


HIGHER = [
    ([1.0], np.poly([-1.0] * 4).tolist()),
    ([-2.0, 1.0], np.poly([-1.0] * 3).tolist()),
    ([245.42], [1.0, 14.0, 64.542, 245.42]),
    ([1.0, 7.0, 24.0, 24.0], [1.0, 10.0, 35.0, 50.0, 24.0]),
    ([1.0], np.poly([-1.0, -0.5, -5.0, -3.0, -10.0]).tolist()),
]


@pytest.mark.parametrize(("numerator", "denominator"), HIGHER)
def test_no_method_of_the_same_gain_has_a_smaller_rms_error(numerator: list[float], denominator: list[float]) -> None:
    found = equivalents_of(RationalSystem(transfer_of(numerator, denominator)))
    final = found.response.final_value
    assert final is not None
    rms = {one.method: one.step_error_rms_percent for one in found.equivalents if one.exists}
    for one in found.equivalents:
        if one.step_error_rms_percent is not None and one.gain == pytest.approx(final.value, rel=1e-6):
            reference = rms[DIRECT] if one.zero_s is None else rms[DIRECT_ZERO]
            assert reference is not None
            # the search takes fewer samples than the judgement
            assert reference <= one.step_error_rms_percent * 1.005 + 1e-6, one.method


@pytest.mark.parametrize(("numerator", "denominator"), HIGHER)
def test_a_general_minimiser_finds_nothing_better(numerator: list[float], denominator: list[float]) -> None:
    """Nelder-Mead of scipy from the model found and from a plain start."""
    system = RationalSystem(transfer_of(numerator, denominator))
    assert system.static_gain is not None
    gain = system.static_gain
    course = course_of(system, gain)
    form = by_step_error(system, course, [], zero=False)
    here = errors_of(form, course)[1]

    def rms(at: np.ndarray) -> float:
        if at[0] < 0:
            return 1e3
        a1, shape = np.exp(at[1]), np.exp(at[2])
        return errors_of(Form(gain=gain, a1=float(a1), a2=float(shape * a1**2), dead_time=float(at[0])), course)[1]

    starts = [
        [form.dead_time, np.log(form.a1), np.log(form.a2 / form.a1**2)],
        [0.2 * form.a1, np.log(form.a1), np.log(0.3)],
    ]
    best = min(float(minimize(rms, start, method="Nelder-Mead", options={"maxiter": 300}).fun) for start in starts)
    assert here <= best * 1.005 + 1e-6


@pytest.mark.parametrize("zero", [False, True])
def test_the_model_does_not_ring_where_the_system_cannot(zero: bool) -> None:
    """A jump cannot be met: poles of 1 rad/s must not become a swing of many rad/s about it, between the samples."""
    system = RationalSystem(transfer_of([1.0, 3.0, 1.0], [1.0, 1.2, 1.0]))
    found = by_step_error(system, course_of(system, 1.0), [], zero=zero)
    frequency = found.a2**-0.5
    assert frequency < 2.0 or found.a1 / (2.0 * found.a2**0.5) >= 0.49
