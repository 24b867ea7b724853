"""The three forms are one controller: published examples, python-control, and every frequency."""

from __future__ import annotations

import math
import pickle

import control
import numpy as np
import pytest
from hypothesis import assume, example, given
from hypothesis import strategies as st

from loopfit.core.errors import UsageError
from loopfit.loop.forms import Terms, Times, ideal_of_terms, series_of_terms, terms_of_ideal, terms_of_series

SKOGESTAD = "Skogestad, Simple analytic rules..., J. Process Control 13, 2003"
PAIRS = [  # series gain, Ti, Td; ideal gain, Ti, Td; all without filter
    ((10.0, 8.0, 2.0), (12.5, 10.0, 1.6), f"{SKOGESTAD}, eq. 36, example E10 (from memory)"),
    ((1.0, 1.0, 1.0), (2.0, 2.0, 0.5), "identity at the boundary Ti = 4 Td"),
    ((0.3, 0.25, 0.25), (0.6, 0.5, 0.125), "Ziegler-Nichols ideal settings 0.6 Ku, Pu/2, Pu/8 (from memory)"),
    ((0.6, 0.5, 0.125), (0.75, 0.625, 0.1), "Smith & Corripio: quarter decay, series and ideal (from memory)"),
    ((0.0625, 8.0, 8.0), (0.125, 16.0, 4.0), f"{SKOGESTAD}, double integrating process (from memory)"),
    (
        (2.5, 10.0, 5.0),
        (3.75, 15.0, 10.0 / 3.0),
        "Seborg, Edgar, Mellichamp 2010, Example 12.1: zeros on the lags 10 and 5",
    ),
]
REFUSED = [
    ((1.0, 1.0, 0.5), "identity: Ti < 4 Td, complex zeros"),
    ((1.2, 3.6, 2.5), "Rivera, Morari, Skogestad 1986: IMC for damping 0.6 has Ti/Td = 1.44 (from memory)"),
    ((1.0, 4.0, 1.0 + 1e-9), "just beyond the boundary"),
]
# a value on the boundary carries the square root of the rounding: sqrt(64 eps) / 2
BOUNDARY = 6e-8


@pytest.mark.parametrize(("series", "ideal", "source"), PAIRS)
def test_published_pairs(series: tuple[float, float, float], ideal: tuple[float, float, float], source: str) -> None:
    terms = terms_of_series(Times(gain=series[0], integral_time_s=series[1], derivative_time_s=series[2]))
    found = ideal_of_terms(terms)
    assert (found.gain, found.integral_time_s, found.derivative_time_s) == pytest.approx(ideal, rel=1e-14), source
    wanted = terms_of_ideal(Times(gain=ideal[0], integral_time_s=ideal[1], derivative_time_s=ideal[2]))
    back = series_of_terms(wanted)
    assert (back.gain, back.integral_time_s, back.derivative_time_s) == pytest.approx(series, rel=BOUNDARY), source


@pytest.mark.parametrize(("ideal", "source"), REFUSED)
def test_complex_zeros_have_no_series_form(ideal: tuple[float, float, float], source: str) -> None:
    terms = terms_of_ideal(Times(gain=ideal[0], integral_time_s=ideal[1], derivative_time_s=ideal[2]))
    with pytest.raises(UsageError, match="its zeros would be complex") as caught:
        series_of_terms(terms)
    assert "\n" not in str(caught.value), source
    assert str(pickle.loads(pickle.dumps(caught.value))) == str(caught.value)


def test_a_filter_takes_the_boundary_away() -> None:
    # (kp - ki Tf)^2 < kp^2 = 4 ki kd: with any filter, Ti = 4 Td is beyond the boundary
    for tf in (1e-6, 0.0125):
        with pytest.raises(UsageError, match="with the filter of"):
            series_of_terms(Terms(kp=0.6, ki=1.2, kd=0.075, filter_s=tf))


def test_no_form_for_other_signs_or_without_gain() -> None:
    with pytest.raises(UsageError, match="without a proportional gain"):
        ideal_of_terms(Terms(kp=0.0, ki=1.0))
    with pytest.raises(UsageError, match="without a proportional gain"):
        series_of_terms(Terms(kp=0.0, ki=1.0))
    with pytest.raises(UsageError, match="the integral gain -1 has not the sign"):
        ideal_of_terms(Terms(kp=1.0, ki=-1.0))
    with pytest.raises(UsageError, match="the derivative gain 2 has not the sign"):
        ideal_of_terms(Terms(kp=-1.0, ki=-1.0, kd=2.0))
    with pytest.raises(UsageError, match="positive times"):
        series_of_terms(Terms(kp=1.0, ki=1.0, kd=0.01, filter_s=3.0))
    with pytest.raises(UsageError, match="positive times"):
        series_of_terms(Terms(kp=-1.0, ki=1.0, kd=0.01, filter_s=0.1))


def test_absent_terms_stay_absent() -> None:
    for ti, td in ((None, None), (5.0, None), (None, 2.0)):
        times = Times(gain=-3.0, integral_time_s=ti, derivative_time_s=td, filter_s=0.2)
        assert terms_of_series(times) == terms_of_ideal(times), "one factor less: the forms are the same"
        assert series_of_terms(terms_of_series(times)) == times


@st.composite
def series_settings(draw: st.DrawFn) -> Times:
    gain = draw(st.sampled_from([-1.0, 1.0])) * 10.0 ** draw(st.floats(-4, 4))
    ti = 10.0 ** draw(st.floats(-3, 4))
    td = ti * 10.0 ** draw(st.floats(-3, 1))
    return Times(gain=gain, integral_time_s=ti, derivative_time_s=td, filter_s=td * draw(st.floats(1e-3, 1.0)))


def frequencies(times: Times) -> np.ndarray[tuple[int], np.dtype[np.complex128]]:
    assert times.integral_time_s is not None
    return 1j * np.logspace(-5, 5, 201) / times.integral_time_s


def response(
    terms: Terms, s: np.ndarray[tuple[int], np.dtype[np.complex128]]
) -> np.ndarray[tuple[int], np.dtype[np.complex128]]:
    out: np.ndarray[tuple[int], np.dtype[np.complex128]] = (
        terms.kp + terms.ki / s + terms.kd * s / (terms.filter_s * s + 1.0)
    )
    return out


@given(times=series_settings())
@example(times=Times(gain=2.0, integral_time_s=4.4, derivative_time_s=4.0, filter_s=0.4))  # the two times are equal
def test_series_there_and_back_at_every_frequency(times: Times) -> None:
    ti, td, tf = times.integral_time_s, times.derivative_time_s, times.filter_s
    assert ti is not None
    assert td is not None
    assume(abs(ti - tf) > 1e-3 * ti)  # where the filter cancels the integral's zero nothing is left of the derivative
    s = frequencies(times)
    terms = terms_of_series(times)
    written = times.gain * (1.0 + 1.0 / (ti * s)) * (1.0 + td * s / (tf * s + 1.0))
    size = abs(terms.kp) + abs(terms.ki / s) + abs(terms.kd * s / (tf * s + 1.0))
    assert np.all(abs(response(terms, s) - written) <= 1e-12 * size), "the form as interface and textbooks write it"
    for integral_longer in (True, False):
        back = series_of_terms(terms, integral_longer=integral_longer)
        again = terms_of_series(back)
        assert np.all(abs(response(again, s) - written) <= 1e-12 * size)
        assert (again.kp, again.ki) == pytest.approx((terms.kp, terms.ki), rel=1e-12)
    if abs(ti - td - tf) > 1e-3 * ti:  # nearer than that the two times are told apart to fewer digits
        same = series_of_terms(terms, integral_longer=ti > td + tf)
        found = (same.gain, same.integral_time_s, same.derivative_time_s)
        assert found == pytest.approx((times.gain, ti, td), rel=1e-9)


@given(kp=st.floats(-3, 3), ki=st.floats(-3, 3), kd=st.floats(-3, 3), tf=st.floats(0, 2))
def test_series_exists_where_the_zeros_are_real(kp: float, ki: float, kd: float, tf: float) -> None:
    assume(min(abs(kp), abs(ki), abs(kd)) > 1e-3)
    # outside check: zeros of the controller by numpy's eigenvalues; K (Ti s + 1)((Td + Tf) s + 1) needs real negative
    # ones, one beyond the filter's pole
    zeros = np.roots([kp * tf + kd, kp + ki * tf, ki])
    assume(zeros.size == 2)
    assume(abs((kp - ki * tf) ** 2 - 4 * ki * kd) > 1e-6 * (kp**2 + abs(ki * kd)))
    real = bool(np.all(abs(zeros.imag) < 1e-9 * abs(zeros)))
    exists = False
    if real and np.all(zeros.real < 0):
        spread = -1.0 / zeros.real
        assume(np.all(abs(spread - tf) > 1e-6))
        exists = bool(np.any(spread > tf))
    terms = Terms(kp=kp, ki=ki, kd=kd, filter_s=tf)
    if not exists:
        with pytest.raises(UsageError):
            series_of_terms(terms)
        return
    found = series_of_terms(terms)
    assert found.integral_time_s is not None
    assert found.integral_time_s > 0
    assert found.derivative_time_s is not None
    assert found.derivative_time_s > 0
    again = terms_of_series(found)
    # each gain to rounding of the sums that it comes from
    assert again.kp == pytest.approx(kp, rel=1e-9)
    assert again.ki == pytest.approx(ki, rel=1e-9)
    assert again.kd == pytest.approx(kd, rel=1e-9, abs=1e-12 * abs(kp) * (tf + abs(kp / ki)))


@given(gain=st.floats(1e-3, 1e3), ti=st.floats(1e-3, 1e3), share=st.floats(0.0, 0.9))
def test_rounding_does_not_refuse_equal_times(gain: float, ti: float, share: float) -> None:
    # Ti = Td + Tf: the discriminant is 0, and what rounding leaves of it may be negative
    found = series_of_terms(
        terms_of_series(Times(gain=gain, integral_time_s=ti, derivative_time_s=ti * (1.0 - share), filter_s=ti * share))
    )
    assert found.integral_time_s == pytest.approx(ti, rel=BOUNDARY)


@given(times=series_settings())
def test_ideal_there_and_back(times: Times) -> None:
    again = ideal_of_terms(terms_of_ideal(times))
    assert again.gain == times.gain
    assert again.integral_time_s == pytest.approx(times.integral_time_s, rel=1e-15)
    assert again.derivative_time_s == pytest.approx(times.derivative_time_s, rel=1e-15)


def test_forms_against_python_control() -> None:
    s, omega = control.tf("s"), np.logspace(-3, 3, 200)
    k, ti, td, tf = 2.0, 10.0, 1.6, 0.3
    times = Times(gain=k, integral_time_s=ti, derivative_time_s=td, filter_s=tf)
    ideal = k * (1 + 1 / (ti * s) + td * s / (tf * s + 1))
    series = k * (1 + 1 / (ti * s)) * (1 + td * s / (tf * s + 1))
    for system, terms in ((ideal, terms_of_ideal(times)), (series, terms_of_series(times))):
        outside = system(1j * omega)
        assert np.allclose(response(terms, 1j * omega), outside, rtol=1e-12, atol=0.0)
    assert not math.isclose(abs(ideal(0.5j)), abs(series(0.5j)), rel_tol=0.01), "the two forms are not one"
