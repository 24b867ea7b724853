"""What the search for an equivalent second-order model says: typed, frozen, and as plain data."""

from __future__ import annotations

from dataclasses import dataclass, fields
from typing import Any

from loopfit.core.plain import plain, to_json
from loopfit.core.quantity import Quantity
from loopfit.equivalents.system import System

_ROUNDING_PERCENT = 1e-9


@dataclass(frozen=True, slots=True, kw_only=True)
class Equivalent:
    """gain (zero_s s + 1) exp(-dead_time_s s) / (s^2 / wn^2 + 2 zeta s / wn + 1), as one method gives it.

    `time_constants_s` holds the lags, slowest first, where they are real (one for a first order, none for dead time
    alone). All fields are None where the method gives nothing, and `reason` says why; otherwise `reason` says what the
    method left out or replaced, if anything. The step errors are in percent of the final value of the exact system
    (for an integrating one: of its final slope); None where it has none. The gain of an integrating system is per second.
    """

    method: str
    gain: float | None = None
    damping_ratio: float | None = None
    natural_frequency_rad_s: float | None = None
    dead_time_s: float | None = None
    time_constants_s: tuple[float, ...] | None = None
    zero_s: float | None = None
    step_error_max_percent: float | None = None
    step_error_rms_percent: float | None = None
    reason: str | None = None

    @property
    def exists(self) -> bool:
        """Whether the method gave a model."""
        return self.gain is not None


@dataclass(frozen=True, slots=True, kw_only=True)
class ExactFigures:
    """Figures of the unit step response of the exact system; None where it has none, and `reasons` say why."""

    final_value: Quantity | None = None
    peak_value: Quantity | None = None
    overshoot_percent: Quantity | None = None
    peak_time_s: Quantity | None = None
    rise_time_s: Quantity | None = None
    settling_time_s: Quantity | None = None
    delay_time_s: Quantity | None = None
    decay_ratio: Quantity | None = None
    reasons: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True, kw_only=True, eq=False, repr=False)
class Equivalents:
    """Equivalents of one system by all methods. `chosen` names the one to use; None when no method gave a model.

    `window_s` is the time from the step over which the rms errors are taken (the largest are those at any time); None where
    there are none.
    """

    system: System
    expression: str | None
    equivalents: tuple[Equivalent, ...]
    chosen: str | None
    adequate: bool
    reasons: tuple[str, ...]
    response: ExactFigures
    band_percent: float
    window_s: float | None = None

    def __repr__(self) -> str:
        return f"<Equivalents of {self.expression or 'a system'}: {self.best or 'none'}>"

    @property
    def best(self) -> Equivalent | None:
        """The chosen equivalent."""
        return next((one for one in self.equivalents if one.method == self.chosen), None)

    def to_dict(self) -> dict[str, Any]:
        """Return the document's keys and plain values; a pole or zero is a pair (real part, imaginary part), rad/s."""
        system = self.system
        document = {
            "document": "loopfit equivalent",
            "version": 1,
            "system": {
                "expression": self.expression,
                "poles": _pairs(system.poles),
                "zeros": _pairs(system.zeros),
                "dead_time_s": system.dead_time_s,
                "static_gain": system.static_gain,
                "stable": system.stable,
                "integrating": system.integrating,
            },
            "equivalents": [_fields(one) for one in self.equivalents],
            "chosen": self.chosen,
            "adequate": self.adequate,
            "reasons": list(self.reasons),
            "response": _fields(self.response),
            "window_s": self.window_s,
            "band_percent": self.band_percent,
        }
        out: dict[str, Any] = plain(document)
        return out

    def to_json(self) -> str:
        """Return the JSON document."""
        return to_json(self.to_dict())


def share_words(percent: float) -> str:
    """Return a percentage in two figures, or all before the point, without an exponent; 0 for what is only rounding."""
    if abs(percent) < _ROUNDING_PERCENT:
        return "0"
    return f"{percent:.0f}" if 99.5 <= abs(percent) < 1e6 else f"{percent:.2g}"


def _pairs(values: Any) -> list[list[float]]:
    return [[float(value.real), float(value.imag)] for value in values]


def _fields(result: Equivalent | ExactFigures) -> dict[str, Any]:
    return {field.name: getattr(result, field.name) for field in fields(result)}
