"""Expressions in s: the transfer function has the value that the algebra says, at any complex s."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from decimal import Decimal
from fractions import Fraction

import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from loopfit.core.errors import LoopfitError, RecordError
from loopfit.equivalents.expression import transfer_of_expression
from loopfit.equivalents.spelling import expression_of
from loopfit.model.transfer import Transfer, transfer_of

UNIT = Fraction(1, 2**53)


@dataclass(frozen=True)
class Exact:
    """A complex number with rational parts: the rules of a first course in algebra, without rounding."""

    re: Fraction
    im: Fraction = Fraction(0)

    def __add__(self, other: Exact) -> Exact:
        return Exact(self.re + other.re, self.im + other.im)

    def __neg__(self) -> Exact:
        return Exact(-self.re, -self.im)

    def __sub__(self, other: Exact) -> Exact:
        return self + -other

    def __mul__(self, other: Exact) -> Exact:
        return Exact(self.re * other.re - self.im * other.im, self.re * other.im + self.im * other.re)

    def __truediv__(self, other: Exact) -> Exact:
        square = other.re**2 + other.im**2
        return self * Exact(other.re / square, -other.im / square)

    def __pow__(self, exponent: int) -> Exact:
        out = Exact(Fraction(1))
        for _ in range(abs(exponent)):
            out = out * self
        return out if exponent >= 0 else Exact(Fraction(1)) / out

    def __abs__(self) -> Fraction:
        """Return the sum of the sizes of both parts, which is at least the size."""
        return abs(self.re) + abs(self.im)


POINTS = tuple(
    Exact(Fraction(re), Fraction(im))
    for re, im in (("0.701", "1.303"), ("-2.103", "0.4"), ("0.013", "5.007"), ("3.3", "-0.207"))
)
Node = tuple[str, int, Callable[[Exact], Exact]]  # text, bound of the degree in s, function of s

NUMBERS = st.decimals(0, 50, places=2).map(lambda d: (str(d), 0, lambda _: Exact(Fraction(d))))


def joined(left: Node, sign: str, right: Node) -> Node:
    operation = {
        "+": lambda a, b: a + b,
        "-": lambda a, b: a - b,
        "*": lambda a, b: a * b,
        "/": lambda a, b: a / b,
    }[sign]
    return f"({left[0]}){sign} ({right[0]})", left[1] + right[1], lambda s: operation(left[2](s), right[2](s))


def powered(base: Node, sign: str, exponent: int) -> Node:
    return f"({base[0]}){sign}{exponent}", base[1] * abs(exponent), lambda s: base[2](s) ** exponent


def negative(node: Node) -> Node:
    return f"-({node[0]})", node[1], lambda s: -node[2](s)


TREES = st.recursive(
    NUMBERS | st.just(("s", 1, lambda s: s)),
    lambda inner: st.one_of(
        st.builds(joined, inner, st.sampled_from("+-*/"), inner),
        st.builds(powered, inner, st.sampled_from(["^", "**", " ^ "]), st.integers(-2, 3)),
        st.builds(negative, inner),
    ),
    max_leaves=8,
)


def polynomial_at(values: tuple[float, ...], s: Exact) -> tuple[Exact, Fraction]:
    """Return the polynomial's value at s, and the sum of the sizes of its terms."""
    terms = [Exact(Fraction(a)) * s**k for k, a in enumerate(reversed(values))]
    total = Exact(Fraction(0))
    for term in terms:
        total = total + term
    return total, sum((abs(term) for term in terms), Fraction(0))


@given(tree=TREES, dead_time=st.decimals(0, 9, places=1))
@settings(max_examples=300, deadline=None)
def test_value_is_that_of_the_tree(tree: Node, dead_time: Decimal) -> None:
    """Each coefficient is rounded once or twice, by a relative 2^-53 each: N / D is wrong by no more than that makes it."""
    text, degree, value = tree
    below = 2 * degree + 1  # makes any tree proper
    assume(3 * degree < 60)
    text = f"exp(-{dead_time}*s)*({text})/(s+7)^{below}"
    seven = Exact(Fraction(7))
    try:
        wanted = [value(s) / (s + seven) ** below for s in POINTS]
    except ZeroDivisionError:
        with pytest.raises(RecordError, match="divides by zero"):
            transfer_of_expression(text)
        return
    if all(abs(one) == 0 for one in wanted):
        with pytest.raises(RecordError, match="this is 0"):
            transfer_of_expression(text)
        return
    found = transfer_of_expression(text)
    assert found.dead_time_s == float(dead_time)
    for s, one in zip(POINTS, wanted, strict=True):
        top, top_sizes = polynomial_at(found.numerator, s)
        bottom, bottom_sizes = polynomial_at(found.denominator, s)
        # |N/D - n/d| = |N - n - (D - d) n/d| / |D|
        assert abs(top - one * bottom) <= 2 * UNIT * 2 * (top_sizes + abs(one) * bottom_sizes)


@pytest.mark.parametrize(
    ("text", "numerator", "denominator", "dead_time"),
    [
        ("2*exp(-0.5*s)/((3*s+1)*(s+1))", [2], [3, 4, 1], 0.5),
        ("-2/(s+1)", [-2], [1, 1], 0),
        ("-s^2/(s+1)^2", [-1, 0, 0], [1, 2, 1], 0),  # the power binds closer than the minus
        ("2^3^2/(s+512)", [512], [1, 512], 0),  # and to the right
        ("6/2*3/(s+1)", [9], [1, 1], 0),  # products from the left
        ("5-3-1+0*s", [1], [1], 0),
        ("1/s^-1/s^2", [1], [1, 0], 0),
        ("s*(s+1)/(s*(s+2))", [1, 1], [1, 2], 0),  # common factors of s cancel
        ("(s+1)/(s+2)+3", [4, 7], [1, 2], 0),  # biproper
        ("1/(s+1)+1/(s+1)^2", [1, 2], [1, 2, 1], 0),  # over the least common denominator
        ("(0.1*s+1)*(0.2*s+1)/(s+1)-0.02*s^2/(s+1)", [0.3, 1], [1, 1], 0),  # exact: in floats s^2 would remain
        ("exp(-(1+1/2)*s)/(s+1)", [1], [1, 1], 1.5),
        ("exp(-s-s/2)*exp(0.5*s)/(s+1)", [1], [1, 1], 1.0),
        ("exp(-s)^3/exp(-s)/(s+1)", [1], [1, 1], 2.0),
        ("exp(-s)/(s+1)+exp(-s)", [1, 2], [1, 1], 1.0),
        ("exp(-s*(s+1)/(s+1))/(s+1)", [1], [1, 1], 1.0),
        ("exp(0)/(s+1)", [1], [1, 1], 0),
        ("4^0.5/(s+1)", [2], [1, 1], 0),
        ("1e-3/(.5*s+1.)", [0.001], [0.5, 1], 0),
        ("1E3/(s+1)\n", [1000], [1, 1], 0),
        ("+2·exp(−3×s)/(s+1)", [2], [1, 1], 3.0),  # signs as a typeset page has them
    ],
)
def test_algebra_as_it_is_taught(text: str, numerator: list[float], denominator: list[float], dead_time: float) -> None:
    """Rules of precedence and of fractions (common practice); the numbers by hand."""
    assert transfer_of_expression(text) == transfer_of(numerator, denominator, dead_time)


SPELLED = st.builds(
    lambda top, bottom, dead: transfer_of([*top, 1.0], [1.0, *bottom, *top, 2.0], dead),
    *[st.lists(st.floats(-1e6, 1e6).filter(lambda v: v == 0 or abs(v) > 1e-6), max_size=4) for _ in range(2)],
    st.floats(0, 1e4),
)


@given(SPELLED)
def test_spelling_says_the_same(transfer: Transfer) -> None:
    """Shortest digits read back to the same floats; only the last coefficient of the denominator is normalised again."""
    assert transfer_of_expression(expression_of(transfer)) == transfer


@given(st.text(max_size=60) | st.text(alphabet="0123456789.s+-*/^()exp, ", max_size=60))
@settings(max_examples=500, deadline=None)
def test_any_text_is_a_system_or_one_line(text: str) -> None:
    try:
        words = expression_of(transfer_of_expression(text))
    except LoopfitError as error:
        words = str(error)
    assert len(words.splitlines()) == 1


def test_a_tree_of_many_characters_at_the_limits() -> None:
    assert len(transfer_of_expression("1/(s+1)^60").denominator) == 61
    assert transfer_of_expression("(" * 100 + "1" + ")" * 100 + "/(s+1)").numerator == (1.0,)
    assert transfer_of_expression("1/(s+1)" + " " * 1993).numerator == (1.0,)
