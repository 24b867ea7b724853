"""What a retuning says: plant, target, present and proposed settings with their figures, the way there, cautions."""

from __future__ import annotations

import math
from dataclasses import dataclass, fields
from typing import TYPE_CHECKING, Any

from loopfit.core.finding import Finding
from loopfit.core.plain import plain, to_json
from loopfit.core.quantity import Quantity
from loopfit.core.version import VERSION
from loopfit.identify.identified import Identified
from loopfit.loop.gains import Gains
from loopfit.loop.plant import Plant
from loopfit.loop.settings import Settings
from loopfit.tuning.goal import Goal

if TYPE_CHECKING:
    from loopfit.identify.typed import TypedCheck


@dataclass(frozen=True, slots=True, kw_only=True)
class LoopFigures:
    """Figures of a loop on the fitted plant, their intervals over the plants that the record allows as well.

    None where a figure does not exist (an unstable loop has no overshoot). Overshoot, rise and settling are of a setpoint
    step, in percent of it and s; `load_integrated_error` is the area under the error after a load of one output unit,
    `load_absolute_error` that of its magnitude; `peak_output` the largest output change after a setpoint step of one
    unit; `output_noise` the rms of the output over that of noise from scan to scan in the measurement.
    """

    stable: bool
    damping_ratio: Quantity | None = None
    swing_percent: Quantity | None = None
    overshoot_percent: Quantity | None = None
    rise_time_s: Quantity | None = None
    settling_time_s: Quantity | None = None
    load_integrated_error: Quantity | None = None
    load_absolute_error: Quantity | None = None
    peak_output: Quantity | None = None
    output_noise: Quantity | None = None
    gain_margin: Quantity | None = None
    phase_margin_deg: Quantity | None = None
    delay_margin_s: Quantity | None = None
    max_sensitivity: Quantity | None = None


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Side:
    """One controller setting and what the loop does with it.

    `settings`: as the controller shows them; `gains`: as the loop computes with them.
    """

    settings: Settings
    gains: Gains
    figures: LoopFigures
    probability_of_target: float | None = None


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Move:
    """One stage on the way: settings to key in, figures on the fitted plant, and what to watch for."""

    side: Side
    text: str


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Retuning:
    """New settings for a loop.

    `proposed` is the best attainable where the target is not `met`; None where no settings may be proposed at all, the
    reason in `refused`.
    """

    identified: Identified
    goal: Goal
    met: bool
    current: Side | None
    proposed: Side | None
    moves: tuple[Move, ...]
    cautions: tuple[str, ...]
    findings: tuple[Finding, ...]
    band_percent: float
    attainable_damping_ratio: float | None = None
    obstacle: str | None = None
    refused: str | None = None
    typed: TypedCheck | None = None
    comparisons: tuple[tuple[str, Side], ...] = ()

    def to_dict(self) -> dict[str, Any]:
        """Return the document as plain data; open bounds as None."""
        plant = self.identified.plant
        record = self.identified.record
        damping, frequency = _second_order(plant)
        return {
            "document": "loopfit retune",
            "version": 1,
            "loopfit": VERSION,
            "record": None if record is None else record.source,
            "plant": {
                "kind": _kind(plant),
                "found_from": self.identified.how,
                "gain": plant.gain,
                "damping_ratio": damping,
                "natural_frequency_rad_s": frequency,
                "dead_time_s": plant.dead_time_s,
                "time_constants_s": None if plant.time_constants_s is None else list(plant.time_constants_s),
                "zero_s": plant.zero_s,
                "integrating": plant.integrating,
                "numerator": list(plant.numerator),
                "denominator": list(plant.denominator),
            },
            "target": {
                "damping_ratio": self.goal.damping_ratio,
                "criterion": self.goal.criterion,
                "max_sensitivity": self.goal.max_sensitivity,
                "noise_gain": self.goal.noise_gain,
                "overshoot_percent": self.goal.overshoot_percent,
                "settling_time_s": self.goal.settling_s,
                "confidence_percent": None if self.goal.confidence is None else 100.0 * self.goal.confidence,
                "met": self.met,
                "attainable_damping_ratio": self.attainable_damping_ratio,
                "obstacle": self.obstacle,
                "refused": self.refused,
            },
            "typed_settings": None if self.typed is None else {"verdict": self.typed.verdict, "text": self.typed.text},
            "current": _side(self.current),
            "proposed": _side(self.proposed),
            "moves": [_side(move.side) | {"text": move.text} for move in self.moves],
            "comparisons": [{"rule": name} | _side(side) for name, side in self.comparisons],
            "findings": [{"code": f.code, "severity": f.severity, "text": f.text} for f in self.findings],
            "cautions": list(self.cautions),
        }

    def to_json(self) -> str:
        """Return the document as JSON text."""
        return to_json(self.to_dict())


def _side(side: Side | None) -> Any:
    if side is None:
        return None
    figures = {item.name: plain(getattr(side.figures, item.name)) for item in fields(LoopFigures)}
    return {
        "settings": _ideal(side.gains),
        "as_entered": side.settings.as_entered(),
        **figures,
        "probability_of_target": side.probability_of_target,
    }


def _ideal(gains: Gains) -> dict[str, Any]:
    """Return the settings in ideal form, seconds and engineering units, the gain with the sign of e = setpoint - measurement."""
    return {
        "form": "ideal",
        "gain": gains.kp,
        "integral_time_s": gains.kp / gains.ki if gains.ki else None,
        "derivative_time_s": gains.kd / gains.kp if gains.kd and gains.kp else None,
        "derivative_filter_s": gains.filter_s if gains.kd else None,
        "setpoint_weight": gains.setpoint_weight,
    }


def _kind(plant: Plant) -> str:
    """Return the kind of a plant in the words of an analysis; "rational" for any other."""
    if plant.integrating:
        return "integrating"
    order = len(plant.denominator) - 1
    if plant.zero_s or order > 2:
        return "second_order_zero" if order == 2 else "rational"
    return ("dead_time", "first_order", "second_order")[order]


def _second_order(plant: Plant) -> tuple[float | None, float | None]:
    """Return damping ratio and natural frequency, rad/s, of a plant of second order; None for another."""
    if plant.integrating or len(plant.denominator) != 3:
        return None, None
    a2, a1, a0 = plant.denominator
    frequency = math.sqrt(a0 / a2)
    return a1 / (2.0 * math.sqrt(a2 * a0)), frequency
