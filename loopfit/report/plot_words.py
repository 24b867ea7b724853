"""Words of a picture: title, axes, and the lines under it."""

from __future__ import annotations

import textwrap
from pathlib import Path

import numpy as np
from matplotlib.axes import Axes
from matplotlib.font_manager import findfont, get_font

from loopfit.analysis.result import Analysis
from loopfit.core.finding import Finding
from loopfit.core.rounding import decimals_for, number
from loopfit.fit.curve import FittedCurve
from loopfit.record.record import Signal
from loopfit.report.plot_labels import INK
from loopfit.report.text import answer

FONT = "DejaVu Sans"  # comes with matplotlib
_TITLE_WIDTH = 94  # characters in bold that fit across the picture
_WIDTH = 140  # small ones


def located(analysis: Analysis, view: tuple[float, float]) -> list[tuple[Finding, tuple[float, float]]]:
    """Return the findings that have a place in the view, by time, and where they are."""
    placed = [(f, f.at_s) for f in analysis.findings if f.at_s is not None]
    return sorted(
        ((f, at) for f, at in placed if at[1] >= view[0] and at[0] <= view[1]), key=lambda pair: (pair[1], pair[0].code)
    )


def out_of_view(analysis: Analysis, view: tuple[float, float]) -> list[Finding]:
    """Return the findings whose place is outside the view."""
    return [f for f in analysis.findings if f.at_s is not None and not (f.at_s[1] >= view[0] and f.at_s[0] <= view[1])]


def title(axes: Axes, analysis: Analysis, *, strip: bool) -> None:
    """Write the answer above the axes, and above the strip of marks if there is one."""
    first, *rest = readable(answer(analysis), "see the page of text").split("\n")
    rest_lines = [part for line in rest for part in textwrap.wrap(line, _TITLE_WIDTH + 18)]
    base = 7 + (19 if strip else 0)
    axes.set_title(
        textwrap.fill(first, _TITLE_WIDTH),
        loc="left",
        fontweight="bold",
        fontsize=11,
        linespacing=1.3,
        pad=base + 2 + 16 * len(rest_lines),
    )
    axes.annotate(
        "\n".join(rest_lines),
        (0.0, 1.0),
        xycoords="axes fraction",
        xytext=(0, base),
        textcoords="offset points",
        va="bottom",
        fontsize=10,
        linespacing=1.3,
        in_layout=False,
    )


def below(axes: Axes, analysis: Analysis, view: tuple[float, float]) -> None:
    """Write the time axis, what the marks mean, why a model is doubtful, and where the record comes from."""
    record, model = analysis.record, analysis.model
    words = "Time (s)"
    if view[0] > record.time[0] or view[1] < record.time[-1]:
        words += f"; the record runs from {record.time[0]:.6g} to {record.time[-1]:.6g} s"
    axes.set_xlabel(words, fontsize=9.5)
    meanings = [f"{i} {f.code.replace('_', ' ')}" for i, (f, _) in enumerate(located(analysis, view), start=1)]
    meanings += [f"not in view: {f.code.replace('_', ' ')}" for f in out_of_view(analysis, view)]
    lines = textwrap.wrap("     ".join(word.replace(" ", "\u00a0") for word in meanings), _WIDTH)
    if model is not None and not model.adequate:
        lines += textwrap.wrap("; ".join(model.reasons), _WIDTH)
    source = readable(Path(record.source).name, "record")
    source = source if len(source) <= 60 else f"{source[:57]}..."
    intervals = f" In brackets: {analysis.confidence_percent:g} % intervals." if model is not None else ""
    lines.append(f"{source}: {record.time.size} rows.{intervals}")
    axes.figure.supxlabel("\n".join(lines), x=0.012, ha="left", fontsize=8.5, color=INK, linespacing=1.4)


def level(analysis: Analysis, curve: FittedCurve, value: float) -> str:
    """Return a level of the measurement with the digits that the size of the change makes worth reading."""
    unit = analysis.record.measurement.unit
    places = decimals_for(0.005 * float(np.ptp(curve.value)), value)
    return number(value, places) + (f" {unit}" if unit else "")


def axis_words(role: str, signal: Signal, width: int) -> str:
    """Return what stands beside a vertical axis, in lines of that width: the column's name, role and unit."""
    name = readable(" ".join(signal.name.split()), role)
    if signal.unit and signal.unit not in name:
        name += f" ({readable(signal.unit, '')})"
    if width > 20 and role not in name.lower():
        name = f"{role}: {name}"
    return "\n".join(textwrap.wrap(name, width, max_lines=2, placeholder=" ..."))


def readable(words: str, otherwise: str) -> str:
    """Return the words, or others in place of a name whose letters the font does not have."""
    known = get_font(findfont(FONT)).get_charmap()
    return words if all(ord(letter) in known or letter == "\n" for letter in words) else otherwise
