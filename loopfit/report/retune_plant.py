"""The plant that a retuning stands on, in words: its figures and how sure they are."""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np

from loopfit.core.quantity import Quantity
from loopfit.loop.plant import Plant
from loopfit.report.retune_numbers import quantity_words
from loopfit.report.retune_recorded import record_of, record_units
from loopfit.report.retune_words import LABEL, labelled
from loopfit.tuning.result import Retuning

_FEW_DRAWS = 0.9  # of the draws must have a figure for its interval to be shown
_HOW = {
    "open step": "from a step of the output with the loop in manual",
    "output to measurement": "from the recorded output to the measurement",
    "through the loop": "from the setpoint step, through the closed loop with the present settings as typed",
    "load": "from what a load did to the closed loop",
    "given": "as given",
}


def plant_words(retuning: Retuning) -> str:
    """Return the plant with its figures, their intervals over the draws, and where they come from."""
    found = retuning.identified
    plant, draws = found.plant, found.draws
    measured, out = record_units(retuning)
    per = f" {measured}/{out}" if measured and out else ""
    source = ""
    record = record_of(retuning)
    if record is not None:
        name = record.source
        source = f" ({'standard input' if name == '-' else name})"
    lines = [labelled("plant", f"{_kind(plant)}, {_HOW[found.how]}{source}")]
    for name, unit, figure, most in (
        ("gain", f"{per}{' per s' if plant.integrating else ''}", _gain, 9),
        ("damping ratio", "", _damping, 3),
        ("natural frequency", " rad/s", _frequency, 9),
        ("sum of the lags", " s", _lags, 9),
        ("zero", " s", _zero, 9),
        ("dead time", " s", _dead_time, 9),
    ):
        value = figure(plant)
        if value is None or (plant.time_constants_s and figure in (_damping, _frequency)):
            continue  # lags say the same and are easier to see
        words = quantity_words(_spread(value, figure, draws, _confidence(retuning)), most_decimals=most)
        lines.append(f"{'':{LABEL}}{name:19}{words}{unit}")
    if plant.time_constants_s:
        lags = " and ".join(
            quantity_words(Quantity(lag, lag, lag)) for lag in sorted(plant.time_constants_s, reverse=True)
        )
        lines.append(
            f"{'':{LABEL}}{'time constants' if len(plant.time_constants_s) > 1 else 'time constant':19}{lags} s"
        )
    if draws:
        lines.append(
            labelled(
                "how sure",
                f"in brackets: {_confidence(retuning):g} % intervals, from {len(draws)} plants that the record allows as well",
            )
        )
    elif found.how == "given":
        lines.append(labelled("how sure", "taken as exact: nothing below accounts for a plant that is different"))
    else:
        lines.append(labelled("how sure", "no interval could be given"))
    return "\n".join(lines)


def _confidence(retuning: Retuning) -> float:
    analysis = retuning.identified.analysis
    return 95.0 if analysis is None else analysis.confidence_percent


def _kind(plant: Plant) -> str:
    order = len(plant.denominator) - 1 - plant.integrating
    lags = "no lag" if order == 0 else "one lag" if order == 1 else f"order {order}"
    swings = _damping(plant)
    if order == 2:
        lags = "second order, oscillating by itself" if swings is not None and swings < 1.0 else "two lags"
    words = f"integrating, {lags}" if plant.integrating else lags
    return f"{words}{', dead time' if plant.dead_time_s else ''}"


def _rest(plant: Plant) -> tuple[float, ...] | None:
    """Return s^2, s and constant coefficient of a second-order denominator, the integration apart; else None."""
    rest = plant.denominator[:-1] if plant.integrating else plant.denominator
    return rest if len(rest) == 3 and rest[0] / rest[2] > 0 else None


def _gain(plant: Plant) -> float | None:
    return plant.gain


def _damping(plant: Plant) -> float | None:
    rest = _rest(plant)
    return None if rest is None else rest[1] / (2.0 * math.sqrt(rest[0] * rest[2]) * math.copysign(1.0, rest[2]))


def _frequency(plant: Plant) -> float | None:
    rest = _rest(plant)
    return None if rest is None else math.sqrt(rest[2] / rest[0])


def _lags(plant: Plant) -> float | None:
    rest = plant.denominator[:-1] if plant.integrating else plant.denominator
    damping = _damping(plant)
    if len(rest) < 2 or (damping is not None and damping < 1.0):
        return None
    return rest[-2] / rest[-1]


def _zero(plant: Plant) -> float | None:
    return plant.zero_s


def _dead_time(plant: Plant) -> float | None:
    return plant.dead_time_s


def _spread(
    value: float, figure: Callable[[Plant], float | None], draws: tuple[Plant, ...], confidence: float
) -> Quantity:
    there = [found for found in (figure(one) for one in draws) if found is not None]
    if not draws or len(there) < _FEW_DRAWS * len(draws):
        return Quantity(value, value, value)
    tail = 0.5 - confidence / 200.0
    low, high = np.quantile(there, [tail, 1.0 - tail])
    return Quantity.spanning(value, float(low), float(high))
