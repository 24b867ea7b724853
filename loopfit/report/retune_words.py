"""Words that the page and the picture of a retuning share: settings as keyed in, figures, the answer."""

from __future__ import annotations

import math
import re
import textwrap
from dataclasses import dataclass

from loopfit.core.quantity import Quantity
from loopfit.core.rounding import decimals_for, decimals_of, number
from loopfit.loop.gains import Gains
from loopfit.loop.settings import Settings
from loopfit.tuning.result import Retuning, Side

WIDTH, LABEL = 100, 13
NO_UNITS = "output per measurement"  # of a gain whose units are not known
NOT_SEEN = "longer than was simulated"
_EXACT, _SHOWN = 6, 4  # significant digits: a number that has no more than six is shown as it is
_SURPRISE_PERCENT = 5.0  # overshoot beyond that of the target damping, from which it is said first
_TIMES = {"s": "s", "min": "min", "h": "h", "ms": "ms"}
_ACTIONS = {
    "reverse": "reverse acting: the output falls as the measurement rises",
    "direct": "direct acting: the output rises with the measurement",
}


@dataclass(frozen=True, slots=True)
class Entry:
    """One line of the controller's screen: its name, the number (None: off), the unit."""

    name: str
    value: float | None
    unit: str

    @property
    def shown(self) -> str:
        """The number as it is keyed in, without its unit."""
        return "off" if self.value is None else entry_number(self.value)

    @property
    def words(self) -> str:
        """Return "integral time 12 s"."""
        return " ".join(word for word in (self.name, self.shown, self.unit if self.value is not None else "") if word)


def entries(settings: Settings, gain_unit: str | None = None) -> list[Entry]:
    """Return what is keyed in, in the controller's own form and units.

    Parameters
    ----------
    settings : Settings
    gain_unit : str, optional
        What to call the unit of a gain that is not in % per %.
    """
    entered = settings.as_entered()
    out = []
    for key, value in entered.items():
        unit = key.rsplit("_", 1)[-1]
        if key == "proportional_band_percent":
            out.append(Entry("proportional band", value, "%"))
        elif key == "gain":
            own = entered["gain_unit"]
            out.append(Entry("gain", value, own if own == "%/%" else gain_unit or own))
        elif key.startswith("integral_gain_per_"):
            out.append(Entry("integral gain", value, f"gain per {unit}"))
        elif key.startswith("integral_repeats_per_"):
            out.append(Entry("integral", value, f"repeats per {unit}"))
        elif key.startswith("integral_time_"):
            out.append(Entry("integral time", value, _TIMES[unit]))
        elif key.startswith("derivative_gain_"):
            out.append(Entry("derivative gain", value, f"gain {unit}"))
        elif key.startswith("derivative_time_"):
            out.append(Entry("derivative time", value, _TIMES[unit]))
        elif key.startswith("derivative_filter_") and value is not None:
            out.append(Entry("derivative filter", value, _TIMES[unit]))
        elif key == "setpoint_weight" and value is not None:
            out.append(Entry("setpoint weight", value, ""))
    return out


def entry_line(settings: Settings, gain_unit: str | None = None, *, absent: bool = True) -> str:
    """Return the settings in one line; `absent`: a term that is absent is named as off."""
    listed = [entry for entry in entries(settings, gain_unit) if absent or entry.value is not None]
    return ", ".join(f"{entry.name} {entry.shown}" if entry.unit == NO_UNITS else entry.words for entry in listed)


def entry_number(value: float) -> str:
    """Return a number as a person keys it in: up to six digits as it is, else four significant ones."""
    digits = _EXACT if math.isclose(float(f"{value:.{_EXACT - 1}e}"), value, rel_tol=1e-9) else _SHOWN
    if value == 0.0 or not 1e-5 <= abs(value) < 1e7:
        return f"{value:.{digits}g}"
    places = max(digits - 1 - math.floor(math.log10(abs(value))), 0)
    text = f"{value:.{places}f}"
    return text.rstrip("0").rstrip(".") if "." in text else text


def form_words(settings: Settings) -> str:
    """Return the form, and the ranges that a gain in % per % refers to."""
    words = f"{settings.form} form"
    if settings.measurement_range is not None and settings.output_range is not None:
        (low, high), (least, most) = settings.measurement_range, settings.output_range
        words += f", in % of the ranges {low:.6g} to {high:.6g} (measurement) and {least:.6g} to {most:.6g} (output)"
    return words


def action_words(settings: Settings, plant_gain: float) -> str:
    """Return the action, and whether its sign is right for the plant."""
    words = _ACTIONS.get(
        settings.action or "", "key in the gain with its sign: positive is reverse acting, negative direct"
    )
    sign = "positive" if plant_gain > 0 else "negative"
    if feeds_back_positively(settings.gains, plant_gain):
        return f"{words}; WRONG for this plant, whose gain is {sign}: the loop would run away"
    return f"{words}; right for this plant, whose gain is {sign}"


def feeds_back_positively(gains: Gains, plant_gain: float) -> bool:
    """Tell whether the controller drives the plant the wrong way."""
    first = next(value for value in (gains.kp, gains.ki, gains.kd) if value != 0.0)
    return first * plant_gain < 0.0


def gain_unit(retuning: Retuning) -> str | None:
    """Return the unit of the controller's gain from the units of the record's columns; None where they are not known."""
    measured, out = record_units(retuning)
    return f"{out}/{measured}" if measured and out else None


def record_units(retuning: Retuning) -> tuple[str | None, str | None]:
    """Return the units of measurement and output, where the record names them."""
    analysis = retuning.identified.analysis
    if analysis is None:
        return None, None
    record = analysis.record
    return record.measurement.unit, None if record.output is None else record.output.unit


def quantity_words(
    quantity: Quantity | None, *, most_decimals: int = 9, interval: bool = True, endless: str = "no limit"
) -> str:
    """Return "0.31 (0.29 to 0.33)"; "-" for a figure that does not exist, `endless` for one that is infinite."""
    if quantity is None:
        return "-"
    if quantity.low == quantity.high:
        places = min(_three_figures(quantity.value), most_decimals)
    else:
        places = min(decimals_of(quantity), most_decimals)
    if not math.isfinite(quantity.value):
        bounded = f" ({number(quantity.low, max(places, 0))} or more)" if math.isfinite(quantity.low) else ""
        return endless + (bounded if interval else "")
    value = number(quantity.value, places)
    if not interval or quantity.low == quantity.high:
        return value
    if math.isinf(quantity.high):
        return (
            f"{value} (no bound)" if math.isinf(quantity.low) else f"{value} ({number(quantity.low, places)} or more)"
        )
    return f"{value} ({number(quantity.low, places)} to {number(quantity.high, places)})"


def _three_figures(value: float) -> int:
    return min(decimals_for(0.0, value) - 1, 9) if math.isfinite(value) else 0


def share_words(share: float) -> str:
    """Return a probability in per cent; a count of draws never says 0 or 100."""
    if share >= 0.995:
        return "more than 99 %"
    return "less than 1 %" if share < 0.005 else f"{100.0 * share:.0f} %"


def overshoot_of(damping: float) -> float:
    """Return the overshoot of a second-order step response, %: 100 exp(-pi z / sqrt(1 - z^2)) (Ogata, 5th ed. 2010, section 5-3)."""
    if damping >= 1.0:
        return 0.0
    return 100.0 * math.exp(-math.pi * damping / math.sqrt(1.0 - damping**2)) if damping > 0.0 else 100.0


def target_words(retuning: Retuning) -> str:
    """Return whether the target is met and how probable that is."""
    goal, proposed = retuning.goal, retuning.proposed
    share = None if proposed is None else proposed.probability_of_target
    if share is not None:
        chance = f"with a probability of {share_words(share)}"
    elif retuning.identified.how == "given":
        chance = "on the plant as given, taken as exact"
    else:
        chance = "on the fitted plant"
    if retuning.met:
        if goal.confidence is None and share is not None:
            chance = f"on the fitted plant; on plants that the record allows as well {chance}"
        return f"The target is met ({goal.criterion}, maximum sensitivity at most {goal.max_sensitivity:g}) {chance}."
    asked = "" if goal.confidence is None or share is None else f" with a probability of {share_words(goal.confidence)}"
    words = f"The target is NOT met: {goal.criterion}, maximum sensitivity at most {goal.max_sensitivity:g}{asked}."
    reach = retuning.attainable_damping_ratio
    if proposed is not None and proposed.figures.damping_ratio is not None:
        words += f" Attainable: a damping ratio of {quantity_words(proposed.figures.damping_ratio, most_decimals=2)}."
    elif reach is not None:
        # cut, not rounded: what is not attainable is not promised
        words += f" Attainable: a damping ratio of {math.floor(100.0 * reach + 1e-9) / 100.0:.2f}."
    elif proposed is None:
        words += " No settings were found that come near it."
    if retuning.obstacle:
        words += f" In the way: {retuning.obstacle.rstrip('.')}."
    if proposed is not None and share is not None:
        words += f" The settings below meet the whole target {chance}."
    return words


def change_words(retuning: Retuning) -> str:
    """Return what the loop does now and what it will do, in one line."""
    current, proposed = retuning.current, retuning.proposed
    assert proposed is not None
    rows = (
        ("damping ratio", "", "damping_ratio", 2),
        ("setpoint overshoot", " %", "overshoot_percent", 1),
        (f"settling (±{retuning.band_percent:g} %)", " s", "settling_time_s", 9),
    )
    now = None if current is None else current.figures
    then = proposed.figures
    if not then.stable:
        return "With these settings the loop is UNSTABLE."
    parts = []
    for name, unit, field, most in rows:
        cells = [
            quantity_words(getattr(figures, field), most_decimals=most, interval=False, endless=NOT_SEEN)
            for figures in ((now, then) if now is not None and now.stable else (then,))
        ]
        parts.append(f"{name} {' -> '.join(cells)}{'' if cells[-1] in ('-', NOT_SEEN) else unit}")
    lead = "The loop will have" if now is None else "Now -> then" if now.stable else "Now UNSTABLE; then"
    return f"{lead}: {', '.join(parts)}."


def overshoot_warning(retuning: Retuning) -> str | None:
    """Return what to know where the setpoint overshoot is more than the damping lets one expect; None where it is not."""
    proposed = retuning.proposed
    if proposed is None or proposed.figures.overshoot_percent is None or proposed.figures.damping_ratio is None:
        return None
    overshoot = proposed.figures.overshoot_percent.value
    wanted = overshoot_of(retuning.goal.damping_ratio)
    if not overshoot > wanted + _SURPRISE_PERCENT:
        return None
    words = (
        f"Take care: after a step of the setpoint it will overshoot by {overshoot:.0f} %, where a damping ratio of "
        f"{retuning.goal.damping_ratio:g} lets one expect {wanted:.0f} %."
    )
    if not overshoot > overshoot_of(proposed.figures.damping_ratio.value) + _SURPRISE_PERCENT:
        return f"{words} That comes from the damping, which falls short of the target."
    weight = "a smaller setpoint weight" if proposed.settings.setpoint_weight is not None else (
        "a setpoint weight below 1 where the controller has one (--setpoint-weight)"
    )  # fmt: skip
    return (
        f"{words} That comes from the zero of the setpoint path, not from poor damping: after a load the loop comes "
        f"back without that swing. What removes it: {weight}, a ramped setpoint, or settings designed "
        f"for it (--overshoot PERCENT)."
    )


def refusal_words(retuning: Retuning) -> str:
    """Return why no settings are proposed."""
    return f"No settings are proposed: {(retuning.refused or '').rstrip('.')}."


def key_in_words(side: Side, retuning: Retuning) -> str:
    """Return the settings to key in as one sentence."""
    settings = side.settings
    action = f"{settings.action} acting" if settings.action else "the gain with its sign"
    lead = "Key in" if retuning.met else "Best attainable, to key in"
    return f"{lead}: {entry_line(settings, gain_unit(retuning), absent=False)} ({settings.form} form, {action})."


def proposes(retuning: Retuning) -> bool:
    """Tell whether settings are to be shown; they never are without their cautions.

    Raises
    ------
    ValueError
        If settings are proposed and there is no caution.
    """
    if retuning.refused is not None or retuning.proposed is None:
        return False
    if not retuning.cautions:
        raise ValueError("settings are not shown without their cautions")
    return True


def filled(text: str, first: str = "", rest: str = "", width: int = WIDTH) -> str:
    """Return the text in lines, without a break between a number and its sign or per cent."""
    tied = re.sub(r"(?<=[\d±]) (?=(?:%|s|min|h|deg|rad/s)\b|%)", "\u00a0", text).replace(" -> ", "\u00a0->\u00a0")
    lines = textwrap.fill(tied, width, initial_indent=first, subsequent_indent=rest, break_on_hyphens=False)
    return lines.replace("\u00a0", " ").rstrip()


def labelled(label: str, text: str) -> str:
    """Return the text in lines, with a label in a column of its own before it."""
    return filled(text, f"{label:<{LABEL}}", " " * LABEL)
