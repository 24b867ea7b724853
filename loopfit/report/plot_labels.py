"""Labels of a picture: beside the ends of lines, at what they name, and numbered marks; none over another."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from itertools import pairwise
from typing import Literal

import numpy as np
from matplotlib.axes import Axes
from matplotlib.lines import Line2D
from matplotlib.text import Annotation, Text
from matplotlib.transforms import Bbox

from loopfit.core.arrays import Array

_MARGIN = 0.022  # of the axes' width: from the end of a line to its label
_NEAR = (6.0, 14.0, 26.0, 42.0, 62.0)  # points from what a label names
_DENSE = 4.0  # pixels between the points of a line that a label should not cover
_WRONG_SIDE = 40.0  # as bad as covering twenty points of a line
INK, STEP = "#262626", "#b4530a"


@dataclass(frozen=True, slots=True, kw_only=True)
class EndLabel:
    """A label in the right margin: the height of its line in the data, words, colour, dashes."""

    height: float
    words: str
    colour: str
    dashes: Literal["-", "--", "-.", ":"] = "-"


@dataclass(frozen=True, slots=True, kw_only=True)
class PointLabel:
    """A label at a point of the data; `above` tells on which side of it there is more room, if known."""

    time: float
    height: float
    words: str
    colour: str = INK
    above: bool | None = None


@dataclass(frozen=True, slots=True, kw_only=True)
class Panel:
    """Axes with what is known of them while they are filled; `lines` are those that labels should not cover."""

    axes: Axes
    ends: list[EndLabel] = field(default_factory=list)
    points: list[PointLabel] = field(default_factory=list)
    lines: list[Line2D] = field(default_factory=list)


def spread(wanted: Sequence[float], sizes: Sequence[float], low: float, high: float) -> list[float]:
    """Return centres as near as may be to those wanted, so that no two labels of these sizes overlap.

    The order of the wanted centres (equal ones: as they come) is kept; all lie between the bounds if they fit.
    """
    order = sorted(range(len(wanted)), key=lambda i: (wanted[i], i))
    centres = list(wanted)
    for _ in range(200):
        moved = 0.0
        for a, b in pairwise(order):
            lack = (sizes[a] + sizes[b]) / 2 - (centres[b] - centres[a])
            if lack > 0:
                centres[a] -= lack / 2
                centres[b] += lack / 2
                moved = max(moved, lack)
        for i in order:
            inside = min(max(centres[i], low + sizes[i] / 2), high - sizes[i] / 2)
            moved = max(moved, abs(inside - centres[i]))
            centres[i] = inside
        if moved < 0.01:
            break
    return centres


def end_labels(axes: Axes, labels: Sequence[EndLabel]) -> list[Text]:
    """Write labels beside the ends of their lines; `settle` moves them apart once the layout is known."""
    return [
        axes.text(1 + _MARGIN, 0.0, label.words, color=label.colour, transform=axes.transAxes, va="center", fontsize=9)
        for label in labels
    ]


def settle(axes: Axes, labels: Sequence[EndLabel], texts: Sequence[Text]) -> None:
    """Put the labels of `end_labels` at their heights, apart from each other, and lead the lines to them."""
    frame = axes.get_window_extent()
    to_pixels = axes.transData.transform
    heights = [float(to_pixels((0.0, label.height))[1]) for label in labels]
    inside = [min(max(height, frame.y0), frame.y1) for height in heights]
    nearly = [10.0 * round(height / 10.0) for height in inside]  # so that equal ends keep the order of the labels
    sizes = [text.get_window_extent().height + 3.0 for text in texts]
    for label, text, height, centre in zip(
        labels, texts, inside, spread(nearly, sizes, frame.y0, frame.y1), strict=True
    ):
        share = (centre - frame.y0) / frame.height
        text.set_y(share)
        lead = Line2D(
            [1.0, 1 + 0.8 * _MARGIN],
            [(height - frame.y0) / frame.height, share],
            transform=axes.transAxes,
            color=label.colour,
            linestyle=label.dashes,
            linewidth=1.1,
            clip_on=False,
        )
        lead.set_in_layout(False)
        axes.add_artist(lead)


def place(axes: Axes, labels: Sequence[PointLabel], lines: Sequence[Line2D]) -> list[Annotation]:
    """Write labels near their points, where they cover the least of the lines and nothing of each other.

    The layout must be known. Labels come in the order of their importance: the first has the free choice.
    """
    frame = axes.get_window_extent().padded(-3.0)
    points = np.concatenate([_along(line) for line in lines]) if lines else np.empty((0, 2))
    taken: list[Bbox] = []
    placed = []
    for label in labels:
        text = axes.annotate(
            label.words,
            (label.time, label.height),
            xytext=(0.0, 0.0),
            textcoords="offset points",
            color=label.colour,
            fontsize=9,
            bbox={"facecolor": "white", "edgecolor": "none", "alpha": 0.8, "pad": 1.0},
            zorder=8,
        )
        text.set_in_layout(False)
        best: tuple[float, tuple[float, float], str, str] | None = None
        for number, (offset, across, along) in enumerate(_places(label.above)):
            text.set(position=offset, ha=across, va=along)
            box = text.get_window_extent().padded(3.0)
            cost = 0.3 * number + 2.0 * _covered(points, box)
            if label.above is not None and (offset[1] > 0) is not label.above:
                cost += _WRONG_SIDE
            cost += sum(1e4 for other in taken if box.overlaps(other))
            cost += 1e3 * _outside(box, frame)
            if best is None or cost < best[0]:
                best = (cost, offset, across, along)
        assert best is not None
        text.set(position=best[1], ha=best[2], va=best[3])
        taken.append(text.get_window_extent().padded(3.0))
        placed.append(text)
    return placed


def _places(above: bool | None) -> list[tuple[tuple[float, float], str, str]]:
    """Return offsets (points) and alignments to try, the best first."""
    sides = [(1, "bottom"), (-1, "top")] if above is not False else [(-1, "top"), (1, "bottom")]
    places = []
    for near in _NEAR:
        for sign, along in sides:
            places += [
                ((4.0, sign * near), "left", along),
                ((0.0, sign * near), "center", along),
                ((-4.0, sign * near), "right", along),
            ]
        places += [((near, 0.0), "left", "center"), ((-near, 0.0), "right", "center")]
    return places


def _along(line: Line2D) -> Array:
    """Return points (m, 2), pixels, along a drawn line, near enough to each other for a label not to slip between."""
    path = line.get_transform().transform_path(line.get_path())
    corners = np.asarray(path.vertices, dtype=np.float64)
    corners = corners[np.isfinite(corners).all(axis=1)]
    if line.get_linestyle() == "None" or len(corners) < 2:
        return corners
    length = np.concatenate([[0.0], np.cumsum(np.hypot(*np.diff(corners, axis=0).T))])
    at = np.arange(0.0, min(length[-1], 2e5), _DENSE)
    return np.stack([np.interp(at, length, corners[:, 0]), np.interp(at, length, corners[:, 1])], axis=1)


def _covered(points: Array, box: Bbox) -> float:
    x, y = points[:, 0], points[:, 1]
    return float(np.count_nonzero((x > box.x0) & (x < box.x1) & (y > box.y0) & (y < box.y1)))


def _outside(box: Bbox, frame: Bbox) -> float:
    beyond = (frame.x0 - box.x0, box.x1 - frame.x1, frame.y0 - box.y0, box.y1 - frame.y1)
    return float(sum(max(0.0, pixels) for pixels in beyond))


def marks(axes: Axes, spans: Sequence[tuple[float, float]]) -> None:
    """Number spans of time, s, from 1 in a strip above the axes; the layout must be known."""
    frame = axes.get_window_extent()
    transform = axes.get_xaxis_transform()
    shown = [np.clip(span, *axes.get_xlim()) for span in spans]
    middles = [float(axes.transData.transform((np.mean(span), 0.0))[0]) for span in shown]
    point = axes.figure.dpi / 72.0  # pixels
    size = 15.0 * point
    centres = spread(middles, [size] * len(spans), frame.x0 - size / 2, frame.x1 + size / 2)
    for number, (span, centre) in enumerate(zip(shown, centres, strict=True), start=1):
        axes.plot(
            span,
            (1.012, 1.012),
            transform=transform,
            clip_on=False,
            color=INK,
            lw=1.4,
            marker="|",
            ms=5,
            in_layout=False,
        )
        axes.text(
            (centre - frame.x0) / frame.width,
            1 + 11.0 * point / frame.height,
            str(number),
            transform=axes.transAxes,
            ha="center",
            va="center",
            fontsize=7,
            color="white",
            fontweight="bold",
            bbox={"boxstyle": "circle,pad=0.25", "facecolor": INK, "edgecolor": "none"},
            in_layout=False,
        )
