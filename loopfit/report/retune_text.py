"""A retuning as a page of text for the engineer who keys the settings in."""

from __future__ import annotations

import math
import re

from loopfit.core.quantity import Quantity
from loopfit.report.retune_plant import plant_words
from loopfit.report.retune_words import (
    NOT_SEEN,
    action_words,
    change_words,
    entries,
    entry_line,
    feeds_back_positively,
    filled,
    form_words,
    gain_unit,
    labelled,
    overshoot_warning,
    proposes,
    quantity_words,
    record_units,
    refusal_words,
    share_words,
    target_words,
)
from loopfit.tuning.result import LoopFigures, Move, Retuning, Side

_NAME, _CELL = 40, 30
_ORDER = ("error", "warning", "note")
_UNSEEN = 0.5  # %: swing that nobody sees
_MORE_SWING, _LEAST_STOP, _MOST_STOP = 10.0, 10.0, 95.0  # %: when a stage is to be taken back
_STICKS = re.compile(r"stick|stiction|friction|lost motion|play|dead ?band", re.IGNORECASE)
_STAIRCASE = (
    "with the loop in manual, a staircase: move the output in small equal steps, several up and then several down, "
    "wait at each until the measurement rests, and record output and measurement. It shows how far the output must "
    "move before anything follows. Mend the final element first; no settings cure it."
)
_OPEN_STEP = (
    "with the loop in manual and the plant at rest where it will run, one clear step of the output, several times "
    "the noise in the measurement; wait until the measurement rests again (an integrating one: until it climbs "
    "steadily); record time, output and measurement at the controller's scan interval. Nothing else may be changed meanwhile."
)


def page(retuning: Retuning) -> str:
    """Return the whole page, without a final newline; at most 100 columns wide.

    Raises
    ------
    ValueError
        If settings are proposed without cautions.
    """
    shown = proposes(retuning)
    parts = [answer(retuning)]
    if retuning.refused is None:
        parts += [plant_words(retuning), _compared(retuning)]
    parts.append(_typed(retuning))
    if shown:
        parts.append(_stages(retuning))
        if retuning.comparisons:
            parts.append(_comparisons(retuning))
    parts += [_findings(retuning), _cautions(retuning) if shown else ""]
    return "\n\n".join(part for part in parts if part)


def answer(retuning: Retuning) -> str:
    """Return the first lines: the settings to key in, the target, what the loop will do; or why there are none."""
    if retuning.refused is not None:
        words = filled(refusal_words(retuning))
        if retuning.identified.refused is None:
            return words  # the plant is known: another record would not help
        return f"{words}\n{labelled('to record', _STAIRCASE if _STICKS.search(retuning.refused) else _OPEN_STEP)}"
    target = filled(target_words(retuning))
    if not proposes(retuning):
        return target
    proposed = retuning.proposed
    assert proposed is not None
    heading = "Key in:" if retuning.met else "Best attainable, to key in:"
    rows = [[entry.name, entry.shown, entry.unit if entry.value is not None else ""]
            for entry in entries(proposed.settings, gain_unit(retuning))]  # fmt: skip
    wide = max(len(row[1]) for row in rows)
    lines = [f"    {name:20}{value:<{wide}}  {unit}".rstrip() for name, value, unit in rows]
    lines += [
        filled(words, f"    {name:20}", " " * 24)
        for name, words in (
            ("form", form_words(proposed.settings)),
            ("action", action_words(proposed.settings, retuning.identified.plant.gain)),
        )
    ]
    block = "\n".join([heading, *lines])
    after = [filled(change_words(retuning))]
    warning = overshoot_warning(retuning)
    if warning is not None:
        after.append(filled(warning))
    if retuning.met:
        return "\n".join([block, target, *after])
    return "\n".join([target, block, *after])


def _compared(retuning: Retuning) -> str:
    sides = [side for side in (retuning.current, retuning.proposed) if side is not None]
    if not sides:
        return ""
    heads = [head for head, side in (("now", retuning.current), ("proposed", retuning.proposed)) if side is not None]
    rows = [_row("", "", heads)]
    listed = [entries(side.settings, gain_unit(retuning)) for side in sides]
    names = list(dict.fromkeys((entry.name, entry.unit) for one in listed for entry in one))
    for name, unit in names:
        cells = [next((e.shown for e in one if (e.name, e.unit) == (name, unit)), "-") for one in listed]
        rows.append(_row(name, unit, cells))
    forms = [side.settings.form for side in sides]
    if len(set(forms)) > 1:
        rows.append(_row("form", "", forms))
    rows.append(_row("loop", "", [_loop_words(side, retuning) for side in sides]))
    measured, out = record_units(retuning)
    area = f"{measured} s/{out}" if measured and out else "s"
    for name, unit, field, most in (
        ("damping ratio", "", "damping_ratio", 3),
        ("swing back after a load", "%", "swing_percent", 1),
        ("setpoint overshoot", "%", "overshoot_percent", 1),
        ("rise time", "s", "rise_time_s", 9),
        (f"settling time (±{retuning.band_percent:g} %)", "s", "settling_time_s", 9),
        ("load: integrated error", area, "load_integrated_error", 9),
        ("load: absolute error", area, "load_absolute_error", 9),
        ("largest output change", gain_unit(retuning) or "", "peak_output", 9),
        ("output noise over measurement noise", "", "output_noise", 9),
        ("gain margin", "", "gain_margin", 2),
        ("phase margin", "deg", "phase_margin_deg", 1),
        ("delay margin", "s", "delay_margin_s", 9),
        ("maximum sensitivity", "", "max_sensitivity", 2),
    ):
        found = [getattr(side.figures, field) for side in sides]
        if any(value is not None for value in found):
            endless = NOT_SEEN if name.startswith("settling") else "no limit"
            rows.append(
                _row(name, unit, [quantity_words(value, most_decimals=most, endless=endless) for value in found])
            )
    shares = [side.probability_of_target for side in sides]
    if any(share is not None for share in shares):
        rows.append(
            _row("probability of the target", "", ["-" if share is None else share_words(share) for share in shares])
        )
    if any(" (no bound)" in row for row in rows):
        rows.append("no bound: with these settings some plants that the record allows are unstable")
    rows.append(
        filled("Load figures: for a load of one output unit. Largest output change: for a setpoint step of one unit.")
    )
    if (
        retuning.nominal is not None
        and retuning.proposed is not None
        and retuning.nominal.gains != retuning.proposed.gains
    ):
        share = retuning.nominal.probability_of_target
        chance = "" if share is None else f"; it meets the target with a probability of {share_words(share)} only"
        line = entry_line(retuning.nominal.settings, gain_unit(retuning))
        rows.append(filled(f"Without reserve for what the record leaves open, the design would be {line}{chance}."))
    return "\n".join(rows)


def _loop_words(side: Side, retuning: Retuning) -> str:
    if feeds_back_positively(side.gains, retuning.identified.plant.gain):
        return "WRONG SIGN"
    return "stable" if side.figures.stable else "UNSTABLE"


def _row(name: str, unit: str, cells: list[str]) -> str:
    what = f"{name}, {unit}" if unit else name
    return f"{what:{_NAME}}{''.join(f'{cell:<{_CELL}}' for cell in cells)}".rstrip()


def _typed(retuning: Retuning) -> str:
    if retuning.current is None or (retuning.typed is None and retuning.identified.how == "given"):
        return ""
    if retuning.typed is None:
        why = " the loop was in manual" if retuning.identified.how == "open step" else " nothing to check them against"
        return labelled(
            "typed", f"whether the present settings as typed are those in the controller was not checked:{why}"
        )
    text = retuning.typed.text
    return labelled("typed", text if retuning.typed.verdict in text else f"{retuning.typed.verdict}: {text}")


def _stages(retuning: Retuning) -> str:
    unit = gain_unit(retuning)
    first = "Write down the present settings before anything is changed: they are the way back"
    now = retuning.current
    first += " (they were not given here)." if now is None else f". {_capital(entry_line(now.settings, unit))}."
    lines = ["Stages", filled(first, "  0  ", " " * 5)]
    for number, move in enumerate(retuning.moves, start=1):
        lines.append(
            filled(f"{_capital(entry_line(move.side.settings, unit, absent=False))}.", f"  {number}  ", " " * 5)
        )
        back: str | None = "the settings written down" if number == 1 else f"those of stage {number - 1}"
        if number == 1 and (now is None or not now.figures.stable):
            back = None  # the way back is manual
        lines.append(filled(_expectation(move, back), " " * 5, " " * 5))
    if not retuning.moves:
        lines.append(
            filled(
                "No stages were worked out: go to the proposed settings in small steps of your own.", "  1  ", " " * 5
            )
        )
    return "\n".join(lines)


def _capital(words: str) -> str:
    return words[0].upper() + words[1:]


def _expectation(move: Move, back: str | None) -> str:
    """Return figures of a stage, the swing to expect, when to stop and what to restore; the move's own words where they say it."""
    figures = move.side.figures
    if not figures.stable:
        return f"UNSTABLE on the fitted plant: do not stay here. {move.text}".strip()
    words = (
        f"Damping ratio {quantity_words(figures.damping_ratio, most_decimals=2)}, setpoint overshoot "
        f"{quantity_words(figures.overshoot_percent, most_decimals=1)} %, settling "
        f"{quantity_words(figures.settling_time_s, endless=NOT_SEEN)}{' s' if _finite(figures.settling_time_s) else ''}."
    )
    if "stop" in move.text.lower():
        after = "" if back is None else f" To put back: {back}."
    else:
        swing = figures.swing_percent
        seen = "no swing back" if swing is None or swing.high < _UNSEEN else (
            f"a swing back of {quantity_words(swing, most_decimals=0)} % of the first deviation"
        )  # fmt: skip
        words += (
            f" After a small upset expect {seen}. Stop if it swings back by more than {stop_at(figures):.0f} % or the "
            f"swing does not die away, and {'put the loop in manual' if back is None else f'restore {back}'}."
        )
        after = ""
    return f"{words} {move.text}".strip() + after


def _finite(quantity: Quantity | None) -> bool:
    return quantity is not None and math.isfinite(quantity.value)


def stop_at(figures: LoopFigures) -> float:
    """Return the swing, %, beyond which a stage is to be taken back: more than the record allows, and clearly more than expected."""
    swing = figures.swing_percent
    if swing is None:
        return _LEAST_STOP
    upper = swing.high if math.isfinite(swing.high) else swing.value
    return min(max(upper, swing.value + _MORE_SWING, _LEAST_STOP), _MOST_STOP)


def _comparisons(retuning: Retuning) -> str:
    unit = gain_unit(retuning)
    rows = ["What published rules would give, for comparison only; none of them is proposed"]
    for name, side in retuning.comparisons:
        figures = side.figures
        words = entry_line(side.settings, unit, absent=False) + ": "
        if figures.stable:
            words += (
                f"damping ratio {quantity_words(figures.damping_ratio, most_decimals=2, interval=False)}, "
                f"overshoot {quantity_words(figures.overshoot_percent, most_decimals=0, interval=False)} %, "
                f"maximum sensitivity {quantity_words(figures.max_sensitivity, most_decimals=2, interval=False)}"
            )
        else:
            words += "UNSTABLE"
        rows.append(filled(words, f"  {name:<24} ", " " * 27))
    return "\n".join(rows)


def _findings(retuning: Retuning) -> str:
    every = list(dict.fromkeys((*retuning.findings, *retuning.identified.findings)))
    if not every:
        return ""
    every.sort(key=lambda finding: _ORDER.index(finding.severity))
    return "Findings\n" + "\n".join(labelled(finding.severity, finding.text) for finding in every)


def _cautions(retuning: Retuning) -> str:
    return "Cautions\n" + "\n".join(filled(caution, "  -  ", " " * 5) for caution in retuning.cautions)
