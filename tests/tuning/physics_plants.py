"""Plants from their physics, none of second order, run from scan to scan by Runge-Kutta steps under a PID controller."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from scipy.optimize import root

Array = np.ndarray


@dataclass(frozen=True, kw_only=True)
class Physics:
    """dx/dt = motion(x, v), measurement = see(x); v is the valve's position or the drive's input, as the controller's output.

    `guess`: near the state of rest at `level`. `transport_s`: from output to plant, whole scans. `stick`, `slip`: a valve
    that holds until the output is `stick` away and then slips to within `slip`; `play`: full width of its lost motion.
    `step_out`, `step_set`: sizes of test steps. `noise`: rms; `resolution` of the measurement that the controller reads.
    """

    name: str
    motion: Callable[[Array, float], Array]
    see: Callable[[Array], float]
    guess: tuple[float, ...]
    level: float
    scan_s: float
    step_out: float
    step_set: float
    noise: float
    substeps: int = 4
    transport_s: float = 0.0
    resolution: float = 0.0
    stick: float = 0.0
    slip: float = 0.0
    play: float = 0.0
    integrating: bool = False

    @cached_property
    def rest(self) -> Array:
        """State of rest."""
        if self.integrating:
            return np.array(self.guess)
        found = root(lambda x: self.motion(x, self.level), self.guess, tol=1e-12)
        assert np.abs(self.motion(found.x, self.level)).max() < 1e-8 * (1.0 + np.abs(found.x).max())
        return np.asarray(found.x)

    @cached_property
    def ultimate(self) -> tuple[float, float]:
        """Gain, with its sign, and period, s, at which a proportional loop swings for ever: small signals, by differences."""
        n, x = len(self.rest), self.rest
        size = 1e-5 * (1.0 + np.abs(x))
        A = np.column_stack([(self.motion(x + d, self.level) - self.motion(x - d, self.level)) / (2 * s)
                             for s, d in zip(size, np.diag(size), strict=True)])  # fmt: skip
        B = (self.motion(x, self.level + 1e-4) - self.motion(x, self.level - 1e-4)) / 2e-4
        C = np.array([(self.see(x + d) - self.see(x - d)) / (2 * s) for s, d in zip(size, np.diag(size), strict=True)])
        w = np.geomspace(1e-5, 3.0, 6000) / self.scan_s
        value = np.array([C @ np.linalg.solve(1j * v * np.eye(n) - A, B) for v in w])
        value = value * np.exp(-1j * w * (self.transport_s + 0.5 * self.scan_s))
        sign = math.copysign(1.0, value[0].real if not self.integrating else -value[0].imag)
        phase = np.unwrap(np.angle(sign * value))
        at = int(np.argmax(phase < -math.pi))
        assert at > 0
        return sign / float(np.abs(value[at])), float(2 * math.pi / w[at])

    def run(
        self, scans: int, settings: tuple[float, float, float, float] | None, *, setpoint: float | Array = 0.0,
        manual: Array | None = None, load: float | Array = 0.0, noise: Array | None = None, rounded: bool = True,
        weight: float = 1.0,
    ) -> tuple[Array, Array]:  # fmt: skip
        """Return measurement and output (scans,), from rest; setpoint, load and manual are changes, settings kp, ki, kd, Tf.

        Backward differences, derivative of the measurement.
        """
        x, rest = self.rest.copy(), self.see(self.rest)
        setpoint, load = np.broadcast_to(setpoint, scans), np.broadcast_to(load, scans)
        noise = np.zeros(scans) if noise is None else noise
        seen, written = np.empty(scans), np.empty(scans)
        wait = round(self.transport_s / self.scan_s)
        line = [self.level] * wait
        valve, integral, slope, last = self.level, 0.0, 0.0, rest
        h = self.scan_s / self.substeps
        for k in range(scans):
            y = self.see(x) + noise[k]
            if self.resolution and rounded:
                y = self.resolution * round(y / self.resolution)
            if settings is None:
                assert manual is not None
                u = self.level + float(manual[k])
            else:
                kp, ki, kd, filter_s = settings
                error = rest + setpoint[k] - y
                integral += ki * self.scan_s * error
                if kd:
                    slope = (filter_s * slope - kd * (y - last)) / (filter_s + self.scan_s)
                last = y
                u = self.level + kp * (rest + weight * setpoint[k] - y) + integral + slope
            seen[k], written[k] = y, u
            valve = self._valve(valve, u)
            line.append(valve + load[k])
            v = line.pop(0)
            for _ in range(self.substeps):
                one = self.motion(x, v)
                two = self.motion(x + 0.5 * h * one, v)
                three = self.motion(x + 0.5 * h * two, v)
                x = x + h / 6.0 * (one + 2.0 * two + 2.0 * three + self.motion(x + h * three, v))
            if not np.all(np.abs(x) < 1e7):
                seen[k + 1 :], written[k + 1 :] = math.inf, math.inf
                break
        return seen, written

    def _valve(self, at: float, u: float) -> float:
        if self.play:
            return min(max(at, u - 0.5 * self.play), u + 0.5 * self.play)
        if self.stick:
            return u - math.copysign(self.slip, u - at) if abs(u - at) > self.stick else at
        return u


def _heater(x: Array, v: float) -> Array:
    """Element, block and sensor; losses by convection and radiation. C, W/K by judgement; power 20 W per %."""
    element, block, sensor = x
    radiated = 4e-9 * ((block + 273.15) ** 4 - 293.15**4)
    return np.array([
        (20.0 * v - 8.0 * (element - block)) / 250.0,
        (8.0 * (element - block) - 1.5 * (block - 20.0) - radiated) / 900.0,
        (block - sensor) / 15.0,
    ])  # fmt: skip


def _tanks(x: Array, v: float) -> Array:
    """Two tanks in a row, outflow by Torricelli's law, and a level sensor; m, inflow 0.4 l/s per 10 %."""
    a, b, sensor = x
    first, second = 1.2e-3 * math.sqrt(max(a, 1e-6)), 1.1e-3 * math.sqrt(max(b, 1e-6))
    return np.array([(4e-5 * v - first) / 0.05, (first - second) / 0.04, (b - sensor) / 4.0])


def _exchanger(x: Array, v: float) -> Array:
    """Six cells of a counterflow exchanger, six of its wall; cold side measured, hot flow by the valve."""
    cold, wall = x[:6], x[6:]
    into = np.concatenate([[15.0], cold[:-1]])
    hot = 80.0 - 0.4 * np.arange(5, -1, -1) * (100.0 - v) / 50.0
    return np.concatenate(
        [(into - cold) / 2.0 + 0.25 * (wall - cold), 0.12 * (hot - wall) * (v / 50.0) - 0.2 * (wall - cold)]
    )


def _reactor(x: Array, v: float) -> Array:
    """A stirred reactor with a first-order exothermic reaction and a jacket: share left, temperatures in K; 1 K a %."""
    left, inside, jacket = x
    rate = math.exp(-8000.0 * (1.0 / inside - 1.0 / 350.0)) / 600.0
    return np.array([
        (1.0 - left) / 600.0 - rate * left,
        (330.0 - inside) / 600.0 + 60.0 * rate * left - 0.004 * (inside - jacket),
        (280.0 + v - jacket) / 60.0 + 0.01 * (inside - jacket),
    ])  # fmt: skip


def _servo(x: Array, v: float) -> Array:
    """Current, speed, gear lag and angle of a drive with viscous friction; the input is a voltage."""
    current, speed, out, _ = x
    return np.array([
        (v - 1.2 * current - 0.08 * speed) / 0.004,
        (0.08 * current - 2e-4 * speed) / 3e-4,
        (speed / 20.0 - out) / 0.02,
        out,
    ])  # fmt: skip


def _shaft(x: Array, v: float) -> Array:
    """Motor and load with an elastic shaft, speed of the load; friction viscous. kg m2, N m."""
    motor, twist, load = x
    torque = 60.0 * twist + 0.02 * (motor - load)
    return np.array([(0.2 * v - torque - 0.02 * motor) / 0.02, motor - load, (torque - 0.03 * load) / 0.05])


def _rod(x: Array, v: float) -> Array:
    """Heat along a rod of 16 pieces, heated at one end, losing a little everywhere; seen in piece 9."""
    left, right = np.concatenate([[x[0]], x[:-1]]), np.concatenate([x[1:], [x[-1]]])
    return 0.5 * (left - 2.0 * x + right) - 0.01 * x + np.concatenate([[0.05 * v], np.zeros(15)])


def _mixers(x: Array, v: float) -> Array:
    """Eight mixed vessels in a row."""
    return (np.concatenate([[0.6 * v], x[:-1]]) - x) / 3.0


def _gas(x: Array, v: float) -> Array:
    """Two gas volumes and an actuator: choked flow in, throttled between, choked out; pressures in bar."""
    actuator, first, second = x
    between = 0.5 * math.copysign(math.sqrt(abs(first**2 - second**2)), first - second)
    return np.array([(v - actuator) / 0.4, (0.06 * actuator - between) / 1.5, (between - 0.6 * second) / 2.0])


def _swelling(x: Array, v: float) -> Array:
    """Pipe, wall and bulk of a bath whose sensor is cooled first by the inflow: it answers the wrong way at first."""
    inflow, wall, bulk = x
    return np.array([(v - inflow) / 2.0, (inflow - wall) / 5.0, (1.2 * wall - 0.3 * inflow - bulk) / 6.0])


def _flow(x: Array, v: float) -> Array:
    """Flow through a long pipe, a transmitter, and a filter."""
    return np.array([(0.8 * v - x[0]) / 3.0, (x[0] - x[1]) / 1.0, (x[1] - x[2]) / 0.6])


def _last(x: Array) -> float:
    return float(x[-1])


SMOOTH = [
    Physics(name="heater with a coarse sensor", motion=_heater, see=_last, guess=(200.0, 170.0, 170.0), level=30.0,
            scan_s=2.0, step_out=8.0, step_set=15.0, noise=0.05, resolution=0.25),
    Physics(name="two tanks", motion=_tanks, see=_last, guess=(1.0, 1.0, 1.0), level=30.0, scan_s=2.0, step_out=3.0,
            step_set=0.1, noise=0.001),
    Physics(name="exchanger with transport", motion=_exchanger, see=lambda x: float(x[5]), guess=(30.0,) * 12, level=50.0,
            scan_s=0.5, step_out=8.0, step_set=2.0, noise=0.03, transport_s=6.0, substeps=2),
    Physics(name="stirred reactor", motion=_reactor, see=lambda x: float(x[1]), guess=(0.5, 350.0, 345.0), level=60.0,
            scan_s=4.0, step_out=4.0, step_set=3.0, noise=0.05),
    Physics(name="servo with a gear lag", motion=_servo, see=_last, guess=(0.0,) * 4, level=0.0, scan_s=0.002,
            step_out=2.0, step_set=0.5, noise=0.002, integrating=True, substeps=2),
    Physics(name="heated rod", motion=_rod, see=lambda x: float(x[8]), guess=(20.0,) * 16, level=40.0, scan_s=1.5,
            step_out=8.0, step_set=2.0, noise=0.02),
    Physics(name="eight mixers", motion=_mixers, see=_last, guess=(20.0,) * 8, level=40.0, scan_s=0.5, step_out=8.0,
            step_set=4.0, noise=0.06, substeps=2),
    Physics(name="two gas volumes", motion=_gas, see=_last, guess=(50.0, 8.0, 5.0), level=50.0, scan_s=0.1, step_out=5.0,
            step_set=0.4, noise=0.008, substeps=2),
    Physics(name="inverse answer", motion=_swelling, see=_last, guess=(40.0,) * 3, level=40.0, scan_s=0.5, step_out=6.0,
            step_set=4.0, noise=0.06, substeps=2),
]  # fmt: skip
SHAFT = Physics(name="two masses on a shaft", motion=_shaft, see=_last, guess=(20.0, 0.01, 20.0), level=5.0, scan_s=0.002,
                step_out=1.0, step_set=2.0, noise=0.02)  # fmt: skip
STICKING = Physics(name="valve with sticking", motion=_flow, see=_last, guess=(30.0,) * 3, level=40.0, scan_s=0.25,
                   step_out=6.0, step_set=5.0, noise=0.03, stick=1.5, slip=0.3, substeps=1)  # fmt: skip
PLAY = Physics(name="valve with lost motion", motion=_flow, see=_last, guess=(30.0,) * 3, level=40.0, scan_s=0.25,
               step_out=6.0, step_set=5.0, noise=0.03, play=2.5, substeps=1)  # fmt: skip
