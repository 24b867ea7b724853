"""Roots of a polynomial whose coefficients are known exactly, however much rounding them would move the roots."""

from __future__ import annotations

import math
from decimal import Decimal, localcontext
from fractions import Fraction

import numpy as np

from loopfit.core.errors import UsageError
from loopfit.equivalents.factors import in_order, roots_of
from loopfit.equivalents.rational import Polynomial, common, divided
from loopfit.model.transfer import Complex

_PRIME = 2**61 - 1
_DIGITS, _MOST_DIGITS = 40, 400
_MOST_ROUNDS = 100
_SMALL = Decimal("1e-8")  # a step, relative, from which on the end may be near
_ALIKE = 1e-7  # relative: two such roots are one, twice; putting both at their mean changes the rest by its square
_Pair = tuple[Decimal, Decimal]  # real and imaginary part


def precise_roots(polynomial: Polynomial) -> Complex | None:
    """Return the roots of a real polynomial of exact coefficients, each correct to the last digit or two of a float.

    Repeated roots are set apart by exact division (D. Y. Y. Yun, On square-free decomposition algorithms, 1976), the
    others are found together, with as many decimal digits as their condition asks for (O. Aberth, Iteration methods for
    finding all zeros of a polynomial simultaneously, Mathematics of Computation 27, 1973; both from memory). None
    where that would take too long or a root is beyond what a float holds.
    """
    left = polynomial
    while left and left[-1] == 0:
        left = left[:-1]
    found: list[complex] = [0j] * (len(polynomial) - len(left))
    try:
        parts = _parts(left)
        for part, times in parts or []:
            found += [root for root in _simple_roots(part) for _ in range(times)]
    except (ArithmeticError, UsageError):
        return None
    roots = np.array(found, dtype=complex)
    if roots.size != len(polynomial) - 1 or not np.all(np.isfinite(roots)):
        return None
    return in_order(_merged(roots))


def _parts(polynomial: Polynomial) -> list[tuple[Polynomial, int]] | None:
    """Return factors without repeated roots, and how often each occurs; None when the numbers become too long."""
    if len(polynomial) < 2:
        return []
    slope = _slope(polynomial)
    if _coprime_modulo(polynomial, slope):
        return [(polynomial, 1)]
    shared = common(polynomial, slope)
    if len(shared) == 1:
        return None
    out, times = [], 0
    once, other = divided(polynomial, shared)[0], divided(slope, shared)[0]
    while len(once) > 1:
        rest = _less(other, _slope(once))
        part = common(once, rest) if rest else tuple(value / once[0] for value in once)
        times += 1
        if len(part) > 1:
            out.append((part, times))
        once = divided(once, part)[0]
        other = divided(rest, part)[0] if rest else ()
    return out


def _slope(polynomial: Polynomial) -> Polynomial:
    degree = len(polynomial) - 1
    return tuple(value * (degree - k) for k, value in enumerate(polynomial[:-1]))


def _less(a: Polynomial, b: Polynomial) -> Polynomial:
    width = max(len(a), len(b))
    wide = [(Fraction(0),) * (width - len(side)) + side for side in (a, b)]
    out = [x - y for x, y in zip(*wide, strict=True)]
    while out and out[0] == 0:
        del out[0]
    return tuple(out)


def _coprime_modulo(a: Polynomial, b: Polynomial) -> bool:
    """Tell whether two polynomials have no common factor modulo a prime; then they have none at all."""
    sides = []
    for side in (a, b):
        if any(value.denominator % _PRIME == 0 for value in side) or side[0].numerator % _PRIME == 0:
            return False
        sides.append([value.numerator * pow(value.denominator, -1, _PRIME) % _PRIME for value in side])
    one, other = sides
    while other:
        inverse = pow(other[0], -1, _PRIME)
        while len(one) >= len(other):
            factor = one[0] * inverse % _PRIME
            one = [(x - factor * y) % _PRIME for x, y in zip(one, other, strict=False)] + one[len(other) :]
            del one[0]
        while one and one[0] == 0:
            del one[0]
        one, other = other, one
    return len(one) == 1


def _simple_roots(polynomial: Polynomial) -> list[complex]:
    """Return the roots of a polynomial that has no repeated ones and none at 0."""
    if len(polynomial) == 2:
        return [complex(float(-polynomial[1] / polynomial[0]))]
    near = roots_of([float(value / polynomial[0]) for value in polynomial])
    # off their places, each its own way: alike ones part, and a pair may become two real roots
    near = near * (1.0 + 1e-3 * np.exp(1j * np.arange(1, near.size + 1)))
    digits = _DIGITS
    with localcontext() as context:
        roots = [(Decimal(root.real), Decimal(root.imag)) for root in near]
        while True:
            context.prec = digits
            values = [Decimal(v.numerator) / Decimal(v.denominator) for v in (c / polynomial[0] for c in polynomial)]
            settled = _together(values, roots, digits)
            lost = max(_lost_digits(values, root) for root in roots)
            if lost + 22 <= digits and settled:
                break
            digits = max(2 * digits, lost + 25)
            if digits > _MOST_DIGITS:
                raise ArithmeticError("too many digits")
        return _paired(roots, Decimal(10) ** (lost + 4 - digits))


def _together(values: list[Decimal], roots: list[_Pair], digits: int) -> bool:
    """Move the roots, one after the other, to where they are; return whether they came to rest."""
    enough = Decimal(10) ** (3 - digits)
    moving = set(range(len(roots)))
    for _ in range(_MOST_ROUNDS):
        for k in sorted(moving):
            here = roots[k]
            value, slope = _value_and_slope(values, here)
            if value[0] == 0 and value[1] == 0:
                moving.discard(k)
                continue
            newton = _quotient(value, slope)
            pull = 0j
            for j, other in enumerate(roots):
                if j != k:
                    pull += 1.0 / complex(here[0] - other[0], here[1] - other[1])
            factor = 1.0 / (1.0 - complex(*newton) * pull)
            step = _times(newton, (Decimal(factor.real), Decimal(factor.imag)))
            roots[k] = (here[0] - step[0], here[1] - step[1])
            share = max(abs(step[0]), abs(step[1])) / max(abs(here[0]), abs(here[1]))
            # below the rounding of the value there is nothing more to find
            if share < _SMALL and share <= enough * 10 ** _lost_digits(values, here):
                moving.discard(k)
        if not moving:
            return True
    return False


def _lost_digits(values: list[Decimal], root: _Pair) -> int:
    """Return how many digits of the coefficients rounding takes from a root."""
    size = (root[0] * root[0] + root[1] * root[1]).sqrt()
    total = Decimal(0)
    for value in values:
        total = total * size + abs(value)
    slope = _value_and_slope(values, root)[1]
    steep = (slope[0] * slope[0] + slope[1] * slope[1]).sqrt() * size
    return max(math.ceil((total / steep).log10()), 0)


def _value_and_slope(values: list[Decimal], at: _Pair) -> tuple[_Pair, _Pair]:
    x, y = at
    a, b, c, d = values[0], Decimal(0), Decimal(0), Decimal(0)
    for value in values[1:]:
        c, d = c * x - d * y + a, c * y + d * x + b
        a, b = a * x - b * y + value, a * y + b * x
    return (a, b), (c, d)


def _times(a: _Pair, b: _Pair) -> _Pair:
    return a[0] * b[0] - a[1] * b[1], a[0] * b[1] + a[1] * b[0]


def _quotient(a: _Pair, b: _Pair) -> _Pair:
    size = b[0] * b[0] + b[1] * b[1]
    return (a[0] * b[0] + a[1] * b[1]) / size, (a[1] * b[0] - a[0] * b[1]) / size


def _paired(roots: list[_Pair], real: Decimal) -> list[complex]:
    """Return floats; a root is real when its imaginary part is within this share, the others stand in mirrored pairs."""
    out: list[complex] = []
    above = below = 0
    for x, y in roots:
        if abs(y) <= real * abs(x):
            out.append(complex(float(x)))
        elif y > 0:
            above += 1
            out += [complex(float(x), float(y)), complex(float(x), -float(y))]
        else:
            below += 1
    if above != below:
        raise ArithmeticError("the roots do not stand in pairs")
    return out


def _merged(roots: Complex) -> Complex:
    """Return the roots with those that agree within `_ALIKE` at their mean, mirrored ones alike."""
    out, left = roots.copy(), list(range(roots.size))
    while left:
        near = [k for k in left if abs(roots[k] - roots[left[0]]) <= _ALIKE * abs(roots[k])]
        if len(near) > 1:
            mean = complex(roots[near].mean())
            out[near] = complex(mean.real) if abs(mean.imag) <= _ALIKE * abs(mean) else mean
        left = [k for k in left if k not in near]
    upper = out[out.imag > 0]
    return np.concatenate([out[out.imag == 0], upper, upper.conj()])
