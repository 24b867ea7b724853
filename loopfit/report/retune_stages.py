"""The stages on the way to the proposed settings: what to key in, what to expect, when to go back and to what."""

from __future__ import annotations

import math
import re

from loopfit.report.retune_numbers import NOT_SEEN, figure_words, with_unit
from loopfit.report.retune_words import entry_line, filled, gain_unit
from loopfit.tuning.result import LoopFigures, Move, Retuning

_UNSEEN = 0.5  # %: swing that nobody sees
_MORE_SWING, _LEAST_STOP, _MOST_STOP = 10.0, 10.0, 95.0  # %: when a stage is to be taken back


def stages_words(retuning: Retuning) -> str:
    """Return the stages in order, the present settings as stage 0."""
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
        lines.append(filled(_expectation(move, back, manual=number == 1 and back is None), " " * 5, " " * 5))
    if not retuning.moves:
        lines.append(
            filled(
                "No stages were worked out: go to the proposed settings in small steps of your own.", "  1  ", " " * 5
            )
        )
    return "\n".join(lines)


def _capital(words: str) -> str:
    return words[0].upper() + words[1:]


def _expectation(move: Move, back: str | None, *, manual: bool) -> str:
    """Return figures of a stage, the swing to expect, when to stop and what to restore; the move's own words where they say it."""
    figures = move.side.figures
    if not figures.stable:
        return f"UNSTABLE on the fitted plant: do not stay here. {move.text}".strip()
    words = (
        ", ".join(
            f"{name} {with_unit(figure_words(getattr(figures, field), field), unit)}"
            for name, unit, field in (
                ("Damping ratio", "", "damping_ratio"),
                ("setpoint overshoot", " %", "overshoot_percent"),
                ("settling", " s", "settling_time_s"),
            )
        ).replace(f"settling {NOT_SEEN}", NOT_SEEN)
        + "."
    )
    text = _entered_in_manual(move.text) if manual else move.text
    if "stop" in text.lower() or "back to manual" in text:
        after = "" if back is None else f" To put back: {back}."
    else:
        swing = figures.swing_percent
        seen = "no swing back" if swing is None or swing.high < _UNSEEN else (
            f"a swing back of {figure_words(swing, 'swing_percent')} % of the first deviation"
        )  # fmt: skip
        words += (
            f" After a small upset expect {seen}. Stop if it swings back by more than {stop_at(figures):.0f} % or the "
            f"swing does not die away, and {'put the loop in manual' if back is None else f'restore {back}'}."
        )
        after = ""
    return f"{words} {text}".strip() + after


def _entered_in_manual(text: str) -> str:
    """Return the words of a stage that no settings go before, as what is done in turn: manual, automatic, manual again."""
    found = re.search(r"stop if (?P<seen>[^;]*); leave the loop in manual", text, flags=re.IGNORECASE)
    if found is None:
        return text
    kept = [
        part
        for part in re.split(r";\s*", (text[: found.start()] + text[found.end() :]).rstrip(". "))
        if part and not re.search(r"^with the loop in manual$|enter it in manual$", part.strip(), re.IGNORECASE)
    ]
    first = "Enter these in manual, with the measurement at rest, then switch to automatic"
    return f"{'; '.join([first, *kept])}; if {found['seen']}, back to manual."


def stop_at(figures: LoopFigures) -> float:
    """Return the swing, %, beyond which a stage is to be taken back: more than the record allows, and clearly more than expected."""
    swing = figures.swing_percent
    if swing is None:
        return _LEAST_STOP
    upper = swing.high if math.isfinite(swing.high) else swing.value
    return min(max(upper, swing.value + _MORE_SWING, _LEAST_STOP), _MOST_STOP)
