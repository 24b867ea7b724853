"""The picture of an analysis: record, model, step, and the figures where they can be seen."""

from __future__ import annotations

import math
import textwrap
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import matplotlib as mpl
import matplotlib.style
import numpy as np
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.font_manager import findfont, get_font
from matplotlib.lines import Line2D

from loopfit.analysis.result import Analysis
from loopfit.core.errors import UsageError
from loopfit.core.rounding import decimals_for, number
from loopfit.record.record import Signal
from loopfit.report.plot_labels import INK, EndLabel, PointLabel, end_labels, marks, place, settle
from loopfit.report.plot_lines import band_width, begins, envelope_of, in_view, thinned, view_of
from loopfit.report.text import _step_words, _stepped_signal, answer, in_words

_FONT = "DejaVu Sans"  # comes with matplotlib
_RECORD, _FIT, _BAND, _STEP, _STRIP = "#6b6b6b", "#10357a", "#a9bfe6", "#b4530a", "#ececec"
_METADATA = {".png": {"Software": None}, ".svg": {"Date": None}, ".pdf": {"CreationDate": None}}
_TITLE_WIDTH = 104  # characters that fit across the picture
_FEW_ROWS = 400


@dataclass(frozen=True, slots=True, kw_only=True)
class _Panel:
    """Axes with what is known of them while they are filled."""

    axes: Axes
    ends: list[EndLabel] = field(default_factory=list)
    points: list[PointLabel] = field(default_factory=list)
    lines: list[Line2D] = field(default_factory=list)  # that labels should not cover


def picture(analysis: Analysis, path: Path) -> None:
    """Write the picture of an analysis to a file; the same analysis gives the same bytes.

    Parameters
    ----------
    analysis : Analysis
    path : Path
        Ends in .png, .svg or .pdf; a file that exists is replaced.

    Raises
    ------
    UsageError
        If the ending is another one, or the file cannot be written.
    """
    ending = path.suffix.lower()
    if ending not in _METADATA:
        raise UsageError(f"{path}: the file name must end in .png, .svg or .pdf")
    with _plain_style():
        drawn = _drawn(analysis)
        try:
            drawn.savefig(path, format=ending[1:], metadata=_METADATA[ending])
        except OSError as error:
            raise UsageError(f"{path}: cannot be written ({error.strerror or error})") from None


def figure(analysis: Analysis) -> Figure:
    """Return the picture of an analysis as a matplotlib figure.

    Without a model it shows the record and its steps.
    """
    with _plain_style():
        return _drawn(analysis)


@contextmanager
def _plain_style() -> Iterator[None]:
    """Keep a user's own matplotlib settings, and dollar signs in column names, out of the picture."""
    own: dict[Any, Any] = {
        "font.family": _FONT,
        "text.parse_math": False,
        "svg.hashsalt": "loopfit",
        "axes.unicode_minus": True,
    }
    with matplotlib.style.context("default"), mpl.rc_context(own):
        yield


def _drawn(analysis: Analysis) -> Figure:
    canvas = FigureCanvasAgg(Figure(figsize=(10.0, 6.0), dpi=150, layout="constrained"))
    out = canvas.figure
    view = view_of(analysis)
    above = _setpoint_above(analysis, view)
    below = _lower_signals(analysis, above=above)
    ratios = [1.0] + [0.26] * len(below)
    rows = out.subplots(len(ratios), 1, sharex=True, squeeze=False, height_ratios=ratios)[:, 0]
    panels = [_Panel(axes=axes) for axes in rows]
    main = panels[0]
    main.axes.set_xlim(view)
    for panel in panels:
        panel.axes.spines[["top", "right"]].set_visible(False)
        panel.axes.tick_params(labelsize=9)
        panel.axes.ticklabel_format(useOffset=False)
        _instants(panel, analysis)
    _record(main, analysis, view)
    if above:
        _stepped(main, analysis, view)
    _model(main, analysis)
    _figures(main, analysis, view)
    _heights(main, analysis, view, above=above)
    main.axes.set_ylabel(_axis_words("measurement", analysis.record.measurement, 44), fontsize=9.5)
    for panel, role in zip(panels[1:], below, strict=True):
        _lower(panel, analysis, role, view)
    if analysis.step is not None:
        words = _readable(_step_words(analysis.step, _stepped_signal(analysis)), analysis.step.signal)
        where = panels[1 + below.index(analysis.step.signal)] if analysis.step.signal in below else main
        low, high = where.axes.get_ylim()
        height = low + (0.04 if analysis.step.size > 0 or where is not main else 0.96) * (high - low)
        where.points.append(PointLabel(time=analysis.step.time_s, height=height, words=words, colour=_STEP))
    shown = _words_around(panels, analysis, view)
    texts = [end_labels(panel.axes, panel.ends) for panel in panels]
    out.draw_without_rendering()
    for panel, ends in zip(panels, texts, strict=True):
        settle(panel.axes, panel.ends, ends)
        place(panel.axes, panel.points, panel.lines)
    marks(main.axes, shown)
    return out


def _setpoint_above(analysis: Analysis, view: tuple[float, float]) -> bool:
    """Tell whether the step is one of the setpoint that fits on the measurement's axis."""
    step, record = analysis.step, analysis.record
    if step is None or step.signal != "setpoint":
        return False
    units = {record.measurement.unit, None if record.setpoint is None else record.setpoint.unit} - {None}
    seen = record.measurement.values[in_view(record.time, view)]
    low, high = float(seen.min()), float(seen.max())
    room = max(high - low, abs(step.size))
    return len(units) < 2 and all(low - room <= level <= high + room for level in (step.from_, step.to))


def _lower_signals(analysis: Analysis, *, above: bool) -> list[str]:
    roles = []
    if analysis.step is not None and analysis.step.signal == "setpoint" and not above:
        roles.append("setpoint")
    if analysis.record.output is not None or (analysis.step is not None and analysis.step.signal == "output"):
        roles.append("output")
    return roles


def _instants(panel: _Panel, analysis: Analysis) -> None:
    for step in analysis.steps:
        line = panel.axes.axvline(step.time_s, color=_STEP, lw=0.9 if step.used else 0.6, ls="-" if step.used else ":")
        panel.lines.append(line)
    if not analysis.steps and analysis.model is not None:
        panel.axes.axvline(begins(analysis), color=_STEP, lw=0.9)


def _record(panel: _Panel, analysis: Analysis, view: tuple[float, float]) -> None:
    record = analysis.record
    rows = in_view(record.time, view)
    count = record.time[rows].size
    time, values = thinned(record.time[rows], record.measurement.values[rows])
    dots = time.size == count
    (line,) = panel.axes.plot(
        time,
        values,
        color=_RECORD,
        ls="none" if dots else "-",
        lw=0.5,
        marker=".",
        ms=(4.5 if count <= _FEW_ROWS else 2.5) if dots else 0.8,
        mew=0,
        zorder=3,
        label="record",
    )
    panel.lines.append(line)
    last = values[np.isfinite(values) & (time <= view[1])][-1]
    panel.ends.append(EndLabel(height=float(last), words="record", colour=_RECORD, dashes=":"))


def _signal_course(analysis: Analysis, role: str, view: tuple[float, float]) -> tuple[np.ndarray, np.ndarray]:
    """Return times and values of the setpoint or output in view; of a stated step, as it was stated."""
    record, step = analysis.record, analysis.step
    signal = record.setpoint if role == "setpoint" else record.output
    stated = any(finding.code == "stated_step" for finding in analysis.findings)
    if step is not None and step.signal == role and (stated or signal is None):
        return np.array([view[0], step.time_s, view[1]]), np.array([step.from_, step.to, step.to])
    assert signal is not None
    rows = in_view(record.time, view)
    return thinned(record.time[rows], signal.values[rows])


def _stepped(panel: _Panel, analysis: Analysis, view: tuple[float, float]) -> None:
    time, values = _signal_course(analysis, "setpoint", view)
    (line,) = panel.axes.plot(time, values, color=_STEP, ls="--", lw=1.3, drawstyle="steps-post", label="setpoint")
    panel.lines.append(line)
    panel.ends.append(EndLabel(height=float(values[-1]), words=f"setpoint {values[-1]:.6g}", colour=_STEP, dashes="--"))


def _model(panel: _Panel, analysis: Analysis) -> None:
    curve = analysis.curve
    if curve is None:
        return
    axes = panel.axes
    axes.fill_between(curve.time, curve.low, curve.high, color=_BAND, lw=0, zorder=2, label="models the record allows")
    (line,) = axes.plot(curve.time, curve.value, color=_FIT, lw=1.6, zorder=4, label="model")
    panel.lines.append(line)
    at_end = float(np.interp(axes.get_xlim()[1], curve.time, curve.value))
    panel.ends.append(EndLabel(height=at_end, words=f"model ({analysis.confidence_percent:g} % band)", colour=_FIT))
    if curve.final_value is None:
        return
    half = band_width(analysis)
    words = f"{'rest' if analysis.step is None else 'final'} value {_level(analysis, curve.final_value)}"
    if half is not None:
        axes.axhspan(curve.final_value - half, curve.final_value + half, color=_STRIP, lw=0, zorder=0, label="band")
        words += f"\nshaded: ±{analysis.band_percent:g} %"
    axes.axhline(curve.final_value, color=INK, lw=0.7, ls=(0, (8, 2, 1, 2)), zorder=1, label="final value")
    panel.ends.append(EndLabel(height=curve.final_value, words=words, colour=INK, dashes="-."))
    envelope = envelope_of(analysis)
    if envelope is None:
        return
    for side, name in ((envelope.high, "envelope"), (envelope.low, "lower envelope")):
        (line,) = axes.plot(envelope.time, side, color=_FIT, lw=0.9, ls=(0, (1.2, 2.2)), zorder=3, label=name)
        panel.lines.append(line)
    period = None if analysis.model is None else analysis.model.damped_period_s
    if period is not None:
        at = envelope.time[0] + 1.3 * period.value
        if at < axes.get_xlim()[1]:
            height = float(np.interp(at, envelope.time, envelope.high))
            panel.points.append(PointLabel(time=at, height=height, words="envelope", colour=_FIT, above=True))


def _figures(panel: _Panel, analysis: Analysis, view: tuple[float, float]) -> None:
    """Mark dead time, first peak and settling where they are seen."""
    model, response, curve = analysis.model, analysis.response, analysis.curve
    if model is None or curve is None:
        return
    begin, span = begins(analysis), view[1] - view[0]
    start = float(np.interp(begin, curve.time, curve.value))
    final = curve.final_value
    up = (float(curve.value[-1]) if final is None else final) >= start
    reach = float(np.ptp(curve.value[(curve.time >= view[0]) & (curve.time <= view[1])]))
    dead = model.dead_time_s
    if dead is not None and analysis.step is not None and dead.value > 0.01 * span:
        height = start - math.copysign(0.06, 1 if up else -1) * reach
        _bracket(panel, begin, begin + dead.value, height, "dead time")
        words = f"dead time {in_words(dead, 's')}"
        panel.points.append(PointLabel(time=begin + dead.value, height=height, words=words, above=not up))
    if response is None or final is None:
        return
    peak, overshoot = response.peak_time_s, response.overshoot_percent
    if peak is not None and overshoot is not None and overshoot.value > 0.05 and begin + peak.value < curve.time[-1]:
        at = begin + peak.value
        top = float(np.interp(at, curve.time, curve.value))
        (line,) = panel.axes.plot(
            [at, at], [final, top], color=INK, lw=0.9, marker="_", ms=7, zorder=5, label="first peak"
        )
        panel.lines.append(line)
        words = f"overshoot {in_words(overshoot, '%')}\nfirst peak after {in_words(peak, 's')}"
        panel.points.insert(0, PointLabel(time=at, height=top, words=words, above=up))
    settling, half = response.settling_time_s, band_width(analysis)
    if settling is None or half is None or not math.isfinite(settling.value):
        return
    words = f"settled within ±{analysis.band_percent:g} % after {in_words(settling, 's')}"
    at = begin + settling.value
    if at > view[1]:
        words += ",\nafter the end of the record"
        panel.points.append(PointLabel(time=view[1], height=final - (half if up else -half), words=words, above=not up))
        return
    height = final - math.copysign(half + 0.05 * reach, 1 if up else -1)
    _bracket(panel, begin + settling.low, min(begin + settling.high, view[1]), height, "settling time")
    panel.axes.plot([at, at], [final, height], color=INK, lw=0.9, marker="d", ms=4, markevery=[1], zorder=5)
    panel.points.insert(0, PointLabel(time=at, height=height, words=words, above=not up))


def _bracket(panel: _Panel, start: float, end: float, height: float, name: str) -> None:
    (line,) = panel.axes.plot([start, end], [height, height], color=INK, lw=0.9, marker="|", ms=6, zorder=5, label=name)
    panel.lines.append(line)


def _heights(panel: _Panel, analysis: Analysis, view: tuple[float, float], *, above: bool) -> None:
    """Show the record, the model and the setpoint, with room for labels; an envelope may run out of the picture."""
    record, curve = analysis.record, analysis.curve
    seen = [record.measurement.values[in_view(record.time, view)]]
    if curve is not None:
        seen.append(curve.value[(curve.time >= view[0]) & (curve.time <= view[1])])
        if curve.final_value is not None and analysis.step is not None:
            seen.append(np.array([curve.final_value]))
    if above:
        seen.append(_signal_course(analysis, "setpoint", view)[1])
    low, high = (float(f(np.concatenate(seen))) for f in (np.min, np.max))
    room = (high - low) or max(abs(high), 1.0)
    panel.axes.set_ylim(low - 0.18 * room, high + 0.18 * room)


def _lower(panel: _Panel, analysis: Analysis, role: str, view: tuple[float, float]) -> None:
    record = analysis.record
    signal = record.setpoint if role == "setpoint" else record.output
    time, values = _signal_course(analysis, role, view)
    stepped = analysis.step is not None and analysis.step.signal == role
    colour = _STEP if stepped else _RECORD
    (line,) = panel.axes.plot(
        time, values, color=colour, lw=1.3 if stepped else 0.9, drawstyle="steps-post", label=role
    )
    panel.lines.append(line)
    panel.axes.margins(y=0.2)
    panel.axes.set_ylabel(role if signal is None else _axis_words(role, signal, 15), fontsize=9)
    panel.ends.append(EndLabel(height=float(values[np.isfinite(values)][-1]), words=role, colour=colour))


def _words_around(panels: list[_Panel], analysis: Analysis, view: tuple[float, float]) -> list[tuple[float, float]]:
    """Write the title, the time axis and the lines under it; return where the numbered findings are."""
    record, axes = analysis.record, panels[0].axes
    located = [finding for finding in analysis.findings if finding.at_s is not None]
    shown = [f for f in located if f.at_s is not None and f.at_s[1] >= view[0] and f.at_s[0] <= view[1]]
    first, *rest = _readable(answer(analysis), "see the page of text").split("\n")
    first_lines = textwrap.wrap(first, _TITLE_WIDTH - 10)
    rest_lines = [part for line in rest for part in textwrap.wrap(line, _TITLE_WIDTH + 8)]
    axes.set_title(
        "\n".join(first_lines),
        loc="left",
        fontweight="bold",
        fontsize=11,
        linespacing=1.3,
        pad=6 + (19 if shown else 0) + 14.5 * len(rest_lines),
    )
    axes.annotate(
        "\n".join(rest_lines),
        (0.0, 1.0),
        xycoords="axes fraction",
        xytext=(0, 7 + (19 if shown else 0)),
        textcoords="offset points",
        va="bottom",
        fontsize=10,
        linespacing=1.3,
        in_layout=False,
    )
    words = "Time (s)"
    if view[0] > record.time[0] or view[1] < record.time[-1]:
        words += f"; the record runs from {record.time[0]:.6g} to {record.time[-1]:.6g} s"
    panels[-1].axes.set_xlabel(words, fontsize=9.5)
    legend = "     ".join(f"{i} {f.code.replace('_', ' ')}" for i, f in enumerate(shown, start=1))
    source = _readable(Path(record.source).name, "record")
    below = f"{source}: {record.time.size} rows. In brackets: {analysis.confidence_percent:g} % intervals."
    lines = textwrap.wrap(legend, 140)
    if analysis.model is not None and not analysis.model.adequate:
        lines += textwrap.wrap("; ".join(analysis.model.reasons), 140)
    lines.append(below)
    axes.figure.supxlabel("\n".join(lines), x=0.012, ha="left", fontsize=8.5, color=INK, linespacing=1.4)
    return [finding.at_s for finding in shown if finding.at_s is not None]


def _level(analysis: Analysis, value: float) -> str:
    curve = analysis.curve
    assert curve is not None
    unit = analysis.record.measurement.unit
    places = decimals_for(0.005 * float(np.ptp(curve.value)), value)
    return number(value, places) + (f" {unit}" if unit else "")


def _axis_words(role: str, signal: Signal, width: int) -> str:
    name = _readable(" ".join(signal.name.split()), role)
    if signal.unit and signal.unit not in name:
        name += f" ({_readable(signal.unit, '')})"
    if width > 20 and role not in name.lower():
        name = f"{role}: {name}"
    lines = textwrap.wrap(name, width)
    return "\n".join(lines[:3])


def _readable(words: str, otherwise: str) -> str:
    """Return the words, or others in place of a name whose letters the font does not have."""
    known = get_font(findfont(_FONT)).get_charmap()
    return words if all(ord(letter) in known or letter == "\n" for letter in words) else otherwise
