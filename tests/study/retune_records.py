"""Records of random plants for the retuning study: an open step, or a setpoint step under some settings."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from retune_plants import Array, Controller, Random, Scanned, log_uniform, random_plant

from loopfit.loop.settings import Settings
from loopfit.record.read import record_from_arrays
from loopfit.record.record import Record

RATIO = 50.0  # change of the measurement over the rms of the noise
WAYS = ("open step", "closed, output recorded", "closed, output not recorded")
_BEFORE = 0.12  # of the record lies before the step
_SCANS_A_UNIT = 20.0  # at least, in dead time + unit
_MOST_ROWS = 2500
_LONG = 4000  # scans of the trial run that a loop must settle in
_SETTLED, _MOST_OVERSHOOT = 0.02, 0.6


@dataclass(frozen=True, kw_only=True)
class Case:
    """A plant, the settings in its controller, and a record."""

    number: int
    seed: int
    random: Random
    way: str
    settings: Settings
    record: Record

    @property
    def scan_s(self) -> float:
        """Scan interval, s."""
        assert self.settings.scan_s is not None
        return self.settings.scan_s


def case_of(seed: int, number: int) -> Case:
    """Return one plant with its record; even numbers open, odd ones closed, with and without output by turns."""
    rng = np.random.default_rng([seed, number])
    way = WAYS[0] if number % 2 == 0 else WAYS[1 + number // 2 % 2]
    while True:
        random = random_plant(rng)
        found = _present(rng, random)
        if found is None:
            continue
        controller, settled = found
        record = _open(rng, random) if way == WAYS[0] else _closed(rng, random, controller, settled, way)
        if record is not None:
            break
    record_, scan = record
    settings = Settings(
        "ideal",
        gain=controller.kp,
        integral_time_s=controller.kp / controller.ki,
        derivative_time_s=controller.kd / controller.kp if controller.kd else None,
        derivative_filter_s=controller.filter_s if controller.kd else None,
        scan_s=scan,
    )
    return Case(number=number, seed=seed, random=random, way=way, settings=settings, record=record_)


def _present(rng: np.random.Generator, random: Random) -> tuple[Controller, float] | None:
    """Draw settings until the loop settles with less than 60 % overshoot; with the time that takes, s."""
    plant, unit = random.plant, random.unit_s
    lag = unit * (2.0 * (plant.damping_ratio or 0.5))
    scale = (plant.dead_time_s + lag) if plant.integrating else 1.0
    scan = (plant.dead_time_s + unit) / _SCANS_A_UNIT
    plant_run = Scanned(plant, scan)
    zero = np.zeros(_LONG)
    for _ in range(40):
        kp = log_uniform(rng, 0.05, 2.0) / plant.gain / scale
        ti = log_uniform(rng, 0.3, 2.0) * (lag + 0.5 * plant.dead_time_s) * (4.0 if plant.integrating else 1.0)
        td = 0.2 * ti if rng.random() < 0.3 else 0.0
        controller = Controller(kp=kp, ki=kp / ti, kd=kp * td, filter_s=0.125 * td)
        y, _u = plant_run.run(_LONG, controller, setpoint=zero + 1.0, noise=zero, load=zero, manual=zero)
        outside = np.flatnonzero(np.abs(y - 1.0) > _SETTLED)
        if y.max() < 1.0 + _MOST_OVERSHOOT and outside[-1] < 0.9 * _LONG:
            return controller, float(outside[-1]) * scan
    return None


def _scan(rng: np.random.Generator, random: Random, span: float) -> tuple[float, int] | None:
    scan = min(span / log_uniform(rng, 300.0, 1200.0), (random.plant.dead_time_s + random.unit_s) / _SCANS_A_UNIT)
    rows = math.ceil(span / scan)
    return (scan, rows) if rows <= _MOST_ROWS else None


def _open(rng: np.random.Generator, random: Random) -> tuple[Record, float] | None:
    plant, unit = random.plant, random.unit_s
    zeta = plant.damping_ratio or 0.5
    slow = unit * max(1.0 / zeta, zeta + math.sqrt(max(zeta**2 - 1.0, 0.0)))
    chosen = _scan(rng, random, (plant.dead_time_s + 6.0 * slow) / (1.0 - _BEFORE))
    if chosen is None:
        return None
    scan, rows = chosen
    begin = math.ceil(_BEFORE * rows)
    step, level = 5.0, 40.0
    u = np.where(np.arange(rows) < begin, 0.0, step)
    zero = np.zeros(rows)
    y, _ = Scanned(plant, scan).run(rows, None, setpoint=zero, noise=zero, load=zero, manual=u)
    change = abs(float(y[-1]))
    y = y + rng.standard_normal(rows) * change / RATIO
    return record_from_arrays(time=scan * np.arange(rows), measurement=20.0 + y, output=level + u), scan


def _closed(
    rng: np.random.Generator, random: Random, controller: Controller, settled: float, way: str
) -> tuple[Record, float] | None:
    plant = random.plant
    chosen = _scan(rng, random, max(1.3 * settled, 3.0 * (plant.dead_time_s + random.unit_s)) / (1.0 - _BEFORE))
    if chosen is None:
        return None
    scan, rows = chosen
    begin = math.ceil(_BEFORE * rows)
    step = 3.0
    setpoint = np.where(np.arange(rows) < begin, 0.0, step)
    zero = np.zeros(rows)
    noise = rng.standard_normal(rows) * step / RATIO
    y, u = Scanned(plant, scan).run(rows, controller, setpoint=setpoint, noise=noise, load=zero, manual=zero)
    if not np.abs(y).max() < 3.0 * step:
        return None
    columns: dict[str, Array] = {"setpoint": 20.0 + setpoint, "measurement": 20.0 + y}
    if way == WAYS[1]:
        columns["output"] = 40.0 + u
    return record_from_arrays(time=scan * np.arange(rows), **columns), scan
