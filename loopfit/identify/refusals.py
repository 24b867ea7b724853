"""Why no settings may be built on a plant that a record told, and what else must be said of it."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from loopfit.core.finding import Finding
from loopfit.identify.identified import How
from loopfit.loop.plant import Plant
from loopfit.loop.settings import Settings

_LEAST_EXPLAINED = 0.5
_WIDEST_GAIN = 1.0  # half the interval over the value
_BETTER = {
    "open step": "make a larger step of the output, or record longer",
    "output to measurement": "make a larger setpoint step, or step the output in manual",
    "through the loop": "make a larger setpoint step, and record the output at every scan",
    "load": "step the setpoint in automatic, or the output in manual",
    "given": "make a record",
}


def about_gain(plant: Plant, draws: Sequence[Plant], how: How, confidence: float, explained: float) -> str | None:
    """Return why the record does not tell the plant well enough, with the record to make; None where it does.

    Parameters
    ----------
    draws : sequence of Plant
        What the record allows.
    confidence : float
        A fraction.
    explained : float
        Share of the measurement's squares that the plant explains.
    """
    if not explained >= _LEAST_EXPLAINED:
        return (
            f"The model explains {100.0 * max(explained, 0.0):.0f} % of what the measurement does: something else moves it; "
            f"{_BETTER[how]} while nothing else disturbs the loop."
        )
    if not draws:
        return None
    gains = np.array([one.gain for one in draws])
    low, high = np.quantile(gains, [0.5 - 0.5 * confidence, 0.5 + 0.5 * confidence])
    if low <= 0.0 <= high:
        return f"The record does not tell even the sign of the plant's gain; {_BETTER[how]}."
    if high - low > 2.0 * _WIDEST_GAIN * abs(plant.gain):
        return f"The record leaves the plant's gain between {low:.3g} and {high:.3g}; {_BETTER[how]}."
    return None


def against_action(plant: Plant, settings: Settings) -> str | None:
    """Return why plant and settings cannot belong together; None where their signs agree."""
    gains = settings.gains
    if plant.gain * (gains.kp or gains.ki or gains.kd) >= 0.0:
        return None
    return (
        f"The plant's gain is {'positive' if plant.gain > 0 else 'negative'}, and with the settings as given the loop would run "
        "away: check the action (direct or reverse), the sign of the gain, and the columns."
    )


def unstable() -> str:
    """Return why a plant that grows by itself is not taken."""
    return "The plant itself would swing with growing amplitude: check the columns, and that nothing else moved the measurement."


def wild_rows(count: int) -> Finding:
    """Rows far from all others."""
    what = f"{count} rows are" if count > 1 else "One row is"
    text = f"{what} far from all others; the values between their neighbours were taken instead."
    return Finding(code="outliers", severity="note", text=text)


def rows_filled(count: int) -> Finding:
    """Rows that the logger left out."""
    what = f"{count} rows are" if count > 1 else "One row is"
    text = f"{what} missing: the measurement was led over the gap, the output taken as held."
    return Finding(code="rows_filled", severity="note", text=text)


def not_at_rest() -> Finding:
    """The loop was moving before the step."""
    return Finding(
        code="not_at_rest",
        severity="warning",
        text="The measurement is off the setpoint before the step: the loop was not at rest, and the plant is less certain than "
        "its draws say.",
    )


def slower_than_scan() -> Finding:
    """The output was logged slower than it was written."""
    return Finding(
        code="output_slower_than_scan",
        severity="warning",
        text="The output was recorded less often than the controller writes it: what it did between the rows is not known. Log "
        "at every scan for a better plant.",
    )


def limits_left_out() -> Finding:
    """Limits are known, but not where the output stood."""
    return Finding(
        code="limits_not_placed",
        severity="warning",
        text="The output was not recorded, so that its limits could not be allowed for: a few scans at a limit make the gain "
        "several times too low. Record the output.",
    )


def no_output() -> Finding:
    """The settings could not be checked."""
    return Finding(
        code="settings_not_checked",
        severity="warning",
        text="The output was not recorded: the plant is right only if the settings were these, and the record cannot show it; "
        "a gain typed 1.5 times too large gives the same fit with a plant gain 1.5 times too small.",
    )


def once_a_row() -> Finding:
    """The scan interval is not known."""
    return Finding(
        code="output_once_a_row",
        severity="note",
        text="No scan interval was given: the controller is taken as continuous, and the recorded output as held from row to row. "
        "State the scan interval if the output moves between the rows.",
    )


def outputs_at_limit(rows: int, level: float, *, placed: bool) -> Finding:
    """The output lay at a limit; `placed`: the fit knows of it."""
    text = f"The output lay at a limit, {level:.4g}, for {rows} rows: the loop was open there. "
    text += (
        "The plant is fitted with it; the figures of the present settings are those without a limit."
        if placed
        else "The fit through the loop knows of no such limit: give the limits of the output."
    )
    return Finding(code="output_clamped", severity="note" if placed else "warning", text=text)


def measurement_flat(rows: int, level: float) -> Finding:
    """The measurement lay at the end of its range."""
    text = (
        f"The measurement lies flat at {level:.4g} for {rows} rows: it is at the end of its range, where the plant does not show; "
        "the plant is less certain than its draws say. Make a smaller step."
    )
    return Finding(code="measurement_saturated", severity="warning", text=text)


def steps_disagree(gains: Sequence[float]) -> Finding:
    """The steps of one record gave plants of their own."""
    text = (
        f"The settings are designed for the plants of all {len(gains)} steps alike, with gains from {min(gains):.3g} to "
        f"{max(gains):.3g}, and the probability counts each step as much as the others; the figures shown are those of the plant "
        "of the first."
    )
    return Finding(code="every_step_counts", severity="warning", text=text)


def levels_refuse(fitted: float, interval: tuple[float, float], gain: float, half: float) -> str:
    """Return why a plant is refused whose gain is not that of the recorded levels."""
    return (
        f"The settings as typed were not those in the controller: the fit through them gives a plant gain of {fitted:.3g} "
        f"({interval[0]:.3g} to {interval[1]:.3g}), and the recorded output and measurement moved from rest to rest by a gain "
        f"of {gain:.3g} ({gain - half:.3g} to {gain + half:.3g}); check the settings and their units, and that nothing else "
        "moved the measurement."
    )


def levels_agree(fitted: float, gain: float) -> Finding:
    """The levels at rest give the fitted gain."""
    text = f"The plant gain fitted through the settings as typed, {fitted:.3g}, agrees with that of the recorded levels at rest, {gain:.3g}."
    return Finding(code="levels_agree", severity="note", text=text)


def levels_differ(fitted: float, gain: float, *, meet: bool) -> Finding:
    """The levels at rest give another gain than the fit, within what may pass; `meet`: the intervals of both do."""
    text = (
        f"The plant gain fitted through the settings as typed is {fitted:.3g}; the recorded levels at rest give {gain:.3g}. Half of "
        "the plants that the record allows are taken with the one, half with the other."
    )
    return Finding(code="levels_differ", severity="note" if meet else "warning", text=text)
