"""The course of an exact step response: sampled as finely as each of its modes asks for, to where it has settled."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from loopfit.core.arrays import Array, read_only
from loopfit.equivalents.system import System

SETTLED = 1e-3  # of the final value: the errors are taken until the exact response stays this near
_PER_RADIAN = 6.0  # samples: a swing's extreme is met within 0.4 %, a lag's time constant by six
_MOST_SAMPLES = 200_000  # a mode
_REST = 1e-7  # of the final value, at the end of the samples
_MOST_LONGER = 6
_SAME_TIME = 1e-12  # relative


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Course:
    """Samples of a step response that comes to rest at `final`, not 0; `time` (n,) s from the step, uneven, rising."""

    time: Array
    value: Array
    final: float
    window_s: float  # the last entry into `SETTLED` about the final value

    @property
    def deviation(self) -> Array:
        """Distance above the final value as a fraction of it, (n,)."""
        return self.value / self.final - 1.0


def course_of(system: System, final: float) -> Course:
    """Return the course of a stable system with this final value."""
    longer = 1.0
    for _ in range(_MOST_LONGER):
        time = _times(system, longer)
        value = system.step(time)
        deviation = np.abs(value / final - 1.0)
        if not deviation[-max(time.size // 50, 1) :].max() > _REST:
            break
        longer *= 1.5
    outside = np.flatnonzero(deviation > SETTLED)
    window = system.dead_time_s
    if outside.size:
        last, after = int(outside[-1]), min(int(outside[-1]) + 1, time.size - 1)
        fall = deviation[last] - deviation[after]  # by interpolation: one sample more or less would show in the mean
        share = (deviation[last] - SETTLED) / fall if fall > 0 else 0.0
        window = float(time[last] + share * (time[after] - time[last]))
    return Course(time=read_only(time), value=read_only(value), final=final, window_s=window)


def _times(system: System, longer: float) -> Array:
    poles = np.unique(system.poles[system.poles.imag >= 0])
    rates = -system.poles.real
    parts = [np.zeros(1), np.array([system.dead_time_s])]
    for pole in poles:
        alike = int(np.sum((rates < -3.0 * pole.real) & (rates > -pole.real / 3.0)))
        span = (16.0 + 3.0 * alike) / -pole.real * longer  # e^-16 = 1e-7; repeated lags last longer
        count = int(min(_PER_RADIAN * span * abs(pole), _MOST_SAMPLES))
        parts.append(system.dead_time_s + np.linspace(0.0, span, count + 1)[1:])
    if poles.size == 0:
        parts.append(system.dead_time_s + np.linspace(0.0, max(system.dead_time_s, 1.0), 50)[1:])
    time = np.unique(np.concatenate(parts))
    # times of two modes that only rounding tells apart are one
    apart = np.diff(time) > _SAME_TIME * time[1:]
    return np.asarray(time[np.append(True, apart)])
