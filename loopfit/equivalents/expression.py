"""Expressions in s, read as ordinary algebra and never run as code."""

from __future__ import annotations

import math
import re
from collections.abc import Callable
from dataclasses import dataclass, field
from fractions import Fraction

from loopfit.core.errors import RecordError, UsageError
from loopfit.equivalents.rational import AlgebraError, Rational
from loopfit.equivalents.system import RationalSystem
from loopfit.equivalents.trust import with_exact_roots
from loopfit.model.transfer import Transfer, transfer_of

MOST_CHARACTERS = 2_000
_DEEPEST = 100
_SHOWN = 28  # characters on either side of a marked place
_TOKEN = re.compile(
    r"(?P<number>([0-9][0-9.]*|\.[0-9][0-9.]*)([eE][+-]?[0-9]+)?)|(?P<name>[^\W\d]\w*)|(?P<sign>\*\*|[-+*/^()])"
)
_TYPESET = str.maketrans({"−": "-", "–": "-", "·": "*", "×": "*", "∗": "*"})  # one for one: places stay
_FOREIGN = {
    ",": "a decimal point is written . and not ,",
    "[": "only round brackets are known",
    "{": "only round brackets are known",
    "=": "give only what stands to the right of =",
}
_NAMES = {
    "S": "the variable is a small s",
    "p": "the variable is written s",
    "z": "the variable is s; systems in z are not known here",
    "e": "dead time is written exp(-T*s)",
}


@dataclass(frozen=True, slots=True)
class _Token:
    """A token and where it begins and ends, counted from 0; kind "end" after the last."""

    kind: str
    text: str
    begin: int
    end: int


def transfer_of_expression(expression: str) -> Transfer:
    """Return the transfer function that an expression in s says.

    Numbers, s, + - * / ^ **, round brackets, and exp(-T*s) for dead time; all algebra is exact until the
    coefficients are made floats.

    Parameters
    ----------
    expression : str
        Such as "2*exp(-0.5*s)/((3*s+1)*(s+1))"; at most 2,000 characters, of degree 60 at most.

    Raises
    ------
    UsageError
        If it cannot be read; the message marks the place, counted from 1, as `>*<`.
    RecordError
        If it can be read but is no usable system: degree, division by zero, s in an exponent, a power of s that is not
        whole, terms with different dead times, prediction, more zeros than poles, numbers that are not finite.
    """
    return _transfer(_exact(expression), expression)


def system_of_expression(expression: str) -> RationalSystem:
    """Return the same as a system, its poles and zeros from the exact coefficients; raises the same."""
    exact = _exact(expression)
    return with_exact_roots(_transfer(exact, expression), exact)


def _exact(expression: str) -> Rational:
    if not isinstance(expression, str):
        raise UsageError(f"an expression in s is text, not {type(expression).__name__}")
    if len(expression) > MOST_CHARACTERS:
        raise UsageError(
            f"the expression has {len(expression)} characters; at most {MOST_CHARACTERS} are read. "
            "Give the coefficients instead"
        )
    return _value(expression, _Reader(expression, _tokens(expression)).read())


def _tokens(text: str) -> list[_Token]:
    plain = text.translate(_TYPESET)
    out, at = [], 0
    while at < len(plain):
        if plain[at].isspace():
            at += 1
            continue
        found = _TOKEN.match(plain, at)
        if found is None:
            reason = _FOREIGN.get(plain[at], f"{plain[at]!r} has no meaning here")
            raise _unreadable(text, at, at + 1, reason)
        token = _Token(str(found.lastgroup), found.group(), at, found.end())
        if token.kind == "number" and token.text.lower().partition("e")[0].count(".") > 1:
            raise _unreadable(text, token.begin, token.end, f"{token.text} is no number")
        out.append(token)
        at = found.end()
    return [*out, _Token("end", "", len(text), len(text))]


@dataclass(slots=True)
class _Reader:
    """Recursive descent: sum, product, signed, power, single. `steps` becomes the expression in postfix order."""

    text: str
    tokens: list[_Token]
    at: int = 0
    depth: int = 0
    steps: list[tuple[str, _Token]] = field(default_factory=list)

    def read(self) -> list[tuple[str, _Token]]:
        if self.tokens[0].kind == "end":
            raise UsageError("the expression is empty")
        self._sum()
        token = self._next
        if token.text == ")":
            raise self._error(token, "this bracket was never opened")
        if token.kind != "end":
            raise self._missing(token)
        return self.steps

    @property
    def _next(self) -> _Token:
        return self.tokens[self.at]

    def _take(self) -> _Token:
        self.at += 1
        return self.tokens[self.at - 1]

    def _error(self, token: _Token, reason: str) -> UsageError:
        return _unreadable(self.text, token.begin, token.end, reason)

    def _missing(self, token: _Token) -> UsageError:
        last = self.tokens[self.at - 1].text
        if "(" in (last, token.text) or last == ")":
            return self._error(token, f"an operator is missing: write * between {last} and {token.text}")
        return self._error(token, f"an operator is missing: write {last}*{token.text}")

    def _sum(self) -> None:
        self._chain(("+", "-"), self._product)

    def _product(self) -> None:
        self._chain(("*", "/"), self._signed)

    def _chain(self, signs: tuple[str, str], part: Callable[[], None]) -> None:
        part()
        while self._next.text in signs:
            operator = self._take()
            part()
            self.steps.append((operator.text, operator))

    def _signed(self) -> None:
        signs = []
        while self._next.text in ("+", "-"):
            signs.append(self._take())
        self._power()
        self.steps += [("negative", sign) for sign in signs if sign.text == "-"]

    def _power(self) -> None:
        self._single()
        if self._next.text in ("^", "**"):
            operator = self._take()
            self._deeper(operator, self._signed)
            self.steps.append(("power", operator))

    def _deeper(self, token: _Token, part: Callable[[], None]) -> None:
        self.depth += 1
        if self.depth > _DEEPEST:
            raise self._error(token, f"brackets and powers are nested more than {_DEEPEST} deep")
        part()
        self.depth -= 1

    def _single(self) -> None:
        token = self._take()
        if token.kind == "number":
            self.steps.append(("number", token))
        elif token.text == "s":
            self.steps.append(("s", token))
        elif token.text == "exp":
            if self._next.text != "(":
                raise self._error(token, "exp needs brackets: exp(-T*s)")
            self._bracketed(self._take())
            self.steps.append(("exp", token))
        elif token.kind == "name":
            raise self._error(token, _NAMES.get(token.text, f"{token.text} is not known: only numbers, s and exp are"))
        elif token.text == "(":
            self._bracketed(token)
        else:
            found = "the end" if token.kind == "end" else token.text
            raise self._error(token, f"a number, s, exp or an opening bracket was expected before {found}")

    def _bracketed(self, opening: _Token) -> None:
        self._deeper(opening, self._sum)
        token = self._next
        if token.kind == "end":
            raise self._error(opening, "this bracket is never closed")
        if token.text != ")":
            raise self._missing(token)
        self._take()


def _value(text: str, steps: list[tuple[str, _Token]]) -> Rational:
    stack: list[Rational] = []
    for operation, token in steps:
        try:
            if operation == "number":
                stack.append(_number(token.text))
            elif operation == "s":
                stack.append(Rational((Fraction(1), Fraction(0))))
            elif operation in ("negative", "exp"):
                only = stack.pop()
                stack.append(-only if operation == "negative" else only.delaying())
            else:
                right, left = stack.pop(), stack.pop()
                stack.append(_combined(operation, left, right))
        except AlgebraError as error:
            place = f"at character {token.begin + 1}: {_marked(text, token.begin, token.end)}"
            raise RecordError("expression", f"{error}, {place}") from None
    (value,) = stack
    return value


def _combined(operation: str, left: Rational, right: Rational) -> Rational:
    if operation == "power":
        return left.power(right)
    if operation in ("+", "-"):
        return left + (right if operation == "+" else -right)
    return left * (right if operation == "*" else right.inverse())


def _number(text: str) -> Rational:
    value = float(text)
    digits = text.lower().partition("e")[0].strip("0.")
    if math.isinf(value) or (value == 0.0 and digits):
        raise AlgebraError(f"{text} is too {'large' if value else 'small'} for a number")
    return Rational((Fraction(text),) if digits else ())


def _transfer(value: Rational, text: str) -> Transfer:
    shown = text if len(text) <= 2 * _SHOWN else f"{text[: 2 * _SHOWN]}..."
    if not value.top:
        raise RecordError(shown, "this is 0: a system that does not answer its input")
    if value.dead_time < 0:
        raise RecordError(
            shown,
            f"this answers {-float(value.dead_time):g} s before its input: no system predicts; "
            "dead time has a minus, exp(-T*s)",
        )
    if len(value.top) > len(value.bottom):
        raise RecordError(
            shown,
            f"the numerator is of degree {len(value.top) - 1}, the denominator of degree {len(value.bottom) - 1}: "
            "a system that differentiates its input does not exist; give the small lags that it has in truth",
        )
    scale = next(number for number in reversed(value.bottom) if number != 0)
    try:
        top, bottom = ([float(number / scale) for number in side] for side in (value.top, value.bottom))
        dead_time = float(value.dead_time)
    except OverflowError:
        raise RecordError(shown, "its coefficients are too far apart in size for numbers") from None
    exact = (*value.top, *value.bottom, value.dead_time)
    if any(number != 0 and made == 0.0 for number, made in zip(exact, (*top, *bottom, dead_time), strict=True)):
        raise RecordError(shown, "its coefficients are too far apart in size for numbers")
    return transfer_of(top, bottom, dead_time)


def _unreadable(text: str, begin: int, end: int, reason: str) -> UsageError:
    where = "at the end" if begin >= len(text) else f"at character {begin + 1}"
    return UsageError(f"the expression cannot be read: {reason}, {where}: {_marked(text, begin, end)}")


def _marked(text: str, begin: int, end: int) -> str:
    """Return the surroundings of a place in one line, the place between > and <."""
    before, here, after = (
        "".join(letter if letter.isprintable() else " " for letter in part)
        for part in (text[:begin], text[begin:end], text[end:])
    )
    if len(before) > _SHOWN:
        before = f"...{before[-_SHOWN:]}"
    if len(after) > _SHOWN:
        after = f"{after[:_SHOWN]}..."
    return f"{before}>{here if len(here) <= _SHOWN else f'{here[:_SHOWN]}...'}<{after}"
