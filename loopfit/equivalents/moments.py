"""Matching of time moments (Gibilaro and Lees 1969)."""

from __future__ import annotations

import numpy as np

from loopfit.core.arrays import Array
from loopfit.equivalents.form import Form, forms_of
from loopfit.equivalents.system import RationalSystem


def series_of(numerator: Array, denominator: Array, count: int) -> Array:
    """Return g0, g1, ... of N(s) / D(s) = g0 + g1 s + ..., (count,); coefficients highest power first, D(0) not 0.

    g_k is (-1)^k / k! times the k-th time moment of the impulse response.
    """
    top, bottom = np.zeros(count), np.zeros(count)
    low_top, low_bottom = np.asarray(numerator)[::-1][:count], np.asarray(denominator)[::-1][:count]
    top[: low_top.size], bottom[: low_bottom.size] = low_top, low_bottom
    out = np.zeros(count)
    for k in range(count):
        out[k] = (top[k] - bottom[1 : k + 1] @ out[:k][::-1]) / bottom[0]
    return out


def zero_match(series: Array) -> tuple[float, float, float, float] | None:
    """Return a2, a1, b1, b0 of (b1 s + b0) / (a2 s^2 + a1 s + 1) with the same g0..g3; None if there is none."""
    g0, g1, g2, g3 = (float(value) for value in series[:4])
    divisor = g1 * g1 - g0 * g2
    if abs(divisor) <= 1e-12 * (g1 * g1 + abs(g0 * g2)):
        return None
    # g2 + a1 g1 + a2 g0 = 0 and g3 + a1 g2 + a2 g1 = 0
    a1 = (g3 * g0 - g1 * g2) / divisor
    a2 = (g2 * g2 - g1 * g3) / divisor
    return a2, a1, g1 + a1 * g0, g0


def dead_time_match(series: Array) -> tuple[float, float, float] | None:
    """Return a2, a1 and dead time of g0 exp(-dead_time s) / (a2 s^2 + a1 s + 1) with the same g0..g3; None if there is none.

    In cumulants (mean m, variance v, third w) of the impulse response: dead_time + a1 = m, a1^2 - 2 a2 = v and
    a1^3 - 3 v a1 + w = 0, of which at most one root leaves a2 positive.
    """
    h1, h2, h3 = (float(value) for value in series[1:4] / series[0])
    mean, variance = -h1, 2.0 * h2 - h1 * h1
    third = -2.0 * (3.0 * h3 - 3.0 * h1 * h2 + h1**3)
    roots = np.roots([1.0, 0.0, -3.0 * variance, third])
    scale = abs(mean) + abs(variance) ** 0.5
    for a1 in sorted((float(root.real) for root in roots if abs(root.imag) <= 1e-7 * scale), reverse=True):
        a2 = 0.5 * (a1 * a1 - variance)
        dead_time = mean - a1
        if a1 > 0.0 and a2 > 1e-9 * a1 * a1 and dead_time >= -1e-9 * a1:
            return a2, a1, max(dead_time, 0.0)
    return None


def by_moments(system: RationalSystem) -> tuple[list[Form], str | None]:
    """Return the equivalents whose time moments of order 0 to 3 are those of a stable system, or why there is none.

    With a dead time, or with a zero. L. G. Gibilaro and F. P. Lees, The reduction of complex transfer function models
    to simple models using the method of moments, Chemical Engineering Science 24, 1969 (from memory).
    """
    series = series_of(np.array(system.numerator), np.array(system.denominator), 4)
    forms = []
    late = dead_time_match(series)
    if late is not None:
        a2, a1, dead_time = late
        forms.append(Form(gain=float(series[0]), a1=a1, a2=a2, dead_time=dead_time))
    zero = zero_match(series)
    if zero is not None:
        a2, a1, b1, b0 = zero
        forms += forms_of((0.0, b1, b0), (a2, a1, 1.0))
    return forms, None if forms else "no stable second-order model has these moments"
