"""Exact figures of the step response against other programs and laws."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.linalg import expm
from scipy.optimize import brentq

from loopfit.figures import unit_step as figures

dampings = st.floats(0.02, 8)
zeros = st.one_of(st.just(0.0), st.floats(-3, 3))


def reference(x: float, shape: float, kappa: float) -> float:
    """Return the response by the matrix exponential (scipy): r y'' + y' + y = u + kappa u'."""
    state = np.array([[0, 1], [-1 / shape, -1 / shape]])
    free = expm(state * x) @ np.array([-1.0, kappa / shape])  # y - 1 and y' just after the step
    return float(1 + free[0])


def shape_of(damping: float) -> float:
    return 1 / (4 * damping**2)


@pytest.mark.parametrize("kappa", [0.0, 0.4, 2.0, -0.7])
@pytest.mark.parametrize("shape", [1e-3, 0.1, 0.25 - 1e-9, 0.25, 0.25 + 1e-9, 0.3, 5.0, 300.0])
def test_value_agrees_with_the_matrix_exponential(shape: float, kappa: float) -> None:
    times = np.array([0.01, 0.3, 1.0, 4.0, 20.0])
    expected = [reference(x, shape, kappa) for x in times]
    # rounding in expm grows with the norm of the matrix times x
    assert figures.step_value(times, shape, kappa) == pytest.approx(expected, rel=1e-9, abs=1e-11)
    assert figures.step_value([-1.0, 0.0], shape, kappa) == pytest.approx([0, 0], abs=0)


@pytest.mark.parametrize("kappa", [0.0, 0.3, 0.8, 2.5, -0.6])
@pytest.mark.parametrize("damping", [0.1, 0.35, 0.6, 0.95, 1.0, 1.05, 2.0, 6.0])
def test_figures_agree_with_a_reading_of_a_fine_grid(damping: float, kappa: float) -> None:
    control = pytest.importorskip("control")
    shape = shape_of(damping)
    end = 1.5 * float(figures.settling_time(shape, 0.002, kappa))
    grid = np.linspace(0, end, 40001)
    step = grid[1]
    _, y = control.step_response(control.tf([kappa, 1], [shape, 1, 1]), grid)

    def exact(level: float, index: int) -> float:  # between two points of the grid, by scipy
        return float(brentq(lambda x: reference(x, shape, kappa) - level, grid[index - 1], grid[index], xtol=1e-13))

    for level in (0.1, 0.5, 0.9):
        reached = int(np.argmax(y >= level))
        assert figures.crossing_time(shape, level, kappa) == pytest.approx(exact(level, reached), rel=1e-9), level
    for band in (0.02, 0.05):
        last = int(np.flatnonzero(np.abs(y - 1) > band)[-1])
        edge = 1 + band * np.sign(y[last] - 1)
        expected = exact(edge, last + 1)
        assert figures.settling_time(shape, band, kappa) == pytest.approx(expected, rel=1e-9), band
    # heights on a grid are off by at most curvature step^2 / 8
    curvature = float(np.max(np.abs(np.diff(y, 2)))) / 8
    assert figures.overshoot(shape, kappa) == pytest.approx(max(np.max(y) - 1, 0), abs=curvature + 1e-9)
    if np.max(y) > 1 + 1e-6:
        assert figures.peak_time(shape, kappa) == pytest.approx(grid[np.argmax(y)], abs=step)
    first_rise = int(np.argmax(y > 0.5))
    assert figures.undershoot(shape, kappa) == pytest.approx(max(-np.min(y[:first_rise]), 0), abs=curvature + 1e-9)


@given(damping=dampings, kappa=zeros, band=st.floats(0.001, 0.3))
def test_settling_is_on_the_edge_of_the_band_and_the_response_stays_inside(
    damping: float, kappa: float, band: float
) -> None:
    shape = shape_of(damping)
    settled = float(figures.settling_time(shape, band, kappa))
    assert abs(reference(settled, shape, kappa) - 1) == pytest.approx(band, rel=1e-6)
    later = settled * np.linspace(1, 3, 400)[1:] + 1e-6
    assert np.all(np.abs(figures.step_value(later, shape, kappa) - 1) <= band * (1 + 1e-9))


@given(damping=dampings, kappa=zeros, level=st.floats(0.01, 0.99))
def test_crossing_is_the_first(damping: float, kappa: float, level: float) -> None:
    shape = shape_of(damping)
    first = float(figures.crossing_time(shape, level, kappa))
    assert reference(first, shape, kappa) == pytest.approx(level, abs=1e-9)
    earlier = first * np.linspace(0, 1, 400)[:-1]
    assert np.all(figures.step_value(earlier, shape, kappa) < level)


NEAR_CRITICAL: list[Callable[[np.ndarray], np.ndarray]] = [
    figures.rise_time,
    figures.delay_time,
    figures.settling_time,
    lambda r: figures.settling_time(r, 0.05, 0.3),
    lambda r: figures.settling_time(r, 0.02, 1.2),
    lambda r: figures.settling_time(r, 0.02, -0.5),
    lambda r: figures.crossing_time(r, 0.5, 0.45),
    lambda r: figures.rise_time(r, -0.4),
    lambda r: figures.crossing_time(r, 1.1, 2.0),
    lambda r: figures.overshoot(r, 1.0),
    lambda r: figures.peak_time(r, 1.0),
    lambda r: figures.undershoot(r, -1.0),
    lambda r: figures.step_value(1.3, r, 0.7),
]


@pytest.mark.parametrize("figure", NEAR_CRITICAL)
def test_value_and_slope_are_continuous_through_critical_damping(figure: Callable[[np.ndarray], np.ndarray]) -> None:
    value = float(figure(np.array([0.25]))[0])
    beside = figure(0.25 * (1 + np.array([-1e-13, -1e-11, 1e-11, 1e-13])))
    assert beside == pytest.approx(value, rel=1e-9)
    # one-sided slopes by five points: truncation about step^4, rounding 1e-16/step, times coefficients up to 50
    step = 4e-4
    weights = np.array([-25, 48, -36, 16, -3]) / (12 * step)
    above = weights @ figure(0.25 + step * np.arange(5.0))
    below = -(weights @ figure(0.25 - step * np.arange(5.0)))
    assert above == pytest.approx(below, rel=1e-9)


@given(damping=st.floats(0.02, 0.97), more=st.floats(1e-3, 2e-2))
def test_more_damping_less_overshoot(damping: float, more: float) -> None:
    assert figures.overshoot(shape_of(damping + more)) < figures.overshoot(shape_of(damping))
    assert figures.decay_ratio(shape_of(damping + more)) < figures.decay_ratio(shape_of(damping))


@given(damping=st.floats(0.05, 0.95))
def test_decay_ratio_is_the_square_of_the_overshoot(damping: float) -> None:
    # one full period apart against half a period (common practice)
    assert figures.decay_ratio(shape_of(damping)) == pytest.approx(float(figures.overshoot(shape_of(damping))) ** 2)


@given(damping=st.floats(1.0, 20), band=st.floats(0.001, 0.2))
def test_critical_is_the_fastest_without_overshoot(damping: float, band: float) -> None:
    # for one natural frequency: time in units of 1/omega_n is tau sqrt(1/r) (common practice)
    def settling(z: float) -> float:
        return float(figures.settling_time(shape_of(z), band)) * 2 * z

    assert figures.overshoot(shape_of(damping)) == 0
    assert settling(damping) >= settling(1.0) * (1 - 1e-12)


def test_first_order_is_the_limit() -> None:
    # 1 - exp(-x): rise ln 9, delay ln 2, settling ln 50 (identities); the correction is of order r
    tiny = np.array([0.0, 1e-9])
    assert figures.rise_time(tiny) == pytest.approx(np.log(9), rel=1e-8)
    assert figures.delay_time(tiny) == pytest.approx(np.log(2), rel=1e-8)
    assert figures.settling_time(tiny) == pytest.approx(np.log(50), rel=1e-8)
    # a zero faster than the lag starts the response at kappa: 1 - (1 - kappa) exp(-x)
    assert figures.settling_time(tiny, 0.02, 0.5) == pytest.approx(np.log(25), rel=1e-7)
    assert figures.overshoot(tiny, 1.5) == pytest.approx(0.5, rel=1e-6)


def test_figures_that_do_not_exist_are_nan() -> None:
    shapes = np.array([0.0, 0.1, 0.25])
    assert np.isnan(figures.peak_time(shapes)).all()
    assert np.isnan(figures.decay_ratio(shapes)).all()
    assert np.isnan(figures.crossing_time(shapes, 1.0)).all()
    assert np.isnan(figures.crossing_time(0.3, 1.2))
    assert np.all(figures.overshoot(shapes) == 0)
    assert np.all(figures.undershoot([0.1, 0.3], [0.0, 2.0]) == 0)


@pytest.mark.parametrize("kappa", [0.0, 0.3, -0.3, 4.0])
def test_nothing_overflows_and_thousands_of_swings_are_no_trouble(kappa: float) -> None:
    shapes = np.concatenate(([0.0], np.geomspace(1e-9, 1e8, 2001)))
    with np.errstate(all="raise", under="ignore"):
        for figure in (figures.overshoot, figures.rise_time, figures.delay_time, figures.undershoot):
            assert np.isfinite(figure(shapes, kappa)).all()
        settled = figures.settling_time(shapes, 0.02, kappa)
    edge = np.abs(figures.step_value(settled, shapes, kappa) - 1)
    # a phase of 1e5 radians is known to 1e-11
    assert edge == pytest.approx(0.02, rel=1e-9)
    # the envelope bounds the settling of a slow decay: half a swing before its time (Ogata 5th ed., section 5-3)
    envelope = -2 * shapes[-1] * np.log(0.02)
    if kappa == 0:
        assert envelope - 2 * np.pi * np.sqrt(shapes[-1]) < settled[-1] <= envelope


def test_arguments_broadcast() -> None:
    shapes, kappas = np.array([[0.1], [0.25], [2.0]]), np.array([0.0, 1.5])
    for figure in (figures.rise_time, figures.overshoot, figures.peak_time, figures.undershoot):
        together = figure(shapes, kappas)
        assert together.shape == (3, 2)
        for row, shape in enumerate(shapes[:, 0]):
            for column, kappa in enumerate(kappas):
                assert together[row, column] == pytest.approx(float(figure(shape, kappa)), rel=1e-12, nan_ok=True)
