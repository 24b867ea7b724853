"""Routh approximation (Hutton and Friedland 1975) and reduction in the Routh array (Krishnamurthy and Seshadri 1978)."""

from __future__ import annotations

import numpy as np

from loopfit.core.arrays import Array
from loopfit.equivalents.form import Form, forms_of
from loopfit.equivalents.system import RationalSystem

_NO_PIVOT = "a pivot of the Routh array of the numerator is 0"


def _next(above: Array, row: Array, factor: float) -> Array:
    """Return the row of the array after these two: above, moved by one, less factor times the row."""
    moved = np.append(above[1:], 0.0)
    other = np.append(row[1:], np.zeros(max(above.size - row.size + 1, 0)))[: moved.size]
    return np.asarray(moved - factor * other)


def routh_approximation(numerator: Array, denominator: Array) -> tuple[Array, Array]:
    """Return b1 s + b0 and s^2 + a1 s + a0, as arrays highest power first, for a strictly proper stable N / D of order 2 and above.

    The first two terms of the alpha-beta expansion of the reciprocal system, which is the one that keeps the behaviour
    at low frequency. M. F. Hutton and B. Friedland, Routh approximations for reducing order of linear, time-invariant
    systems, IEEE Trans. Automatic Control 20, 1975.
    """
    bottom = np.asarray(denominator, dtype=np.float64)[::-1]  # that of the reciprocal system, highest power first
    top = np.zeros(bottom.size - 1)
    top[: len(numerator)] = np.asarray(numerator)[::-1]
    first, second = bottom[::2], bottom[1::2]
    alpha1 = first[0] / second[0]
    third = _next(first, second, alpha1)
    alpha2, beta1, beta2 = second[0] / third[0], top[0] / second[0], top[1] / third[0]
    return np.array([beta2, alpha2 * beta1]), np.array([1.0, alpha2, alpha1 * alpha2])


def array_rows(coefficients: Array, degree: int) -> Array | None:
    """Return the polynomial of this degree that continues the Routh array of the given one; None at a pivot of 0.

    V. Krishnamurthy and V. Seshadri, Model reduction using the Routh stability criterion, IEEE Trans. Automatic
    Control 23, 1978.
    """
    values = np.trim_zeros(np.asarray(coefficients, dtype=np.float64), "f")
    above, row = values[::2], values[1::2]
    for _ in range(values.size - 1 - degree):
        if row[0] == 0.0:
            return None
        above, row = row, np.trim_zeros(_next(above, row, above[0] / row[0]), "b")
        if row.size == 0:
            return None
    out = np.zeros(degree + 1)
    out[::2], out[1::2] = above[: out[::2].size], row[: out[1::2].size]
    return out


def by_routh(system: RationalSystem) -> tuple[list[Form], str | None]:
    """Return the equivalent of a stable system of order 2 and above by Hutton and Friedland; a direct term is kept apart."""
    direct, proper = _parts(system)
    top, bottom = routh_approximation(proper, np.array(system.denominator))
    whole = direct * bottom
    whole[1:] += top
    return _forms(whole, bottom)


def by_routh_array(system: RationalSystem) -> tuple[list[Form], str | None]:
    """Return the equivalent of a stable system of order 2 and above by Krishnamurthy and Seshadri."""
    direct, proper = _parts(system)
    bottom = array_rows(np.array(system.denominator), 2)
    top = array_rows(proper, 1) if proper.size > 2 else np.append(np.zeros(2 - proper.size), proper)
    if bottom is None or top is None:
        return [], _NO_PIVOT
    whole = direct * bottom
    whole[1:] += top
    return _forms(whole, bottom)


def _parts(system: RationalSystem) -> tuple[float, Array]:
    """Return the direct term and the numerator of the rest, highest power first."""
    top, bottom = np.array(system.numerator), np.array(system.denominator)
    if top.size < bottom.size:
        return 0.0, top
    direct = float(top[0] / bottom[0])
    return direct, (top - direct * bottom)[1:]


def _forms(top: Array, bottom: Array) -> tuple[list[Form], str | None]:
    b2, b1, b0 = (float(value) for value in top)
    a2, a1, a0 = (float(value) for value in bottom)
    forms = forms_of((b2, b1, b0), (a2, a1, a0))
    return forms, None if forms else "no stable second-order model with a gain comes out"
