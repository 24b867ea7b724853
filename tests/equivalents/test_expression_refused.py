"""What is no expression in s, or no system: each in its own words, with the place marked."""

from __future__ import annotations

import pickle

import pytest

from loopfit.core.errors import RecordError, UsageError
from loopfit.equivalents.expression import transfer_of_expression

UNREADABLE = [
    ("2/(s+*1)", "expected before *", "at character 6: 2/(s+>*<1)"),
    ("2s", "write 2*s", "at character 2: 2>s<"),
    ("2 s/(s+1)", "write 2*s", "at character 3: 2 >s</(s+1)"),
    ("(s+1)(s+2)", "write * between ) and (", "at character 6: (s+1)>(<s+2)"),
    ("3(s+1)", "write * between 3 and (", "at character 2: 3>(<s+1)"),
    ("1/(s+1) 2", "write * between ) and 2", "at character 9: 1/(s+1) >2<"),
    ("(2s+1)/s", "write 2*s", "at character 3: (2>s<+1)/s"),
    ("2exp(-s)", "write 2*exp", "at character 2: 2>exp<(-s)"),
    ("2*(s+1", "never closed", "at character 3: 2*>(<s+1"),
    ("exp(-s", "never closed", "at character 4: exp>(<-s"),
    ("2/(s+1))", "never opened", "at character 8: 2/(s+1)>)<"),
    ("2/", "expected before the end", "at the end: 2/><"),
    ("()", "expected before )", "at character 2: (>)<"),
    ("s^", "expected before the end", "at the end: s^><"),
    ("*s", "expected before *", "at character 1: >*<s"),
    ("1,5/(s+1)", "written . and not ,", "at character 2: 1>,<5/(s+1)"),
    ("1.2.3", "1.2.3 is no number", "at character 1: >1.2.3<"),
    ("[1]", "only round brackets", "at character 1: >[<1]"),
    ("G=1/s", "right of =", "at character 2: G>=<1/s"),
    ("1/(S+1)", "small s", "at character 4: 1/(>S<+1)"),
    ("1/(p+1)", "the variable is written s", "at character 4: 1/(>p<+1)"),
    ("e^(-2*s)", "exp(-T*s)", "at character 1: >e<^(-2*s)"),
    ("sin(s)", "sin is not known", "at character 1: >sin<(s)"),
    ("exp -s", "exp needs brackets", "at character 1: >exp< -s"),
    ("1/(s+1)\n+$", "'$' has no meaning", "at character 10: 1/(s+1) +>$<"),
    ("__import__(s)", "__import__ is not known", "at character 1: >__import__<(s)"),
    ("s.real", "has no meaning", "at character 2: s>.<real"),
    ("²", "not known", "at character 1: >²<"),
    ("٣", "has no meaning", "at character 1: >٣<"),
    (
        "1" + "+1" * 40 + "+%" + "+1" * 40,
        "'%'",
        "at character 83: ...1+1+1+1+1+1+1+1+1+1+1+1+1+1+>%<+1+1+1+1+1+1+1+1+1+1+1+1+1+1...",
    ),
    ("(" * 101 + "1", "more than 100 deep", "at character 101: ...(((("),
    ("2^" * 102 + "1", "more than 100 deep", "at character 202"),
    ("", "empty", ""),
    (" \t\n", "empty", ""),
    ("1+" * 1000 + "1", "2001 characters; at most 2000", ""),
]

UNUSABLE = [
    ("1/0", "divides by zero", "at character 2: 1>/<0"),
    ("1/(s-s)", "divides by zero", "at character 2: 1>/<(s-s)"),
    ("0^-1", "divides by zero", "at character 2: 0>^<-1"),
    ("0*s", "this is 0", ""),
    ("1/(s+1)-1/(s+1)", "this is 0", ""),
    ("exp(2*s)/(s+1)", "2 s before its input", ""),
    ("1/(exp(-s)*(s+1))", "1 s before its input", ""),
    ("s", "differentiates", ""),
    ("s^2/(s+1)", "degree 2, the denominator of degree 1", ""),
    ("1e999/(s+1)", "1e999 is too large", "at character 1: >1e999</(s+1)"),
    ("1e-999/(s+1)", "1e-999 is too small", "at character 1: >1e-999</(s+1)"),
    ("9^9^9^9", "larger or smaller than any number", "at character 4: 9^9>^<9^9"),
    ("1e300*1e300/(s+1)", "too far apart", ""),
    ("1/(1e-300*1e-300*s^2+s+1)", "too far apart", ""),
    ("exp(-s)+1/(s+1)", "different dead times, 1 and 0 s", "at character 8: exp(-s)>+<1/(s+1)"),
    ("1/(1-exp(-s))", "different dead times, 0 and 1 s", "at character 5: 1/(1>-<exp(-s))"),
    ("2^s", "s in an exponent", "at character 2: 2>^<s"),
    ("s**s", "s in an exponent", "at character 2: s>**<s"),
    ("1/s^0.5", "the power 0.5 is not a whole number", "at character 4: 1/s>^<0.5"),
    ("(-8)^(1/3)/(s+1)", "the power 0.333333 of -8", "at character 5: (-8)>^<(1/3)/(s+1)"),
    ("(s+1)^61", "of degree 61 in s; the limit is 60", "at character 6: (s+1)>^<61"),
    ("1/((s+1)^40*(s+2)^30)", "of degree 70", "at character 12: 1/((s+1)^40>*<(s+2)^30)"),
    ("s^99999999999999", "of degree 99999999999999", "at character 2: s>^<99999999999999"),
    ("exp(-s^2)", "only of -T*s", "at character 1: >exp<(-s^2)"),
    ("exp(-1/s)", "only of -T*s", "at character 1: >exp<(-1/s)"),
    ("exp(-s+1)/(s+1)", "here 1 stands beside it", "at character 1: >exp<(-s+1)/(s+1)"),
    ("exp(2)/(s+1)", "here 2 stands beside it", "at character 1: >exp<(2)/(s+1)"),
    ("exp(exp(-s))", "exp inside exp", "at character 1: >exp<(exp(-s))"),
]


@pytest.mark.parametrize(("text", "words", "place"), UNREADABLE)
def test_unreadable(text: str, words: str, place: str) -> None:
    with pytest.raises(UsageError) as caught:
        transfer_of_expression(text)
    assert words in str(caught.value)
    assert place in str(caught.value)


@pytest.mark.parametrize(("text", "words", "place"), UNUSABLE)
def test_unusable(text: str, words: str, place: str) -> None:
    with pytest.raises(RecordError) as caught:
        transfer_of_expression(text)
    assert words in str(caught.value)
    assert place in str(caught.value)
    assert str(pickle.loads(pickle.dumps(caught.value))) == str(caught.value)


def test_what_cannot_be_read_comes_before_what_cannot_be_used() -> None:
    with pytest.raises(UsageError, match="never opened"):
        transfer_of_expression("1/0)")
    with pytest.raises(UsageError, match="is text"):
        transfer_of_expression(3)  # type: ignore[arg-type]
