"""Roots of polynomials whose coefficients are exact, where rounding them would move the roots far."""

from __future__ import annotations

from fractions import Fraction

import numpy as np
import pytest

from loopfit.equivalents.precise import precise_roots
from loopfit.equivalents.rational import Polynomial


def product(*roots: Fraction | int) -> Polynomial:
    out = [Fraction(1)]
    for root in roots:
        out = [a - root * b for a, b in zip([*out, Fraction(0)], [Fraction(0), *out], strict=True)]
    return tuple(out)


# J. H. Wilkinson, Rounding Errors in Algebraic Processes, 1963, chapter 2: the roots of (z - 1)...(z - 20) - 2^-23 z^19,
# from memory; nine decimals are printed
PERTURBED = [1.0, 2.0, 3.0, 4.0, 4.999999928, 6.000006944, 6.999697234, 8.007267603, 8.917250249, 20.846908101]
PERTURBED_PAIRS = [
    10.095266145 + 0.643500904j,
    11.793633881 + 1.652329728j,
    13.992358137 + 2.518830070j,
    16.730737466 + 2.812624894j,
    19.502439400 + 1.940330347j,
]


def test_the_perturbed_product_of_twenty_as_printed() -> None:
    whole = list(product(*range(1, 21)))
    whole[1] -= Fraction(1, 2**23)
    found = precise_roots(tuple(whole))
    assert found is not None
    assert np.sort(found[found.imag == 0].real) == pytest.approx(sorted(PERTURBED), rel=0, abs=1e-9)
    upper = found[found.imag > 0]
    assert upper[np.argsort(upper.real)] == pytest.approx(np.array(PERTURBED_PAIRS), rel=0, abs=1.5e-9)


@pytest.mark.parametrize("count", [1, 2, 5, 20, 40])
def test_roots_of_a_product_are_those_of_its_factors(count: int) -> None:
    """Off by the last digit of a float at most: what rounds is only the result."""
    roots = [Fraction(-3 * k - 1, 7) for k in range(count)]
    found = precise_roots(product(*roots))
    assert found is not None
    assert np.all(found.imag == 0)
    assert found.real == pytest.approx([float(root) for root in roots], rel=3e-16)


def test_repeated_roots_and_roots_at_zero_are_exact() -> None:
    roots = [Fraction(0)] * 2 + [Fraction(-1, 3)] * 8 + [Fraction(-1)] * 3 + [Fraction(-1001, 1000)]
    found = precise_roots(product(*roots))
    assert found is not None
    assert found == pytest.approx(np.array([float(root) for root in roots]), rel=3e-16)


def test_repeated_pairs_stand_mirrored() -> None:
    pair = (Fraction(1), Fraction(1), Fraction(5, 4))  # -1/2 +- j, by hand
    whole = np.array([Fraction(1)])
    for _ in range(3):
        whole = np.convolve(whole, pair)
    found = precise_roots(tuple(Fraction(value) for value in whole))
    assert found is not None
    assert found == pytest.approx(np.array([-0.5 + 1j] * 3 + [-0.5 - 1j] * 3), rel=3e-16)


def test_roots_that_no_response_tells_apart_are_one_twice() -> None:
    found = precise_roots(product(Fraction(-1), Fraction(-1) - Fraction(1, 10**9), Fraction(-2)))
    assert found is not None
    assert found[0] == found[1] == pytest.approx(-1.0 - 0.5e-9, rel=3e-16)


def test_roots_far_apart_keep_their_digits() -> None:
    found = precise_roots(product(Fraction(-1, 10**9), Fraction(-1), Fraction(-(10**12))))
    assert found is not None
    assert found.real == pytest.approx([-1e-9, -1.0, -1e12], rel=3e-16)
