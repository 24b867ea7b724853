"""The answer of lags and oscillating pairs to a recorded output that is held between rows, exact, and fits to it."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from loopfit.core.arrays import Array
from loopfit.loop.state_space import held, state_space
from loopfit.model.transfer import Transfer, transfer_of

_SETTLED = 1e-4  # free motion is modelled while it is more than this of its first size


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class CourseFit:
    """Least squares of a measurement on the answer of unit gain, an offset and the free motion before the record."""

    gain: float
    offset: float
    residual: Array  # (n,)
    rms: float


def held_answer(transfer: Transfer, every_s: float, output: Array) -> Array:
    """Return the answer (n,) to an output (n,) that is held between rows, starting at rest at its first value.

    Notes
    -----
    The state is advanced exactly over the two parts of a row between which the delayed input changes; the recursion is
    then run as a filter whose denominator is the characteristic polynomial of the advance (Cayley and Hamilton).
    """
    from scipy.signal import lfilter

    space = state_space(transfer.numerator, transfer.denominator)
    order = len(space.B)
    moved = output - output[0]
    whole = math.floor(transfer.dead_time_s / every_s + 1e-9)
    part = max(transfer.dead_time_s - whole * every_s, 0.0)
    moved = np.concatenate((np.zeros(min(whole, len(moved))), moved[: max(len(moved) - whole, 0)]))
    if order == 0:
        return np.asarray(space.D * (moved if part == 0.0 else np.concatenate(([0.0], moved[:-1]))))
    after, newer = held(space.A, space.B, np.asarray(every_s - part))
    before, older = held(space.A, space.B, np.asarray(part))
    matrix, older = after @ before, after @ older
    # response of the recursion to one row of input: y[k] = C x[k] + D v[k - 1], x[k + 1] = matrix x[k] + older v[k - 1] + newer v[k]
    first = np.zeros(order + 2)
    state, last = np.zeros(order), 0.0
    for k in range(order + 2):
        first[k] = space.C @ state + space.D * last
        new = 1.0 if k == 0 else 0.0
        state = matrix @ state + older * last + newer * new
        last = new
    below = np.poly(np.linalg.eigvals(matrix)).real
    return np.asarray(lfilter(np.convolve(below, first)[: order + 2], below, moved))


def fitted(transfer: Transfer, time: Array, output: Array, measurement: Array) -> CourseFit:
    """Return the fit of `measurement` to the answer of `transfer` to `output`.

    The columns: that answer, 1, and one free motion for each pole (of an integrating plant a drift).
    """
    every = float(np.median(np.diff(time)))
    answer = held_answer(transfer, every, output)
    columns = np.column_stack([answer, np.ones(len(time)), *_free_motion(transfer, time - time[0])])
    size = np.sqrt(np.mean(columns**2, axis=0))
    size[size == 0.0] = 1.0
    solution = np.linalg.lstsq(columns / size, measurement, rcond=1e-8)[0] / size
    residual = measurement - columns @ solution
    return CourseFit(
        gain=float(solution[0]),
        offset=float(solution[1]),
        residual=residual,
        rms=math.sqrt(float(np.mean(residual**2))),
    )


def with_gain(transfer: Transfer, gain: float) -> Transfer:
    """Return the transfer function times a gain."""
    return transfer_of([gain * one for one in transfer.numerator], transfer.denominator, transfer.dead_time_s)


def lags_and_pair(poles: tuple[complex, ...], dead_time_s: float) -> Transfer:
    """Return the transfer function of unit gain (per second if it integrates) with these poles, no zeros."""
    below = np.ones(1, dtype=complex)
    for pole in poles:
        below = np.convolve(below, np.array([1.0, 0.0] if pole == 0.0 else [-1.0 / pole, 1.0], dtype=complex))
    return transfer_of([1.0], [float(value) for value in below.real], dead_time_s)


def _free_motion(transfer: Transfer, time: Array) -> list[Array]:
    out: list[Array] = []
    for pole in transfer.poles:
        if pole.imag < 0.0:
            continue
        with np.errstate(under="ignore"):
            motion = np.exp(pole * time) if abs(pole) > 0.0 else time.astype(complex)
        if abs(motion[min(2, len(motion) - 1)]) < _SETTLED:
            continue
        out.append(motion.real)
        if pole.imag > 0.0:
            out.append(motion.imag)
    return out
