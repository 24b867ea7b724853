"""Coordinates of the family: they lead back to the model they came from, and agree with each other."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from loopfit.model.chart import LAGS, R_SHIFT, SMALLEST_R, SWING, Chart

EPS = float(np.finfo(float).eps)
CHARTS = pytest.mark.parametrize("chart", [LAGS, SWING], ids=lambda chart: chart.name)
MODELS = {
    "zeta": st.floats(0.02, 50.0),
    "omega": st.floats(1e-6, 1e6),
    "dead": st.floats(0.0, 1e3),
}


@CHARTS
@given(**MODELS)
@settings(max_examples=60, deadline=None)
def test_located_model_is_the_model(chart: Chart, zeta: float, omega: float, dead: float) -> None:
    theta = chart.locate(*(np.array([value]) for value in (zeta, omega, dead)))
    # r = exp(u) - 0.03: the subtraction magnifies rounding by up to 0.03 / r, r = 1 / 4 zeta^2
    rel = 40 * EPS * (1.0 + 4.0 * R_SHIFT * zeta**2)
    assert chart.damping(theta)[0] == pytest.approx(zeta, rel=rel)
    assert chart.frequency(theta)[0] == pytest.approx(omega, rel=rel)
    assert theta[0, 2] == dead
    T, r = chart.lags(theta)
    # sum of the time constants of s^2 + 2 zeta omega s + omega^2, and their product over its square
    assert T[0] == pytest.approx(2.0 * zeta / omega, rel=rel)
    assert r[0] == pytest.approx(0.25 / zeta**2, rel=2 * rel)


@given(zeta=st.floats(0.03, 0.99), omega=st.floats(1e-3, 1e3))
@settings(max_examples=40, deadline=None)
def test_both_charts_give_one_response(zeta: float, omega: float) -> None:
    t = np.linspace(0.0, 15.0 / omega, 50)[None]
    found = []
    for chart in (LAGS, SWING):
        theta = chart.locate(np.array([zeta]), np.array([omega]), np.array([0.0]))
        found.append(chart.respond(t / chart.scale(theta)[:, None], chart.shape(theta)).step)
    assert found[0] == pytest.approx(found[1], rel=0, abs=1e3 * EPS / (1.0 - zeta**2))


@CHARTS
def test_slopes_of_the_coordinates(chart: Chart) -> None:
    """Derivatives of scale and shape in the coordinates, against central differences (error h^2 / 6)."""
    theta = np.array([[0.7, -0.4, 0.1]])
    h = 1e-5
    for column, of, wanted in (
        (0, lambda at: np.log(chart.scale(at)), chart.scale_sign),
        (1, chart.shape, chart.shape_slope(chart.shape(theta))[0]),
    ):
        step = h * np.eye(3)[column]
        assert (of(theta + step) - of(theta - step))[0] / (2 * h) == pytest.approx(wanted, rel=1e-9)


@CHARTS
def test_coefficients_are_of_the_response(chart: Chart) -> None:
    """a F0' + b F0 + F1 = 1 with the chart's a and b, the slope's derivative by differences."""
    shape = np.array([0.4])
    x, h = np.linspace(0.5, 8.0, 20)[None], 1e-4
    a, b, _, _ = chart.coefficients(shape)
    here = chart.respond(x, shape)
    bend = (chart.respond(x + h, shape).slope - chart.respond(x - h, shape).slope) / (2 * h)
    # h^2 / 6 times a third derivative of about 1 / a^2
    assert a * bend + b * here.slope + here.step == pytest.approx(np.ones_like(x), rel=0, abs=1e-7)


def test_bounds() -> None:
    assert LAGS.shape(LAGS.lowest[None])[0] == pytest.approx(SMALLEST_R, rel=1e-9)
    assert SWING.lowest[1] == -np.inf
    assert LAGS.lowest[2] == SWING.lowest[2] == 0.0


@CHARTS
@pytest.mark.parametrize("far", [-1e3, 1e3])
def test_far_coordinates_stay_finite(chart: Chart, far: float) -> None:
    theta = np.array([[far, far, 0.0]])
    T, r = chart.lags(theta)
    assert np.all(np.isfinite([*T, *r, *chart.scale(theta), *chart.frequency(theta)]))
