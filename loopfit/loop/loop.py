"""A loop: a plant and the settings of its controller, and what follows from the two exactly."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import ArrayLike

from loopfit.core.errors import UsageError
from loopfit.loop.certificate import CertifiedRoots, certified_roots
from loopfit.loop.closed import ClosedLoop
from loopfit.loop.gains import Gains
from loopfit.loop.margins import Margins, margins_of
from loopfit.loop.plant import Plant
from loopfit.loop.response import Response, respond
from loopfit.loop.roots import characteristic
from loopfit.loop.sampled import ScanEffect, sampled_swing, scan_matters
from loopfit.loop.settings import Settings
from loopfit.loop.visible import Swing, swing_of

_SPANS = 8.0
_POINTS = 600


@dataclass(frozen=True)
class Loop:
    """A plant under a controller.

    `settings` may also be `Gains`, the controller as the loop computes with it. With `Settings.scan_s` the damping is
    that of the sampled loop, by its own roots; margins are those of the continuous loop.
    """

    plant: Plant
    settings: Settings | Gains

    def __post_init__(self) -> None:
        if not isinstance(self.plant, Plant):
            raise UsageError(f"a loop needs a Plant, not {type(self.plant).__name__}; see Plant.of_transfer")
        if not isinstance(self.settings, Settings | Gains):
            raise UsageError(f"a loop needs Settings, not {type(self.settings).__name__}")

    @property
    def gains(self) -> Gains:
        """The controller as the loop computes with it."""
        return self.settings.gains if isinstance(self.settings, Settings) else self.settings

    @property
    def scan_s(self) -> float | None:
        """Scan interval, s; None for a controller taken as continuous."""
        return self.settings.scan_s if isinstance(self.settings, Settings) else None

    @cached_property
    def certified(self) -> CertifiedRoots:
        """The rightmost roots of the continuous loop, and whether a count confirmed them."""
        return certified_roots(characteristic(self.plant, self.gains))

    @property
    def roots(self) -> np.ndarray[tuple[int, ...], np.dtype[np.complex128]]:
        """Rightmost roots of the characteristic equation, rad/s, dead time exact; rightmost first."""
        return self.certified.roots

    @cached_property
    def swing(self) -> Swing:
        """How the loop swings after a load: of the sampled loop where the scan interval is known."""
        if self.scan_s is not None:
            return sampled_swing(self.plant, self.gains, self.scan_s)
        return swing_of(self.plant, self.gains, self.certified)

    @property
    def damping_ratio(self) -> float:
        """The damping that a person sees: that of a second-order answer with the same swing; at most 1, below 0 unstable."""
        return self.swing.visible_damping

    @property
    def design_damping(self) -> float:
        """The stricter damping ratio that a design constrains: every mode above a tenth of the peak counts."""
        return self.swing.design_damping

    @property
    def stable(self) -> bool:
        """Whether the loop is stable."""
        return self.swing.stable

    @property
    def scan_effect(self) -> ScanEffect | None:
        """What the scan interval does to the loop, in words; None for a continuous controller."""
        return None if self.scan_s is None else scan_matters(self.plant, self.gains, self.scan_s)

    @property
    def closed(self) -> ClosedLoop:
        """Setpoint to measurement, for `loopfit.equivalent`."""
        return ClosedLoop(plant=self.plant, gains=self.gains)

    def margins(self) -> Margins:
        """Return the margins of the continuous loop, all crossovers, sensitivities and bandwidth."""
        return margins_of(self.plant, self.gains)

    def respond(self, time: ArrayLike | None = None, *, setpoint_step: float = 0.0, load_step: float = 0.0) -> Response:
        """Return the exact response of the continuous loop to steps at time 0.

        Parameters
        ----------
        time : (n,) array, optional
            s; by default until the loop has come to rest, or ten swings of one that does not.
        setpoint_step, load_step : float
            A setpoint step of 1 where neither is given. The load adds to the plant's input.
        """
        if setpoint_step == 0.0 and load_step == 0.0:
            setpoint_step = 1.0
        when = self._times() if time is None else time
        return respond(self.plant, self.gains, time=when, setpoint_step=setpoint_step, load_step=load_step)

    def _times(self) -> np.ndarray[tuple[int, ...], np.dtype[np.float64]]:
        slowest = self.roots[0]
        pace = abs(slowest.real) if abs(slowest.real) > 0.02 * abs(slowest) else 0.1 * abs(slowest)
        span = self.plant.dead_time_s + _SPANS / max(float(pace), 1e-12)
        return np.linspace(0.0, span, _POINTS)
