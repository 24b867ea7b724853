"""The second-order step response in 80-digit arithmetic, from complex exponentials of the differential equation."""

from __future__ import annotations

from decimal import Decimal, localcontext

_DIGITS = 80
_LARGEST = 10**12  # exponents: exp(-x / 2r) underflows nothing here


def _exponential(real: Decimal, imaginary: Decimal) -> tuple[Decimal, Decimal]:
    """exp of a complex number: Taylor series of a small part of it, squared back up; the real part by Decimal.exp."""
    halvings = max(0, imaginary.adjusted() * 4 + 12)
    small = imaginary / 2**halvings
    cosine, sine, term = Decimal(1), Decimal(0), Decimal(1)
    for k in range(1, 60):
        term *= small / k
        if k % 2:
            sine += term if k % 4 == 1 else -term
        else:
            cosine += term if k % 4 == 0 else -term
    for _ in range(halvings):
        cosine, sine = cosine * cosine - sine * sine, 2 * cosine * sine
    size = real.exp()
    return size * cosine, size * sine


def _value_and_slope(x: Decimal, a: Decimal, b: Decimal) -> tuple[Decimal, Decimal]:
    """Return F1 and F0 = dF1/dx of a F0' + b F0 + F1 = 1 from rest, from its roots."""
    middle, square = -b / (2 * a), b * b / (4 * a * a) - 1 / a
    if square == 0:
        e = (middle * x).exp()
        return 1 - e * (1 - middle * x), e * x / a
    root = abs(square).sqrt()
    if square > 0:
        fast, slow = ((middle - root) * x).exp(), ((middle + root) * x).exp()
        slope = (slow - fast) / (2 * root * a)
        return 1 - (slow + fast) / 2 + middle * (slow - fast) / (2 * root), slope
    cosine, sine = _exponential(middle * x, root * x)
    return 1 - cosine + middle * sine / root, sine / (root * a)


def response(x: float, a: float, b: float, by: str) -> tuple[float, float, float, float]:
    """Return F1, F0 and their derivatives in a ("a") or in half of b ("b") at x >= 0, to double precision.

    The derivatives are central differences with a relative step of 1e-25: error about 1e-50.
    """
    with localcontext() as context:
        context.prec, context.Emax, context.Emin = _DIGITS, _LARGEST, -_LARGEST
        at, first, second = Decimal(x), Decimal(a), Decimal(b)
        step = Decimal(10) ** -25 * (first if by == "a" else 1)
        more = (first + step, second) if by == "a" else (first, second + 2 * step)
        less = (first - step, second) if by == "a" else (first, second - 2 * step)
        here = _value_and_slope(at, first, second)
        up, down = _value_and_slope(at, *more), _value_and_slope(at, *less)
        slopes = [(u - d) / (2 * step) for u, d in zip(up, down, strict=True)]
        return float(here[0]), float(here[1]), float(slopes[0]), float(slopes[1])
