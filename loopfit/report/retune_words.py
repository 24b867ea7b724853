"""Words that the page and the picture of a retuning share: settings as keyed in, figures, the answer."""

from __future__ import annotations

import math
import re
import textwrap
from dataclasses import dataclass

from loopfit.loop.gains import Gains
from loopfit.loop.settings import Settings
from loopfit.report.retune_numbers import figure_words, with_unit
from loopfit.report.retune_recorded import record_units
from loopfit.tuning.result import Retuning, Side

WIDTH, LABEL = 100, 13
NO_UNITS = "output per measurement"  # of a gain whose units are not known
_EXACT, _SHOWN = 6, 4  # significant digits: a number that has no more than six is shown as it is
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
    words = _ACTIONS[settings.action or sense(settings)]
    if settings.action is None and settings.proportional_band_percent is None:
        words = signed_words(settings)
    sign = "positive" if plant_gain > 0 else "negative"
    if feeds_back_positively(settings.gains, plant_gain):
        return f"{words}; WRONG for this plant, whose gain is {sign}: the loop would run away"
    return f"{words}; right for this plant, whose gain is {sign}"


def sense(settings: Settings) -> str:
    """Return "reverse" or "direct": the action, by the sign of the gain where none was said."""
    return settings.action or ("reverse" if _first(settings.gains) > 0.0 else "direct")


def signed_words(settings: Settings) -> str:
    """Return what the sign of the gain is, where the controller has no action to choose."""
    acting = sense(settings)
    return f"the gain is {'positive' if acting == 'reverse' else 'negative'} here ({acting} acting)"


def feeds_back_positively(gains: Gains, plant_gain: float) -> bool:
    """Tell whether the controller drives the plant the wrong way."""
    return _first(gains) * plant_gain < 0.0


def _first(gains: Gains) -> float:
    return next(value for value in (gains.kp, gains.ki, gains.kd) if value != 0.0)


def gain_unit(retuning: Retuning) -> str | None:
    """Return the unit of the controller's gain from the units of the record's columns; None where they are not known."""
    measured, out = record_units(retuning)
    return f"{out}/{measured}" if measured and out else None


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
        words += f" Attainable: a damping ratio of {figure_words(proposed.figures.damping_ratio, 'damping_ratio')}."
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
        ("damping ratio", "", "damping_ratio"),
        ("setpoint overshoot", " %", "overshoot_percent"),
        (f"settling (±{retuning.band_percent:g} %)", " s", "settling_time_s"),
    )
    now = None if current is None else current.figures
    then = proposed.figures
    if not then.stable:
        return "With these settings the loop is UNSTABLE."
    parts = []
    for name, unit, field in rows:
        cells = [
            figure_words(getattr(figures, field), field, interval=False)
            for figures in ((now, then) if now is not None and now.stable else (then,))
        ]
        if "-" in cells or not all(cell[0].isdigit() for cell in cells):  # the unit belongs to the numbers
            cells, unit = [with_unit(cell, unit) for cell in cells], ""
        parts.append(f"{name} {' -> '.join(cells)}{unit}")
    lead = "The loop will have" if now is None else "Now -> then" if now.stable else "Now UNSTABLE; then"
    return f"{lead}: {', '.join(parts)}."


def refusal_words(retuning: Retuning) -> str:
    """Return why no settings are proposed."""
    return f"No settings are proposed: {(retuning.refused or '').rstrip('.')}."


def key_in_words(side: Side, retuning: Retuning) -> str:
    """Return the settings to key in as one sentence."""
    settings = side.settings
    signed = settings.action is None and settings.proportional_band_percent is None
    action = signed_words(settings) if signed else f"{sense(settings)} acting"
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
