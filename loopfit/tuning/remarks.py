"""What must be said of a proposal beside its figures: its price, what it does not do, what the record could not show."""

from __future__ import annotations

import math
from collections.abc import Mapping

import numpy as np

from loopfit.core.finding import Finding
from loopfit.core.quantity import Quantity
from loopfit.identify.identified import Identified
from loopfit.loop.plant import Plant
from loopfit.loop.visible import Swing
from loopfit.tuning.goal import Goal
from loopfit.tuning.probable import Probable
from loopfit.tuning.result import Side

_ROWS_PER_PACE = 2.0
_MUCH_MORE = 1.5
_FIGURES = {
    "damping_ratio_min": ("damping_ratio", "damping ratio", ""),
    "damping_ratio_max": ("damping_ratio", "damping ratio", ""),
    "overshoot_percent_max": ("overshoot_percent", "setpoint overshoot", " %"),
    "settling_time_s_max": ("settling_time_s", "settling time", " s"),
    "rise_time_s_max": ("rise_time_s", "rise time", " s"),
}


def remarks(
    identified: Identified, goal: Goal, current: Side | None, proposed: Side, found: Probable, *,
    scan_s: float | None, limits: Mapping[str, float],
) -> list[Finding]:  # fmt: skip
    """Return the findings that go with a proposal, in the order in which a person should read them."""
    out = _met_already(current, goal)
    out += _offset(identified.plant, goal, proposed)
    out += _price(current, proposed)
    out += _limits(proposed, limits)
    out += _pace(identified, found.designed.swing, scan_s)
    out += _rounding(found, proposed, goal)
    out += _derivative(goal, proposed)
    return out


def _met_already(current: Side | None, goal: Goal) -> list[Finding]:
    share = None if current is None else current.probability_of_target
    if current is None or share is None or goal.confidence is None or share < goal.confidence:
        return []
    text = (
        f"The present settings meet this target already, with a probability of {100 * min(share, 0.99):.0f} % or more: change them "
        "only if a faster loop is wanted; an averaging level loop is better left alone."
    )
    return [Finding(code="already_met", severity="warning", text=text)]


def _offset(plant: Plant, goal: Goal, proposed: Side) -> list[Finding]:
    if goal.integral or not proposed.figures.stable:
        return []
    through = math.inf if plant.integrating else plant.gain * proposed.gains.kp
    load = 1.0 / proposed.gains.kp if plant.integrating else plant.gain / (1.0 + through)
    kept = (
        "a setpoint is reached"
        if plant.integrating
        else f"{100.0 / (1.0 + through):.3g} % of a setpoint change is never reached"
    )
    text = (
        f"Without integral action an offset stands: {kept}, and a lasting load of one output unit moves the measurement by "
        f"{abs(load):.3g} for good."
    )
    return [Finding(code="standing_offset", severity="warning", text=text)]


def _price(current: Side | None, proposed: Side) -> list[Finding]:
    if current is None or not current.figures.stable or not proposed.figures.stable:
        return []
    words = []
    for name, what in (("load_absolute_error", "the error after a load"), ("settling_time_s", "the time to settle")):
        old, new = getattr(current.figures, name), getattr(proposed.figures, name)
        if _counts(old) and _counts(new) and new.value > _MUCH_MORE * old.value:
            words.append(f"{what} becomes {new.value / old.value:.2g} times what it is now")
    if not words:
        return []
    return [
        Finding(code="worse_than_now", severity="warning", text=f"The price of the damping: {' and '.join(words)}.")
    ]


def _counts(quantity: Quantity | None) -> bool:
    return quantity is not None and math.isfinite(quantity.value) and quantity.value > 0


def _limits(proposed: Side, limits: Mapping[str, float]) -> list[Finding]:
    out = []
    for name, limit in limits.items():
        if name not in _FIGURES:
            continue
        field, word, unit = _FIGURES[name]
        quantity = getattr(proposed.figures, field)
        if quantity is None:
            continue
        least = name.endswith("_min")
        near, far = (quantity.low, quantity.high) if least else (quantity.high, quantity.low)
        if not _fails(near, limit, least=least):
            continue
        certain = _fails(far, limit, least=least)
        text = (
            f"The limit {name} = {limit:g} {'will' if certain else 'may'} be missed: the {word} is foreseen as "
            f"{quantity.value:.3g}{unit} ({quantity.low:.3g} to {quantity.high:.3g})."
        )
        out.append(Finding(code="limits_not_foreseen", severity="warning", text=text))
    return out


def _fails(value: float, limit: float, *, least: bool) -> bool:
    return value < limit if least else value > limit


def _pace(identified: Identified, swing: Swing | None, scan_s: float | None) -> list[Finding]:
    """Say so when the proposed loop is faster than the record could show: by its root of most weight."""
    if identified.record is None or swing is None or not len(swing.roots):
        return []
    interval = identified.record.sample_interval_s
    slowest = swing.roots[int(np.argmax(swing.weights))] if np.any(swing.weights > 0) else swing.roots[0]
    pace = 1.0 / max(float(abs(slowest)), 1e-300)
    if pace >= _ROWS_PER_PACE * interval or (scan_s is not None and scan_s >= interval):
        return []
    text = (
        f"The proposed loop acts within {pace:.2g} s, and the record has a row only every {interval:.2g} s: what the plant does "
        "so fast was not seen. Record faster, or hold the gain back with --at-most, before these settings are believed."
    )
    return [Finding(code="faster_than_record", severity="warning", text=text)]


def _rounding(found: Probable, proposed: Side, goal: Goal) -> list[Finding]:
    if found.probability is None or proposed.probability_of_target is None or goal.confidence is None:
        return []
    if proposed.probability_of_target >= goal.confidence or found.probability < goal.confidence:
        return []
    text = (
        f"Rounded to what the screen takes, the settings meet the target with {100 * proposed.probability_of_target:.0f} %, "
        f"not {100 * found.probability:.0f} %: key in more digits if the controller takes them."
    )
    return [Finding(code="rounding_costs", severity="warning", text=text)]


def _derivative(goal: Goal, proposed: Side) -> list[Finding]:
    if not goal.derivative or proposed.gains.kd != 0.0:
        return []
    text = "A derivative brings this loop nothing within the limits: the proposal does without it."
    return [Finding(code="no_derivative", severity="note", text=text)]
