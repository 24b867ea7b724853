"""Balanced truncation against published matrices, python-control's Gramians, and the bound of its error."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from loopfit.equivalents.balanced import Balanced, balanced, residualised, truncated
from loopfit.equivalents.system import RationalSystem
from loopfit.model.transfer import transfer_of

BENCHMARK = ([1.0, 7.0, 24.0, 24.0], [1.0, 10.0, 35.0, 50.0, 24.0])
LIBRARY = ([1.0, 11.0, 45.0, 32.0], [1.0, 15.0, 60.0, 200.0, 60.0])


def balance(numerator: list[float], denominator: list[float]) -> tuple[RationalSystem, Balanced]:
    system = RationalSystem(transfer_of(numerator, denominator))
    state = system.realisation
    return system, balanced(state.A, state.B, state.C)


def polynomials(numerator: list[float], denominator: list[float], how: str) -> tuple[np.ndarray, np.ndarray]:
    """Return numerator and denominator of order 2 in s (the states run in units of the realisation's rate)."""
    system, whole = balance(numerator, denominator)
    top, bottom = (truncated if how == "truncated" else residualised)(whole, system.realisation.D)
    powers = system.realisation.rate ** np.arange(3)
    return np.array(top) * powers, np.array(bottom) * powers


def test_steady_state_is_lost_by_truncation_and_kept_by_residualisation() -> None:
    # 4th-order benchmark of the literature on reduction; values computed to full precision apart from this code (identity)
    top, bottom = polynomials(*BENCHMARK, "truncated")
    assert top[1:] == pytest.approx([0.8216223275157091, 0.4541841068244836], rel=1e-7)
    assert bottom == pytest.approx([1, 1.2679152873134776, 0.46629561422000376], rel=1e-7)
    top, bottom = polynomials(*BENCHMARK, "residualised")
    assert top == pytest.approx([0.02597388228876818, 0.6925342151528383, 2.5007410581292877], rel=1e-7)
    assert bottom == pytest.approx([1, 3.3975962169142653, 2.500741058129287], rel=1e-7)


def test_reduced_models_of_a_library_test() -> None:
    # python-control 0.10.2, control/tests/modelsimp_test.py (BSD-3-Clause): trace, determinant and direct term of the
    # printed matrices; the tolerance is their rounding to four digits
    _, bottom = polynomials(*LIBRARY, "truncated")
    assert -bottom[1] == pytest.approx(-2.792, rel=0, abs=0.001)
    assert bottom[2] == pytest.approx(0.208, rel=0, abs=0.002)
    top, bottom = polynomials(*LIBRARY, "residualised")
    assert -bottom[1] == pytest.approx(-9.792, rel=0, abs=0.004)
    assert bottom[2] == pytest.approx(3.034, rel=0, abs=0.012)
    assert top[0] == pytest.approx(-0.08384, rel=0, abs=0.0003)


def test_hankel_singular_values_of_a_library_test() -> None:
    # python-control 0.10.2, same file: 24.42686 and 0.5731395. The second looks wrong in its seventh digit: the exact value is
    # 0.57313956 (square roots of the eigenvalues of the product of the Gramians), so it is tested against that.
    found = balanced(np.array([[1.0, -2], [3, -4]]), np.array([5.0, 7]), np.array([6.0, 8])).singular_values
    assert found[0] == pytest.approx(24.42686, rel=0, abs=5e-6)
    assert found == pytest.approx([24.42686044187658, 0.573139558123635], rel=1e-9)
    assert abs(found[1] - 0.5731395) > 5e-8


@pytest.mark.parametrize("plant", [BENCHMARK, LIBRARY, ([1.0], np.poly([-1.0] * 5).tolist())])
def test_singular_values_agree_with_the_gramians_of_python_control(plant: tuple[list[float], list[float]]) -> None:
    control = pytest.importorskip("control")
    whole = control.ss(control.tf(*plant))
    reached = control.lyap(whole.A, whole.B @ whole.B.T)
    seen = control.lyap(whole.A.T, whole.C.T @ whole.C)
    expected = np.sort(np.sqrt(np.abs(np.linalg.eigvals(reached @ seen))))[::-1]
    _, found = balance(*plant)
    assert found.singular_values[:3] == pytest.approx(expected[:3], rel=1e-6)


@settings(max_examples=30)
@given(
    lags=st.lists(st.floats(0.1, 10), min_size=3, max_size=6),
    damping=st.floats(0.1, 0.9),
    zero=st.floats(-2, 2).filter(lambda value: value == 0.0 or abs(value) > 1e-6),
)
def test_error_stays_below_twice_the_singular_values_left_out(lags: list[float], damping: float, zero: float) -> None:
    """Frequency response error <= 2 sum of the others (Enns 1984; Glover 1984; Liu and Anderson 1989 for the states at rest)."""
    denominator = np.array([1.0, 2 * damping, 1.0])
    for lag in lags:
        denominator = np.convolve(denominator, [lag, 1.0])
    numerator, bottom = [zero, 1.0], denominator.tolist()
    system, whole = balance(numerator, bottom)
    bound = 2 * whole.singular_values[2:].sum()
    s = 1j * np.geomspace(1e-3, 1e3, 400)
    exact = np.polyval(system.numerator, s) / np.polyval(system.denominator, s)
    for how in ("truncated", "residualised"):
        top, low = polynomials(numerator, bottom, how)
        error = np.abs(np.polyval(top, s) / np.polyval(low, s) - exact).max()
        assert error <= bound * (1 + 1e-6) + 1e-9, how
