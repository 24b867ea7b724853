"""The record in a retuning's picture: over its prediction, or alone where no settings are proposed."""

from __future__ import annotations

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure

from loopfit.record.record import Record
from loopfit.report.plot_labels import INK, STEP, EndLabel, Panel
from loopfit.report.plot_lines import thinned
from loopfit.report.plot_words import readable
from loopfit.report.retune_lines import in_view
from loopfit.report.retune_overlay import Overlay
from loopfit.report.retune_recorded import record_units
from loopfit.tuning.result import Retuning

PRESENT, PRESENT_BAND = "#7d6f64", "#e3dcd6"
_FEW_ROWS = 400


def draw_record(panel: Panel, retuning: Retuning, overlay: Overlay) -> None:
    """Draw the recorded step over what the fitted plant does with the present settings."""
    axes, view = panel.axes, overlay.view_s
    shown = (overlay.recorded_time >= view[0]) & (overlay.recorded_time <= view[1])
    heights = np.concatenate([overlay.recorded[shown], overlay.setpoint])
    low, high = float(heights.min()), float(heights.max())
    room = 0.12 * (high - low)
    predicted = in_view(overlay.predicted, low - room, high + room)
    dots = overlay.recorded_time.size
    time, values = thinned(overlay.recorded_time, overlay.recorded)
    axes.plot(
        time, values, color=INK, ls="none", marker=".", ms=3.4 if dots <= _FEW_ROWS else 2.0, mew=0, zorder=4,
        label="record",
    )  # fmt: skip
    if not np.array_equal(predicted.low, predicted.high, equal_nan=True):
        axes.fill_between(
            overlay.time, predicted.low, predicted.high, color=PRESENT_BAND, lw=0, zorder=2, label="predicted, allowed"
        )
    axes.plot(overlay.time, predicted.value, color=PRESENT, lw=2.2, zorder=3, label="predicted")
    axes.plot(
        overlay.time, overlay.setpoint, color=STEP, ls="--", lw=1.1, drawstyle="steps-post", zorder=1, label="setpoint"
    )
    there = np.isfinite(predicted.value)
    panel.ends.extend(
        [
            EndLabel(height=float(overlay.recorded[shown][-1]), words="record", colour=INK, dashes=":"),
            EndLabel(
                height=float(np.interp(view[1], overlay.time[there], predicted.value[there])),
                words="predicted",
                colour=PRESENT,
            ),
            EndLabel(height=float(overlay.setpoint[-1]), words="setpoint", colour=STEP, dashes="--"),
        ]
    )
    axes.set_ylim(low - room, high + room)
    axes.set_xlim(max(view[0], overlay.recorded_time[0]), min(view[1], overlay.recorded_time[-1]))
    axes.set_title(
        "Whether to believe it: the record, and what the fitted plant does with the present settings",
        loc="left",
        fontsize=9.5,
    )
    _measurement_axis(axes, retuning)


def _measurement_axis(axes: Axes, retuning: Retuning) -> None:
    axes.set_ylabel(named("measurement", record_units(retuning)[0]), fontsize=9)
    axes.set_xlabel("Time of the record (s)", fontsize=9)


def draw_alone(out: Figure, record: Record, retuning: Retuning) -> list[Panel]:
    """Draw the record's signals and return their panels."""
    signals = [
        ("measurement", record.measurement, INK),
        ("setpoint", record.setpoint, STEP),
        ("output", record.output, PRESENT),
    ]
    upper = Panel(axes=out.add_subplot(2, 1, 1))
    panels = [upper]
    for role, signal, colour in signals:
        if signal is None:
            continue
        if role == "output":
            panels.append(Panel(axes=out.add_subplot(2, 1, 2, sharex=upper.axes)))
            panels[-1].axes.set_ylabel("output", fontsize=9)
        time, values = thinned(record.time, signal.values)
        panels[-1].axes.plot(time, values, color=colour, lw=0.9, label=role)
        panels[-1].ends.append(EndLabel(height=float(values[-1]), words=role, colour=colour))
    upper.axes.set_xlim(record.time[0], record.time[-1])
    _measurement_axis(upper.axes, retuning)
    if len(panels) > 1:
        panels[-1].axes.set_xlabel(upper.axes.get_xlabel(), fontsize=9)
        upper.axes.set_xlabel("")
    return panels


def named(role: str, unit: str | None) -> str:
    """Return what stands beside an axis: a role with its unit where that is known."""
    return f"{role} ({readable(unit, 'units')})" if unit else role
