"""The closed loop from setpoint to measurement, as a system that equivalents can be asked of."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from loopfit.core.arrays import Array
from loopfit.loop.certificate import certified_roots
from loopfit.loop.gains import Gains
from loopfit.loop.plant import Plant
from loopfit.loop.response import respond
from loopfit.loop.roots import actions, characteristic
from loopfit.loop.visible import is_stable
from loopfit.model.transfer import Complex, Transfer, transfer_of

_POLES = 12


@dataclass(frozen=True, kw_only=True)
class ClosedLoop:
    """Setpoint to measurement of a loop with dead time: no rational function, but exact poles, residues and step.

    transfer(s) = b_F(s) exp(-th s) / (a(s) + b(s) exp(-th s)), b_F the part of b that the setpoint sees.
    """

    plant: Plant
    gains: Gains

    @property
    def numerator(self) -> None:
        """None: a loop around a dead time is no rational function."""
        return

    @property
    def denominator(self) -> None:
        """None, as the numerator."""
        return

    @property
    def dead_time_s(self) -> float:
        """Dead time of the plant, s."""
        return self.plant.dead_time_s

    @cached_property
    def poles(self) -> Complex:
        """The rightmost poles, rad/s; there are infinitely many."""
        return certified_roots(characteristic(self.plant, self.gains), _POLES).roots

    @cached_property
    def zeros(self) -> Complex:
        """Zeros of the setpoint path, rad/s."""
        return np.roots(self._forward[2]).astype(complex)

    @cached_property
    def residues(self) -> Complex:
        """Residues of the setpoint transfer at `poles`; large where a pole is nearly repeated."""
        a, b, forward = self._forward
        s, th = self.poles, self.dead_time_s
        delay = np.exp(-th * s)
        slope = np.polyval(np.polyder(a), s) + (np.polyval(np.polyder(b), s) - th * np.polyval(b, s)) * delay
        with np.errstate(divide="ignore", invalid="ignore"):
            # the dead time itself stays outside, as in every other system
            return np.asarray(np.polyval(forward, s) / slope, dtype=complex)

    @property
    def static_gain(self) -> float | None:
        """Final value of the unit step response."""
        a, b, forward = self._forward
        below = float(a[-1] + b[-1])
        return None if below == 0.0 else float(forward[-1]) / below

    @property
    def stable(self) -> bool:
        """Whether the loop is stable."""
        return is_stable(self.poles)

    @property
    def integrating(self) -> bool:
        """Whether the closed loop has a pole at 0."""
        a, b, _ = self._forward
        return float(a[-1] + b[-1]) == 0.0

    def step(self, time: Array) -> Array:
        """Return the unit step response at `time`, s."""
        when = np.asarray(time, dtype=np.float64)
        moved = respond(self.plant, self.gains, time=np.maximum(when, 0.0), setpoint_step=1.0).measurement
        return np.where(when >= 0.0, moved, 0.0)

    @property
    def rational(self) -> Transfer | None:
        """The transfer function of a loop without dead time; None with one."""
        if self.dead_time_s > 0.0:
            return None
        a, b, forward = self._forward
        return transfer_of(list(forward), list(np.polyadd(a, b)))

    @cached_property
    def _forward(self) -> tuple[Array, Array, Array]:
        """Coefficients of a, b and b_F, highest power first, in seconds."""
        gains = self.gains
        characteristic(self.plant, gains)  # refuses a loop without a meaning
        rows, below, _ = actions(gains.filter_s, integral=gains.ki != 0.0, derivative=gains.kd != 0.0)
        numerator = np.array(self.plant.numerator)
        seen = [gains.setpoint_weight * gains.kp, gains.ki, gains.kd if gains.derivative_on_error else 0.0]
        a = np.convolve(self.plant.denominator, below)
        b = np.convolve(numerator, np.array([gains.kp, gains.ki, gains.kd]) @ rows)
        forward = np.convolve(numerator, np.array(seen) @ rows)
        return a, b, np.trim_zeros(forward, "f") if np.any(forward) else np.zeros(1)
