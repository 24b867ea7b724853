"""Exact algebra of rational functions of s times one dead time."""

from __future__ import annotations

from dataclasses import dataclass
from fractions import Fraction
from itertools import dropwhile, zip_longest

Polynomial = tuple[Fraction, ...]  # highest power first, without leading zeros; () is zero

MOST_POWERS = 60
_MOST_BITS = 4_000  # of a coefficient: sixty factors of full precision have fewer, and the work stays quick
_ONE: Polynomial = (Fraction(1),)
_TOO_FAR = "this becomes larger or smaller than any number that can be held"


class AlgebraError(ValueError):
    """The operation leads out of the rational functions with one dead time; the text says how."""


@dataclass(frozen=True, slots=True)
class Rational:
    """top(s) / bottom(s) exp(-dead_time s) with exact coefficients; a negative dead time may cancel later.

    Sums go over the least common denominator, so that no factor comes to stand above and below that the terms lack.
    """

    top: Polynomial
    bottom: Polynomial = _ONE
    dead_time: Fraction = Fraction(0)

    def __post_init__(self) -> None:
        _check_degree(self.degree)
        if _bits((*self.top, *self.bottom, self.dead_time)) > _MOST_BITS:
            raise AlgebraError(_TOO_FAR)

    @property
    def degree(self) -> int:
        """The larger of the degrees above and below."""
        return max(len(self.top), len(self.bottom)) - 1

    @property
    def constant(self) -> Fraction | None:
        """The number that this is; None when it depends on s."""
        if not self.top:
            return Fraction(0)
        quotient, rest = divided(self.top, self.bottom)
        return quotient[0] if not rest and len(quotient) == 1 and self.dead_time == 0 else None

    def __neg__(self) -> Rational:
        return Rational(tuple(-a for a in self.top), self.bottom, self.dead_time)

    def __add__(self, other: Rational) -> Rational:
        if not self.top or not other.top:
            return other if not self.top else self
        if self.dead_time != other.dead_time:
            raise AlgebraError(
                f"the terms have different dead times, {float(self.dead_time):g} and {float(other.dead_time):g} s: "
                "their sum is no rational function of s with one dead time"
            )
        shared = common(self.bottom, other.bottom)
        mine, theirs = divided(self.bottom, shared)[0], divided(other.bottom, shared)[0]
        top = _sum(_product(self.top, theirs), _product(other.top, mine))
        return Rational(top, _product(self.bottom, theirs), self.dead_time)

    def __mul__(self, other: Rational) -> Rational:
        _check_degree(max(len(self.top) + len(other.top), len(self.bottom) + len(other.bottom)) - 2)
        top, bottom = _product(self.top, other.top), _product(self.bottom, other.bottom)
        return Rational(top, bottom, self.dead_time + other.dead_time)

    def inverse(self) -> Rational:
        """Return 1 / self."""
        if not self.top:
            raise AlgebraError("this divides by zero")
        return Rational(self.bottom, self.top, -self.dead_time)

    def power(self, exponent: Rational) -> Rational:
        """Return self to a constant power: a whole one, or any for a number above 0."""
        wanted = exponent.constant
        if wanted is None:
            raise AlgebraError("there is s in an exponent; dead time is written exp(-T*s)")
        number = self.constant
        if wanted.denominator != 1:
            if number is None:
                raise AlgebraError(f"the power {float(wanted):g} is not a whole number")
            return Rational((_real_power(number, wanted),))
        base, count = (self.inverse() if wanted < 0 else self), abs(wanted.numerator)
        if base.degree == 0:
            value = _whole_power(base.top[0] / base.bottom[0], count) if base.top else Fraction(int(count == 0))
            return Rational((value,) if value else (), dead_time=base.dead_time * count)
        _check_degree(base.degree * count)
        out = Rational(_ONE)
        for _ in range(count):
            out = out * base
        return out

    def delaying(self) -> Rational:
        """Return exp(self), where self is -T s."""
        if self.dead_time != 0 and self.top:
            raise AlgebraError("there is an exp inside exp; only exp(-T*s) is known")
        quotient, rest = divided(self.top, self.bottom)
        if rest or len(quotient) > 2:
            raise AlgebraError("exp is known only of -T*s with a number T: dead time")
        if quotient and quotient[-1] != 0:
            raise AlgebraError(f"exp is known only of -T*s: here {float(quotient[-1]):g} stands beside it")
        return Rational(_ONE, dead_time=-quotient[0] if quotient else Fraction(0))


def _check_degree(degree: int) -> None:
    if degree > MOST_POWERS:
        raise AlgebraError(f"this is of degree {degree} in s; the limit is {MOST_POWERS}")


def _bits(numbers: Polynomial) -> int:
    return max((max(n.numerator.bit_length(), n.denominator.bit_length()) for n in numbers), default=0)


def _whole_power(number: Fraction, count: int) -> Fraction:
    if number in (-1, 0, 1):
        return number ** (count % 2 or min(count, 2))
    if count * (_bits((number,)) - 1) > _MOST_BITS:
        raise AlgebraError(_TOO_FAR)
    return number**count


def _real_power(number: Fraction, exponent: Fraction) -> Fraction:
    if number <= 0:
        raise AlgebraError(f"the power {float(exponent):g} of {float(number):g} is no number that can be used")
    try:
        return Fraction(float(number) ** float(exponent))
    except OverflowError:
        raise AlgebraError(_TOO_FAR) from None


def _trimmed(values: list[Fraction]) -> Polynomial:
    return tuple(dropwhile(lambda value: value == 0, values))


def _sum(a: Polynomial, b: Polynomial) -> Polynomial:
    return _trimmed([x + y for x, y in zip_longest(a[::-1], b[::-1], fillvalue=Fraction(0))][::-1])


def _product(a: Polynomial, b: Polynomial) -> Polynomial:
    if not a or not b:
        return ()
    out = [Fraction(0)] * (len(a) + len(b) - 1)
    for i, x in enumerate(a):
        for j, y in enumerate(b):
            out[i + j] += x * y
    return tuple(out)


def divided(a: Polynomial, b: Polynomial) -> tuple[Polynomial, Polynomial]:
    """Return quotient and remainder."""
    rest, quotient = list(a), []
    while len(rest) >= len(b):
        factor = rest[0] / b[0]
        quotient.append(factor)
        for i, value in enumerate(b):
            rest[i] -= factor * value
        del rest[0]
    return tuple(quotient), _trimmed(rest)


def common(a: Polynomial, b: Polynomial) -> Polynomial:
    """Return the greatest common factor by Euclid's algorithm; 1 where its numbers would become too long to be quick."""
    while b:
        if _bits(b) > _MOST_BITS:
            return _ONE
        a, b = b, divided(a, b)[1]
        b = tuple(value / b[0] for value in b)
    return tuple(value / a[0] for value in a)
