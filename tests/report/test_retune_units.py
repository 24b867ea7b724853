"""Units, predicted record and digits of a retuning from a closed-loop record, whose step was not analysed by itself."""

from __future__ import annotations

import math
import re
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from matplotlib.text import Text
from retunings import HEATER, HEATER_NOW, retuned, retuning_of

from loopfit.core.finding import Finding
from loopfit.core.quantity import Quantity
from loopfit.loop.settings import Settings
from loopfit.record.record import Record
from loopfit.report.retune_numbers import figure_words, quantity_words
from loopfit.report.retune_overlay import overlay_of
from loopfit.report.retune_plot import draw, figure, short_cautions
from loopfit.report.retune_text import answer, page
from loopfit.report.retune_words import action_words
from loopfit.tuning.goal import Goal
from loopfit.tuning.result import Move, Retuning

FIRST = (
    "standing_offset", "worse_than_now", "already_met", "limits_not_foreseen", "faster_than_record",
    "typed_settings_differ",
)  # fmt: skip
ZERO = (
    "A setpoint step overshoots by 15 %, where the target damping alone would give 0 %. That comes from the zero of the "
    "setpoint path, not from poor damping: after a load the loop does not swing back. A setpoint weight of 0.52 removes "
    "it, where the controller has one. A setpoint that is ramped instead of stepped, or a target for the overshoot "
    "(--overshoot) does so too."
)


def joined(text: str) -> str:
    return " ".join(text.split())


def closed_loop(settings: Settings | None = None) -> Retuning:
    """The ringing heater, told by its record alone: °C and %, no analysis of the step."""
    base = retuning_of("ringing heater") if settings is None else retuned(
        HEATER, settings, Goal(), identified=retuning_of("ringing heater").identified
    )  # fmt: skip
    analysis = base.identified.analysis
    assert analysis is not None
    record: Record = analysis.record
    assert record.output is not None
    record = replace(
        record, measurement=replace(record.measurement, unit="°C"), output=replace(record.output, unit="%")
    )
    return replace(base, identified=replace(base.identified, analysis=None, record=record))


IN_UNITS = Settings("ideal", gain=0.5, integral_time_s=72.0, action="reverse", scan_s=2.0)


def test_units_come_from_the_record_without_an_analysis() -> None:
    """The plant answers in °C per %, the controller in % per °C, and the area after a load of 1 % in °C s per %."""
    text = page(closed_loop(IN_UNITS))
    assert re.search(r"gain +0\.\d+ +%/°C", text)
    assert "gain, %/°C" in text
    assert "output per measurement" not in text
    assert "load: integrated error, °C s/%" in text
    assert re.search(r"gain +2\.00 \([\d.]+ to [\d.]+\) °C/%", text)


def test_unknown_units_are_not_said_in_part() -> None:
    text = page(retuning_of("level"))
    assert re.search(r"load: integrated error {5}", text)
    assert not re.search(r"(?:integrated|absolute) error, s\b", text)


def test_record_without_an_analysis_lies_on_its_prediction() -> None:
    """The plant is the one that made the record: what is left is its noise, 0.1, and what the loop makes of it."""
    overlay = overlay_of(closed_loop())
    assert overlay is not None
    predicted = np.interp(overlay.recorded_time, overlay.time, overlay.predicted.value)
    assert 0.08 < np.sqrt(np.mean((overlay.recorded - predicted) ** 2)) < 0.15
    drawn = figure(closed_loop())
    assert len(drawn.axes) == 5
    assert {"record", "predicted", "setpoint"} <= {line.get_label() for line in drawn.axes[0].lines}
    words = " ".join(text.get_text() for text in drawn.findobj(Text))
    assert "Step of the setpoint, 20 °C" in words  # the record steps from 180 to 200
    assert "measurement (°C)" in words


def test_refused_shows_a_record_without_an_analysis() -> None:
    base = retuning_of("refused")
    found = replace(base.identified, analysis=None, record=closed_loop().identified.record)
    drawn = figure(replace(base, identified=found))
    assert {line.get_label() for axes in drawn.axes for line in axes.lines} >= {"measurement", "setpoint", "output"}


def test_a_setpoint_that_never_moves_has_no_prediction() -> None:
    base = closed_loop()
    record = base.identified.record
    assert record is not None
    assert record.setpoint is not None
    still = replace(record, setpoint=replace(record.setpoint, values=np.full_like(record.setpoint.values, 180.0)))
    assert overlay_of(replace(base, identified=replace(base.identified, record=still))) is None


@given(value=st.floats(1e-8, 1e11), below=st.floats(0.0, 1.0), above=st.floats(0.0, 5.0))
def test_no_rounding_moves_a_value_by_two_percent(value: float, below: float, above: float) -> None:
    """However wide the interval: three significant digits leave 0.5 %."""
    words = quantity_words(Quantity(value, value * (1.0 - below), value * (1.0 + above)))
    assert float(words.split()[0]) == pytest.approx(value, rel=0.0051)


@pytest.mark.parametrize(
    ("field", "quantity", "shown"),
    [
        ("settling_time_s", Quantity(247.0, 203.0, 512.0), "247 (203 to 512)"),
        ("settling_time_s", Quantity(167.0, 150.0, 260.0), "167 (150 to 260)"),
        ("damping_ratio", Quantity(0.951, 0.6, 1.0), "0.95 (0.60 to 1.00)"),
        ("damping_ratio", Quantity(0.0444, 0.01, 0.06), "0.044 (0.010 to 0.060)"),
        ("overshoot_percent", Quantity(4e179, 3.0, math.inf), "more than 1000"),
        ("overshoot_percent", Quantity(70.0, 65.0, 4e5), "70.0 (65.0 to more than 1000)"),
        ("settling_time_s", Quantity(math.inf, 900.0, math.inf), "does not settle in the time simulated"),
        ("load_absolute_error", Quantity(4e179, 4e179, 4e179), "no limit"),
        ("load_absolute_error", Quantity(3.21e8, 3e8, 4e8), "3.21e+08 (3e+08 to 4e+08)"),
    ],
)
def test_figures_in_words(field: str, quantity: Quantity, shown: str) -> None:
    assert figure_words(quantity, field) == shown


def test_a_figure_is_printed_alike_at_the_top_in_the_table_and_in_the_last_stage() -> None:
    base = retuning_of("ringing heater")
    assert base.proposed is not None
    wide = replace(
        base.proposed.figures, settling_time_s=Quantity(247.3, 201.0, 512.0), damping_ratio=Quantity(0.951, 0.6, 1.0)
    )
    last = base.moves[-1]
    exact = replace(
        last.side.figures,
        settling_time_s=Quantity(247.3, 247.3, 247.3),
        damping_ratio=Quantity(0.951, 0.951, 0.951),
    )
    text = page(
        replace(
            base,
            proposed=replace(base.proposed, figures=wide),
            moves=(*base.moves[:-1], Move(side=replace(last.side, figures=exact), text=last.text)),
        )
    )
    assert "-> 247 s" in joined(text)
    assert "247 (201 to 512)" in text
    assert "settling 247 s" in joined(text)
    assert "-> 0.95," in joined(text)
    assert "0.95 (0.60 to 1.00)" in text
    assert "Damping ratio 0.95," in joined(text)


def nearly_unstable() -> Retuning:
    """Figures as a present loop at its limit has them."""
    base = retuning_of("ringing heater")
    assert base.current is not None
    far = Quantity(4e179, 3.0, math.inf)
    figures = replace(
        base.current.figures, overshoot_percent=far, settling_time_s=Quantity(math.inf, 900.0, math.inf),
        load_absolute_error=Quantity(4e179, 4e179, 4e179), peak_output=far, damping_ratio=Quantity(1e-5, -0.1, 0.01),
    )  # fmt: skip
    return replace(base, current=replace(base.current, figures=figures))


def test_absurd_figures_are_said_in_words() -> None:
    text = page(nearly_unstable())
    assert "more than 1000 %" in joined(answer(nearly_unstable()))
    assert "does not settle in the time simulated" in joined(answer(nearly_unstable()))
    assert not re.search(r"\d{9}|e\+1\d\d", text)
    assert all(len(line) <= 100 for line in text.splitlines())


@pytest.mark.parametrize("band", [10.0, 1.0, 0.05])
def test_curves_that_run_away_are_clipped(band: float, tmp_path: Path) -> None:
    """The axes are at most five times what the proposed curve needs, and 16 % of margin; warnings are errors here."""
    retuning = retuned(HEATER, replace(HEATER_NOW, proportional_band_percent=band), Goal())
    assert retuning.current is not None
    assert not retuning.current.figures.stable
    drawn = figure(retuning)
    for axes in drawn.axes:
        low, high = axes.get_ylim()
        own = np.concatenate(
            [np.asarray(line.get_ydata(), float) for line in axes.lines if line.get_label() == "proposed"]
        )
        reach = max(float(own.max()), 0.0) - min(float(own.min()), 0.0)
        assert high - low < 1.6 * 5.0 * 1.16 * reach  # 0.3 either way at most for the band of the proposed one
        for line in axes.lines:
            height = np.asarray(line.get_ydata(), float)
            there = np.isfinite(height)
            assert np.all(np.abs(height[there]) < 20.0 * reach)
            if (
                line.get_label() == "now" and band <= 1.0
            ):  # it ends where it leaves, instead of crossing the picture again and again
                assert not there[-1]
                outside = (height[there] < low) | (height[there] > high)
                assert 1 <= np.count_nonzero(outside) < 0.2 * there.size
    draw(retuning, tmp_path / "drawn.png")


def test_first_stage_without_present_settings_is_entered_in_manual_and_tried_in_automatic() -> None:
    base = retuning_of("no present settings")
    assert base.proposed is not None
    text = (
        "With the loop in manual; expect no swing back after a load; stop if the swing back is above 10 % or swings grow; "
        "leave the loop in manual; the move to it is not proven stable in between: enter it in manual."
    )
    retuning = replace(base, moves=(Move(side=base.proposed, text=text),))
    words = joined(page(retuning))
    assert "leave the loop in manual" not in words
    assert "Enter these in manual, with the measurement at rest, then switch to automatic" in words
    assert "expect no swing back after a load; if the swing back is above 10 % or swings grow, back to manual." in words
    assert retuning.to_dict()["moves"][0]["text"] == text  # the document keeps its own words


@pytest.mark.parametrize(
    ("settings", "said"),
    [
        (Settings("ideal", gain=2.0, integral_time_s=9.0), "positive here (reverse acting)"),
        (Settings("ideal", gain=-2.0, integral_time_s=9.0), "negative here (direct acting)"),
        (replace(HEATER_NOW, action=None), "reverse acting: the output falls as the measurement rises"),
    ],
)
def test_the_sign_of_the_gain_is_said_without_an_action(settings: Settings, said: str) -> None:
    words = action_words(settings, math.copysign(1.0, settings.gains.kp))
    assert said in words
    assert "key in the gain" not in words
    assert ("positive here" in words) is (settings.gain is not None and settings.gain > 0)


def test_the_overshoot_is_said_once_and_with_the_weight_that_removes_it() -> None:
    base = retuning_of("no present settings")
    retuning = replace(base, cautions=(ZERO, *base.cautions))
    text = joined(page(retuning))
    assert text.count("the zero of the setpoint path") == 1
    assert "a setpoint weight of 0.52 where the controller has one" in joined(answer(retuning))
    assert "A setpoint step overshoots" not in short_cautions(retuning)
    assert ZERO in retuning.to_dict()["cautions"]
    swings = (
        "A setpoint step overshoots by 15 %, where 0 %. The loop itself swings: after a load it swings back by 9 %."
    )
    assert swings in joined(page(replace(base, cautions=(swings, *base.cautions))))  # another subject stays
    calm = retuning_of("ringing heater")
    assert "weight of 0.52 removes it" in joined(page(replace(calm, cautions=(ZERO, *calm.cautions))))


@pytest.mark.parametrize("code", FIRST)
@pytest.mark.parametrize("name", ["ringing heater", "not met", "nothing found"])
def test_findings_that_change_the_answer_stand_first(code: str, name: str) -> None:
    base = retuning_of("not met" if name == "nothing found" else name)
    if name == "nothing found":
        base = replace(base, proposed=None, moves=(), cautions=())
    found = Finding(code=code, severity="warning", text="This must be known at 2.5 % first. And the rest below.")
    text = page(replace(base, findings=(*base.findings, found)))
    first, _, rest = text.partition("\n\n")
    assert "This must be known at 2.5 % first." in first.splitlines()
    assert "And the rest below." not in joined(first)
    assert "This must be known at 2.5 % first. And the rest below." in joined(rest)


def test_other_findings_stand_below() -> None:
    assert "The record ends before" not in answer(retuning_of("servo"))
