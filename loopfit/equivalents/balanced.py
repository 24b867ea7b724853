"""Balanced truncation (Moore 1981), and the same with the states at rest instead of left out (Fernando and Nicholson 1982)."""

from __future__ import annotations

from dataclasses import replace
from typing import Any, NamedTuple

import numpy as np

from loopfit.core.arrays import Array
from loopfit.equivalents.form import Form, forms_of
from loopfit.equivalents.system import RationalSystem

_NO_STATE = 1e-12  # of the largest Hankel singular value: below, a state is neither reached nor seen


class Balanced(NamedTuple):
    """Balanced states, those most reached and seen first, and their Hankel singular values."""

    A: Array
    B: Array
    C: Array
    singular_values: Array


def balanced(A: Array, B: Array, C: Array) -> Balanced:
    """Return the balanced form of a stable x' = A x + B u, y = C x with one input and one output.

    Square-root method: the factors of both Gramians, and the singular values of their product. B. C. Moore, Principal
    component analysis in linear systems, IEEE Trans. Automatic Control 26, 1981.
    """
    from scipy.linalg import solve_continuous_lyapunov, svd

    reached = _factor(solve_continuous_lyapunov(A, -np.outer(B, B)))
    seen = _factor(solve_continuous_lyapunov(A.T, -np.outer(C, C)))
    left, values, right = svd(seen.T @ reached)
    kept = values > _NO_STATE * values[0]
    root = np.sqrt(values[kept])
    into = (seen @ left[:, kept] / root).T
    back = reached @ right[kept].T / root
    return Balanced(into @ A @ back, into @ B, C @ back, values)


def _factor(gramian: Any) -> Array:
    values, vectors = np.linalg.eigh(0.5 * (gramian + gramian.T))
    return np.asarray(vectors * np.sqrt(np.maximum(values, 0.0)))


def truncated(whole: Balanced, D: float) -> tuple[tuple[float, float, float], tuple[float, float, float]]:
    """Return numerator and denominator, highest power first, of the first two states alone."""
    return _rational(whole.A[:2, :2], whole.B[:2], whole.C[:2], D)


def residualised(whole: Balanced, D: float) -> tuple[tuple[float, float, float], tuple[float, float, float]]:
    """Return the same with the other states at rest: it keeps the gain, and has a direct term.

    K. V. Fernando and H. Nicholson, Singular perturbational model reduction of balanced systems, IEEE Trans.
    Automatic Control 27, 1982.
    """
    A, B, C = whole.A, whole.B, whole.C
    rest = np.linalg.solve(A[2:, 2:], np.column_stack([A[2:, :2], B[2:]]))
    return _rational(
        A[:2, :2] - A[:2, 2:] @ rest[:, :2],
        B[:2] - A[:2, 2:] @ rest[:, 2],
        C[:2] - C[2:] @ rest[:, :2],
        D - float(C[2:] @ rest[:, 2]),
    )


def _rational(A: Array, B: Array, C: Array, D: float) -> tuple[tuple[float, float, float], tuple[float, float, float]]:
    trace, determinant = float(np.trace(A)), float(np.linalg.det(A))
    first, second = float(C @ B), float(C @ (A @ B - trace * B))
    return (D, first - D * trace, second + D * determinant), (1.0, -trace, determinant)


def by_balancing(system: RationalSystem) -> tuple[list[Form], list[Form], str | None]:
    """Return the equivalents of a stable system by truncation and by residualisation, or why there is none."""
    state = system.realisation
    whole = balanced(state.A, state.B, state.C)
    if whole.B.size < 2:
        return [], [], "fewer than two states are both reached and seen"
    out = []
    for top, bottom in (truncated(whole, state.D), residualised(whole, state.D)):
        w = state.rate  # the states run in units of 1 / rate
        out.append(forms_of((top[0] / w**2, top[1] / w, top[2]), (bottom[0] / w**2, bottom[1] / w, bottom[2])))
    gain, kept = system.static_gain or 1.0, [form for form in out[0] if form.gain != 0.0]
    if kept and abs(kept[0].gain / gain - 1.0) > 1e-3:
        word = f"truncation changes the gain by {100.0 * (kept[0].gain / gain - 1.0):+.1f} %"
        out[0] = [replace(form, note="; ".join(text for text in (word, form.note) if text)) for form in out[0]]
    return out[0], out[1], None if out[0] or out[1] else "no stable second-order model with a gain comes out"
