"""A retuning as a page of text for the engineer who keys the settings in."""

from __future__ import annotations

import re

from loopfit.report.retune_numbers import figure_words
from loopfit.report.retune_plant import plant_words
from loopfit.report.retune_recorded import record_units
from loopfit.report.retune_stages import stages_words
from loopfit.report.retune_warnings import first_findings, overshoot_warning, printed_cautions
from loopfit.report.retune_words import (
    action_words,
    change_words,
    entries,
    entry_line,
    feeds_back_positively,
    filled,
    form_words,
    gain_unit,
    labelled,
    proposes,
    refusal_words,
    share_words,
    target_words,
)
from loopfit.tuning.result import Retuning, Side

_NAME, _CELL = 40, 30
_ORDER = ("error", "warning", "note")
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
        parts.append(stages_words(retuning))
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
        return "\n".join([target, *_first(retuning)])
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
    after = [*_first(retuning), filled(change_words(retuning))]
    warning = overshoot_warning(retuning)
    if warning is not None:
        after.append(filled(warning))
    if retuning.met:
        return "\n".join([block, target, *after])
    return "\n".join([target, block, *after])


def _first(retuning: Retuning) -> list[str]:
    return [filled(sentence) for sentence in first_findings(retuning)]


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
    area = f"{measured} s/{out}" if measured and out else ""  # a unit is said whole or not at all
    for name, unit, field in (
        ("damping ratio", "", "damping_ratio"),
        ("swing back after a load", "%", "swing_percent"),
        ("setpoint overshoot", "%", "overshoot_percent"),
        ("rise time", "s", "rise_time_s"),
        (f"settling time (±{retuning.band_percent:g} %)", "s", "settling_time_s"),
        ("load: integrated error", area, "load_integrated_error"),
        ("load: absolute error", area, "load_absolute_error"),
        ("largest output change", gain_unit(retuning) or "", "peak_output"),
        ("output noise over measurement noise", "", "output_noise"),
        ("gain margin", "", "gain_margin"),
        ("phase margin", "deg", "phase_margin_deg"),
        ("delay margin", "s", "delay_margin_s"),
        ("maximum sensitivity", "", "max_sensitivity"),
    ):
        found = [getattr(side.figures, field) for side in sides]
        if any(value is not None for value in found):
            rows.append(_row(name, unit, [figure_words(value, field, short=True) for value in found]))
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
    return "\n".join(rows)


def _loop_words(side: Side, retuning: Retuning) -> str:
    if feeds_back_positively(side.gains, retuning.identified.plant.gain):
        return "WRONG SIGN"
    return "stable" if side.figures.stable else "UNSTABLE"


def _row(name: str, unit: str, cells: list[str]) -> str:
    what = f"{name}, {unit}" if unit else name
    return f"{what:{_NAME}}{''.join(f'{cell} '.ljust(_CELL) for cell in cells)}".rstrip()


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


def _comparisons(retuning: Retuning) -> str:
    unit = gain_unit(retuning)
    rows = ["What published rules would give, for comparison only; none of them is proposed"]
    for name, side in retuning.comparisons:
        figures = side.figures
        words = entry_line(side.settings, unit, absent=False) + ": "
        if figures.stable:
            words += (
                f"damping ratio {figure_words(figures.damping_ratio, 'damping_ratio', interval=False)}, "
                f"overshoot {figure_words(figures.overshoot_percent, 'overshoot_percent', interval=False)} %, "
                f"maximum sensitivity {figure_words(figures.max_sensitivity, 'max_sensitivity', interval=False)}"
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
    return "Cautions\n" + "\n".join(filled(caution, "  -  ", " " * 5) for caution in printed_cautions(retuning))
