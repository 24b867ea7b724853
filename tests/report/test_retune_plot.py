"""The picture of a retuning: its curves are those of the loops, no label is lost, no settings without cautions."""

from __future__ import annotations

import subprocess
import sys
from dataclasses import replace
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
from retunings import CAUTIONS, HEATER, HEATER_NOW, NAMES, retuned, retuning_of

from loopfit.core.errors import UsageError
from loopfit.loop.response import respond
from loopfit.report.retune_lines import curves_of
from loopfit.report.retune_overlay import overlay_of
from loopfit.report.retune_plot import draw, figure, short_cautions
from loopfit.tuning.goal import Goal

PROPOSING = [name for name in NAMES if name != "refused"]


@cache
def drawn_of(name: str) -> Figure:
    return figure(retuning_of(name))


def line(axes: Axes, label: str) -> Line2D:
    (found,) = [drawn for drawn in axes.lines if drawn.get_label() == label]
    return found


def xy(drawn: Line2D) -> tuple[np.ndarray, np.ndarray]:
    return np.asarray(drawn.get_xdata(), dtype=float), np.asarray(drawn.get_ydata(), dtype=float)


def words(drawn: Figure) -> str:
    return " ".join(" ".join(text.get_text() for text in drawn.findobj(Text)).split())


def panels(drawn: Figure) -> list[Axes]:
    """Step of the setpoint: measurement, output; step of the load: measurement, output."""
    return drawn.axes[-4:]


@pytest.mark.parametrize("name", NAMES)
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
    frames = [axes.get_window_extent() for axes in drawn.axes]
    assert not any(box.overlaps(frame) for box in boxes for frame in frames)
    assert all(frame.height > 0.08 * page.height for frame in frames)


@pytest.mark.parametrize("name", PROPOSING)
def test_proposed_curves_are_in_view_whole(name: str) -> None:
    for axes in panels(drawn_of(name)):
        time, value = xy(line(axes, "proposed"))
        (left, right), (low, high) = axes.get_xlim(), axes.get_ylim()
        assert left <= time[0] < 0.0 < time[-1] <= right
        assert low < value.min() <= value.max() < high
        assert axes.lines  # and the present ones, where they are known
        assert any(drawn.get_label() == "now" for drawn in axes.lines) is (retuning_of(name).current is not None)


def test_curves_are_the_responses_of_the_loop() -> None:
    """Of a continuous controller against the method of steps, which approximates no dead time; 1 %: the simulation scans."""
    retuning = retuning_of("no present settings")
    assert retuning.proposed is not None
    upper, output, load, _ = panels(drawn_of("no present settings"))
    time, value = xy(line(upper, "proposed"))
    after = time > 0
    exact = respond(HEATER, retuning.proposed.gains, time=time[after], setpoint_step=1.0)
    np.testing.assert_allclose(value[after], exact.measurement, atol=0.01)
    assert np.all(value[~after] == 0)
    late = time > 5.0  # the kick of the setpoint has passed
    np.testing.assert_allclose(xy(line(output, "proposed"))[1][late], exact.output[late[after]], atol=0.02)
    exact = respond(HEATER, retuning.proposed.gains, time=time[after], load_step=1.0)
    np.testing.assert_allclose(xy(line(load, "proposed"))[1][after], exact.measurement, atol=0.01)


@pytest.mark.parametrize("name", ["ringing heater", "level", "unstable now", "no present settings"])
def test_integral_action_ends_at_the_setpoint_and_takes_the_load_over(name: str) -> None:
    """At rest the error is 0 and the output cancels the load: final value theorem; 2 % of the step: nearly at rest."""
    curves = curves_of(retuning_of(name))
    assert curves.proposed is not None
    step = curves.setpoint_step
    assert curves.proposed.setpoint_measurement.value[-1] == pytest.approx(step, abs=0.02 * step)
    assert curves.proposed.load_output.value[-1] == pytest.approx(-1.0, abs=0.02)


def test_bands_hold_the_curves_and_are_as_wide_as_the_draws() -> None:
    """The peak after a load, without control, is in proportion to the gain, whose draws differ by 5 %."""
    curves = curves_of(retuning_of("ringing heater"))
    for side in (curves.present, curves.proposed):
        assert side is not None
        for name in ("setpoint_measurement", "setpoint_output", "load_measurement", "load_output"):
            band = getattr(side, name)
            assert np.all(band.low <= band.value)
            assert np.all(band.value <= band.high)
            assert np.max(band.high - band.low) > 0.01 * np.ptp(band.value)
    exact = curves_of(retuning_of("no present settings")).proposed
    assert exact is not None
    assert np.array_equal(exact.load_measurement.low, exact.load_measurement.high)  # a plant that was given
    unstable = curves_of(retuning_of("unstable now")).present
    assert unstable is not None
    assert np.array_equal(unstable.load_measurement.low, unstable.load_measurement.high)


def test_record_lies_on_its_prediction() -> None:
    """The plant is the one that made the record: what is left is the noise, 0.1, and what the loop makes of it."""
    overlay = overlay_of(retuning_of("ringing heater"))
    assert overlay is not None
    predicted = np.interp(overlay.recorded_time, overlay.time, overlay.predicted.value)
    left = overlay.recorded - predicted
    assert 0.08 < np.sqrt(np.mean(left**2)) < 0.15
    axes = drawn_of("ringing heater").axes[0]
    assert {"record", "predicted", "setpoint"} <= {drawn.get_label() for drawn in axes.lines}
    wrong = replace(HEATER, gain=2.6)
    base = retuning_of("ringing heater")
    off = overlay_of(replace(base, identified=replace(base.identified, plant=wrong, draws=())))
    assert off is not None
    far = overlay.recorded - np.interp(overlay.recorded_time, off.time, off.predicted.value)
    assert np.sqrt(np.mean(far**2)) > 0.4  # and a user sees a plant that is wrong


@pytest.mark.parametrize("name", [name for name in PROPOSING if name != "ringing heater"])
def test_no_prediction_without_a_record_in_automatic(name: str) -> None:
    assert overlay_of(retuning_of(name)) is None
    assert len(drawn_of(name).axes) == 4


def test_output_limits_hold_the_curves_and_are_drawn() -> None:
    """The record rests at an output of 40; an upper limit of 52 leaves 12, and the present settings ask for 20."""
    limited = replace(HEATER_NOW, output_limits=(0.0, 52.0))
    base = retuning_of("ringing heater")
    retuning = retuned(HEATER, limited, Goal(), identified=base.identified)
    curves = curves_of(retuning)
    assert curves.limits == pytest.approx((-40.0, 12.0), abs=0.05)  # the mean of 60 noisy rows
    assert curves.present is not None
    assert curves.present.setpoint_output.value.max() == pytest.approx(12.0, abs=0.05)
    output = panels(figure(retuning))[1]
    assert xy(line(output, "limit"))[1][0] == pytest.approx(12.0, abs=0.05)


@pytest.mark.parametrize("name", PROPOSING)
def test_caption_has_the_settings_and_every_caution(name: str) -> None:
    retuning = retuning_of(name)
    assert retuning.proposed is not None
    caption = words(drawn_of(name))
    entered = retuning.proposed.settings.as_entered()
    for key, value in entered.items():
        if isinstance(value, float) and key not in ("scan_s",):
            assert f"{value:.4g}" in caption, key
    for caution in CAUTIONS:
        assert " ".join(caution.split()[:5]).rstrip(":;,.") in caption
    assert ("zero of the setpoint path" in caption) is (name in ("level", "no present settings"))
    assert ("The target is NOT met" in caption) is (name == "not met")


def test_a_long_caution_keeps_its_sense() -> None:
    base = retuning_of("level")
    long = (
        "This plant integrates: a lower gain alone makes the loop swing more. With an integral time of 63.1 s it is 0.98.",
        "A gain that is changed in automatic can bump the output: change it in manual, or with the measurement at rest at "
        "its setpoint.",
    )
    short = short_cautions(replace(base, cautions=long))
    assert "This plant integrates: a lower gain alone makes the loop swing more." in short
    assert short.endswith("A gain that is changed in automatic can bump the output.")
    assert "in full on the page" in short


@pytest.mark.parametrize("name", PROPOSING)
def test_no_settings_without_cautions(name: str) -> None:
    with pytest.raises(ValueError, match="cautions"):
        figure(replace(retuning_of(name), cautions=()))


def test_refused_shows_the_record_and_no_settings() -> None:
    drawn = drawn_of("refused")
    assert words(drawn).count("No settings are proposed: the valve sticks") == 1
    labels = {drawn.get_label() for axes in drawn.axes for drawn in axes.lines if drawn.get_label()}
    assert labels == {"measurement", "setpoint", "output"}
    assert "roportional" not in words(drawn)
    base = retuning_of("refused")
    with pytest.raises(UsageError, match="nothing to draw"):
        figure(replace(base, identified=replace(base.identified, analysis=None)))


def test_nothing_found_is_drawn_with_the_present_settings_alone() -> None:
    base = retuning_of("not met")
    drawn = figure(replace(base, proposed=None, cautions=(), moves=()))
    assert all("proposed" not in {drawn.get_label() for drawn in axes.lines} for axes in drawn.axes)
    assert "ey in" not in words(drawn)


@pytest.mark.parametrize("ending", [".png", ".svg", ".pdf"])
def test_same_bytes_twice_whatever_the_users_settings(tmp_path: Path, ending: str) -> None:
    first, second = tmp_path / f"first{ending}", tmp_path / f"second{ending}"
    draw(retuning_of("no present settings"), first)
    with mpl.rc_context({"font.size": 20, "axes.facecolor": "black", "savefig.dpi": 30, "svg.hashsalt": "own"}):
        draw(retuning_of("no present settings"), second)
    assert first.read_bytes() == second.read_bytes()
    if ending == ".png":
        assert imread(first).shape[1] == 1500


@pytest.mark.parametrize("path", ["a.jpg", "no such folder/a.png"])
def test_file_that_cannot_be_written_is_told(tmp_path: Path, path: str) -> None:
    with pytest.raises(UsageError, match=r"a\.(jpg|png)"):
        draw(retuning_of("servo"), tmp_path / path)


def test_no_window_system_is_touched() -> None:
    code = "import sys, loopfit.report.retune_plot; assert 'matplotlib.pyplot' not in sys.modules"
    subprocess.run([sys.executable, "-c", code], check=True)
