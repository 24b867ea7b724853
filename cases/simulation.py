"""Running a plant of `plant.py` under a controller: sensors, PI control once a scan, what a logger keeps.

Chance comes from `random.Random.random` alone, whose numbers Python promises to keep for a given seed.
"""

from __future__ import annotations

import math
from collections import deque
from collections.abc import Sequence
from dataclasses import dataclass
from random import Random

from plant import Acting, Plant, State


@dataclass(frozen=True, slots=True, kw_only=True)
class Transmitter:
    """Adds normal noise, then rounds to its resolution."""

    noise: float
    resolution: float

    def measure(self, value: float, _earlier: float, random: Random) -> float:
        """Return what is shown for a value."""
        return round((value + self.noise * normal(random)) / self.resolution) * self.resolution


@dataclass(frozen=True, slots=True, kw_only=True)
class Encoder:
    """Gives speed as whole counts of travel within the last scan."""

    count_mm: float
    scan_s: float

    def measure(self, value: float, earlier: float, _random: Random) -> float:
        """Return the speed for a travel now and one scan earlier."""
        counts = math.floor(value / self.count_mm) - math.floor(earlier / self.count_mm)
        return counts * self.count_mm / self.scan_s


@dataclass(frozen=True, slots=True, kw_only=True)
class Controller:
    """Ideal PI, u = K (b r - y + ∫(r - y) dt / Ti), once a scan; at an output limit the integral waits."""

    gain: float  # % per measurement unit
    integral_time_s: float
    setpoint_weight: float = 1.0
    limits: tuple[float, float] = (0.0, 100.0)

    def start(self, level: float, output: float) -> float:
        """Return the integral part (%) that holds `output` with measurement and setpoint at `level`."""
        return output - self.gain * (self.setpoint_weight - 1) * level

    def scan(self, setpoint: float, measurement: float, integral: float, scan_s: float) -> tuple[float, float]:
        """Return the output (%) and the new integral part (%)."""
        more = integral + self.gain * (setpoint - measurement) * scan_s / self.integral_time_s
        wanted = self.gain * (self.setpoint_weight * setpoint - measurement) + more
        low, high = self.limits
        if low <= wanted <= high:
            return wanted, more
        return min(max(wanted, low), high), integral


@dataclass(frozen=True, slots=True, kw_only=True)
class Change:
    """The stepped signal (setpoint in automatic, output in manual): `after` counts from scan `at` on."""

    before: float
    after: float
    at: int


@dataclass(frozen=True, slots=True, kw_only=True)
class Row:
    """One logged row."""

    time_s: float
    setpoint: float
    measurement: float
    output: float


def normal(random: Random) -> float:
    """Return a unit normal deviate: twelve uniforms summed (central limit), exact on every machine."""
    return sum(random.random() for _ in range(12)) - 6.0


def advance(plant: Plant, state: State, acting: Acting, step_s: float) -> State:
    """Return the state one step later, by the classical fourth-order rule of Kutta (1901)."""

    def moved(slope: State, share: float) -> State:
        return tuple(x + share * step_s * dx for x, dx in zip(state, slope, strict=True))

    first = plant.slope(state, acting)
    second = plant.slope(moved(first, 0.5), acting)
    third = plant.slope(moved(second, 0.5), acting)
    fourth = plant.slope(moved(third, 1.0), acting)
    mean = tuple((a + 2 * b + 2 * c + d) / 6 for a, b, c, d in zip(first, second, third, fourth, strict=True))
    return moved(mean, 1.0)


def simulate(
    plant: Plant,
    controller: Controller | None,
    change: Change,
    rows: Sequence[int],
    *,
    level: float,
    sensor: Transmitter | Encoder,
    scan_s: float,
    seed: int,
    substeps: int = 4,
) -> list[Row]:
    """Run a plant from rest and return what a logger keeps.

    Parameters
    ----------
    plant : Plant
        The mechanism; starts at rest.
    controller : Controller or None
        None is manual: the change is one of the output.
    change : Change
        The step; its instant counts scans from the start of the simulation.
    rows : sequence of int, rising
        Scans that are logged; the time of a row counts from the first of them.
    level : float
        Where the measured quantity rests at the start, in measurement units.
    sensor : Transmitter or Encoder
        What turns the plant's reading into a measurement, once a scan.
    scan_s : float
        Scan interval, s; the output is held between scans.
    seed : int
        Seed of noise and disturbance.
    substeps : int
        Integration steps in a scan.

    Returns
    -------
    list of Row
    """
    random = Random(seed)
    state, output = plant.rest(level)
    integral = 0.0 if controller is None else controller.start(level, output)
    pipe = deque([plant.leaving(state)] * (round(plant.dead_time_s / scan_s) + 1))
    logged, kept = [], set(rows)
    # a belt at rest in its loop has already travelled during the scan before the first
    earlier = plant.reading(state) - scan_s * level if isinstance(sensor, Encoder) else plant.reading(state)
    for scan in range(rows[-1] + 1):
        target = change.after if scan >= change.at else change.before
        value = plant.reading(state)
        measurement = sensor.measure(value, earlier, random)
        earlier = value
        if controller is None:
            output = target
        else:
            output, integral = controller.scan(target, measurement, integral, scan_s)
        if scan in kept:
            time_s = (scan - rows[0]) * scan_s
            logged.append(Row(time_s=time_s, setpoint=target, measurement=measurement, output=output))
        acting = Acting(output=output, arriving=pipe[0], chance=normal(random))
        for _ in range(substeps):
            state = advance(plant, state, acting, scan_s / substeps)
        pipe.append(plant.leaving(state))
        pipe.popleft()
    return logged
