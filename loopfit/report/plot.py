"""The picture of an analysis: record, model, step, and the figures where they can be seen."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import matplotlib as mpl
import matplotlib.style
import numpy as np
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure

from loopfit.analysis.result import Analysis
from loopfit.core.arrays import Array
from loopfit.core.errors import UsageError
from loopfit.fit.curve import FittedCurve
from loopfit.report.plot_figures import draw_figures, draw_model
from loopfit.report.plot_labels import INK, STEP, EndLabel, Panel, PointLabel, end_labels, marks, place, settle
from loopfit.report.plot_lines import begins, curve_in, in_view, thinned, view_of
from loopfit.report.plot_words import FONT, axis_words, below, located, readable, title
from loopfit.report.text import step_words, stepped_signal

_RECORD, _LONG_RECORD, _OUTPUT = INK, "#9c9c9c", "#5c5c5c"  # a long noisy record is an area: lighter
METADATA = {".png": {"Software": None}, ".svg": {"Date": None}, ".pdf": {"CreationDate": None}}
_FEW_ROWS = 400  # are drawn as larger dots
_MANY_ROWS = 1500  # would hide the model, and are drawn behind it


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
    if ending not in METADATA:
        raise UsageError(f"{path}: the file name must end in .png, .svg or .pdf")
    with plain_style():
        drawn = _drawn(analysis)
        try:
            drawn.savefig(path, format=ending[1:], metadata=METADATA[ending])
        except OSError as error:
            raise UsageError(f"{path}: cannot be written ({error.strerror or error})") from None


def figure(analysis: Analysis) -> Figure:
    """Return the picture of an analysis as a matplotlib figure.

    Without a model it shows the record and its steps.
    """
    with plain_style():
        return _drawn(analysis)


@contextmanager
def plain_style() -> Iterator[None]:
    """Keep a user's own matplotlib settings, and dollar signs in column names, out of the picture."""
    own: dict[Any, Any] = {
        "font.family": FONT,
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
    roles = _lower_signals(analysis, above=above)
    ratios = [1.0] + [0.26] * len(roles)
    rows = out.subplots(len(ratios), 1, sharex=True, squeeze=False, height_ratios=ratios)[:, 0]
    panels = [Panel(axes=axes) for axes in rows]
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
    curve = curve_in(analysis, view)
    if curve is not None:
        draw_model(main, analysis, curve)
        draw_figures(main, analysis, curve, view)
    _heights(main, analysis, curve, view, above=above)
    main.axes.set_ylabel(axis_words("measurement", analysis.record.measurement, 44), fontsize=9.5)
    for panel, role in zip(panels[1:], roles, strict=True):
        _lower(panel, analysis, role, view)
    if analysis.step is not None:
        words = readable(
            step_words(analysis.step, stepped_signal(analysis), analysis.record.sample_interval_s), analysis.step.signal
        )
        where = panels[1 + roles.index(analysis.step.signal)] if analysis.step.signal in roles else main
        low, high = where.axes.get_ylim()
        upwards = where is not main or analysis.step.size * _direction(analysis) > 0
        height = low + (0.03 if upwards else 0.97) * (high - low)
        where.points.append(
            PointLabel(time=analysis.step.time_s, height=height, words=words, colour=STEP, above=upwards)
        )
    elif begins(analysis) > analysis.record.time[0] and analysis.model is not None:
        words = f"release, from {begins(analysis):.6g} s on"
        low = main.axes.get_ylim()[0]
        main.points.append(PointLabel(time=begins(analysis), height=low, words=words, colour=STEP, above=True))
    shown = [at for _, at in located(analysis, view)]
    for start, end in shown:
        if start == end and view[0] < start < view[1]:
            main.lines.append(main.axes.axvline(start, color=INK, lw=0.7, ls=(0, (1, 3)), label="finding"))
    title(main.axes, analysis, strip=bool(shown))
    below(panels[-1].axes, analysis, view)
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


def _instants(panel: Panel, analysis: Analysis) -> None:
    for step in analysis.steps:
        line = panel.axes.axvline(step.time_s, color=STEP, lw=0.9 if step.used else 0.6, ls="-" if step.used else ":")
        panel.lines.append(line)
    if not analysis.steps and analysis.model is not None:
        panel.axes.axvline(begins(analysis), color=STEP, lw=0.9)


def _record(panel: Panel, analysis: Analysis, view: tuple[float, float]) -> None:
    record = analysis.record
    rows = in_view(record.time, view)
    count = record.time[rows].size
    time, values = thinned(record.time[rows], record.measurement.values[rows])
    dots = time.size == count
    (line,) = panel.axes.plot(
        time,
        values,
        color=_RECORD if dots else _LONG_RECORD,
        ls="none" if dots else "-",
        lw=0.5,
        marker=".",
        ms=(3.6 if count <= _FEW_ROWS else 2.2) if dots else 0.8,
        mew=0,
        zorder=4.5 if count <= _MANY_ROWS else 3,
        label="record",
    )
    panel.lines.append(line)
    panel.ends.append(EndLabel(height=_last(time, values, view), words="record", colour=_RECORD, dashes=":"))
    for finding in analysis.findings:
        if finding.code == "false_first_rows" and finding.at_s is not None:
            apart = (record.time >= finding.at_s[0]) & (record.time <= finding.at_s[1])
            time, values = record.time[apart], record.measurement.values[apart]
            panel.axes.plot(
                time, values, color=INK, ls="none", marker="o", ms=7, mfc="none", mew=0.8, label="set aside"
            )
            panel.points.append(PointLabel(time=float(time[-1]), height=float(values[-1]), words="set aside"))


def _last(time: Array, values: Array, view: tuple[float, float]) -> float:
    """Return the last value in view; nan parts, and rows beyond, do not count."""
    return float(values[np.flatnonzero(time <= view[1])[-1]])


def _signal_course(analysis: Analysis, role: str, view: tuple[float, float]) -> tuple[Array, Array]:
    """Return times and values of the setpoint or output in view; of a stated step, as it was stated."""
    record, step = analysis.record, analysis.step
    signal = record.setpoint if role == "setpoint" else record.output
    stated = any(finding.code == "stated_step" for finding in analysis.findings)
    if step is not None and step.signal == role and (stated or signal is None):
        return np.array([view[0], step.time_s, view[1]]), np.array([step.from_, step.to, step.to])
    assert signal is not None
    rows = in_view(record.time, view)
    return thinned(record.time[rows], signal.values[rows])


def _stepped(panel: Panel, analysis: Analysis, view: tuple[float, float]) -> None:
    time, values = _signal_course(analysis, "setpoint", view)
    (line,) = panel.axes.plot(time, values, color=STEP, ls="--", lw=1.3, drawstyle="steps-post", label="setpoint")
    panel.lines.append(line)
    unit = None if analysis.record.setpoint is None else analysis.record.setpoint.unit
    last = _last(time, values, view)
    words = f"setpoint {last:.6g}" + (f" {readable(unit, '')}" if unit else "")
    panel.ends.append(EndLabel(height=last, words=words, colour=STEP, dashes="--"))


def _heights(
    panel: Panel, analysis: Analysis, curve: FittedCurve | None, view: tuple[float, float], *, above: bool
) -> None:
    """Show the record, the model and the setpoint, with room for labels; an envelope may run out of the picture."""
    record = analysis.record
    seen = [record.measurement.values[in_view(record.time, view)]]
    if curve is not None:
        seen.append(curve.value)
        if curve.final_value is not None and analysis.step is not None:
            seen.append(np.clip([curve.final_value], *_far(seen[0])))
    if above:
        seen.append(_signal_course(analysis, "setpoint", view)[1])
    seen += [np.asarray(line.get_ydata()) for line in panel.lines if line.get_label() in ("dead time", "settling time")]
    low, high = (float(f(np.concatenate(seen))) for f in (np.min, np.max))
    room = (high - low) or max(abs(high), 1.0)
    start = 0.18 + (0.1 if above else 0.0)  # the words of the step stand beside where it starts
    up = analysis.step is None or analysis.step.size * _direction(analysis) > 0
    panel.axes.set_ylim(low - (start if up else 0.18) * room, high + (0.18 if up else start) * room)


def _far(values: Array) -> tuple[float, float]:
    """Return the bounds beyond which a final value would make the record too small to see."""
    low, high = float(np.min(values)), float(np.max(values))
    return low - 1.5 * (high - low), high + 1.5 * (high - low)


def _direction(analysis: Analysis) -> float:
    model = analysis.model
    return 1.0 if model is None or model.gain is None else model.gain.value


def _lower(panel: Panel, analysis: Analysis, role: str, view: tuple[float, float]) -> None:
    record = analysis.record
    signal = record.setpoint if role == "setpoint" else record.output
    time, values = _signal_course(analysis, role, view)
    stepped = analysis.step is not None and analysis.step.signal == role
    colour = STEP if stepped else _OUTPUT
    (line,) = panel.axes.plot(
        time, values, color=colour, lw=1.3 if stepped else 0.9, drawstyle="steps-post", label=role
    )
    panel.lines.append(line)
    panel.axes.margins(y=0.2)
    panel.axes.set_ylabel(role if signal is None else axis_words(role, signal, 15), fontsize=9)
    panel.ends.append(EndLabel(height=_last(time, values, view), words=role, colour=colour))
