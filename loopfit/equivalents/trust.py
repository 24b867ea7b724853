"""How far the poles and zeros of a system can be trusted, and better ones where its coefficients tell them only roughly."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace
from fractions import Fraction

import numpy as np

from loopfit.core.arrays import Array
from loopfit.equivalents.precise import precise_roots
from loopfit.equivalents.rational import Rational
from loopfit.equivalents.system import RationalSystem
from loopfit.model.transfer import Complex, Transfer

_ROUNDING = float(np.finfo(np.float64).eps)
_SURE = 1e-11  # relative: roots that rounding moves by less are taken as they come
_SAME_RESPONSE = 1e-6  # of the final value: poles and zeros that answer this nearly are those of the coefficients
_MOVED = 1e-2  # relative: poles that rounding may move by more deserve a word
_WORTH_SAYING = 1e-4  # of the final value
_GRID = 400


def with_exact_roots(transfer: Transfer, exact: Rational) -> RationalSystem:
    """Return the system of an expression; `exact` has the coefficients that `transfer` has rounded."""
    system = RationalSystem(transfer)
    sides = ((exact.top, transfer.numerator, system.zeros), (exact.bottom, transfer.denominator, system.poles))
    known: list[tuple[complex, ...]] = []
    for polynomial, coefficients, found in sides:
        roots: Complex | None = found
        if moved_by_rounding(coefficients, found).max(initial=0.0) > _SURE:
            roots = precise_roots(polynomial[: len(coefficients)])  # common factors of s stand at the end of both
        if roots is None:
            return with_better_roots(system)
        known.append(tuple(complex(root) for root in roots))
    return replace(system, known_zeros=known[0], known_poles=known[1], rounded=False)


def with_better_roots(system: RationalSystem) -> RationalSystem:
    """Return a system of rounded coefficients with roots that answer as the coefficients do, as far as they can be found."""
    doubt = response_doubt(system)
    if doubt is None or doubt <= _SAME_RESPONSE:
        return system
    sides = [precise_roots(tuple(Fraction(v) for v in side)) for side in (system.numerator, system.denominator)]
    if sides[0] is None or sides[1] is None:
        return system
    better = replace(
        system,
        known_zeros=tuple(complex(root) for root in sides[0]),
        known_poles=tuple(complex(root) for root in sides[1]),
    )
    after = response_doubt(better)
    return better if after is not None and after < doubt else system


def moved_by_rounding(coefficients: Sequence[float], roots: Complex) -> Array:
    """Return how far the rounding of the coefficients may move each root, relative, to the first order; (n,).

    eps * sum of |a_k z^k| / |z p'(z)|; inf at a repeated root, 0 at the origin (J. H. Wilkinson, Rounding errors in
    algebraic processes, 1963, from memory).
    """
    out = np.zeros(roots.size)
    values, away = np.trim_zeros(np.abs(np.asarray(coefficients, dtype=np.float64)), "b"), roots[roots != 0]
    if away.size == 0:
        return out
    powers = np.arange(values.size - 1, -1, -1)
    with np.errstate(divide="ignore", over="ignore", under="ignore"):
        logs = np.log(values) + np.log(np.abs(away))[:, None] * powers
        highest = logs.max(axis=1)
        terms = highest + np.log(np.exp(logs - highest[:, None]).sum(axis=1))
        apart = np.abs(away[:, None] - away)
        np.fill_diagonal(apart, 1.0)
        slope = math.log(values[0]) + np.log(np.abs(away)) + np.log(apart).sum(axis=1)
        out[roots != 0] = _ROUNDING * np.exp(terms - slope)
    return out


def response_doubt(system: RationalSystem) -> float | None:
    """Return how far the step response of the poles and zeros is from that of the coefficients, as a share of the final value.

    By the difference of their frequency responses over the frequency, the first of which rounding hardly touches; an
    estimate. None where there is no final value, or none that is not 0.
    """
    gain, poles, zeros = system.static_gain, system.poles, system.zeros
    if not gain or poles.size == 0 or not system.stable:
        return None
    sizes = np.abs(np.concatenate([poles, zeros[zeros != 0]]))
    w = np.geomspace(1e-3 * sizes.min(), 1e3 * sizes.max(), _GRID)
    with np.errstate(all="ignore"):
        own = np.zeros(w.size, dtype=complex)
        for side, sign in ((system.numerator, 1.0), (system.denominator, -1.0)):
            # both sides by (w / size)^k, so that none overflows
            rate = math.exp(float(np.mean(np.log(sizes))))
            scaled = np.array(side) * rate ** np.arange(len(side) - 1.0, -1.0, -1.0)
            own += sign * np.log(np.polyval(scaled, 1j * w / rate).astype(complex))
        lead = system.numerator[0] / system.denominator[0]
        other = (
            np.log(complex(lead))
            + np.log(1j * w[:, None] - zeros).sum(axis=1)
            - np.log(1j * w[:, None] - poles).sum(axis=1)
        )
        response = np.exp(own)
        apart = np.abs(response * (np.exp(other - own) - 1.0)) / abs(gain)
        doubt = float(apart[0] + np.trapezoid(apart, np.log(w)) / math.pi)
    return doubt if math.isfinite(doubt) else math.inf


def cautions(system: RationalSystem) -> tuple[str, ...]:
    """Return what is to be said of poles and zeros that the coefficients tell only roughly."""
    out = []
    doubt = response_doubt(system)
    if doubt is not None and doubt > _WORTH_SAYING:
        out.append(
            "the poles and zeros could not be found well from these coefficients: the step response may be off by about "
            f"{100.0 * doubt:.2g} % of the final value; give the system as products and sums of its factors"
        )
    if not system.rounded:
        return tuple(out)
    moved = moved_by_rounding(system.denominator, system.poles)
    doubtful = np.isfinite(moved) & (moved > _MOVED)
    if doubtful.any():
        worst = float(moved[doubtful].max())
        size = f"about {100.0 * worst:.2g} % of" if worst < 1.0 else "as much as"
        answer = ""
        if doubt is not None and doubt <= _WORTH_SAYING:
            answer = f", the step response by no more than about {max(100.0 * doubt, 1e-6):.1g} % of the final value"
        out.append(
            f"rounding in the last digit of the coefficients may move poles by {size} their size{answer}: "
            "where the factors are known, give those"
        )
    return tuple(out)
