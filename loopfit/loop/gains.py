"""A controller as the loop computes with it."""

from __future__ import annotations

import math
from dataclasses import dataclass

from loopfit.core.errors import UsageError


@dataclass(frozen=True, slots=True, kw_only=True)
class Gains:
    """u = kp (b r - y) + ki integral of (r - y) + kd s / (filter_s s + 1) (-y, or r - y when on the error).

    Seconds and engineering units; e = setpoint - measurement. `kp`, `ki` and `kd` carry the sign that the plant's gain
    asks for. `filter_s` is 0 only where `kd` is.
    """

    kp: float
    ki: float = 0.0
    kd: float = 0.0
    filter_s: float = 0.0
    setpoint_weight: float = 1.0
    derivative_on_error: bool = False

    def __post_init__(self) -> None:
        for name in ("kp", "ki", "kd", "filter_s", "setpoint_weight"):
            value = getattr(self, name)
            if not math.isfinite(value):
                raise UsageError(f"{name} is a finite number, not {value!r}")
        if self.filter_s < 0:
            raise UsageError(f"the time of a derivative filter is at least 0 s, not {self.filter_s:g}")
        if self.kd != 0.0 and self.filter_s == 0.0:
            raise UsageError("a derivative needs a filter: without one the loop amplifies noise without limit")
        if self.kp == self.ki == self.kd == 0.0:
            raise UsageError("the controller does nothing: all its gains are 0")
