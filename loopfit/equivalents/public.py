"""Equivalents of whatever says a system: the public entry, where arguments are checked."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from typing import Any

import numpy as np

from loopfit.core.errors import UsageError
from loopfit.equivalents.expression import transfer_of_expression
from loopfit.equivalents.interchange import from_control, is_control_system, usable_transfer
from loopfit.equivalents.result import Equivalents
from loopfit.equivalents.spelling import expression_of
from loopfit.equivalents.system import RationalSystem
from loopfit.model.transfer import Transfer

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
        of that kind, such as a plant; or an object that has poles and a step response of its own.
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
    known = _transfer(given, coefficients=coefficients is not None)
    if known is None:
        if dead_time_s is not None:
            raise UsageError(f"{type(given).__name__} has its own dead time: it takes no dead_time_s")
        return equivalents_of(given, band_percent=float(band_percent))
    if dead_time_s is not None:
        more = usable_transfer([1.0], [1.0], dead_time_s, source="system").dead_time_s
        known = replace(known, dead_time_s=known.dead_time_s + more)
    expression = expression_of(known)
    if isinstance(given, str) and dead_time_s is None:
        expression = " ".join(given.split())
    return equivalents_of(RationalSystem(known), expression=expression, band_percent=float(band_percent))


def _transfer(given: Any, *, coefficients: bool) -> Transfer | None:
    """Return the transfer function that was given; None for an object that is a system of its own."""
    if isinstance(given, str) and not coefficients:
        return transfer_of_expression(given)
    if isinstance(given, tuple | list) or coefficients:
        if not isinstance(given, tuple | list) or len(given) != 2:
            raise UsageError("coefficients are a pair: numerator and denominator, each a list, highest power first")
        return usable_transfer(*given, source="coefficients")
    if isinstance(given, Transfer):
        return given
    if is_control_system(given):
        return from_control(given)
    held = getattr(given, "transfer", None)
    if isinstance(held, Transfer):
        return held
    if all(hasattr(given, name) for name in _OF_A_SYSTEM):
        return None
    raise UsageError(
        f"{type(given).__name__} is no system: give an expression in s, coefficients, or a python-control system"
    )
