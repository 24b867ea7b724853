"""Random loops in automatic and their records: noise, rounding, limits; the controllers of process and drive loops."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from loopfit.loop.gains import Gains
from loopfit.loop.plant import Plant
from loopfit.loop.simulate import simulate

Array = np.ndarray


@dataclass(frozen=True, kw_only=True)
class OnRecord:
    """A record and the controller that made it, in the ideal form with its sign."""

    time: Array
    setpoint: Array
    measurement: Array
    output: Array
    plant: Plant
    gain: float
    integral_s: float
    derivative_s: float
    filter_s: float
    scan_s: float
    limits: tuple[float, float] | None
    weight: float
    on_error: bool

    @property
    def columns(self) -> tuple[Array, Array, Array, Array]:
        return self.time, self.setpoint, self.measurement, self.output


def log_uniform(rng: np.random.Generator, low: float, high: float) -> float:
    return float(math.exp(rng.uniform(math.log(low), math.log(high))))


def rounded(value: float, digits: int = 3) -> float:
    return float(f"{value:.{digits - 1}e}")


def loop_on_record(
    rng: np.random.Generator,
    *,
    derivative: bool = True,
    weight: float = 1.0,
    on_error: bool = False,
    filter_share: float | None = None,
    rows: int = 600,
    rows_a_scan: int = 1,
) -> OnRecord:
    """A stable loop: plant of second order with dead time, time scale 1 to 300 s, gain .1 to 10; two setpoint steps.

    Noise .1 to 1 % of the step, the controller reads it in steps of .02 to .1 % of it; output stored in as fine steps.
    """
    while True:
        unit = log_uniform(rng, 1.0, 300.0)
        plant = Plant(
            gain=log_uniform(rng, 0.1, 10.0),
            damping_ratio=log_uniform(rng, 0.4, 3.0),
            natural_frequency_rad_s=1.0 / unit,
            dead_time_s=unit * float(rng.uniform(0.0, 1.0)),
        )
        slow = 2.0 * (plant.damping_ratio or 0.0) * unit
        gain = rounded(log_uniform(rng, 0.2, 1.2) / plant.gain)
        integral_s = rounded(slow * float(rng.uniform(0.7, 1.6)) + 0.3 * unit)
        derivative_s = rounded(integral_s * float(rng.uniform(0.1, 0.24))) if derivative else 0.0
        share = float(rng.uniform(0.06, 0.3)) if filter_share is None else filter_share
        filter_s = rounded(share * derivative_s)
        scan_s = rounded(min(unit, slow) / float(rng.uniform(12.0, 40.0)), 2)
        gains = Gains(
            kp=gain, ki=gain / integral_s, kd=gain * derivative_s, filter_s=filter_s,
            setpoint_weight=weight, derivative_on_error=on_error,
        )  # fmt: skip
        scans = rows // rows_a_scan
        step = log_uniform(rng, 0.5, 20.0)
        setpoint = np.where(
            np.arange(scans) < 0.08 * scans, 0.0, np.where(np.arange(scans) < 0.55 * scans, step, 0.4 * step)
        )
        noise = step * log_uniform(rng, 1e-3, 1e-2) * rng.standard_normal(scans)
        fine = step * log_uniform(rng, 2e-4, 1e-3)
        limits = None
        if rng.random() < 0.3:
            limits = (-0.3 * step * gain, step * gain * 1.15)
        run = simulate(
            plant, gains, scan_s=scan_s, scans=scans, setpoint=setpoint, noise=noise, measurement_resolution=fine,
            output_limits=limits,
        )  # fmt: skip
        if not (np.abs(run.controlled).max() < 2.0 * step and np.ptp(run.controlled[-scans // 8 :]) < 0.3 * step):
            continue
        held_rows = np.repeat(np.arange(scans), rows_a_scan)
        fine_output = step * gain * log_uniform(rng, 1e-4, 1e-3)
        stored = fine_output * np.round(run.output / fine_output)
        if limits is not None:
            stored = np.clip(stored, *limits)
        return OnRecord(
            time=scan_s / rows_a_scan * np.arange(len(held_rows)), setpoint=run.setpoint[held_rows],
            measurement=run.measurement[held_rows], output=stored[held_rows], plant=plant, gain=gain,
            integral_s=integral_s, derivative_s=derivative_s, filter_s=filter_s, scan_s=scan_s, limits=limits,
            weight=weight, on_error=on_error,
        )  # fmt: skip
