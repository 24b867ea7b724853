"""The unit step response: against 80-digit arithmetic, matrix exponentials, scipy.signal and python-control."""

from __future__ import annotations

import math

import control
import numpy as np
import pytest
from exact_response import response
from scipy.integrate import quad
from scipy.linalg import expm
from scipy.signal import lti, step

from loopfit.core.arrays import Array
from loopfit.model.chart import LAGS, SWING, Chart
from loopfit.model.shape import Shape, ladder, ladder_by_shape, lag_shape, swing_shape

EPS = float(np.finfo(float).eps)

# from nearly first order through critical (with both ends of the series used near it) to hardly damped
RATIOS = [
    *(1e-8, 1e-6, 1e-4, 0.01, 0.1, 0.2, 0.249, 0.2499),
    *(0.25 * (1.0 + d) for d in (-1.01e-4, -0.99e-4, -1e-9, 0.0, 1e-9, 0.99e-4, 1.01e-4)),
    *(0.2501, 0.251, 0.3, 1.0, 10.0, 1e2, 1e4, 1e6),
]
DAMPINGS = [-0.3, -1e-3, 0.0, 1e-4, 0.05, 0.3, 0.9, 0.99, 0.9989]


def times(r: float) -> Array:
    """Times from a tiny part of 1 / omega_n to many time constants."""
    unit = math.sqrt(r) if r > 0.05 else 1.0
    return unit * np.array([0.0, 1e-9, 1e-6, 1e-3, 0.01, 0.1, 0.3, 1.0, 3.0, 10.0, 30.0, 100.0, 600.0, 5000.0])


@pytest.mark.parametrize("r", RATIOS)
def test_lags_against_80_digits(r: float) -> None:
    """Bounds on absolute errors: eps for values, with d = 1 - 4r dividing 1 to 3 times near critical.

    The closed forms divide by sqrt(d) once for the values, by d more for derivatives, and the series takes over at
    |d| = 1e-4: at worst eps / d^(3/2) = 2e-10 there. The slope by r is as large as 1 / r.
    """
    x = times(r)
    exact = np.array([response(float(t), r, 1.0, "a") for t in x]).T
    found = lag_shape(x[None], np.array([r]))
    d = max(abs(1.0 - 4.0 * r), 1e-4)
    # the phase of an undamped swing is w x: its rounding is eps w x, but E decays with x / 2r
    swing = math.sqrt(max(4.0 * r - 1.0, 0.0))
    value = 4.0 * EPS * (1.0 / math.sqrt(d) + swing)
    assert np.max(np.abs(found.step[0] - exact[0])) <= value
    assert np.max(np.abs(found.slope[0] - exact[1])) <= value
    assert np.max(np.abs(found.step_by_shape[0] - exact[2])) <= 2.0 * EPS * (1.0 + d**-1.5 + swing)
    largest = max(float(np.max(np.abs(exact[3]))), 1.0 / r)  # of the terms that cancel in it
    assert np.max(np.abs(found.slope_by_shape[0] - exact[3])) <= 8.0 * EPS * largest * (1.0 + d**-1.5 + swing)


@pytest.mark.parametrize("zeta", DAMPINGS)
def test_swings_against_80_digits(zeta: float) -> None:
    """Errors relative to the values (which grow without damping): eps times the phase, 300, and 1 / (1 - zeta^2)."""
    x = np.array([0.0, 1e-6, 1e-3, 0.1, 1.0, 3.0, 10.0, 30.0, 100.0, 300.0])
    exact = np.array([response(float(t), 1.0, 2.0 * zeta, "b") for t in x]).T
    found = swing_shape(x[None], np.array([zeta]))
    for values, wanted in zip(found, exact, strict=True):
        size = np.maximum(1.0, np.exp(-zeta * x)) * np.maximum(1.0, x)  # derivatives grow with x besides
        assert np.max(np.abs(values[0] - wanted) / size) <= 300.0 * EPS * (10.0 + 1.0 / (1.0 - zeta**2))


@pytest.mark.parametrize("r", [1e-4, 0.02, 0.2, 0.25, 0.26, 1.0, 30.0, 1e4])
def test_against_matrix_exponential(r: float) -> None:
    """The state at x is exp(A x) times the state at 0: a law of the differential equation, with no closed form."""
    A = np.array([[0.0, 1.0], [-1.0 / r, -1.0 / r]])
    x = np.linspace(0.05, 12.0, 25) * max(1.0, math.sqrt(r))
    found = lag_shape(x[None], np.array([r]))
    state = np.array([expm(A * t) @ [-1.0, 0.0] for t in x])
    # rounding of the exponential: eps times the norm that is squared away
    bound = 50.0 * EPS * float(np.max(np.abs(A))) * x[-1]
    assert found.step[0] == pytest.approx(1.0 + state[:, 0], rel=0, abs=bound)
    assert found.slope[0] == pytest.approx(state[:, 1], rel=0, abs=bound)


@pytest.mark.parametrize("zeta", [0.02, 0.3, 0.7, 0.95, 1.05, 1.6, 4.0, 30.0])
def test_against_scipy_signal_and_python_control(zeta: float) -> None:
    omega = 1.7
    t = np.linspace(0.0, 20.0 / omega * max(1.0, zeta), 400)
    theta = LAGS.locate(np.array([zeta]), np.array([omega]), np.array([0.0]))
    found = LAGS.respond(t[None] / LAGS.scale(theta)[:, None], LAGS.shape(theta)).step[0]
    _, by_poles = step(lti([omega**2], [1.0, 2.0 * zeta * omega, omega**2]), T=t)
    system = control.TransferFunction([omega**2], [1.0, 2.0 * zeta * omega, omega**2])
    by_control = control.step_response(system, t).outputs
    # both march over 400 intervals with a matrix exponential: some eps each, and the stiff one loses 2 zeta^2 more
    bound = 400 * EPS * max(10.0, 4.0 * zeta**2)
    assert found == pytest.approx(np.asarray(by_poles), rel=0, abs=bound)
    assert found == pytest.approx(by_control, rel=0, abs=bound)
    if zeta < 0.999:
        swing = swing_shape(omega * t[None], np.array([zeta])).step[0]
        assert swing == pytest.approx(by_control, rel=0, abs=bound)


@pytest.mark.parametrize("centre", [0.25, 0.25 * (1.0 - 1e-4), 0.25 * (1.0 + 1e-4)])
@pytest.mark.parametrize("gap", [1e-12, 1e-9])
def test_no_seam_at_critical_damping(centre: float, gap: float) -> None:
    """Values, slopes and parameter derivatives meet to 1e-9 across critical damping and the series' ends."""
    x = np.linspace(0.0, 12.0, 241)[None]
    below, above = (lag_shape(x, np.array([centre * (1.0 + side)])) for side in (-gap, gap))
    for name in Shape._fields:
        low, high = getattr(below, name), getattr(above, name)
        # the functions themselves change by 2 gap r times their slope in r, at most 20 here
        assert np.max(np.abs(high - low)) <= 1e-9 + 2.0 * gap * 0.25 * 20.0, name


@pytest.mark.parametrize("r", [0.0, 1e-300, 1e-12, 1e-8, 1e-3, 0.25, 1.0, 1e6, 1e12])
def test_nothing_overflows(r: float) -> None:
    x = np.array([[-1e6, 0.0, 1e-300, 1e-12, 1e-3, 1.0, 50.0, 1e4, 1e8, 1e12]])
    with np.errstate(over="raise", invalid="raise", divide="raise"):
        found = lag_shape(x, np.array([r]))
    assert all(np.all(np.isfinite(part)) for part in found)
    assert np.all((found.step >= -1e-15) & (found.step <= 2.0 + 1e-15))  # an undamped step swings to twice its end
    assert np.all(found.step[0, :2] == 0.0)
    assert np.all(found.slope[0, :2] == 0.0)


@pytest.mark.parametrize("zeta", [-5.0, -0.5, 0.0, 0.5, 0.999, 3.0])
def test_swings_do_not_overflow(zeta: float) -> None:
    with np.errstate(over="raise", invalid="raise", divide="raise"):
        found = swing_shape(np.array([[-1.0, 0.0, 1.0, 1e3, 1e6]]), np.array([zeta]))
    assert all(np.all(np.isfinite(part)) for part in found)


def test_first_order_limit() -> None:
    """At r = 0 the response is that of one lag, 1 - exp(-x)."""
    x = np.linspace(0.01, 20.0, 100)[None]
    found = lag_shape(x, np.array([0.0]))
    # the smallest r used is 1e-9: the value changes by that times its slope in r, at most 1
    assert found.step == pytest.approx(-np.expm1(-x), rel=0, abs=2e-9)
    assert found.slope == pytest.approx(np.exp(-x), rel=0, abs=2e-9)


def test_members_of_all_regimes_at_once_are_those_alone() -> None:
    r = np.array([0.01, 0.25, 0.2500001, 3.0, 1e-6, 80.0])
    x = np.linspace(0.0, 20.0, 50) * np.ones((r.size, 1))
    together = lag_shape(x, r)
    for i in range(r.size):
        alone = lag_shape(x[i : i + 1], r[i : i + 1])
        for whole, part in zip(together, alone, strict=True):
            assert np.array_equal(whole[i], part[0])


@pytest.mark.parametrize("r", [0.02, 0.25, 4.0])
def test_rungs_are_integrals_and_derivatives(r: float) -> None:
    """F2 and F3 against numerical quadrature of the response, F_-1 against the slope's differences."""
    x = np.array([[0.0, 0.4, 2.0, 7.0]])
    at = np.array([r])

    def rung(k: int, t: float) -> float:
        point = np.array([[t]])
        found = ladder(point, lag_shape(point, at), at[:, None], np.ones((1, 1)), -1, 3)
        return float(found[k][0, 0])

    for t in x[0]:
        for k in (1, 2):
            area, error = quad(lambda s, k=k: rung(k, s), 0.0, float(t), epsabs=1e-13, epsrel=1e-13)
            assert rung(k + 1, float(t)) == pytest.approx(area, rel=0, abs=1e-12 + 10 * error)
    for t in x[0, 1:]:
        h = 1e-3
        five = (rung(0, t - 2 * h) - 8 * rung(0, t - h) + 8 * rung(0, t + h) - rung(0, t + 2 * h)) / (12 * h)
        # five-point rule: h^4 / 30 times the fifth derivative, at most r^-3 here
        assert rung(-1, t) == pytest.approx(five, rel=0, abs=1e-12 * (1.0 + r**-3) + 1e-11)


@pytest.mark.parametrize("chart", [LAGS, SWING], ids=lambda chart: chart.name)
def test_rungs_by_shape(chart: Chart) -> None:
    """Derivatives of all rungs in the shape against eighth-order differences of the rungs themselves."""
    x = np.linspace(0.0, 9.0, 40)[None]
    shape = np.array([0.4])

    def rungs(at: Array) -> dict[int, Array]:
        a, b, _, _ = chart.coefficients(at)
        return ladder(x, chart.respond(x, at), a, b, 0, 3)

    a, b, a_by, b_by = chart.coefficients(shape)
    found = ladder_by_shape(chart.respond(x, shape), rungs(shape), a, b, a_by, b_by, 3)
    h = 5e-3
    weights = {1: 4 / 5, 2: -1 / 5, 3: 4 / 105, 4: -1 / 280}
    for k in range(4):
        numeric = sum(w * (rungs(shape + m * h)[k] - rungs(shape - m * h)[k]) for m, w in weights.items()) / h
        # rounding eps / h = 4e-14 times values of up to 40; truncation h^8 / 630 times the ninth derivative
        assert found[k] == pytest.approx(numeric, rel=0, abs=1e-10)
