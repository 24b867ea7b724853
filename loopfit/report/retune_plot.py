"""The picture of a retuning: what the loop does now and what it will do, and the record that says whether to believe it."""

from __future__ import annotations

import re
import textwrap
from pathlib import Path

import numpy as np
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.layout_engine import ConstrainedLayoutEngine

from loopfit.core.errors import UsageError
from loopfit.report.plot import METADATA, plain_style
from loopfit.report.plot_figures import FIT
from loopfit.report.plot_labels import INK, STEP, EndLabel, Panel, end_labels, settle
from loopfit.report.plot_words import readable
from loopfit.report.retune_lines import Band, Curves, SideCurves, curves_of, in_view
from loopfit.report.retune_numbers import figure_words, with_unit
from loopfit.report.retune_overlay import overlay_of
from loopfit.report.retune_record import PRESENT, PRESENT_BAND, draw_alone, draw_record, named
from loopfit.report.retune_recorded import record_of, record_units
from loopfit.report.retune_warnings import first_findings, overshoot_warning, printed_cautions
from loopfit.report.retune_words import (
    key_in_words,
    proposes,
    refusal_words,
    target_words,
)
from loopfit.tuning.result import Retuning

_PROPOSED_BAND = "#bcd0f0"
_TITLE_WIDTH, _SMALL_WIDTH = 112, 160  # characters that fit across the picture
_HEIGHT, _RECORD_HEIGHT, _LINE_HEIGHT = 5.6, 2.4, 0.15  # inches
_BEYOND = 2.0  # times the height of the proposed curve, that a present one is shown beyond it on either side
_RUNS_AWAY, _AWAY = 20.0, 4.0  # steps: a curve that goes so far runs away, and so far is it shown
_LONG, _LEAST = 110, 40  # characters of a caution: from which it is cut, and what is kept at least


def draw(retuning: Retuning, path: Path) -> None:
    """Write the picture of a retuning to a file; the same retuning gives the same bytes.

    Parameters
    ----------
    retuning : Retuning
    path : Path
        Ends in .png, .svg or .pdf; a file that exists is replaced.

    Raises
    ------
    UsageError
        If the ending is another one, the file cannot be written, or there is nothing to draw.
    ValueError
        If settings are proposed without cautions.
    """
    ending = path.suffix.lower()
    if ending not in METADATA:
        raise UsageError(f"{path}: the file name must end in .png, .svg or .pdf")
    with plain_style():
        drawn = _drawn(retuning)
        try:
            drawn.savefig(path, format=ending[1:], metadata=METADATA[ending])
        except OSError as error:
            raise UsageError(f"{path}: cannot be written ({error.strerror or error})") from None


def figure(retuning: Retuning) -> Figure:
    """Return the picture of a retuning as a matplotlib figure; errors as of `draw`."""
    with plain_style():
        return _drawn(retuning)


def short_cautions(retuning: Retuning) -> str:
    """Return every caution in short, its first sentence or the first clause of a long one, in one paragraph."""
    short = []
    for caution in printed_cautions(retuning):
        sentence = re.split(r"(?<=[^\W\d]{2})\.(?:\s|$)", caution.strip(), maxsplit=1)[0].rstrip(".")
        if len(sentence) > _LONG:
            cut = re.search(r"[;:] ", sentence[_LEAST:])
            sentence = sentence if cut is None else sentence[: _LEAST + cut.start()]
        short.append(f"{sentence}.")
    return "Cautions (in full on the page of text): " + " ".join(short)


def _drawn(retuning: Retuning) -> Figure:
    if retuning.refused is not None:
        return _refused(retuning)
    proposes(retuning)
    if retuning.proposed is None and retuning.current is None:
        raise UsageError("there is nothing to draw: no settings, neither present nor proposed")
    overlay = overlay_of(retuning)
    above, below = _words(retuning)
    height = _HEIGHT + (_RECORD_HEIGHT if overlay is not None else 0.0)
    out = _empty(height + _LINE_HEIGHT * (len(above) + len(below)), above, below)
    ratios = [1.0, 0.55] if overlay is None else [0.85, 1.0, 0.55]
    grid = out.add_gridspec(len(ratios), 2, height_ratios=ratios)
    panels: list[Panel] = []
    if overlay is not None:
        panels.append(Panel(axes=out.add_subplot(grid[0, :])))
        draw_record(panels[0], retuning, overlay)
    curves = curves_of(retuning)
    measured, output = record_units(retuning)
    for column, (kind, size) in enumerate(
        (("setpoint", f"{curves.setpoint_step:.4g} {measured or ''}"), ("load", f"1 {output or 'unit'} of output"))
    ):
        upper = Panel(axes=out.add_subplot(grid[-2, column]))
        lower = Panel(axes=out.add_subplot(grid[-1, column], sharex=upper.axes))
        _response(upper, curves, f"{kind}_measurement")
        _response(lower, curves, f"{kind}_output")
        if kind == "setpoint":
            level = curves.setpoint_step
            upper.axes.plot(
                [curves.time[0], 0, 0, curves.time[-1]],
                [0, 0, level, level],
                color=STEP,
                ls="--",
                lw=1.1,
                label="setpoint",
            )
            upper.ends.append(EndLabel(height=level, words="setpoint", colour=STEP, dashes="--"))
        words = f"Step of the {kind}, {readable(size.strip(), '1 unit')}\n{_figures(retuning, kind)}"
        upper.axes.set_title(words, loc="left", fontsize=9.5)
        if column == 0:
            upper.axes.set_ylabel(f"{named('measurement', measured)},\nfrom rest", fontsize=9)
            lower.axes.set_ylabel(f"{named('output', output)},\nfrom rest", fontsize=9)
        upper.axes.tick_params(labelbottom=False)
        lower.axes.set_xlabel("Time after the step (s)", fontsize=9)
        panels += [upper, lower]
    _finish(out, panels)
    return out


def _empty(height: float, above: list[str], below: list[str]) -> Figure:
    engine = ConstrainedLayoutEngine(w_pad=0.08, h_pad=0.06)
    out = FigureCanvasAgg(Figure(figsize=(10.0, height), dpi=150, layout=engine)).figure
    out.suptitle("\n".join(above), x=0.012, ha="left", fontsize=10, fontweight="bold", linespacing=1.3)
    out.supxlabel("\n".join(below), x=0.012, ha="left", fontsize=8, color=INK, linespacing=1.35)
    return out


def _finish(out: Figure, panels: list[Panel]) -> None:
    for panel in panels:
        panel.axes.tick_params(labelsize=8.5)
        panel.axes.spines[["top", "right"]].set_visible(False)
        panel.axes.ticklabel_format(useOffset=False)
    texts = [end_labels(panel.axes, panel.ends) for panel in panels]
    for _ in range(2):
        out.draw_without_rendering()
    out.set_layout_engine("none")
    for panel, ends in zip(panels, texts, strict=True):
        settle(panel.axes, panel.ends, ends)


def _words(retuning: Retuning) -> tuple[list[str], list[str]]:
    """Return the lines above and below the picture."""
    target, warning = target_words(retuning), overshoot_warning(retuning)
    if retuning.proposed is None:
        return textwrap.wrap(target, _TITLE_WIDTH), []
    keys = key_in_words(retuning.proposed, retuning)
    titles = (keys, target) if retuning.met else (target, keys)
    above = [line for words in titles for line in textwrap.wrap(words, _TITLE_WIDTH)]
    warnings = [*first_findings(retuning), *([] if warning is None else [warning])]
    below = [line for words in warnings for line in textwrap.wrap(words, _SMALL_WIDTH)]
    below += textwrap.wrap(short_cautions(retuning), _SMALL_WIDTH)
    below = [readable(line, "see the page of text") for line in below]
    return [readable(line, "see the page of text") for line in above], below


def _figures(retuning: Retuning, kind: str) -> str:
    """Return the figures that the panel lets one see: ": overshoot 29 % now, 0.2 % proposed"."""
    sides = [(side, word) for side, word in ((retuning.current, "now"), (retuning.proposed, "proposed")) if side]
    field, name = ("overshoot_percent", "overshoot") if kind == "setpoint" else ("damping_ratio", "damping ratio")
    unit = " %" if kind == "setpoint" else ""
    parts = []
    for side, word in sides:
        if not side.figures.stable:
            parts.append(f"{word} UNSTABLE")
            continue
        shown = figure_words(getattr(side.figures, field), field, interval=False)
        parts.append(f"{with_unit(shown, unit)} {word}")
    return f"{name} {', '.join(parts)}"


def _response(panel: Panel, curves: Curves, name: str) -> None:
    """Draw one signal of both sides, and choose heights that neither a band nor an unstable loop can spoil."""
    axes = panel.axes
    axes.axhline(0.0, color=INK, lw=0.5, zorder=1)
    axes.axvline(0.0, color=STEP, lw=0.8, zorder=1)
    least, most = _heights(curves, name)
    for side, colour, allowed, word, width in (
        (curves.present, PRESENT, PRESENT_BAND, "now", 1.5),
        (curves.proposed, FIT, _PROPOSED_BAND, "proposed", 2.1),
    ):
        if side is None:
            continue
        band = in_view(getattr(side, name), least, most)
        if not np.array_equal(band.low, band.high, equal_nan=True):
            axes.fill_between(
                curves.time, band.low, band.high, color=allowed, alpha=0.75, lw=0, zorder=2, label=f"{word}, allowed"
            )
        (line,) = axes.plot(curves.time, band.value, color=colour, lw=width, zorder=3, label=word)
        panel.lines.append(line)
        end = float(band.value[np.isfinite(band.value)][-1])
        panel.ends.append(EndLabel(height=end, words=word, colour=colour))
    axes.set_xlim(curves.time[0], curves.time[-1])
    axes.set_ylim(least, most)
    for limit in curves.limits or () if name.endswith("output") else ():
        if axes.get_ylim()[0] < limit < axes.get_ylim()[1]:
            axes.axhline(limit, color=INK, lw=0.7, ls=":", label="limit")
            panel.ends.append(EndLabel(height=limit, words="limit", colour=INK, dashes=":"))


def _heights(curves: Curves, name: str) -> tuple[float, float]:
    """Return the axis: the proposed curve whole, the present one as far as five times that lets it be seen."""
    sides = [side for side in (curves.proposed, curves.present) if side is not None]
    size = abs(curves.setpoint_step) if name == "setpoint_measurement" else None
    low, high = _reach(sides[0], name, size)
    for side in sides[1:]:
        now, room = _reach(side, name, size), _BEYOND * (high - low)
        low, high = max(min(low, now[0]), low - room), min(max(high, now[1]), high + room)
    if name == "setpoint_measurement":
        low, high = min(low, curves.setpoint_step), max(high, curves.setpoint_step)
    room = (high - low) or 1.0
    return low - 0.08 * room, high + 0.08 * room


def _reach(side: SideCurves, name: str, size: float | None) -> tuple[float, float]:
    """Return the least and greatest value of a curve and 0, with so much of its band as is not out of all proportion.

    What runs away counts as far as a few setpoint steps of that `size`, without one as far as in its first fifth.
    """
    band: Band = getattr(side, name)
    value = band.value
    far = np.abs(value)
    early = float(far[: far.size // 5].max())
    if size is not None and far.max() > _RUNS_AWAY * size:
        value = np.clip(value, -_AWAY * size, _AWAY * size)
    elif early > 0.0 and far[-(far.size // 10) :].max() > _RUNS_AWAY * far[: far.size // 2].max():
        value = np.clip(value, -early, early)
    low, high = min(float(value.min()), 0.0), max(float(value.max()), 0.0)
    room = high - low
    return max(float(band.low.min()), low - 0.3 * room), min(float(band.high.max()), high + 0.3 * room)


def _refused(retuning: Retuning) -> Figure:
    """Draw the record alone: there are no settings to show."""
    record = record_of(retuning)
    words = refusal_words(retuning)
    if record is None:
        raise UsageError(f"there is nothing to draw. {words}")
    above = [readable(line, "see the page of text") for line in textwrap.wrap(words, _TITLE_WIDTH)]
    out = _empty(_HEIGHT, above, [])
    _finish(out, draw_alone(out, record, retuning))
    return out
