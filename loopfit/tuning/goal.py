"""What new settings are to reach, and within which limits."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field
from types import MappingProxyType
from typing import Literal

from loopfit.core.arrays import Array
from loopfit.core.errors import UsageError
from loopfit.loop.visible import Swing

Terms = Literal["P", "PI", "PD", "PID"]
SETTINGS = ("gain", "integral", "derivative")
LIMITED = ("gain", "integral_time_s", "derivative_time_s")
CRITICAL = 1.0
_SWING_AT_CRITICAL = 0.02  # critical damping survives no fit error exactly: what is promised is a swing
_VISIBLE_SHORT = 0.05
_DESIGN_SHORT = 0.02
_MOST_SENSITIVITY = (1.05, 3.0)


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Goal:
    """The wanted damping ratio and the limits that hold besides.

    `noise_gain`: largest |plant gain| (kp + kd / filter). `move`: the settings that may change (all, when None);
    `at_least`, `at_most`: bounds on gain (its magnitude), integral_time_s, derivative_time_s, ideal form.
    `confidence`: the probability with which the true loop is to meet the goal; None for the fitted plant alone.
    `series`: only settings that exist in series form. `disc`: (2, n) frequency, rad/s, and how far the plant may be from its
    model there, in its own unit: the loop keeps its distance for every plant in it.
    `margin`: visible damping beyond the criterion that a search asks for, since no draw holds the whole error of the model.
    """

    damping_ratio: float = CRITICAL
    overshoot_percent: float | None = None
    settling_s: float | None = None
    max_sensitivity: float = 1.6
    noise_gain: float = 20.0
    terms: Terms = "PI"
    move: frozenset[str] | None = None
    at_least: Mapping[str, float] = field(default_factory=lambda: MappingProxyType({}))
    at_most: Mapping[str, float] = field(default_factory=lambda: MappingProxyType({}))
    confidence: float | None = 0.9
    series: bool = False
    disc: Array | None = None
    margin: float = 0.0

    def __post_init__(self) -> None:
        if not 0.0 < self.damping_ratio <= 1.0:
            raise UsageError(f"the target damping ratio is above 0 and at most 1, not {self.damping_ratio:g}")
        low, high = _MOST_SENSITIVITY
        if not low <= self.max_sensitivity <= high:
            raise UsageError(f"the limit of the sensitivity is {low:g} to {high:g}, not {self.max_sensitivity:g}")
        if not (math.isfinite(self.noise_gain) and self.noise_gain > 0):
            raise UsageError(f"the limit of the noise gain is above 0, not {self.noise_gain:g}")
        for name in ("overshoot_percent", "settling_s"):
            value = getattr(self, name)
            if value is not None and not (math.isfinite(value) and value > 0):
                raise UsageError(f"the target {name.rsplit('_', 1)[0]} is a number above 0, not {value!r}")
        if self.confidence is not None and not 0.5 <= self.confidence < 1.0:
            raise UsageError("the confidence of the target is at least 50 and below 100 %")
        for name in self.move or ():
            if name not in SETTINGS:
                raise UsageError(f"{name!r} is no setting that moves; there are {', '.join(SETTINGS)}")
        for name, value in (*self.at_least.items(), *self.at_most.items()):
            if name not in LIMITED:
                raise UsageError(f"{name!r} cannot be bounded; there are {', '.join(LIMITED)}")
            if not (math.isfinite(value) and value >= 0):
                raise UsageError(f"the bound of {name} is a number of at least 0, not {value!r}")
        for name in self.at_least.keys() & self.at_most.keys():
            if self.at_least[name] > self.at_most[name]:
                raise UsageError(f"{name} is to be at least {self.at_least[name]:g} and at most {self.at_most[name]:g}")

    @property
    def integral(self) -> bool:
        """Whether the controller integrates."""
        return "I" in self.terms

    @property
    def derivative(self) -> bool:
        """Whether the controller differentiates."""
        return "D" in self.terms

    @property
    def design_damping(self) -> float:
        """Least design damping of a nominal design: a little below the target, where the optimum is a multiple root."""
        return self.damping_ratio - _DESIGN_SHORT

    @property
    def criterion(self) -> str:
        """What "met" means, in words."""
        words = (
            f"swing at most {100.0 * _SWING_AT_CRITICAL:g} %"
            if self.damping_ratio == CRITICAL
            else f"visible damping at least {self.damping_ratio - _VISIBLE_SHORT:.3g}"
        )
        if self.overshoot_percent is not None:
            words += f", setpoint overshoot at most {self.overshoot_percent:g} %"
        if self.settling_s is not None:
            words += f", settled within {self.settling_s:g} s"
        return words

    @property
    def least_visible(self) -> float:
        """Visible damping that meets the criterion."""
        if self.damping_ratio == CRITICAL:
            turn = -math.log(_SWING_AT_CRITICAL)
            return turn / math.hypot(math.pi, turn) + self.margin
        return self.damping_ratio - _VISIBLE_SHORT + self.margin

    def met_by(self, swing: Swing) -> bool:
        """Tell whether a loop's swing meets the criterion of the damping."""
        return swing.stable and swing.visible_damping >= self.least_visible
