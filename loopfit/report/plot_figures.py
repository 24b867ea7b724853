"""The model in a picture, and its figures where they can be seen."""

from __future__ import annotations

import math

import numpy as np

from loopfit.analysis.result import Analysis
from loopfit.fit.curve import FittedCurve
from loopfit.report.plot_labels import INK, EndLabel, Panel, PointLabel
from loopfit.report.plot_lines import band_width, begins, envelope_of, until
from loopfit.report.plot_words import level
from loopfit.report.text import in_words

FIT, _ALLOWED, SETTLED = "#3f74c4", "#bcd0f0", "#ececec"
_CLEAR = 4.0  # times the noise: brackets stay out of the record


def draw_model(panel: Panel, analysis: Analysis, curve: FittedCurve) -> None:
    """Draw the model with its band, where it comes to rest, the settling band and the envelope."""
    axes = panel.axes
    axes.fill_between(
        curve.time, curve.low, curve.high, color=_ALLOWED, lw=0, zorder=2, label="models the record allows"
    )
    (line,) = axes.plot(curve.time, curve.value, color=FIT, lw=2.4, zorder=4, label="model")
    panel.lines.append(line)
    at_end = float(np.interp(axes.get_xlim()[1], curve.time, curve.value))
    panel.ends.append(EndLabel(height=at_end, words=f"model ({analysis.confidence_percent:g} % band)", colour=FIT))
    if curve.final_value is None:
        return
    strip, end = band_width(analysis, curve), until(analysis)
    alone = end == analysis.window_s[1]
    share = 1.0 if alone else float((end - axes.get_xlim()[0]) / np.ptp(axes.get_xlim()))
    words = f"{'rest' if analysis.step is None else 'final'} value {level(analysis, curve, curve.final_value)}"
    if strip is not None:
        bounds = (curve.final_value - strip, curve.final_value + strip)
        axes.axhspan(*bounds, xmax=share, color=SETTLED, lw=0, zorder=0, label="band")
        words += f"\nshaded: ±{analysis.band_percent:g} %{_late(analysis)}"
    axes.axhline(curve.final_value, xmax=share, color=INK, lw=0.7, ls=(0, (8, 2, 1, 2)), zorder=1, label="final value")
    if alone:
        panel.ends.append(EndLabel(height=curve.final_value, words=words, colour=INK, dashes="-."))
    else:
        panel.points.append(PointLabel(time=end, height=curve.final_value, words=words))
    envelope = envelope_of(analysis, curve)
    if envelope is None:
        return
    for side, name in ((envelope.high, "envelope"), (envelope.low, "lower envelope")):
        (line,) = axes.plot(envelope.time, side, color=FIT, lw=0.9, ls=(0, (1.2, 2.2)), zorder=3, label=name)
        panel.lines.append(line)
    period = None if analysis.model is None else analysis.model.damped_period_s
    if period is not None:
        half = envelope.high - curve.final_value
        at = min(envelope.time[0] + 1.3 * period.value, float(np.interp(-0.15 * half[0], -half, envelope.time)))
        if at < axes.get_xlim()[1]:
            height = float(np.interp(at, envelope.time, envelope.high))
            panel.points.append(PointLabel(time=at, height=height, words="envelope", colour=FIT, above=True))


def _late(analysis: Analysis) -> str:
    settling = None if analysis.response is None else analysis.response.settling_time_s
    if settling is None or not until(analysis) < begins(analysis) + settling.value < math.inf:
        return ""
    return f", reached\nonly after the {'record' if until(analysis) == analysis.window_s[1] else 'next step'}"


def draw_figures(panel: Panel, analysis: Analysis, curve: FittedCurve, view: tuple[float, float]) -> None:
    """Mark dead time, first peak and settling where they are seen."""
    model, response = analysis.model, analysis.response
    if model is None:
        return
    begin, span = begins(analysis), view[1] - view[0]
    start = float(np.interp(begin, curve.time, curve.value))
    final = curve.final_value
    up = (float(curve.value[-1]) if final is None else final) >= start
    reach = float(np.ptp(curve.value[(curve.time >= view[0]) & (curve.time <= view[1])]))
    clear = min(_CLEAR * analysis.noise_rms, 0.25 * reach)
    dead = model.dead_time_s
    if dead is not None and analysis.step is not None and dead.value > 0.01 * span:
        height = start - math.copysign(0.06 * reach + clear, 1 if up else -1)
        _bracket(panel, begin, begin + dead.value, height, "dead time")
        words = f"dead time {in_words(dead, 's')}"
        panel.points.append(PointLabel(time=begin + dead.value, height=height, words=words, above=not up))
    if response is None or final is None:
        return
    peak, overshoot = response.peak_time_s, response.overshoot_percent
    if peak is not None and overshoot is not None and overshoot.value > 0.05 and begin + peak.value < until(analysis):
        at = begin + peak.value
        at, top = _peak(curve, at, at + _gradual(analysis), up=up)
        (line,) = panel.axes.plot(
            [at, at], [final, top], color=INK, lw=0.9, marker="_", ms=7, zorder=5, label="first peak"
        )
        panel.lines.append(line)
        words = "for a sudden step: " if _gradual(analysis) > 0 else ""
        words += f"overshoot {in_words(overshoot, '%')}\nfirst peak after {in_words(peak, 's')}"
        panel.points.insert(0, PointLabel(time=at, height=top, words=words, above=up))
    settling, half = response.settling_time_s, band_width(analysis, curve)
    if settling is None or half is None or not math.isfinite(settling.value):
        return
    narrow = "\n" if until(analysis) < analysis.window_s[1] else " "
    words = f"settled within ±{analysis.band_percent:g} %{narrow}after {in_words(settling, 's')}"
    at = begin + settling.value
    if at > until(analysis):
        return
    height = final - math.copysign(max(half + 0.05 * reach, clear + 0.03 * reach), 1 if up else -1)
    _bracket(panel, begin + settling.low, min(begin + settling.high, until(analysis)), height, "settling time")
    panel.axes.plot([at, at], [final, height], color=INK, lw=0.9, marker="d", ms=4, markevery=[1], zorder=5)
    panel.points.insert(1, PointLabel(time=at, height=height, words=words, above=not up))


def _bracket(panel: Panel, start: float, end: float, height: float, name: str) -> None:
    (line,) = panel.axes.plot([start, end], [height, height], color=INK, lw=0.9, marker="|", ms=6, zorder=5, label=name)
    panel.lines.append(line)


def _gradual(analysis: Analysis) -> float:
    """Return how long the step itself took, s: 0 for a sudden one."""
    spans = [f.at_s for f in analysis.findings if f.code == "gradual_change" and f.at_s is not None]
    return max((end - start for start, end in spans), default=0.0)


def _peak(curve: FittedCurve, earliest: float, latest: float, *, up: bool) -> tuple[float, float]:
    """Return time and height of the curve's peak: known for a sudden step, later at most by how long it took."""
    between = (curve.time > earliest) & (curve.time <= latest)
    times = np.append(earliest, curve.time[between])
    heights = np.interp(times, curve.time, curve.value)
    best = int(np.argmax(heights if up else -heights))
    return float(times[best]), float(heights[best])
