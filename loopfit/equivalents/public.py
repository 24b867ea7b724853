"""Equivalents of whatever says a system: the public entry, where arguments are checked."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from fractions import Fraction
from typing import Any

import numpy as np

from loopfit.core.errors import UsageError
from loopfit.equivalents.expression import system_of_expression
from loopfit.equivalents.interchange import from_control, is_control_system, usable_transfer
from loopfit.equivalents.rational import Rational
from loopfit.equivalents.result import Equivalents
from loopfit.equivalents.spelling import expression_of
from loopfit.equivalents.system import RationalSystem
from loopfit.equivalents.trust import with_better_roots, with_exact_roots
from loopfit.model.transfer import Transfer

_DIGITS = 15  # of a float that surely say which decimal it was
_OF_A_SYSTEM = ("numerator", "denominator", "dead_time_s", "poles", "zeros", "static_gain", "stable", "step")


def equivalent(
    system: Any = None,
    *,
    coefficients: tuple[Sequence[float], Sequence[float]] | None = None,
    dead_time_s: float | None = None,
    band_percent: float = 2.0,
) -> Equivalents:
    """Return second-order models that stand for a system, each with its step error, and which to use.

    Parameters
    ----------
    system
        An expression in s, such as "2*exp(-0.5*s)/((3*s+1)*(s+1))"; a pair (numerator, denominator) of coefficients,
        highest power first; a python-control TransferFunction or StateSpace; a `Transfer`; anything with a `transfer`
        of that kind, such as a plant; a loop, which stands for its way from setpoint to measurement; or an object that
        has poles and a step response of its own.
    coefficients : tuple of two sequences, optional
        Numerator and denominator, instead of `system`.
    dead_time_s : float, optional
        Dead time, s, besides the one that the system has.
    band_percent : float
        Settling band of the exact response, ± % of its final value.

    Raises
    ------
    UsageError
        If the arguments make no sense, or an expression cannot be read.
    RecordError
        If what they say is no usable system: it predicts, differentiates its input, divides by zero.
    """
    if isinstance(band_percent, bool) or not isinstance(band_percent, int | float | np.number):
        raise UsageError(f"the settling band is a number, not {band_percent!r}")
    if not 0 < band_percent < 50:
        raise UsageError(f"the settling band must be above 0 and below 50 %, not {band_percent:g}")
    if (system is None) == (coefficients is None):
        raise UsageError("give a system or coefficients, one of them")
    from loopfit.equivalents.choose import equivalents_of

    given: Any = coefficients if system is None else system
    is_text = coefficients is None and isinstance(given, str)
    transfer = None if is_text else _transfer(given, coefficients=coefficients is not None)
    if transfer is None and not is_text:
        if dead_time_s is not None:
            raise UsageError(f"{type(given).__name__} has its own dead time: it takes no dead_time_s")
        return _continuous(equivalents_of(_with_response(given), band_percent=float(band_percent)), given)
    if transfer is None:
        known = system_of_expression(given)
    elif isinstance(given, tuple | list) and (exact := _as_written(given)) is not None:
        known = with_exact_roots(transfer, exact)
    else:
        known = with_better_roots(RationalSystem(transfer))
    if dead_time_s is not None:
        more = usable_transfer([1.0], [1.0], dead_time_s, source="system").dead_time_s
        known = replace(known, transfer=replace(known.transfer, dead_time_s=known.dead_time_s + more))
    if is_text and dead_time_s is None:
        expression = " ".join(given.split())
    elif isinstance(given, tuple | list):
        top, bottom = (tuple(float(value) for value in _without_zeros(side)) for side in given)
        expression = expression_of(replace(known.transfer, numerator=top, denominator=bottom))
    else:
        expression = expression_of(known.transfer)
    return _continuous(equivalents_of(known, expression=expression, band_percent=float(band_percent)), given)


def _transfer(given: Any, *, coefficients: bool) -> Transfer | None:
    """Return the transfer function that was given; None for an object that is a system of its own."""
    if isinstance(given, tuple | list) or coefficients:
        if not isinstance(given, tuple | list) or len(given) != 2:
            raise UsageError("coefficients are a pair: numerator and denominator, each a list, highest power first")
        return usable_transfer(*given, source="coefficients")
    if isinstance(given, Transfer):
        return given
    if is_control_system(given):
        return from_control(given)
    whole = _with_response(given)
    for name in ("transfer", "rational"):
        held = getattr(whole, name, None)
        if isinstance(held, Transfer):
            return held
    if all(hasattr(whole, name) for name in _OF_A_SYSTEM):
        return None
    raise UsageError(
        f"{type(given).__name__} is no system: give an expression in s, coefficients, or a python-control system"
    )


def _as_written(given: Sequence[Any]) -> Rational | None:
    """Return coefficients as the decimals that they were written as; None where one has more digits than people write."""
    sides = []
    for side in given:
        texts = [repr(float(value)) for value in _without_zeros(side)]
        if any(len(text.partition("e")[0].replace(".", "").strip("-0")) > _DIGITS for text in texts):
            return None
        sides.append(tuple(Fraction(text) for text in texts))
    return Rational(sides[0], sides[1])


def _without_zeros(side: Any) -> Any:
    return np.trim_zeros(np.atleast_1d(np.asarray(side, dtype=np.float64)), "f")


def _continuous(found: Equivalents, given: Any) -> Equivalents:
    """Say of a sampled loop that it was taken as continuous."""
    scan = getattr(given, "scan_s", None)
    if scan is None:
        return found
    note = f"the loop was taken as continuous: what its scan interval of {scan:g} s does to it is not in these figures"
    return replace(found, reasons=(note, *found.reasons))


def _with_response(given: Any) -> Any:
    """Return what answers a step: of a loop, the closed loop from setpoint to measurement."""
    return getattr(given, "closed", given)
