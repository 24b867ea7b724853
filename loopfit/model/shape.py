"""The unit step response of a second-order system, its derivatives and its integrals.

Two spellings of one family, `a F0' + b F0 + F1 = 1` with F0 = dF1/dx:

- `lag_shape`: time in units of the sum of the time constants, a = r, b = 1, r = T1 T2 / (T1 + T2)^2
  = 1 / (4 zeta^2). It runs without a seam from r = 0 (first order) through r = 1/4 (critical) upwards.
- `swing_shape`: time in units of 1 / omega_n, a = 1, b = 2 zeta. zeta may pass through 0, so that a
  growing oscillation is an ordinary point.

Closed forms: any text on linear systems (e.g. Ogata, Modern Control Engineering, section 5-3, from
memory); the derivatives in r and zeta follow by differentiation.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from loopfit.core.arrays import Array

_NEAR_CRITICAL = 1e-4
_LARGEST_EXPONENT = 600.0
_SERIES_TERMS = 9
_SMALLEST_R = 1e-9


class Shape(NamedTuple):
    """Step response F1, its slope F0, and the derivatives of both in the shape parameter."""

    step: Array
    slope: Array
    step_by_shape: Array
    slope_by_shape: Array


def lag_shape(x: Array, r: Array, *, derivatives: bool = True) -> Shape:
    """Return the response at x >= 0 in units of the sum of the time constants.

    Parameters
    ----------
    x : (B, M) array
        Time since the response began, in units of T; negative times count as 0.
    r : (B,) array
        1 / (4 zeta^2), at least 0.
    derivatives : bool
        Without them the last two arrays are the first two again.

    Returns
    -------
    Shape
        Four (B, M) arrays; derivatives are in r.
    """
    x = np.maximum(x, 0.0)
    r = np.maximum(r, _SMALLEST_R)
    d = 1.0 - 4.0 * r
    regimes = ((d > _NEAR_CRITICAL, _overdamped), (d < -_NEAR_CRITICAL, _underdamped))
    for chosen, formula in regimes:
        if chosen.all():
            return formula(x, r[:, None], d[:, None], derivatives)
    out = [np.empty_like(x) for _ in range(4 if derivatives else 2)]
    for chosen, formula in (*regimes, (np.abs(d) <= _NEAR_CRITICAL, _near_critical)):
        if chosen.any():
            parts = formula(x[chosen], r[chosen, None], d[chosen, None], derivatives)
            for whole, part in zip(out, parts, strict=False):
                whole[chosen] = part
    return Shape(out[0], out[1], *out[-2:])


def _overdamped(x: Array, r: Array, d: Array, derivatives: bool) -> Shape:
    q = np.sqrt(d)
    p1 = 0.5 * (1.0 + q)
    p2 = r / p1
    e1 = np.exp(-x / p1)
    e2 = np.exp(-np.minimum(x / p2, _LARGEST_EXPONENT))
    h = (e1 - e2) / q
    g = 1.0 - (p1 * e1 - p2 * e2) / q
    if not derivatives:
        return Shape(g, h, g, h)
    f1, f2 = e1 / p1, e2 / p2
    both = f1 + f2
    g_r = (x * both - h) / d
    h_r = (both - x * (f1 / p1 + f2 / p2) + (f1 - f2) / q) / d
    return Shape(g, h, g_r, np.where(x > 0, h_r, 0.0))


def _underdamped(x: Array, r: Array, d: Array, derivatives: bool) -> Shape:
    a = 0.5 / r
    w = np.sqrt(-d) * a
    angle = w * x
    E = np.exp(-a * x)
    c, s = np.cos(angle), np.sin(angle)
    c *= E
    s *= E
    s *= 1.0 / w
    if not derivatives:
        g, h = 1.0 - (c + a * s), s * (2.0 * a)
        return Shape(g, h, g, h)
    turned = x * c
    k = s - turned
    k *= 1.0 / (w * w)
    return _from_swing(x, a, c, s, turned, k)


def _near_critical(x: Array, r: Array, d: Array, derivatives: bool) -> Shape:  # noqa: ARG001
    a = 0.5 / r
    z = d * (a * x) ** 2  # -(w x)^2: an even power series has no seam at 0
    E = np.exp(-a * x)
    z = np.where(a * x > _LARGEST_EXPONENT, 0.0, z)
    c = s = k = np.zeros_like(x)
    for j in range(_SERIES_TERMS, -1, -1):  # Horner, highest term first
        c = 1.0 + c * z / ((2 * j + 1) * (2 * j + 2))
        s = 1.0 + s * z / ((2 * j + 2) * (2 * j + 3))
        k = 1.0 + k * z * (j + 2) / ((j + 1) * (2 * j + 4) * (2 * j + 5))
    c = c * E
    return _from_swing(x, a, c, x * s * E, x * c, x**3 * k * E / 3.0)


def _from_swing(x: Array, a: Array, c: Array, s: Array, turned: Array, k: Array) -> Shape:
    """Combine cosine, sine / w, x times cosine and (s - x c) / w^2, all decayed, into the response and its derivatives.

    Written with few intermediate arrays: at some thousand samples the cost is memory.
    """
    g = a * s
    g += c
    np.subtract(1.0, g, out=g)
    h = s * (2.0 * a)
    late = x * s
    g_r = a * k
    g_r -= late
    g_r *= 2.0 * a * a
    late *= a
    turned += s
    turned -= late
    turned *= -2.0 * a * a
    turned -= a * g_r
    return Shape(g, h, g_r, turned)


def swing_shape(x: Array, zeta: Array, *, derivatives: bool = True) -> Shape:  # noqa: ARG001
    """Return the response at x >= 0 in units of 1 / omega_n; zeta below 1, of either sign.

    Parameters
    ----------
    x : (B, M) array
        omega_n times the time since the response began; negative times count as 0.
    zeta : (B,) array
        Damping ratio; values of 0.999 and above are cut off there.

    Returns
    -------
    Shape
        Four (B, M) arrays; derivatives are in zeta.
    """
    x = np.maximum(x, 0.0)
    z = np.minimum(zeta, 0.999)[:, None]
    w2 = 1.0 - z * z
    w = np.sqrt(np.maximum(w2, 1e-12))
    E = np.exp(np.clip(-z * x, -_LARGEST_EXPONENT, 0.25 * _LARGEST_EXPONENT))
    c, s = np.cos(w * x), np.sin(w * x) / w
    k = (x * c - s) / w2
    return Shape(1.0 - E * (c + z * s), E * s, E * k, -E * (x * s + z * k))


def ladder(x: Array, shape: Shape, a: Array, b: Array, lowest: int, highest: int) -> dict[int, Array]:
    """Return F_k for k = lowest..highest: F1 the step response, F0 its slope, F2 and F3 its integrals.

    Each follows from the differential equation: F_-1 = (1 - F1 - b F0) / a, F2 = x - b F1 - a F0,
    F3 = x^2 / 2 - b F2 - a F1; all are 0 before the response begins.

    Parameters
    ----------
    x : (B, M) array
        Time as given to the shape, at least 0.
    a, b : (B, 1) arrays
        Coefficients of the equation.
    """
    out = {1: shape.step, 0: shape.slope}
    if lowest < 0:
        out[-1] = np.where(x > 0, (1.0 - shape.step - b * shape.slope) / a, 0.0)
    if highest > 1:
        taken = a * shape.slope
        taken += b * shape.step
        out[2] = np.subtract(x, taken, out=taken)
    if highest > 2:
        out[3] = 0.5 * x * x - b * out[2] - a * shape.step
    return out


def ladder_by_shape(
    shape: Shape, rungs: dict[int, Array], a: Array, b: Array, a_by: float, b_by: float, highest: int
) -> dict[int, Array]:
    """Return the derivatives of F0..F_highest in the shape parameter (a_by, b_by: those of a and b)."""
    out = {1: shape.step_by_shape, 0: shape.slope_by_shape}
    for k in range(2, highest + 1):
        change = a * out[k - 2]
        change += b * out[k - 1]
        if a_by != 0.0:
            change += a_by * rungs[k - 2]
        if b_by != 0.0:
            change += b_by * rungs[k - 1]
        out[k] = np.negative(change, out=change)
    return out
