"""The picture of equivalents: step responses over each other, the error, poles and zeros."""

from __future__ import annotations

import textwrap
from pathlib import Path

import numpy as np
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.layout_engine import ConstrainedLayoutEngine

from loopfit.core.arrays import Array
from loopfit.core.errors import UsageError
from loopfit.equivalents.choose import ADEQUATE_PERCENT
from loopfit.equivalents.interchange import transfer_of_equivalent
from loopfit.equivalents.result import Equivalent, Equivalents
from loopfit.equivalents.system import RationalSystem, System
from loopfit.report.equivalent_plane import draw_plane, label_plane, scale_plane
from loopfit.report.equivalent_text import answer
from loopfit.report.plot import METADATA, plain_style
from loopfit.report.plot_figures import FIT
from loopfit.report.plot_labels import INK, STEP, EndLabel, Panel, end_labels, place, settle
from loopfit.report.plot_words import readable

_OTHER = "#b9b9b9"
_SAMPLES = 1200
_TITLE_WIDTH, _SMALL_WIDTH = 100, 130  # characters that fit across the picture


def picture(result: Equivalents, path: Path) -> None:
    """Write the picture to a file; the same result gives the same bytes.

    Raises
    ------
    UsageError
        If the ending is not .png, .svg or .pdf, or the file cannot be written.
    """
    ending = path.suffix.lower()
    if ending not in METADATA:
        raise UsageError(f"{path}: the file name must end in .png, .svg or .pdf")
    with plain_style():
        drawn = _drawn(result)
        try:
            drawn.savefig(path, format=ending[1:], metadata=METADATA[ending])
        except OSError as error:
            raise UsageError(f"{path}: cannot be written ({error.strerror or error})") from None


def figure(result: Equivalents) -> Figure:
    """Return the picture as a matplotlib figure."""
    with plain_style():
        return _drawn(result)


def _drawn(result: Equivalents) -> Figure:
    out = FigureCanvasAgg(
        Figure(figsize=(10.0, 6.0), dpi=150, layout=ConstrainedLayoutEngine(w_pad=0.08, h_pad=0.06))
    ).figure
    body = compared(result)
    time = _times(result, body)
    errors = result.best is not None and result.best.step_error_max_percent is not None and bool(body.static_gain)
    grid = out.add_gridspec(
        2 if errors else 1, 2, width_ratios=[1.6, 1.0], height_ratios=[1.0, 0.42] if errors else [1.0]
    )
    steps = Panel(axes=out.add_subplot(grid[0, 0]))
    panels = [steps]
    _steps(steps, result, body, time)
    if errors:
        panels.append(Panel(axes=out.add_subplot(grid[1, 0], sharex=steps.axes)))
        _errors(panels[1], result, body, time)
        steps.axes.tick_params(labelbottom=False)
    panels[-1].axes.set_xlabel("Time (s)", fontsize=9.5)
    plane = Panel(axes=out.add_subplot(grid[:, 1]))
    draw_plane(plane, result)
    for panel in (*panels, plane):
        panel.axes.tick_params(labelsize=9)
        panel.axes.spines[["top", "right"]].set_visible(False)
    _words(out, result)
    texts = [end_labels(panel.axes, panel.ends) for panel in panels]
    for _ in range(2):  # the ticks of the plane move the layout a little
        out.draw_without_rendering()
        scale_plane(plane)
    out.set_layout_engine("none")
    for panel, ends in zip(panels, texts, strict=True):
        settle(panel.axes, panel.ends, ends)
        place(panel.axes, panel.points, panel.lines)
    label_plane(plane, result)
    return out


def compared(result: Equivalents) -> System:
    """Return the system whose step response is compared: of an integrating one the rest, its rate of change."""
    system = result.system
    if not system.integrating or not isinstance(system, RationalSystem):
        return system
    rest = system.without_cancellations[0].rest
    return system if rest is None or rest.integrating else rest


def _times(result: Equivalents, body: System) -> Array:
    """Return the times to draw, a little before the step included; a jump at the end of a dead time is met on both sides."""
    rates = np.abs(body.poles.real)
    rates = rates[rates > 1e-9 * np.abs(body.poles).max(initial=0.0)]
    end = 6.0 / float(rates.min()) + body.dead_time_s if rates.size else 3.0 * body.dead_time_s or 1.0
    if result.window_s is not None:
        end = 1.15 * result.window_s if result.window_s > 0 else 1.0
    elif rates.size == 0 and np.any(body.poles.imag > 0):  # swings without end
        end = 25.0 / float(np.abs(body.poles).max()) + body.dead_time_s
    elif not body.stable and np.any(body.poles.real > 0):
        end = 4.0 / float(body.poles.real.max()) + body.dead_time_s
    best = result.best
    delays = [body.dead_time_s, *([] if best is None or best.dead_time_s is None else [best.dead_time_s])]
    if result.window_s is not None:
        end = max(end, 1.6 * max(delays))
    jumps = [at for delay in delays for at in (delay * (1 - 1e-9), delay)]
    return np.unique(np.concatenate([[-0.04 * end, -1e-9 * end], np.linspace(0.0, end, _SAMPLES), jumps]))


def _response(one: Equivalent, body: System, time: Array) -> Array:
    return RationalSystem(transfer_of_equivalent(one, integrating=body.integrating)).step(time)


def _steps(panel: Panel, result: Equivalents, body: System, time: Array) -> None:
    axes, best = panel.axes, result.best
    exact = body.step(time)
    axes.axvline(0.0, color=STEP, lw=0.9)
    for one in _others(result):
        axes.plot(time, _response(one, body, time), color=_OTHER, lw=0.8, zorder=2, label=one.method)
    shown = [exact]
    if best is not None:
        own = _response(best, body, time)
        shown.append(own)
        (line,) = axes.plot(time, own, color=FIT, lw=3.2, zorder=3, label="equivalent")
        panel.lines.append(line)
        panel.ends.append(EndLabel(height=float(own[-1]), words="equivalent", colour=FIT))
    (line,) = axes.plot(time, exact, color=INK, lw=1.2, zorder=4, label="exact")
    panel.lines.append(line)
    panel.ends.append(EndLabel(height=float(exact[-1]), words="exact", colour=INK))
    if _others(result):
        panel.ends.append(EndLabel(height=float(exact[-1]), words="other methods", colour="#8a8a8a"))
    low, high = float(np.min(shown)), float(np.max(shown))
    room = (high - low) or max(abs(high), 1.0)
    axes.set_ylim(low - 0.1 * room, high + 0.12 * room)
    axes.set_xlim(time[0], time[-1])
    rate = result.system is not body
    axes.set_ylabel("rate of the response to a unit step (1/s)" if rate else "response to a unit step", fontsize=9.5)


def _errors(panel: Panel, result: Equivalents, body: System, time: Array) -> None:
    axes, best, final = panel.axes, result.best, body.static_gain
    if final is None or best is None:
        return
    exact = body.step(time)
    largest = 0.0
    for one in (*_others(result), best):
        error = 100.0 * (_response(one, body, time) - exact) / final
        chosen = one is best
        largest = max(largest, float(np.abs(error).max())) if chosen else largest
        (line,) = axes.plot(
            time, error, color=FIT if chosen else _OTHER, lw=2.0 if chosen else 0.8, zorder=3 if chosen else 2,
            label="error" if chosen else one.method,
        )  # fmt: skip
        if chosen:
            panel.lines.append(line)
    reach = 1.25 * max(largest, ADEQUATE_PERCENT)
    axes.set_ylim(-reach, reach)
    axes.axhline(0.0, color=INK, lw=0.7)
    for side, words in ((ADEQUATE_PERCENT, f"adequate: ±{ADEQUATE_PERCENT:g} %"), (-ADEQUATE_PERCENT, "")):
        axes.axhline(side, color=INK, lw=0.7, ls=(0, (8, 2, 1, 2)), label="adequate")
        if words:
            panel.ends.append(EndLabel(height=side, words=words, colour=INK, dashes="-."))
    panel.ends.append(EndLabel(height=0.0, words="equivalent − exact", colour=FIT))
    what = "final slope" if result.system is not body else "final value"
    axes.set_ylabel(f"error\n(% of the {what})", fontsize=9)


def _others(result: Equivalents) -> list[Equivalent]:
    return [
        one
        for one in result.equivalents
        if one.exists and one.method != result.chosen and one.step_error_max_percent is not None
    ]


def _words(out: Figure, result: Equivalents) -> None:
    first, *rest = answer(result).split("\n")
    lines = [textwrap.fill(first, _TITLE_WIDTH), *(textwrap.fill(line, _SMALL_WIDTH) for line in rest)]
    out.suptitle("\n".join(lines[:1]), x=0.012, ha="left", fontsize=11, fontweight="bold", linespacing=1.3)
    below = lines[1:]
    if result.expression is not None:
        words = readable(f"system: {result.expression}", "system: see the page of text")
        below.append(words if len(words) <= _SMALL_WIDTH else f"{words[: _SMALL_WIDTH - 4]} ...")
    out.supxlabel("\n".join(below), x=0.012, ha="left", fontsize=8.5, color=INK, linespacing=1.4)
