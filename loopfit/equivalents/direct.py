"""The second-order model of smallest step error: the reference that the published methods are measured against."""

from __future__ import annotations

import numpy as np

from loopfit.core.arrays import Array
from loopfit.equivalents.course import Course
from loopfit.equivalents.form import Form
from loopfit.equivalents.system import System
from loopfit.model.shape import lag_shape

_DAMPINGS = (0.3, 0.5, 0.7, 0.85, 1.0, 1.4, 3.0)
_SHARES = (0.0, 0.15, 0.3, 0.45, 0.6, 0.75)  # of the mean time of the response that is dead time
_STARTS = 3
_ROUNDS = 40
_ENOUGH = 1e-7  # relative fall of the mean square in one round
_DAMPING_RANGE = (np.log(1e-4), np.log(11.0))  # beyond 11 a second lag is not told from dead time
_FASTER = 2.0  # times the fastest pole: beyond, where the samples lie too far apart for a swing, a model is damped
_QUIET = float(np.log(0.5))
_SAMPLES = 500
_MANY_SAMPLES = 4000  # where many swings ask for them
_STEP = 1e-6
_NO_ZERO = 1e-3  # of the sum of the lags


def by_step_error(system: System, course: Course, others: list[Form], *, zero: bool) -> Form:
    """Return the model, with the exact gain, whose rms step error over the window is smallest.

    Levenberg-Marquardt in dead time, log natural frequency, log damping ratio and, when asked for, the zero; from the
    best of a fixed grid of starts and of the models that `others` (dead times without that of the system) found. The
    same system gives the same model.
    """
    search = _Search(system, course, zero)
    mean = search.mean_time
    starts: list[list[float]] = []
    for damping in _DAMPINGS:
        for share in _SHARES:
            lag = mean * (1.0 - share)  # 2 zeta / wn; the mean time of the response is dead time and lag
            starts.append([mean * share, np.log(2.0 * damping / lag), np.log(damping), 0.0])
        if zero:  # a zero of 0 is a saddle: dead time and zero act alike there, so the search has to start off it
            starts += [
                [0.0, start[1], start[2], sign * mean] for start in starts[-len(_SHARES) :] for sign in (0.5, -0.5)
            ]
    for form in others:
        if form.a1 > 0.0:
            a2 = max(form.a2, form.a1**2 * 0.0025)
            start = [form.dead_time, -0.5 * np.log(a2), np.log(0.5 * form.a1 / a2**0.5), form.zero]
            starts.append(start)
            if form.zero != 0.0 and not zero:  # a zero as less lag or as dead time
                starts.append([max(form.dead_time - form.zero, 0.0), *start[1:3], 0.0])
    at = search.within(np.array(starts)[:, : 4 if zero else 3])
    order = np.argsort(search.squares(at), kind="stable")
    found = [search.descend(at[k]) for k in order[:_STARTS]]
    best = min(found, key=lambda point: float(search.squares(point[None])[0]))
    wn, damping = np.exp(best[1]), np.exp(best[2])
    time = float(best[3]) if zero else 0.0
    useless = abs(time) <= _NO_ZERO * 2.0 * damping / wn
    return Form(
        gain=course.final,
        a1=float(2.0 * damping / wn),
        a2=float(wn**-2),
        dead_time=float(best[0]),
        zero=0.0 if useless else time,
        note="a zero does not lower the error" if zero and useless else None,
    )


class _Search:
    """Points are rows (dead time, log wn, log zeta[, zero]); residuals are fractions of the final value, weighted by time."""

    def __init__(self, system: System, course: Course, zero: bool) -> None:
        inside = course.time <= course.window_s
        time, value = course.time[inside] - system.dead_time_s, course.value[inside] / course.final
        time, value = time[time >= 0.0], value[time >= 0.0]
        gap = np.diff(time, append=time[-1])
        self.mean_time = float(np.sum((1.0 - value) * gap))
        span = max(float(time[-1]), 1e-300)
        if not 1e-3 * span < self.mean_time < span:
            self.mean_time = 0.1 * span
        limit = _SAMPLES if time.size < 4 * _SAMPLES else _MANY_SAMPLES
        stride = -(-time.size // limit)
        self.time, self.value = time[::stride], value[::stride]
        width = np.gradient(self.time) if self.time.size > 1 else np.ones(1)
        self.weight = np.sqrt(width / width.sum())
        self.span, self.zero = span, zero
        self.fastest = float(np.log(_FASTER * np.abs(system.poles).max(initial=1.0 / span)))

    def within(self, at: Array) -> Array:
        """Return the points moved into what is allowed."""
        at = at.copy()
        at[:, 0] = np.clip(at[:, 0], 0.0, self.span)
        at[:, 1] = np.clip(at[:, 1], np.log(1e-2 / self.span), np.log(1e9 / self.span))
        least = np.where(at[:, 1] > self.fastest, _QUIET, _DAMPING_RANGE[0])  # no ringing that the system has not
        at[:, 2] = np.clip(at[:, 2], least, _DAMPING_RANGE[1])
        return at

    def residuals(self, at: Array) -> Array:
        wn, damping = np.exp(at[:, 1]), np.exp(at[:, 2])
        lag = 2.0 * damping / wn
        since = (self.time - at[:, :1]) / lag[:, None]
        shape = lag_shape(since, 0.25 / damping**2, derivatives=False)
        value = shape.step
        if self.zero:
            value = value + np.where(since >= 0.0, (at[:, 3] / lag)[:, None] * shape.slope, 0.0)
        return np.asarray((value - self.value) * self.weight)

    def squares(self, at: Array) -> Array:
        return np.asarray((self.residuals(at) ** 2).sum(axis=1))

    def descend(self, at: Array) -> Array:
        scale = np.array([self.mean_time, 1.0, 1.0, self.mean_time])[: at.size]
        damp, now = 1e-3, float(self.squares(at[None])[0])
        for _ in range(_ROUNDS):
            moved = np.vstack([at, at + np.diag(_STEP * scale)])
            values = self.residuals(moved)
            J = ((values[1:] - values[0]) / _STEP).T
            normal, slope = J.T @ J, J.T @ values[0]
            before = now
            for _ in range(8):
                held = (at == 0.0) & (slope > 0.0) & (np.arange(at.size) == 0)  # dead time at its bound
                free = ~held
                change = np.zeros(at.size)
                system = normal[np.ix_(free, free)]
                system = system + damp * np.diag(np.diag(system) + 1e-12 * (np.trace(system) + 1e-300))
                change[free] = -np.linalg.solve(system, slope[free])
                trial = self.within((at + np.clip(change, -2.0, 2.0) * scale)[None])
                found = float(self.squares(trial)[0])
                if found < now:
                    at, now, damp = trial[0], found, max(0.2 * damp, 1e-12)
                    break
                damp *= 6.0
            if not now < before * (1.0 - _ENOUGH) or now < 1e-24:
                break
        return at
