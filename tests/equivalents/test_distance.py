"""The step error of a model against python-control's responses."""

from __future__ import annotations

import numpy as np
import pytest

from loopfit.equivalents.course import course_of
from loopfit.equivalents.direct import by_step_error
from loopfit.equivalents.distance import errors_of
from loopfit.equivalents.form import Form, forms_of
from loopfit.equivalents.system import RationalSystem
from loopfit.model.transfer import transfer_of


@pytest.mark.parametrize(
    "form",
    [
        Form(gain=2.0, a1=0.8, a2=1.0, dead_time=0.0),
        Form(gain=2.0, a1=2.0, a2=1.0, dead_time=0.0, zero=0.4),
        Form(gain=-1.0, a1=5.0, a2=1.0, dead_time=0.0, zero=-1.0),
        Form(gain=1.0, a1=3.0, a2=0.0, dead_time=0.0),
        Form(gain=1.0, a1=3.0, a2=0.0, dead_time=0.0, zero=1.0),
    ],
)
def test_response_of_a_model_agrees_with_python_control(form: Form) -> None:
    control = pytest.importorskip("control")
    time = np.linspace(0, 30, 601)
    plant = control.tf([form.gain * form.zero, form.gain], [form.a2, form.a1, 1.0])
    _, expected = control.step_response(plant, time)
    assert form.step(time) == pytest.approx(expected, rel=0, abs=1e-9)
    late = Form(gain=form.gain, a1=form.a1, a2=form.a2, dead_time=2.0, zero=form.zero)
    assert late.step(time + 2.0) == pytest.approx(form.step(time), rel=0, abs=1e-12)
    assert late.step(np.array([0.0, 1.999])) == pytest.approx([0, 0], abs=0)


# Dorf & Bishop, Modern Control Systems, 12th ed. 2011, Example 5.9: 6/(s^3+6s^2+11s+6) to 1.60/(s^2+2.590s+1.60) (from memory)
DORF = ([6.0], [1.0, 6.0, 11.0, 6.0], Form(gain=1.0, a1=2.590 / 1.60, a2=1 / 1.60, dead_time=0.0))
# Seborg, Edgar, Mellichamp, Process Dynamics and Control, 3rd ed. 2010, Example 6.4, by Taylor series: lag 5, dead time 3.6
# for (-0.1 s + 1)/((5 s + 1)(3 s + 1)(0.5 s + 1)) (from memory)
SEBORG = ([-0.1, 1.0], np.polymul([15.0, 8.0, 1.0], [0.5, 1.0]).tolist(), Form(gain=1.0, a1=5.0, a2=0.0, dead_time=3.6))


@pytest.mark.parametrize(("numerator", "denominator", "published"), [DORF, SEBORG], ids=["Dorf 5.9", "Seborg 6.4"])
def test_errors_of_published_models_and_the_reference_below_them(
    numerator: list[float], denominator: list[float], published: Form
) -> None:
    """Largest and rms error on a fine grid of python-control; no model of the same form and gain has a smaller rms than the reference."""
    control = pytest.importorskip("control")
    system = RationalSystem(transfer_of(numerator, denominator))
    course = course_of(system, 1.0)
    largest, rms = errors_of(published, course)
    fine = np.linspace(0, float(course.time[-1]), 40001)
    _, exact = control.step_response(control.tf(numerator, denominator), fine)
    _, model = control.step_response(control.tf([1.0], [published.a2, published.a1, 1.0]), fine)
    error = np.interp(fine - published.dead_time, fine, model, left=0.0) - exact
    # six samples a radian of each mode: the extreme of a smooth error is met within 1/144 of it (cosine of 1/12)
    assert largest == pytest.approx(100 * np.abs(error).max(), rel=0.01)
    inside = fine <= course.window_s
    # the trapezium on uneven samples; a kink at the end of the dead time costs most
    assert rms == pytest.approx(100 * np.sqrt(np.mean(error[inside] ** 2)), rel=0.03)
    assert np.abs(exact[fine > course.window_s] - 1).max() <= 1e-3 * 1.0001
    assert errors_of(by_step_error(system, course, [], zero=False), course)[1] < rms


def test_error_at_rest_counts() -> None:
    course = course_of(RationalSystem(transfer_of([1.0], [1.0, 1.0])), 1.0)
    assert errors_of(Form(gain=0.9, a1=1.0, a2=0.0, dead_time=0.0), course)[0] == pytest.approx(10, rel=1e-9)


def test_numerators_of_second_order_agree_to_the_second_power() -> None:
    """exp(-T s)(z s + 1) against 1 + b1 s + b2 s^2: series by hand, z - T = b1 and T^2 / 2 - z T = b2."""
    forms = forms_of((0.5, -2.0, 1.0), (1.0, 2.0, 1.0))
    late = [form for form in forms if form.dead_time > 0 and form.zero != 0]
    assert len(late) == 2
    for form in late:
        assert form.zero - form.dead_time == pytest.approx(-2, rel=1e-12)
        assert form.dead_time**2 / 2 - form.zero * form.dead_time == pytest.approx(0.5, rel=1e-12)


@pytest.mark.parametrize("bottom", [(1.0, -0.1, 1.0), (-1.0, 1.0, 1.0), (1.0, 1.0, 0.0)])
def test_unstable_reduced_models_are_none(bottom: tuple[float, float, float]) -> None:
    assert forms_of((0.0, 0.0, 1.0), bottom) == []
