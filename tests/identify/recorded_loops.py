"""Records of loops whose plant is known, from the package's simulation and from an independent one."""

from __future__ import annotations

import math

import numpy as np

from loopfit.loop.gains import Gains
from loopfit.loop.plant import Plant
from loopfit.loop.settings import Settings
from loopfit.loop.simulate import Simulated, simulate
from loopfit.record.read import record_from_arrays
from loopfit.record.record import Record

Array = np.ndarray
SCAN = 0.5
ROWS = 800
PLANTS = {
    "two lags": Plant(gain=2.0, time_constants_s=(8.0, 3.0), dead_time_s=2.2),
    "light damping": Plant(gain=-0.7, damping_ratio=0.06, natural_frequency_rad_s=0.3, dead_time_s=0.7),
    "one lag": Plant(gain=1.5, time_constants_s=(10.0,), dead_time_s=3.3),
    "integrating": Plant(gain=0.05, time_constants_s=(4.0,), dead_time_s=2.0, integrating=True),
    "level": Plant(gain=-0.02, integrating=True),
}
SETTINGS = {
    "two lags": Settings(gain=1.2, integral_time_s=11.0, scan_s=SCAN),
    "light damping": Settings(gain=-0.15, integral_time_s=3.0, scan_s=SCAN),
    "one lag": Settings(gain=0.8, integral_time_s=9.0, derivative_time_s=1.0, scan_s=SCAN),
    "integrating": Settings(gain=2.0, integral_time_s=40.0, scan_s=SCAN),
    "level": Settings(gain=3.0, integral_time_s=60.0, scan_s=SCAN, action="direct"),
}


def automatic(
    name: str,
    *,
    seed: int,
    step: float = 2.0,
    load: float = 0.0,
    noise: float = 0.02,
    limits: tuple[float, float] | None = None,
    rows: int = ROWS,
    back: int = 10**6,
) -> Simulated:
    """A loop at rest at 50 with the output at 30; setpoint step in row 40, half of it back in row `back`, load in row 77."""
    at = np.arange(rows)
    return simulate(
        PLANTS[name],
        SETTINGS[name].gains,
        scan_s=SCAN,
        scans=rows,
        setpoint=np.where(at < 40, 50.0, np.where(at < back, 50.0 + step, 50.0 + 0.5 * step)),
        load=np.where(at < 77, 0.0, load),
        noise=noise * np.random.default_rng(seed).normal(size=rows),
        initial_measurement=50.0,
        initial_output=30.0,
        initial_setpoint=50.0,
        output_limits=limits,
    )


def record_of(run: Simulated, *, output: bool = True, setpoint: bool = True, every: int = 1, first: int = 0) -> Record:
    rows = slice(first, None, every)
    return record_from_arrays(
        time=run.time[rows],
        measurement=run.measurement[rows],
        setpoint=run.setpoint[rows] if setpoint else None,
        output=run.output[rows] if output else None,
        interval_s=None,
        window_s=None,
    )


def figures(plant: Plant) -> Array:
    """Gain, damping ratio, sum of the lags, dead time; for an integrating plant the damping ratio is left at 0."""
    denominator = np.array(plant.denominator)
    if plant.integrating:
        lag = denominator[-3] / denominator[-2] if denominator.size > 2 else 0.0
        return np.array([plant.gain, 0.0, lag, plant.dead_time_s])
    a = denominator / denominator[-1]
    return np.array([plant.gain, a[-2] / (2.0 * math.sqrt(a[0])), a[-2], plant.dead_time_s])


def by_runge_kutta(
    gains: Gains, *, zeta: float, omega: float, dead_time: float, scan: float, rows: int, noise: Array, steps: int = 20
) -> tuple[Array, Array, Array]:
    """Setpoint, measurement and output of a PI loop around y'' + 2 zeta omega y' + omega^2 y = omega^2 u(t - dead time).

    Classical Runge-Kutta of fourth order, `steps` steps between two scans, the dead time a whole number of steps; the
    unit setpoint step is in row 40.
    """
    small = scan / steps
    behind = round(dead_time / small)
    assert abs(behind * small - dead_time) < 1e-9
    setpoint = np.where(np.arange(rows) < 40, 0.0, 1.0)
    state, integral = np.zeros(2), 0.0
    inputs = np.zeros(rows * steps)
    measured, output = np.zeros(rows), np.zeros(rows)

    def slope(x: Array, u: float) -> Array:
        return np.array([x[1], omega**2 * (u - x[0]) - 2.0 * zeta * omega * x[1]])

    for k in range(rows):
        measured[k] = state[0] + noise[k]
        integral += gains.ki * scan * (setpoint[k] - measured[k])
        output[k] = gains.kp * (setpoint[k] - measured[k]) + integral
        inputs[k * steps : (k + 1) * steps] = output[k]
        for i in range(k * steps, (k + 1) * steps):
            u = inputs[i - behind] if i >= behind else 0.0
            k1 = slope(state, u)
            k2 = slope(state + 0.5 * small * k1, u)
            k3 = slope(state + 0.5 * small * k2, u)
            k4 = slope(state + small * k3, u)
            state = state + small / 6.0 * (k1 + 2.0 * k2 + 2.0 * k3 + k4)
    return setpoint, measured, output
