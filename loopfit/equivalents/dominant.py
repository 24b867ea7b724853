"""Dominant poles with their residues kept (Davison 1966)."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from loopfit.equivalents.course import Course
from loopfit.equivalents.form import Form
from loopfit.equivalents.system import System

_SAMPLES = 400  # of the dead time, over the window, in search of those that keep the residues
_MOST_DELAYS = 6
_MOST_REAL = 4


def by_dominant_poles(system: System, course: Course) -> tuple[list[Form], str | None]:
    """Return models that keep two poles of a stable system with their residues, or why there is none.

    Dominant are the poles whose share of the step response is largest, in height times duration: |residue / pole| /
    |real part|. The gain is kept; the two residues, which would change the gain if nothing else were done, are kept by a dead time
    and a zero, so that the late part of the response is the exact one. Where no dead time does that, the model comes as
    near as it can, or keeps the size or the phase of the slower residue alone.

    E. J. Davison, A method for simplifying linear dynamic systems, IEEE Trans. Automatic Control 11, 1966; the measure
    of dominance as in L. Litz, 1979 (both from memory).
    """
    poles, share = system.poles, system.residues / system.poles
    known = np.isfinite(share)
    if not known.any():
        return [], "all poles are repeated: they have no residues to keep"
    weight = np.where(known, np.abs(share / poles.real), -1.0)
    dominant = -poles.real[np.argmax(weight)]
    if np.any(-poles.real[~known] < dominant):
        return [], "the slowest poles are repeated: they have no residues to keep"
    order = [int(k) for k in np.argsort(-weight, kind="stable") if known[k]]
    pairs = [k for k in order if poles[k].imag > 0][:2]
    real = [k for k in order if poles[k].imag == 0][:_MOST_REAL]
    forms: list[Form] = []
    for k in pairs:
        forms += _kept(complex(poles[k]), complex(poles[k].conjugate()), complex(share[k]), None, course)
    for k in real[1:]:
        first, second = sorted((real[0], k), key=lambda i: -poles[i].real)
        forms += _kept(
            complex(poles[first]), complex(poles[second]), complex(share[first]), complex(share[second]), course
        )
    if real:  # one lag
        lag, ratio = -1.0 / float(poles[real[0]].real), -float(share[real[0]].real) / course.final
        dead_time = lag * np.log(ratio) if ratio > 1.0 + 1e-9 else 0.0
        forms.append(Form(gain=course.final, a1=lag, a2=0.0, dead_time=float(dead_time), note="one lag dominates"))
    return forms, None if forms else "no two poles have residues to keep"


def _kept(one: complex, two: complex, share: complex, other: complex | None, course: Course) -> list[Form]:
    """Return the models of poles `one` and `two`; `other` is None for a conjugate pair."""
    a1, a2 = float(-(1.0 / one + 1.0 / two).real), float((1.0 / (one * two)).real)
    # a model without zero and dead time has the share -gain / (1 - one / two); this is what the exact one has more
    more = -share * (1.0 - one / two) / course.final
    further = None if other is None else -other * (1.0 - two / one) / course.final

    def zero(delay: float) -> complex:
        return complex((more * np.exp(delay * one) - 1.0) / one)

    def mismatch(delay: float) -> float:
        if further is None:
            return zero(delay).imag
        return float((zero(delay) - (further * np.exp(delay * two) - 1.0) / two).real)

    def form(delay: float, z: float, note: str | None) -> Form:
        z = 0.0 if abs(z) < 1e-9 * a1 else z
        return Form(gain=course.final, a1=a1, a2=a2, dead_time=delay, zero=z, note=note)

    crossings, nearest = _zeros_of(mismatch, course.window_s, a1)
    forms = [form(delay, zero(delay).real, None) for delay in crossings]
    forms += [
        form(delay, zero(delay).real, "the residues are kept as nearly as a dead time and a zero can")
        for delay in nearest
    ]
    size, angle = abs(more), -float(np.angle(more))
    by_size = float(np.log(size) / -one.real) if size > 1.0 + 1e-9 else 0.0
    forms.append(form(by_size, 0.0, "of the residues only the size of the slower is kept: no zero"))
    if other is None and angle * one.imag > 0.0:
        forms.append(form(angle / one.imag, 0.0, "of the residues only the phase is kept: no zero"))
    return forms


def _zeros_of(function: Callable[[float], float], longest: float, scale: float) -> tuple[list[float], list[float]]:
    """Return the first arguments from 0 on at which the function is 0, of the size of `scale`, and those at which it nearly is."""
    grid = np.concatenate([[0.0], np.geomspace(1e-4 * longest, longest, _SAMPLES)])
    values = np.array([function(float(x)) for x in grid])
    out = [0.0] if abs(values[0]) <= 1e-9 * scale else []
    for k in np.flatnonzero(values[:-1] * values[1:] < 0)[:_MOST_DELAYS]:
        low, high, rising = float(grid[k]), float(grid[k + 1]), values[k + 1] > 0
        for _ in range(50):
            middle = 0.5 * (low + high)
            if (function(middle) > 0) == rising:
                high = middle
            else:
                low = middle
        out.append(0.5 * (low + high))
    size = np.abs(values)
    low_points = np.flatnonzero((size[1:-1] < size[:-2]) & (size[1:-1] <= size[2:])) + 1
    signs = values[low_points] * values[low_points - 1] > 0
    signs &= values[low_points] * values[low_points + 1] > 0
    return out, [float(x) for x in grid[low_points[signs]][:_MOST_DELAYS]]
