"""The exact step response of a rational system: state space and the matrix exponential at any times.

The system is a chain of sections of first and second order, each of gain 1 at rest where it has one, so that its
states stay of the size of its response; no partial fractions, so that repeated poles are ordinary.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from loopfit.core.arrays import Array
from loopfit.model.transfer import Complex

_TERMS = 15  # of the series of exp: 0.5^15 / 15! is below 1e-16
_MOST_HALVINGS = 60


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Realisation:
    """x' = rate (A x + B u), y = C x + D u; `rate` in rad/s makes the rest dimensionless."""

    A: Array
    B: Array
    C: Array
    D: float
    rate: float


def realise(poles: Complex, zeros: Complex, lead: float) -> Realisation:
    """Return a chain of sections for lead * product of (s - zero) / product of (s - pole).

    Poles and zeros come in conjugate pairs and there are no more zeros than poles.
    """
    sizes = np.abs(poles[poles != 0])
    rate = float(np.exp(np.mean(np.log(sizes)))) if sizes.size else 1.0
    lead *= rate ** float(zeros.size - poles.size)
    n = poles.size
    A, B, C, D = np.zeros((n, n)), np.zeros(n), np.zeros(n), 1.0
    done = 0
    for section_poles, section_zeros in _sections(poles / rate, zeros / rate):
        a, b, c, d, gain = _section(section_poles, section_zeros)
        lead /= gain
        now = slice(done, done + section_poles.size)
        A[now, now] = a
        A[now, :done] = np.outer(b, C[:done])  # fed by the output of the chain so far
        B[now] = b * D
        C[:done] *= d
        C[now] = c
        D *= d
        done += section_poles.size
    return Realisation(A=A, B=B, C=C * lead, D=D * lead, rate=rate)


def _sections(poles: Complex, zeros: Complex) -> list[tuple[Complex, Complex]]:
    """Return the poles in sections of two (a last one of one), each with the zeros nearest to it."""
    real = poles[poles.imag == 0]
    pairs = [np.array([pole, pole.conjugate()]) for pole in poles[poles.imag > 0]]
    groups = pairs + [real[k : k + 2] for k in range(0, real.size, 2)]
    taken: list[list[complex]] = [[] for _ in groups]
    for zero in sorted(zeros[zeros.imag >= 0], key=lambda value: value.imag == 0):  # pairs first: they need two places
        members = [zero] if zero.imag == 0 else [zero, zero.conjugate()]
        room = [k for k, group in enumerate(groups) if group.size - len(taken[k]) >= len(members)]
        best = min(room, key=lambda k: np.min(np.abs(groups[k] - zero) / (np.abs(groups[k]) + abs(zero) + 1e-300)))
        taken[best] += members
    return [(group, np.array(found, dtype=complex)) for group, found in zip(groups, taken, strict=True)]


def _section(poles: Complex, zeros: Complex) -> tuple[Array, Array, Array, float, float]:
    """Return A, B, C, D of gain * product of (s - zero) / product of (s - pole), and the gain: 1 at rest where possible."""
    gain = 1.0
    if np.all(poles != 0) and np.all(zeros != 0):
        gain = float(np.real(np.prod(-poles) / np.prod(-zeros)))
    top = np.zeros(poles.size + 1)
    top[poles.size - zeros.size :] = gain * np.real(np.poly(zeros)) if zeros.size else gain
    d = float(top[0])
    if poles.size == 1:
        pole = float(poles[0].real)
        size = abs(pole) or 1.0
        return np.array([[pole]]), np.array([size]), np.array([(top[1] + d * pole) / size]), d, gain
    bottom = np.real(np.poly(poles))
    first = top[1] - d * bottom[1]  # rest after the direct term: first s + second
    second = top[2] - d * bottom[2]
    if poles[0].imag == 0:  # one lag after the other
        one, two = float(poles[0].real), float(poles[1].real)
        k, m = abs(one) or 1.0, abs(two) or 1.0
        c = np.array([first / k, (second + first * two) / (k * m)])
        return np.array([[one, 0.0], [m, two]]), np.array([k, 0.0]), c, d, gain
    w = float(np.sqrt(bottom[2]))
    a = np.array([[0.0, w], [-w, -bottom[1]]])
    return a, np.array([0.0, w]), np.array([second / w**2, first / w]), d, gain


def step_of(system: Realisation, time: Array) -> Array:
    """Return the unit step response at `time` >= 0, s, any shape; at 0 the value after a jump."""
    n = system.B.size
    if n == 0:
        return np.full(np.shape(time), system.D)
    whole = np.zeros((n + 1, n + 1))  # the input as one more state, which stays 1
    whole[:n, :n], whole[:n, n] = system.A, system.B
    state = motion(whole, np.append(np.zeros(n), 1.0), np.ravel(time) * system.rate)
    return np.asarray((system.C @ state[:n] + system.D).reshape(np.shape(time)))


def motion(A: Array, start: Array, time: Array) -> Array:
    """Return exp(A t) start for each t, (n, times).

    A time is a whole number of small steps h and a part of one. The part is a power series; the whole number is taken
    by its binary digits, from exp(A h) doubled again and again. What is doubled is exp - 1, as 2 F + F^2: a mode that
    is slow beside the others keeps its digits (scaling and squaring: Moler and Van Loan, SIAM Review 45, 2003, method 3).
    """
    longest = float(time.max(initial=0.0))
    h = 0.5 / max(float(np.abs(A).sum(axis=0).max()), 2.0**-_MOST_HALVINGS, 1e-300)
    while longest / h > 2.0**_MOST_HALVINGS:
        h *= 2.0
    count = np.floor(time / h)
    part = time / h - count
    column, power, F = start.copy(), np.eye(A.shape[0]), np.zeros_like(A)
    terms = [column]
    for k in range(1, _TERMS):
        column = A @ column * (h / k)
        power = A @ power * (h / k)
        terms.append(column)
        F += power
    state = np.stack(terms, axis=1) @ np.vander(part, _TERMS, increasing=True).T
    whole = count.astype(np.int64)
    digits = int(whole.max(initial=0)).bit_length()
    with np.errstate(over="ignore", invalid="ignore"):  # an unstable system leaves the numbers behind
        for digit in range(digits):
            here = (whole >> digit) & 1 == 1
            if here.any():
                state[:, here] += F @ state[:, here]
            F = 2.0 * F + F @ F
    return state
