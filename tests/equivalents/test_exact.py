"""The exact step response against closed forms, scipy, and 60-digit arithmetic."""

from __future__ import annotations

from decimal import Decimal, localcontext
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.linalg import expm
from scipy.special import gammainc

from loopfit.core.arrays import Array
from loopfit.equivalents.system import RationalSystem
from loopfit.model.transfer import transfer_of

_BOUND = 1e-8  # of the final value: the bound that is stated for the exact response


def product(*factors: list[float]) -> Array:
    out = np.ones(1)
    for factor in factors:
        out = np.convolve(out, factor)
    return out


def system(numerator: object, denominator: object, dead_time: float = 0.0) -> RationalSystem:
    return RationalSystem(transfer_of(np.asarray(numerator, float), np.asarray(denominator, float), dead_time))  # type: ignore[arg-type]


@pytest.mark.parametrize("lags", [1, 2, 3, 5, 8, 13, 20, 35, 60])
def test_equal_lags_are_the_incomplete_gamma_function(lags: int) -> None:
    time = np.linspace(0, 3 * lags + 20, 501)  # Poisson process: 1/(s+1)^n answers a step with P(n, t), an identity
    found = system([1], product(*[[1.0, 1.0]] * lags)).step(time)
    assert found == pytest.approx(gammainc(lags, time), rel=0, abs=1e-11)


@pytest.mark.parametrize(
    "lags", [(1, 2), (20, 2), (1, 0.2, 0.04, 0.008), (1000, 1, 1e-3, 1e-6), (5, 4, 3, 2.5, 2, 1.5, 1, 0.7)]
)
def test_different_lags_agree_with_partial_fractions_in_60_digits(lags: tuple[float, ...]) -> None:
    time = np.concatenate([np.linspace(0, 8 * max(lags), 40), np.geomspace(1e-7, max(lags), 40)])
    with localcontext() as context:
        context.prec = 60
        exact = [Decimal(Fraction(lag).numerator) / Decimal(Fraction(lag).denominator) for lag in map(float, lags)]
        expected = []
        for t in time:
            left = Decimal(0)
            for one in exact:
                weight = Decimal(1)
                for other in exact:
                    weight *= Decimal(1) if other is one else one / (one - other)
                left += weight * (-Decimal(float(t)) / one).exp()
            expected.append(float(1 - left))
    found = system([1], product(*[[lag, 1.0] for lag in lags])).step(time)
    assert found == pytest.approx(expected, rel=0, abs=1e-11)


def by_expm(numerator: Array, denominator: Array, time: float) -> float:
    """Companion form, input as a state, scipy's matrix exponential."""
    n = denominator.size - 1
    monic, top = denominator / denominator[0], np.zeros(n + 1)
    top[n + 1 - numerator.size :] = numerator / denominator[0]
    whole = np.zeros((n + 1, n + 1))
    whole[0, :n], whole[0, n] = -monic[1:], 1.0
    whole[1:n, : n - 1] = np.eye(n - 1)
    state = (expm(whole * time) @ np.append(np.zeros(n), 1.0))[:n]
    return float((top[1:] - top[0] * monic[1:]) @ state + top[0])


AWKWARD = [
    (
        "zeros of every kind",
        product([2, 1], [-0.5, 1], [1, 0.4, 1]),
        product([3, 1], [1, 1], [1, 1], [0.2, 0.3, 1], [0.5, 1]),
    ),
    ("direct term", product([1, 3, 1]), product([1, 1.2, 1])),
    ("direct term, one lag", product([3, 1]), product([1, 1])),
    ("repeated pair", product([1]), product([1, 0.4, 1], [1, 0.4, 1], [1, 0.4, 1])),
    ("integrating", product([1, 2]), product([1, 0], [1, 1], [0.5, 1])),
    ("twice integrating", product([1]), product([1, 0], [1, 0], [1, 1])),
    ("unstable pair", product([1]), product([1, -0.2, 1], [0.1, 1])),
    ("unstable lag", product([1, 1]), product([1, -0.5], [1, 3, 2])),
    ("no static gain", product([1, 0]), product([1, 1], [1, 1], [1, 1])),
    ("complex zeros over real poles", product([1, 0.2, 4]), product([1, 1], [1, 2], [1, 3])),
    ("undamped", product([1]), product([1, 0, 1], [1, 1])),
]


@pytest.mark.parametrize(("what", "numerator", "denominator"), AWKWARD, ids=[row[0] for row in AWKWARD])
def test_awkward_systems_agree_with_scipy(what: str, numerator: Array, denominator: Array) -> None:
    times = np.array([0.0, 0.01, 0.3, 1.0, 2.5, 7.0, 15.0])
    expected = np.array([by_expm(numerator, denominator, t) for t in times])
    found = system(numerator, denominator, 0.7).step(times + 0.7)
    assert found == pytest.approx(expected, rel=1e-9, abs=1e-10), what
    assert system(numerator, denominator, 0.7).step(np.array([-1.0, 0.0, 0.699])) == pytest.approx([0, 0, 0], abs=0)


@given(
    lags=st.lists(st.floats(0.05, 20), min_size=1, max_size=5),
    pairs=st.lists(st.tuples(st.floats(0.05, 0.99), st.floats(0.1, 10)), max_size=2),
    zero=st.one_of(st.just(0.0), st.floats(1e-6, 5), st.floats(-5, -1e-6)),
    gain=st.sampled_from([-3.0, 1.0, 1e-6]),
    faster=st.sampled_from([1e-6, 1.0, 3600.0]),
)
def test_time_and_gain_scale(
    lags: list[float], pairs: list[tuple[float, float]], zero: float, gain: float, faster: float
) -> None:
    """s / c stands for time in units c times smaller: an identity of the Laplace transform."""
    factors = [[lag, 1.0] for lag in lags] + [[1 / w**2, 2 * z / w, 1.0] for z, w in pairs]
    denominator, numerator = product(*factors), np.array([zero, 1.0])
    if denominator.size < 3:
        numerator = np.ones(1)
    powers = faster ** -np.arange(denominator.size - 1, -1.0, -1.0)
    time = np.linspace(0, 5 * sum(lags), 30)
    plain = system(numerator, denominator).step(time)
    scaled = system(gain * numerator * powers[-numerator.size :], denominator * powers).step(time / faster)
    assert scaled == pytest.approx(gain * plain, rel=0, abs=abs(gain) * _BOUND)
    reference = [by_expm(numerator, denominator, float(t)) for t in time[::10]]
    # companion form and expm lose digits where lags differ much
    assert plain[::10] == pytest.approx(reference, rel=0, abs=1e-6)


def test_python_control_gives_the_same_response() -> None:
    control = pytest.importorskip("control")
    numerator, denominator = [1.0, 11.0, 45.0, 32.0], [1.0, 15.0, 60.0, 200.0, 60.0]
    time = np.linspace(0, 20, 201)
    _, expected = control.step_response(control.tf(numerator, denominator), time)
    assert system(numerator, denominator).step(time) == pytest.approx(expected, rel=0, abs=1e-9)


# Nise, Control Systems Engineering, 6th ed. 2011, Example 4.10 (from memory), step response as a sum of exponentials
NISE = [
    ([26.25, 105.0], product([1, 3.5], [1, 5], [1, 6]), {-3.5: (-1, 0), -5.0: (-3.5, 1), -6.0: (3.5, 1)}, (1, 0)),
    (
        [26.25, 105.0],
        product([1, 4.01], [1, 5], [1, 6]),
        {-4.01: (0.033, 3), -5.0: (-5.3, 1), -6.0: (4.4, 1)},
        (0.87, 2),
    ),
]


@pytest.mark.parametrize(("numerator", "denominator", "amplitudes", "constant"), NISE)
def test_residues_as_published(
    numerator: list[float], denominator: Array, amplitudes: dict[float, tuple[float, int]], constant: tuple[float, int]
) -> None:
    nise = system(numerator, denominator)
    for pole, (printed, digits) in amplitudes.items():
        k = int(np.argmin(np.abs(nise.poles - pole)))
        found = (nise.residues[k] / nise.poles[k]).real
        assert found == pytest.approx(printed, rel=0, abs=0.5 * 10.0**-digits), pole
    assert nise.static_gain == pytest.approx(constant[0], rel=0, abs=0.5 * 10.0 ** -constant[1])


# Strejc / Zwicker inflection-tangent table for n equal lags (from memory): Tu/Tg, Tg/T, Tu/T, three decimals
STREJC = [(2, 0.104, 2.718, 0.282), (3, 0.218, 3.695, 0.805), (4, 0.319, 4.463, 1.425), (5, 0.410, 5.119, 2.100)]


@pytest.mark.parametrize(("lags", "ratio", "rise", "delay"), STREJC)
def test_inflection_tangent_of_equal_lags_as_published(lags: int, ratio: float, rise: float, delay: float) -> None:
    """The slope of a step response is the step response of s times the system; the inflection is at (n - 1) T."""
    denominator, at = product(*[[1.0, 1.0]] * lags), np.array([lags - 1.0])
    height, slope = system([1], denominator).step(at)[0], system([1, 0], denominator).step(at)[0]
    Tg, Tu = 1 / slope, lags - 1 - height / slope
    assert (Tu / Tg, Tg, Tu) == pytest.approx((ratio, rise, delay), rel=0, abs=0.0005)
