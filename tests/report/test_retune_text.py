"""The page of a retuning: what must stand on it in each case, in the controller's own units, and what must not."""

from __future__ import annotations

import math
import re
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from retunings import CAUTIONS, HEATER, HEATER_NOW, LEVEL_NOW, NAMES, SERVO_NOW, SWINGING_NOW, retuning_of

from loopfit.core.quantity import Quantity
from loopfit.identify.identified import Identified
from loopfit.loop.settings import Settings
from loopfit.report.retune_numbers import quantity_words
from loopfit.report.retune_stages import stop_at
from loopfit.report.retune_text import answer, page
from loopfit.report.retune_warnings import overshoot_warning
from loopfit.report.retune_words import (
    action_words,
    entry_number,
    overshoot_of,
    share_words,
)
from loopfit.tuning.goal import Goal
from loopfit.tuning.result import LoopFigures, Move, Retuning

PROPOSING = [name for name in NAMES if name != "refused"]
NOW = {
    "ringing heater": HEATER_NOW, "servo": SERVO_NOW, "level": LEVEL_NOW, "not met": SWINGING_NOW,
    "no present settings": Settings("ideal", gain=1.0), "unstable now": HEATER_NOW,
}  # fmt: skip


def joined(text: str) -> str:
    return " ".join(text.split())


def with_figures(retuning: Retuning, **figures: float | None) -> Retuning:
    """The same retuning with other predicted figures, without intervals."""
    assert retuning.proposed is not None
    own = {name: None if value is None else Quantity(value, value, value) for name, value in figures.items()}
    return replace(retuning, proposed=replace(retuning.proposed, figures=replace(retuning.proposed.figures, **own)))


def keyed_from(text: str) -> dict[str, str]:
    """The lines of the block to key in: name to value with unit."""
    lines = text[text.index("to key in:" if "to key in:" in text else "Key in:") :].splitlines()[1:]
    out = {}
    for line in lines:
        if not line.startswith("    "):
            break
        if line[4] != " ":
            out[line[4:24].strip()] = " ".join(line[24:].split())
    return out


@pytest.mark.parametrize("name", NAMES)
def test_fits_a_screen_and_shows_no_gap(name: str) -> None:
    text = page(retuning_of(name))
    assert all(len(line) <= 100 for line in text.splitlines())
    assert "\t" not in text
    assert not any(line != line.rstrip() for line in text.splitlines())
    assert not re.search(r"\b(nan|inf|None)\b", text)


@pytest.mark.parametrize("name", PROPOSING)
def test_what_is_keyed_in_means_the_proposed_gains(name: str) -> None:
    """The printed numbers, typed into the same controller, give the gains that the figures were computed with."""
    retuning = retuning_of(name)
    assert retuning.proposed is not None
    shown = keyed_from(page(retuning))
    now = NOW[name]
    typed = {
        "proportional_band_percent": shown["proportional band"].split()[0] if "proportional band" in shown else None,
        "gain": shown["gain"].split()[0] if "gain" in shown else None,
        "setpoint_weight": shown.get("setpoint weight"),
    }
    integral = shown.get("integral time") or shown.get("integral") or shown["integral gain"]
    derivative = shown.get("derivative time") or shown["derivative gain"]
    entry = Settings.from_entry(
        now.form,
        integral=integral.replace(" repeats per ", "/"),
        derivative=derivative.replace(" gain s", ""),
        derivative_filter=shown.get("derivative filter", "off"),
        action=now.action,
        measurement_range=now.measurement_range,
        output_range=now.output_range,
        **{key: float(value) for key, value in typed.items() if value is not None},
    )
    for field in ("kp", "ki", "kd", "filter_s", "setpoint_weight"):
        # four digits were chosen and four are shown, so only the conversion of units rounds
        assert getattr(entry.gains, field) == pytest.approx(getattr(retuning.proposed.gains, field), rel=1e-9), field
    assert shown["form"].startswith(f"{now.form} form")


def test_units_are_the_controllers_own() -> None:
    heater, level, servo = (keyed_from(page(retuning_of(name))) for name in ("ringing heater", "level", "servo"))
    assert heater["proportional band"].endswith(" %")
    assert heater["integral time"].endswith(" min")
    assert "ranges 0 to 400 (measurement) and 0 to 100 (output)" in heater["form"]
    assert "gain" not in heater
    assert level["integral"].endswith("repeats per min")
    assert level["action"].startswith("direct acting")
    assert float(level["gain"].split()[0]) > 0  # a magnitude: the action carries the sign
    assert servo["integral gain"] == "off"
    assert servo["derivative gain"].endswith("gain s")


def test_a_wrong_sign_is_cried_out() -> None:
    assert "WRONG" in action_words(replace(LEVEL_NOW, action="reverse"), -0.02)
    assert "right for this plant" in action_words(LEVEL_NOW, -0.02)
    level = retuning_of("level")
    assert level.current is not None
    settings = replace(LEVEL_NOW, action="reverse")
    wrong = replace(level.current, settings=settings, gains=settings.gains, figures=LoopFigures(stable=False))
    assert re.search(r"loop +WRONG SIGN +stable", page(replace(level, current=wrong)))


@pytest.mark.parametrize("name", PROPOSING)
def test_the_answer_comes_first(name: str) -> None:
    retuning = retuning_of(name)
    lines = page(retuning).splitlines()
    if retuning.met:
        assert lines[0] == "Key in:"
        after = next(line for line in lines if line and not line.startswith((" ", "Key in")))
        assert after.startswith("The target is met (")
    else:
        assert lines[0].startswith("The target is NOT met")
        assert "Best attainable, to key in:" in lines
    assert page(retuning).startswith(answer(retuning))
    top = joined(answer(retuning))
    assert "damping ratio" in top
    assert "setpoint overshoot" in top
    assert "settling (±2 %)" in top


def test_probability_is_said_with_the_answer() -> None:
    assert "with a probability of 94 %" in joined(answer(retuning_of("ringing heater")))
    assert "taken as exact" in joined(answer(retuning_of("no present settings")))
    assert share_words(1.0) == "more than 99 %"  # all of 200 draws is no certainty
    assert share_words(0.0) == "less than 1 %"
    assert share_words(0.9) == "90 %"


def test_not_met_says_what_is_attainable_and_what_is_in_the_way() -> None:
    retuning = retuning_of("not met")
    assert not retuning.met
    assert retuning.obstacle is not None
    first = joined(answer(retuning)).split("Best attainable, to key in:")[0]
    assert "Attainable: a damping ratio of " in first
    assert retuning.obstacle.rstrip(".") in first
    assert "meet the whole target with a probability of 2 %" in first


def test_nothing_found_shows_no_settings() -> None:
    nothing = replace(
        retuning_of("not met"),
        proposed=None,
        moves=(),
        cautions=(),
        attainable_damping_ratio=None,
        obstacle="dead time",
    )
    text = page(nothing)
    assert text.startswith("The target is NOT met")
    assert "In the way: dead time." in joined(text)
    assert "key in" not in text.lower()
    assert "Stages" not in text
    assert "Cautions" not in text


def test_attainable_is_cut_not_rounded() -> None:
    bare = replace(retuning_of("not met"), proposed=None, cautions=(), attainable_damping_ratio=0.5799)
    assert "a damping ratio of 0.57." in joined(answer(bare))


@pytest.mark.parametrize("name", PROPOSING)
def test_every_caution_is_on_the_page(name: str) -> None:
    text = joined(page(retuning_of(name)))
    for caution in CAUTIONS:
        assert f"- {caution}" in text


@pytest.mark.parametrize("name", PROPOSING)
def test_no_settings_without_cautions(name: str) -> None:
    with pytest.raises(ValueError, match="cautions"):
        page(replace(retuning_of(name), cautions=()))


def test_refused_shows_no_settings() -> None:
    """Also where the document, against its rule, holds a proposal."""
    whole = retuning_of("ringing heater")
    careless = replace(whole, refused=retuning_of("refused").refused, met=False)
    for retuning in (retuning_of("refused"), careless):
        text = page(retuning)
        assert text.startswith("No settings are proposed: the valve sticks")
        assert whole.proposed is not None
        for settings in (whole.proposed.settings, HEATER_NOW):
            band = settings.proportional_band_percent
            assert band is not None
            assert f"{band:g}" not in text
        for word in ("key in", "proportional band", "integral", "stages", "cautions"):
            assert word not in text.lower()


def test_refused_says_what_record_to_make() -> None:
    def of(reason: str) -> str:
        base = retuning_of("refused")
        return joined(page(replace(base, refused=reason, identified=replace(base.identified, refused=reason))))

    assert "a staircase" in of("the valve sticks")
    assert "a staircase" in of("lost motion of 2 % in the linkage")
    other = of("the record ends long before the loop is at rest")
    assert "staircase" not in other
    assert "one clear step of the output" in other
    base = retuning_of("refused")
    unattainable = replace(base, refused="dead time", identified=replace(base.identified, refused=None))
    assert "to record" not in page(unattainable)  # the plant is known: another record would not help


@pytest.mark.parametrize(
    ("name", "said"), [("level", True), ("no present settings", True), ("ringing heater", False), ("servo", False)]
)
def test_overshoot_of_the_zero_is_said_first(name: str, said: bool) -> None:
    retuning = retuning_of(name)
    top = joined(answer(retuning))
    assert ("the zero of the setpoint path, not from poor damping" in top) is said
    if said:
        for cure in ("setpoint weight", "a ramped setpoint", "--overshoot"):
            assert cure in top


def test_overshoot_warning_begins_at_five_points() -> None:
    """Of a critically damped second-order system there is none (Ogata, 5th ed., section 5-3), so 5 points are 5 %."""
    heater = retuning_of("ringing heater")
    assert overshoot_warning(with_figures(heater, overshoot_percent=5.1, damping_ratio=1.0)) is not None
    assert overshoot_warning(with_figures(heater, overshoot_percent=4.9, damping_ratio=1.0)) is None
    half = replace(heater, goal=Goal(damping_ratio=0.5))  # 16.3 %
    assert overshoot_warning(with_figures(half, overshoot_percent=21.5, damping_ratio=0.5)) is not None
    assert overshoot_warning(with_figures(half, overshoot_percent=21.2, damping_ratio=0.5)) is None
    poor = overshoot_warning(with_figures(heater, overshoot_percent=30.0, damping_ratio=0.36))
    assert poor is not None
    assert "zero of the setpoint path" not in poor


@pytest.mark.parametrize(
    ("damping", "percent", "digits", "source"),
    [
        (0.5, 16.3, 1, "closed form, from memory"),
        (0.7, 4.6, 1, "closed form, from memory"),
        (1.0, 0.0, 1, "no overshoot"),
    ],
)
def test_overshoot_of_a_damping_ratio(damping: float, percent: float, digits: int, source: str) -> None:
    assert overshoot_of(damping) == pytest.approx(percent, abs=0.5 * 10.0**-digits), source


def test_present_and_proposed_stand_side_by_side() -> None:
    retuning = retuning_of("ringing heater")
    assert retuning.current is not None
    assert retuning.proposed is not None
    lines = page(retuning).splitlines()
    (row,) = [line for line in lines if line.startswith("maximum sensitivity")]
    shown = [float(cell) for cell in re.findall(r"(\d+\.\d+) \(", row)]
    both = [side.figures.max_sensitivity for side in (retuning.current, retuning.proposed)]
    assert shown == pytest.approx([one.value for one in both if one is not None], abs=0.005)
    assert len(re.findall(r"\(\d+\.\d+ to \d+\.\d+\)", row)) == 2
    (row,) = [line for line in lines if line.startswith("integral time, min")]
    assert row.split()[-2] == "1.2"
    (row,) = [line for line in lines if line.startswith("probability of the target")]
    assert row.endswith("94 %")


def test_intervals_of_the_plant_are_those_of_its_draws() -> None:
    """Gains spread evenly over 1 to 3: 95 % of them lie in 1.05 to 2.95."""
    draws = tuple(replace(HEATER, gain=float(gain)) for gain in np.linspace(1.0, 3.0, 201))
    found = Identified(plant=HEATER, how="open step", draws=draws)
    (row,) = [line for line in page(replace(retuning_of("ringing heater"), identified=found)).splitlines()
              if line.strip().startswith("gain  ")]  # fmt: skip
    numbers = [float(cell) for cell in re.findall(r"[\d.]+", row)]
    assert numbers == pytest.approx([2.0, 1.05, 2.95], abs=0.06)  # one figure of the spread is shown


def test_typed_settings_have_their_verdict() -> None:
    text = joined(page(retuning_of("ringing heater")))
    assert "typed agree: The recorded output obeys the settings as typed" in text
    assert "was not checked: the loop was in manual" in joined(page(retuning_of("level")))


def test_stages_in_order_with_what_to_watch_and_restore() -> None:
    retuning = retuning_of("level")
    text = joined(page(retuning))
    stages = text[text.index("Stages") : text.index("Findings")]
    assert stages.startswith("Stages 0 Write down the present settings")
    assert "Gain 0.3, integral 2 repeats per min, derivative time off." in stages  # all of them, absent ones too
    for move in retuning.moves:
        entered = move.side.settings.as_entered()
        assert f"{entered['gain']:.4g}" in stages
        assert f"{entered['integral_repeats_per_min']:.4g} repeats per min" in stages
        assert move.text in stages
    assert stages.count("Stop if it swings back by more than") == len(retuning.moves)
    assert "restore the settings written down" in stages
    assert "restore those of stage 1" in stages


def test_a_stage_that_says_itself_when_to_stop_says_it_once() -> None:
    level = retuning_of("level")
    own = tuple(replace(move, text="Stop if swings grow; put the earlier settings back.") for move in level.moves)
    text = joined(page(replace(level, moves=own)))
    assert text.count("Stop if") == len(own)
    assert "To put back: those of stage 1." in text


def test_nothing_unstable_is_restored() -> None:
    text = joined(page(retuning_of("unstable now")))
    assert "put the loop in manual" in text
    assert "restore the settings written down" not in text
    assert "Now UNSTABLE; then: damping ratio" in text
    assert re.search(r"loop UNSTABLE stable", text)


@given(swing=st.floats(0.0, 94.0), above=st.floats(0.0, 100.0))
def test_a_stage_is_stopped_only_beyond_what_it_may_show(swing: float, above: float) -> None:
    limit = stop_at(LoopFigures(stable=True, swing_percent=Quantity(swing, swing, swing + above)))
    assert limit >= min(swing + above, 95.0)
    assert limit > swing
    assert limit <= 95.0


def test_without_present_settings_they_are_still_to_be_written_down() -> None:
    text = joined(page(retuning_of("no present settings")))
    assert "Write down the present settings" in text
    assert " now " not in text.split("Stages", maxsplit=1)[0].split("plant", 1)[1].split("proposed")[0]


def test_a_stage_that_is_unstable_is_marked() -> None:
    level = retuning_of("level")
    first = level.moves[0]
    bad = Move(side=replace(first.side, figures=LoopFigures(stable=False)), text="")
    assert "UNSTABLE on the fitted plant: do not stay here." in joined(
        page(replace(level, moves=(bad, level.moves[1])))
    )


def test_rules_are_comparisons_and_say_so() -> None:
    text = joined(page(retuning_of("ringing heater")))
    assert "for comparison only; none of them is proposed" in text
    assert "Skogestad 2003, PI" in text


def test_findings_worst_first() -> None:
    text = page(retuning_of("servo"))
    assert "note         The record ends before the loop is quite at rest." in text


@pytest.mark.parametrize(
    ("value", "shown"),
    [(2.5, "2.5"), (1200.0, "1200"), (0.000127234, "0.000127234"), (1.0 / 3.0, "0.3333"), (123456.0, "123456"),
     (1234567.0, "1234567"), (-0.25, "-0.25"), (0.0, "0"), (2e-6, "2e-06")],
)  # fmt: skip
def test_numbers_as_they_are_keyed_in(value: float, shown: str) -> None:
    assert entry_number(value) == shown


@given(st.floats(1e-9, 1e12))
def test_a_number_keyed_in_is_the_number(value: float) -> None:
    """Four significant digits: off by half a unit of the fourth, 0.05 % at most."""
    assert float(entry_number(value)) == pytest.approx(value, rel=5.001e-4)
    six = float(f"{value:.5e}")
    assert float(entry_number(six)) == pytest.approx(six, rel=1e-12)


@pytest.mark.parametrize(
    ("quantity", "shown"),
    [
        (None, "-"),
        (Quantity(0.312, 0.29, 0.334), "0.312 (0.290 to 0.334)"),
        (Quantity(2.0, 2.0, 2.0), "2.00"),
        (Quantity(3.0, 2.0, math.inf), "3.00 (2.00 or more)"),
        (Quantity(0.98, -math.inf, math.inf), "0.980 (no bound)"),
        (Quantity(math.inf, 4.0, math.inf), "no limit (4.00 or more)"),
        (Quantity(math.inf, math.inf, math.inf), "no limit"),
    ],
)
def test_quantities_in_words(quantity: Quantity | None, shown: str) -> None:
    assert quantity_words(quantity) == shown
