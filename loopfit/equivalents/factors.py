"""Poles and zeros from coefficients, with repeated ones recognised, and pairs that cancel."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from loopfit.core.arrays import Array
from loopfit.core.errors import UsageError
from loopfit.model.transfer import Complex

_RADII = (0.6, 0.4, 0.25, 0.15, 0.08, 0.04, 0.02, 0.01, 3e-3, 1e-3, 1e-4, 1e-5, 1e-6)
_SAME_POLYNOMIAL = 1e-11  # of the sum of the sizes of the terms of a coefficient: rounding of some tens of factors
_FAR = 1e-14  # what the other roots change in the place of one far beyond them, relative
CANCELS = 1e-3  # relative distance of a pole and a zero, both stable: the step response changes by about as much
_CANCELS_UNSTABLE = 1e-7  # rounding of coefficients only: what it hides would grow


def roots_of(coefficients: Sequence[float]) -> Complex:
    """Return the roots of a real polynomial (highest power first), those furthest to the right first.

    A root of multiplicity m comes out of any root finder as m roots on a small circle of radius about eps^(1/m);
    such a cluster is replaced by its centre, m times, where the polynomial stays the same within rounding.

    Raises
    ------
    UsageError
        If a root is beyond what a number can hold.
    """
    values = np.asarray(coefficients, dtype=np.float64)
    at_zero = values.size - np.trim_zeros(values, "b").size
    values = values[: values.size - at_zero]
    fast: list[float] = []
    while values.size > 1:  # a root far beyond the others is found apart: side by side, rounding would hide them
        with np.errstate(over="ignore", under="ignore"):
            root = -values[1] / values[0]
            if root == 0.0:
                break
            beside = np.sum(np.abs(values[2:]) * abs(root) ** -np.arange(1.0, values.size - 1))
        if not beside <= _FAR * abs(values[1]):
            break
        if not np.isfinite(root):
            raise UsageError(f"the coefficients {values[0]:g} and {values[1]:g} of one polynomial are too far apart")
        fast.append(float(root))
        values = values[1:]
    return in_order(np.concatenate([_together(values), np.zeros(at_zero), fast]))


def in_order(roots: Complex) -> Complex:
    """Return roots, those furthest to the right first, of a pair the upper one first."""
    return roots[np.lexsort((-roots.imag, np.abs(roots.imag), -roots.real))]


def _together(values: Array) -> Complex:
    degree = values.size - 1
    if degree == 0:
        return np.zeros(0, dtype=complex)
    rate = float(np.exp((np.log(abs(values[-1])) - np.log(abs(values[0]))) / degree))
    scaled = values / values[0] * np.exp(-np.log(rate) * np.arange(degree + 1))
    return np.asarray(_with_repeated(np.roots(scaled).astype(complex), scaled) * rate)


def _with_repeated(roots: Complex, coefficients: Array) -> Complex:
    size = np.real(np.poly(-np.abs(roots)))
    free = np.ones(roots.size, dtype=bool)
    for radius in _RADII:
        if not free.any():
            break
        for group in _groups(roots, free, radius):
            merged = roots.copy()
            merged[group] = _centre(merged[group], coefficients)
            if merged[group[0]].imag != 0:  # the mirror image is a group too
                mirror = [int(np.argmin(np.abs(roots - roots[k].conj()))) for k in group]
                if len(set(mirror)) < len(group) or set(mirror) & set(group):
                    continue
                merged[mirror] = merged[group].conj()
                group = group + mirror
            if np.all(np.abs(np.real(np.poly(merged)) - coefficients) <= _SAME_POLYNOMIAL * size):
                roots, free[group] = merged, False
    return roots


def _groups(roots: Complex, free: NDArray[np.bool_], radius: float) -> list[list[int]]:
    """Return the sets of at least two free roots that are linked by relative distances below the radius."""
    near = np.abs(roots[:, None] - roots) <= radius * np.abs(roots)[:, None]
    near &= free[:, None] & free
    left, out = set(np.flatnonzero(free).tolist()), []
    while left:
        group, edge = set(), {min(left)}
        while edge:
            group |= edge
            edge = set(np.flatnonzero(near[sorted(edge)].any(axis=0)).tolist()) - group
        left -= group
        if len(group) > 1 and roots[sorted(group)].imag.sum() > -1e-9:
            out.append(sorted(group))
    return out


def _centre(group: Complex, coefficients: Array) -> complex:
    """Return the multiple root: the simple root of the derivative of that order, by Newton from the mean."""
    centre = complex(group.mean())
    if abs(centre.imag) <= 1e-9 * abs(centre):
        centre = complex(centre.real)
    lower = np.polyder(coefficients, group.size - 1)
    slope = np.polyder(lower)
    for _ in range(2):
        change = np.polyval(lower, centre) / np.polyval(slope, centre)
        if np.isfinite(change) and abs(change) <= 0.1 * abs(centre):
            centre -= complex(change)
    return centre


def cancelled(poles: Complex, zeros: Complex) -> tuple[Complex, Complex, tuple[str, ...]]:
    """Return the poles and zeros without those that lie on each other, and what was removed, in words.

    A stable pole goes with a zero within a relative distance of 0.001: the step response then changes by about
    0.1 %. A pole that is not stable goes only with a zero at the same place within rounding (1e-7).
    """
    left_poles, left_zeros, reasons = list(poles), list(zeros), []
    for pole in poles:
        if pole.imag < 0 or not left_zeros:  # goes with its mirror image
            continue
        distances = np.abs(np.array(left_zeros) - pole)
        nearest = int(np.argmin(distances))
        zero = left_zeros[nearest]
        both_stable = pole.real < 0 and zero.real < 0
        reach = (CANCELS if both_stable else _CANCELS_UNSTABLE) * abs(pole)
        if not distances[nearest] <= reach or (pole.imag == 0) != (zero.imag == 0):
            continue
        gone = [(pole, zero)] if pole.imag == 0 else [(pole, zero), (pole.conjugate(), zero.conjugate())]
        for one, other in gone:
            _remove(left_poles, one)
            _remove(left_zeros, other)
        reasons.append(
            f"the pole at {_text(pole)} rad/s was removed with the zero at {_text(zero)} rad/s "
            f"(relative distance {distances[nearest] / abs(pole):.1g}, at most {reach / abs(pole):g})"
            + ("" if both_stable else ": it is not stable, and what disturbs it grows unseen")
        )
    return np.array(left_poles, dtype=complex), np.array(left_zeros, dtype=complex), tuple(reasons)


def _remove(values: list[complex], value: complex) -> None:
    del values[int(np.argmin(np.abs(np.array(values) - value)))]


def _text(value: complex) -> str:
    return f"{value.real:.6g}" if value.imag == 0 else f"{value.real:.6g} ± {abs(value.imag):.6g}j"
