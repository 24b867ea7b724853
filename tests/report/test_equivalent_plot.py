"""The picture of equivalents: curves and roots are those of the result, no label is lost, the same bytes each time."""

from __future__ import annotations

import math
import subprocess
import sys
from functools import cache
from pathlib import Path

import matplotlib as mpl
import numpy as np
import pytest
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.image import imread
from matplotlib.lines import Line2D
from matplotlib.text import Text
from scipy import signal

import loopfit
from loopfit.core.errors import UsageError
from loopfit.equivalents.result import Equivalents
from loopfit.report.equivalent_plot import figure, picture

SYSTEMS = {
    "lags": "-2/(s+1)^5",
    "itself": "2*exp(-0.5*s)/((3*s+1)*(s+1))",
    "swing": "(s+2)/((s^2+0.4*s+1)*(s+3)*(s+5))",
    "dead time": "exp(-2*s)",
    "gain": "3",
    "right zero": "(1-s)/((s+1)^3*(s+20))",
    "integrating": "1/(s*(s+1)*(s+2)*(s+5))",
    "twice integrating": "1/(s^2*(s+1))",
    "unstable": "1/((s-1)*(s+1)*(s+4))",
    "growing swing": "1/(s^2-0.2*s+1)",
    "no gain": "s/(s+1)^2",
    "biproper": "(2*s+1)/(s+1)*exp(-s)",
    "far poles": "1/((s+0.001)*(s+1)*(s+1000))",
    "long": "+".join(f"{k}/(s+{k})" for k in range(1, 30)),
}


@cache
def result_of(name: str) -> Equivalents:
    return loopfit.equivalent(SYSTEMS[name])


@cache
def drawn_of(name: str) -> Figure:
    return figure(result_of(name))


def line(axes: Axes, label: str) -> Line2D:
    (found,) = [drawn for drawn in axes.lines if drawn.get_label() == label]
    return found


def xy(drawn: Line2D) -> tuple[np.ndarray, np.ndarray]:
    return np.asarray(drawn.get_xdata(), dtype=float), np.asarray(drawn.get_ydata(), dtype=float)


@pytest.mark.parametrize("name", SYSTEMS)
def test_no_label_over_another_and_none_cut(name: str) -> None:
    drawn = drawn_of(name)
    drawn.draw_without_rendering()
    page = drawn.bbox
    ticks = {id(tick) for axes in drawn.axes for axis in (axes.xaxis, axes.yaxis) for tick in axis.get_ticklabels()}
    texts = [text for text in drawn.findobj(Text) if text.get_text() and text.get_visible() and id(text) not in ticks]
    boxes = [Text.get_window_extent(text) for text in texts]
    for text, box in zip(texts, boxes, strict=True):
        assert page.x0 <= box.x0, text
        assert box.x1 <= page.x1, text
        assert page.y0 <= box.y0, text
        assert box.y1 <= page.y1, text
    for i, box in enumerate(boxes):
        for j in range(i):
            assert not box.overlaps(boxes[j]), (texts[i], texts[j])


def test_curves_are_the_step_responses() -> None:
    """Exact by scipy.signal (1e-6: its own integration), the equivalent by its formula as a transfer function."""
    upper, lower, _ = drawn_of("swing").axes
    time, value = xy(line(upper, "exact"))
    after = time >= 0
    poles = np.poly([-0.2 + math.sqrt(0.96) * 1j, -0.2 - math.sqrt(0.96) * 1j, -3, -5]).real
    grid = np.linspace(0.0, time[-1], 20001)
    exact = np.interp(time[after], grid, signal.step(signal.lti([1, 2], poles), T=grid)[1])
    np.testing.assert_allclose(value[after], exact, atol=1e-6)
    assert np.all(value[~after] == 0)
    best = result_of("swing").best
    assert best is not None
    wn, zeta, gain = best.natural_frequency_rad_s, best.damping_ratio, best.gain
    assert wn is not None
    assert zeta is not None
    assert gain is not None
    model = signal.lti([gain * (best.zero_s or 0.0), gain], [wn**-2, 2 * zeta / wn, 1])
    late = np.maximum(time - (best.dead_time_s or 0.0), 0.0)
    own = np.interp(late, grid, signal.step(model, T=grid)[1])
    np.testing.assert_allclose(xy(line(upper, "equivalent"))[1], own, atol=1e-6)
    error = xy(line(lower, "error"))[1]
    np.testing.assert_allclose(error[after], 100 * (own[after] - exact) / (2 / 15), atol=2e-3)
    # the largest error of the page is met in the picture, within the spacing of its samples
    assert np.abs(error).max() == pytest.approx(best.step_error_max_percent, rel=0.02)


def test_roots_and_lines_of_constant_damping() -> None:
    """The angle of a pole of damping ratio z from the negative real axis is arccos z (Ogata, 5th ed., section 5-3)."""
    plane = drawn_of("swing").axes[-1]
    real, imaginary = xy(line(plane, "poles"))
    np.testing.assert_allclose(sorted(real), [-5, -3, -0.2, -0.2], atol=1e-9)
    assert max(imaginary) == pytest.approx(math.sqrt(0.96), rel=1e-9)
    assert xy(line(plane, "zeros"))[0] == pytest.approx([-2.0])
    rays = [xy(drawn) for drawn in plane.lines if drawn.get_label() == "damping"]
    labels = [float(text.get_text()) for text in plane.texts if text.get_label() == "ratio"]
    assert len(rays) == len(labels) == 4
    for (x, y), ratio in zip(rays, labels, strict=True):
        assert math.cos(math.atan2(y[0], -x[0])) == pytest.approx(ratio, rel=1e-9)
    frame = plane.get_window_extent()
    (left, right), (low, high) = plane.get_xlim(), plane.get_ylim()
    assert frame.width / (right - left) == pytest.approx(frame.height / (high - low), rel=1e-6)


def test_roots_out_of_view_are_counted() -> None:
    texts = " ".join(text.get_text() for text in drawn_of("far poles").axes[-1].texts)
    assert "further out: 1 pole" in texts  # -1000; the equivalent has the other two
    assert "5 times" in " ".join(text.get_text() for text in drawn_of("lags").axes[-1].texts)


def test_integrating_system_is_compared_by_its_rate() -> None:
    upper = drawn_of("integrating").axes[0]
    assert "rate" in upper.get_ylabel()
    assert xy(line(upper, "exact"))[1][-1] == pytest.approx(0.1, rel=2e-3)  # 1/(1 2 5), within 0.1 % of rest and a bit


@pytest.mark.parametrize("ending", [".png", ".svg", ".pdf"])
def test_same_bytes_twice_whatever_the_users_settings(tmp_path: Path, ending: str) -> None:
    first, second = tmp_path / f"first{ending}", tmp_path / f"second{ending}"
    picture(result_of("itself"), first)
    with mpl.rc_context({"font.size": 20, "axes.facecolor": "black", "savefig.dpi": 30, "svg.hashsalt": "own"}):
        picture(result_of("itself"), second)
    assert first.read_bytes() == second.read_bytes()
    if ending == ".png":
        assert imread(first).shape[:2] == (900, 1500)


@pytest.mark.parametrize("path", ["a.jpg", "no such folder/a.png"])
def test_file_that_cannot_be_written_is_told(tmp_path: Path, path: str) -> None:
    with pytest.raises(UsageError, match=r"a\.(jpg|png)"):
        picture(result_of("itself"), tmp_path / path)


def test_no_window_system_is_touched() -> None:
    code = "import sys, loopfit.report.equivalent_plot; assert 'matplotlib.pyplot' not in sys.modules"
    subprocess.run([sys.executable, "-c", code], check=True)


def test_an_integration_with_a_jump_is_drawn_with_its_ramp() -> None:
    """(s + 1)/s: 1 at once, then 1 per s, for the exact system and for its equivalent, by hand."""
    axes = figure(loopfit.equivalent("(s+1)/s")).axes[0]
    for name in ("exact", "equivalent"):
        (line,) = [each for each in axes.lines if each.get_label() == name]
        time, value = (np.asarray(side, dtype=float) for side in line.get_data())
        assert value[time >= 0] == pytest.approx(1.0 + time[time >= 0], abs=1e-9)


def test_a_swing_without_end_is_drawn_for_several_periods() -> None:
    axes = figure(loopfit.equivalent("1/(s^2+1)")).axes[0]
    assert axes.get_xlim()[1] > 3 * 2 * np.pi
