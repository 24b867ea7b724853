"""Short records of each kind, made apart from loopfit: second-order plants by scipy's state-space simulation.

Every number is kept to a few decimals, so that a text, a spreadsheet and a calendar stamp can all carry it exactly.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import signal

Array = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Made:
    """Times, s from 0, with three decimals at most; measurement (three decimals), setpoint and output or None."""

    time: Array
    measurement: Array
    setpoint: Array | None = None
    output: Array | None = None
    zeta: float
    omega: float

    @property
    def columns(self) -> dict[str, Array]:
        """The columns by role, in the order of a file."""
        every = {"time": self.time, "measurement": self.measurement, "setpoint": self.setpoint, "output": self.output}
        return {role: values for role, values in every.items() if values is not None}


def responses(zeta: float, omega: float, changes: list[tuple[float, float]], time: Array) -> Array:
    """Return the response to changes (instant, size) of the input: the sum of scipy's unit step responses."""
    plant = signal.lti([omega**2], [1.0, 2.0 * zeta * omega, omega**2])
    fine = np.linspace(0.0, float(time[-1]) + 1.0, 20001)
    _, unit = signal.step(plant, T=fine)
    return np.sum([size * np.interp(time - at, fine, unit, left=0.0) for at, size in changes], axis=0)


def levels(start: float, changes: list[tuple[float, float]], time: Array) -> Array:
    """Return the stepped signal itself; a change acts at the first row at or after its instant."""
    return start + np.sum([size * (time >= at) for at, size in changes], axis=0)


def _noise(rows: int, rms: float) -> Array:
    return np.random.default_rng(7).normal(0.0, rms, rows)


def automatic() -> Made:
    """Setpoint step of 8 at 3 s in a loop with a standing output."""
    time, changes = np.round(np.arange(200) * 0.1, 1), [(3.0, 8.0)]
    measurement = 50.0 + responses(0.35, 1.4, changes, time) + _noise(200, 0.06)
    output = 30.0 + 0.4 * (responses(0.7, 3.0, changes, time) + _noise(200, 0.02))
    return Made(time=time, measurement=np.round(measurement, 2), setpoint=levels(50.0, changes, time),
                output=np.round(output, 2), zeta=0.35, omega=1.4)  # fmt: skip


def manual() -> Made:
    """Output stepped from 30 to 40 % at 20 s, overdamped plant of gain 55 that passes 1000."""
    time, changes = np.round(np.arange(180) * 1.5, 1), [(21.0, 10.0)]
    measurement = 703.0 + 55.0 * responses(1.4, 0.08, changes, time) + _noise(180, 2.0)
    return Made(time=time, measurement=np.round(measurement, 1), output=levels(30.0, changes, time),
                zeta=1.4, omega=0.08)  # fmt: skip


def irregular() -> Made:
    """Setpoint step at 4 s, sampled at random times: gaps between rows 30 to 170 ms."""
    time = np.round(np.cumsum(np.random.default_rng(11).uniform(0.03, 0.17, 220)), 3)
    time, changes = np.round(time - time[0], 3), [(4.0, -2.5)]
    step = time[np.searchsorted(time, 4.0)]  # the loop acts on the row that shows the change
    measurement = 12.0 + responses(0.5, 1.1, [(float(step), -2.5)], time) + _noise(220, 0.02)
    return Made(time=time, measurement=np.round(measurement, 3), setpoint=levels(12.0, changes, time),
                zeta=0.5, omega=1.1)  # fmt: skip


def several() -> Made:
    """Four setpoint steps, up and down, each long enough to settle."""
    time = np.round(np.arange(240) * 0.25, 2)
    changes = [(5.0, 1.0), (20.0, 1.5), (35.0, -2.0), (48.0, 0.75)]
    measurement = 3.0 + responses(0.4, 1.3, changes, time) + _noise(240, 0.01)
    return Made(time=time, measurement=np.round(measurement, 3), setpoint=levels(3.0, changes, time),
                zeta=0.4, omega=1.3)  # fmt: skip


def release() -> Made:
    """A mass let go from 25 mm: the closed form of the free decay from rest (textbook)."""
    time, zeta, omega = np.round(np.arange(240) * 0.02, 2), 0.06, 6.5
    damped = omega * np.sqrt(1.0 - zeta**2)
    swing = np.exp(-zeta * omega * time) * (np.cos(damped * time) + zeta * omega / damped * np.sin(damped * time))
    return Made(time=time, measurement=np.round(25.0 * swing + _noise(240, 0.05), 2), zeta=zeta, omega=omega)


KINDS: dict[str, Callable[[], Made]] = {
    "automatic": automatic,
    "manual": manual,
    "irregular": irregular,
    "several": several,
    "release": release,
}
