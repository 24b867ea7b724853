"""Random plants of the retuning study, and their simulation from scan to scan without loopfit's formulas."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import expm
from scipy.signal import tf2ss

from loopfit.loop.plant import Plant

Array = NDArray[np.float64]

# shares of second order, integrating with a lag, first order, second order with a zero
KINDS = ("second order", "integrating", "first order", "with a zero")
_SHARES = (0.66, 0.12, 0.11, 0.11)
_NO_DEAD_TIME = 0.07
_MOST_DEAD_TIME = 3.0  # of the plant's unit of time


@dataclass(frozen=True, kw_only=True)
class Random:
    """A random plant: its kind and its unit of time 1 / wn, or the lag, s."""

    kind: str
    plant: Plant
    unit_s: float

    @property
    def words(self) -> str:
        """The plant in units of its own: gain 1, unit of time 1."""
        one, unit = self.plant, self.unit_s
        inner = {
            "zeta": one.damping_ratio,
            "dead": one.dead_time_s / unit,
            "zero": None if one.zero_s is None else one.zero_s / unit,
        }
        return f"{self.kind} " + " ".join(f"{name} {value:.3g}" for name, value in inner.items() if value is not None)


def log_uniform(rng: np.random.Generator, low: float, high: float) -> float:
    """Draw a number whose logarithm is evenly spread."""
    return float(math.exp(rng.uniform(math.log(low), math.log(high))))


def random_plant(rng: np.random.Generator) -> Random:
    """Draw a plant: zeta 0.1 to 5, dead time 0 to 3 units, gain 0.1 to 10 of either sign, unit 0.1 to 100 s."""
    kind = KINDS[int(rng.choice(4, p=_SHARES))]
    unit = log_uniform(rng, 0.1, 100.0)
    gain = log_uniform(rng, 0.1, 10.0) * float(rng.choice([1.0, -1.0]))
    dead = 0.0 if rng.random() < _NO_DEAD_TIME else unit * float(rng.uniform(0.0, _MOST_DEAD_TIME))
    zeta, zero = log_uniform(rng, 0.1, 5.0), float(rng.uniform(-0.8, 2.0)) * unit
    if kind == "first order":
        plant = Plant(gain=gain, time_constants_s=(unit,), dead_time_s=dead)
    elif kind == "integrating":
        plant = Plant(gain=gain / unit, time_constants_s=(unit,), dead_time_s=dead, integrating=True)
    else:
        plant = Plant(
            gain=gain, damping_ratio=zeta, natural_frequency_rad_s=1.0 / unit, dead_time_s=dead,
            zero_s=zero if kind == "with a zero" else None,
        )  # fmt: skip
    return Random(kind=kind, plant=plant, unit_s=unit)


@dataclass(frozen=True, kw_only=True)
class Controller:
    """u = kp (r - y) + ki sum of h (r - y) - kd h-difference of y through a filter; backward differences, no limits."""

    kp: float
    ki: float
    kd: float = 0.0
    filter_s: float = 0.0


class Scanned:
    """A plant from scan to scan, its input held between scans; the dead time splits a scan in two.

    Van Loan's block exponential (1978) for each part.
    """

    def __init__(self, plant: Plant, scan_s: float) -> None:
        A, B, C, D = tf2ss(plant.numerator, plant.denominator)
        self.n = n = A.shape[0]
        whole = math.floor(plant.dead_time_s / scan_s + 1e-9)
        part = max(plant.dead_time_s - whole * scan_s, 0.0)
        self.delay, self.C, self.direct, self.scan_s = int(whole), C[0], float(D[0, 0]), scan_s

        def over(time: float) -> tuple[Array, Array]:
            block = expm(np.block([[A, B], [np.zeros((1, n + 1))]]) * time)
            return block[:n, :n], block[:n, n]

        first, older = over(part)
        second, newer = over(scan_s - part)
        self.step = second @ first
        self.older, self.newer = second @ older, newer

    def run(
        self, scans: int, controller: Controller | None, *, setpoint: Array, noise: Array, load: Array, manual: Array
    ) -> tuple[Array, Array]:
        """Return measurement (with noise) and output, (scans,) each, of a loop that starts at rest at 0.

        `load` adds to the plant's input; `manual` is the output where there is no controller.
        """
        x, integral, slope, last = np.zeros(self.n), 0.0, 0.0, 0.0
        held = np.zeros(scans + self.delay + 2)  # input of the plant, from delay + 1 scans before the first on
        seen, written = np.empty(scans), np.empty(scans)
        late = self.delay + 1
        for k in range(scans):
            y = float(self.C @ x) + self.direct * held[k] + noise[k]
            if controller is None:
                u = float(manual[k])
            else:
                error = setpoint[k] - y
                integral += controller.ki * self.scan_s * error
                if controller.kd:
                    slope = (controller.filter_s * slope - controller.kd * (y - last)) / (
                        controller.filter_s + self.scan_s
                    )
                last = y
                u = controller.kp * error + integral + slope
            seen[k], written[k] = y, u
            held[k + late] = u + load[k]
            x = self.step @ x + self.older * held[k] + self.newer * held[k + 1]
            if not abs(y) < 1e9:
                seen[k:], written[k:] = math.inf, math.inf
                break
        return seen, written
