"""Poles and zeros of a system and of its equivalent, with lines of constant damping ratio."""

from __future__ import annotations

import math

import numpy as np
from matplotlib.axes import Axes
from matplotlib.ticker import MaxNLocator

from loopfit.equivalents.interchange import transfer_of_equivalent
from loopfit.equivalents.result import Equivalents
from loopfit.equivalents.system import RationalSystem
from loopfit.model.transfer import Complex
from loopfit.report.equivalent_text import repeated
from loopfit.report.plot_figures import FIT, SETTLED
from loopfit.report.plot_labels import INK, Panel

_RATIOS = (0.2, 0.4, 0.6, 0.8)
_RAY = "#b0b0b0"
_NEAR = 6.0  # times the slowest pole: roots further out are counted, not shown
_INSIDE = 13.0  # points from the frame to the middle of a ray's label
_WIDER = 1.25  # room about the furthest root


def draw_plane(panel: Panel, result: Equivalents) -> None:
    """Draw the roots near the origin; those too far out to show are counted in words."""
    axes, system, best = panel.axes, result.system, result.best
    own = None if best is None else RationalSystem(transfer_of_equivalent(best, integrating=system.integrating))
    reach = _reach(system.poles, np.empty(0, complex) if own is None else own.poles, system.zeros)
    axes.axvspan(0.0, 1e3 * reach, color=SETTLED, lw=0, zorder=0, label="unstable")
    axes.axhline(0.0, color=INK, lw=0.6)
    axes.axvline(0.0, color=INK, lw=0.6)
    for ratio in _RATIOS:
        far = 1e3 * reach
        high = far * math.sqrt(1.0 - ratio**2)
        axes.plot([-ratio * far, 0.0, -ratio * far], [high, 0.0, -high], color=_RAY, lw=0.7, zorder=1, label="damping")
    if own is not None:
        _roots(axes, own.poles, "x", FIT, 11.0, 2.6, "poles of the equivalent")
        _roots(axes, own.zeros, "o", FIT, 11.0, 2.0, "zeros of the equivalent")
    _roots(axes, system.poles, "x", INK, 6.5, 1.3, "poles")
    _roots(axes, system.zeros, "o", INK, 6.0, 1.2, "zeros")
    right = float(np.max(system.poles.real, initial=0.0))
    for value in (*system.zeros, *(() if own is None else own.zeros)):
        if abs(value) <= reach:
            right = max(right, float(value.real))
    axes.set_xlim(-1.1 * reach, max(0.15 * reach, _WIDER * right))
    axes.set_ylim(-reach, reach)
    axes.xaxis.set_major_locator(MaxNLocator(5))
    axes.set_xlabel("poles × and zeros ○ (rad/s)", fontsize=9.5)


def scale_plane(panel: Panel) -> None:
    """Give both axes the same scale, by showing more of one; the layout must be known."""
    axes = panel.axes
    frame = axes.get_window_extent()
    (left, right), (low, high) = axes.get_xlim(), axes.get_ylim()
    scale = max((right - left) / frame.width, (high - low) / frame.height)  # rad/s a pixel
    axes.set_xlim(right - scale * frame.width, right)
    axes.set_ylim(-0.5 * scale * frame.height, 0.5 * scale * frame.height)


def label_plane(panel: Panel, result: Equivalents) -> None:
    """Write the damping ratio at the ends of its lines, and what lies out of view; the layout must be known."""
    axes = panel.axes
    (left, right), (low, high) = axes.get_xlim(), axes.get_ylim()
    inward = _INSIDE * axes.figure.dpi / 72.0 * (high - low) / axes.get_window_extent().height
    for ratio in _RATIOS:
        slope = math.sqrt(1.0 - ratio**2) / ratio
        x = -min((high - inward) / slope, -left - inward)
        axes.text(
            x, -x * slope, f"{ratio:g}", fontsize=8, color="#6e6e6e", ha="center", va="center", zorder=2,
            bbox={"facecolor": "white", "edgecolor": "none", "pad": 1.0}, label="ratio",
        )  # fmt: skip
    away = [
        sum(1 for root in roots if not (left <= root.real <= right and low <= root.imag <= high))
        for roots in (result.system.poles, result.system.zeros)
    ]
    parts = [
        f"{count} {name}{'s' if count > 1 else ''}" for count, name in zip(away, ("pole", "zero"), strict=True) if count
    ]
    for root, count in repeated(result.system.poles):
        if count == 1:
            continue
        axes.annotate(
            f"{count} times",
            (root.real, root.imag),
            xytext=(0.0, 9.0),
            textcoords="offset points",
            ha="center",
            va="bottom",
            fontsize=8.5,
            color=INK,
            zorder=6,
            annotation_clip=True,
        )
    words = [f"further out: {' and '.join(parts)}"] if parts else []
    colours = "black: exact, blue: equivalent" if result.best is not None else "black: exact"
    words = [colours, "rays: damping ratio", *words]
    axes.text(
        0.02, 0.01, "\n".join(words), transform=axes.transAxes, fontsize=8.5, color=INK, va="bottom", zorder=6,
        bbox={"facecolor": "white", "edgecolor": "none", "alpha": 0.85, "pad": 1.0},
    )  # fmt: skip


def _reach(poles: Complex, own: Complex, zeros: Complex) -> float:
    sizes = np.abs(poles[np.abs(poles) > 0])
    near = sizes[sizes <= _NEAR * sizes.min()] if sizes.size else np.ones(1)
    limit = max(float(near.max()), float(np.abs(own[np.isfinite(own)]).max(initial=0.0)))
    close = np.abs(zeros)[np.abs(zeros) <= 1.5 * limit]
    return _WIDER * max(limit, float(close.max(initial=0.0))) or 1.0


def _roots(axes: Axes, roots: Complex, marker: str, colour: str, size: float, width: float, name: str) -> None:
    axes.plot(
        roots.real, roots.imag, ls="none", marker=marker, ms=size, mew=width, mec=colour, mfc="none", zorder=4 if colour == INK else 3,
        label=name, clip_on=True,
    )  # fmt: skip
