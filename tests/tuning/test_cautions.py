"""What is said with a proposal: always the same cautions, and each truth of a loop where it holds and only there."""

from __future__ import annotations

import math
import re

import numpy as np
import pytest

from loopfit.core.quantity import Quantity
from loopfit.loop.gains import Gains
from loopfit.loop.plant import Plant
from loopfit.model.transfer import transfer_of
from loopfit.tuning.cautions import always, cautions, changes, noise_gain, truths
from loopfit.tuning.result import LoopFigures
from loopfit.tuning.setpoint_overshoot import overshoot_percent

LAG = Plant(gain=1.0, time_constants_s=(10.0, 2.0), dead_time_s=1.0)
CALM = Gains(kp=1.5, ki=0.12)  # well damped on LAG
INTEGRATING = Plant(gain=1.0, integrating=True)


def said(sentences: tuple[str, ...], *words: str) -> str | None:
    """The one sentence with all the words; None without any."""
    found = [one for one in sentences if all(word in one for word in words)]
    assert len(found) <= 1
    return found[0] if found else None


@pytest.mark.parametrize(
    "words",
    [
        ("model first", "small stages", "person", "manual"), ("automatic can bump",), ("cascade", "inner loop"),
        ("operating range of the record",), ("Protective functions and interlocks",), ("Site procedure", "local codes"),
        ("responsible licensed engineer",), ("writes to no controller",),
    ],
)  # fmt: skip
def test_the_cautions_of_every_proposal(words: tuple[str, ...]) -> None:
    assert said(cautions(LAG, CALM, CALM), *words)
    assert said(cautions(INTEGRATING, None, Gains(kp=1.0), scan_s=0.1), *words)


def test_a_calm_loop_that_changes_little_has_the_fixed_cautions_only() -> None:
    assert truths(LAG, CALM, Gains(kp=1.4, ki=0.12)) == ()
    assert cautions(LAG, CALM, Gains(kp=1.4, ki=0.12)) == always()


def test_the_operating_range_is_named_where_known() -> None:
    assert said(cautions(LAG, CALM, CALM, operating_range="40 to 55 °C"), "record, 40 to 55 °C")
    assert said(cautions(LAG, CALM, CALM), "record:")


def test_sentences_are_plain_and_short() -> None:
    plants = (
        Plant(gain=1.0, integrating=True, dead_time_s=1.0), Plant(gain=1.0, time_constants_s=(1.0,), dead_time_s=5.0, zero_s=-1.0),
    )  # fmt: skip
    for plant in plants:
        proposed = Gains(kp=0.4, ki=0.05, kd=0.1, filter_s=0.1)
        for sentence in cautions(plant, Gains(kp=0.1, ki=0.001), proposed, scan_s=0.5, noise=0.2):
            assert sentence[0].isupper() or sentence.startswith("loopfit ")
            assert sentence.endswith(".")
            assert all(len(part) < 240 for part in sentence.split(". "))


def test_a_lower_gain_on_an_integration_swings_more_with_the_figures_of_the_textbook() -> None:
    """k kp s + k ki + s^2: damping ratio 0.5 sqrt(k kp Ti), common practice; kp 0.5, Ti 8: 1, 0.71 and 0.5."""
    sentence = said(truths(INTEGRATING, None, Gains(kp=0.5, ki=0.0625)), "lower gain alone")
    assert sentence is not None
    assert sentence.startswith("This plant integrates")
    figures = [float(x) for x in re.findall(r"\d\.\d\d", sentence)]
    # half the gain with twice the integral time has the same product kp Ti
    assert figures == pytest.approx([1.0, math.sqrt(0.5), 0.5, 1.0], abs=0.006)
    assert "8 s" in sentence


def test_a_lower_gain_is_not_said_to_swing_more_where_it_does_not() -> None:
    assert said(truths(LAG, None, CALM), "lower gain alone") is None
    assert said(truths(INTEGRATING, None, Gains(kp=0.5)), "lower gain alone") is None
    # kp Ti so large that a quarter of the gain is still overdamped: 0.5 sqrt(0.25 k kp Ti) > 1
    assert said(truths(INTEGRATING, None, Gains(kp=1.0, ki=1.0 / 20.0)), "lower gain alone") is None


def test_a_lower_gain_swings_more_without_integration_too_where_the_integral_time_is_short() -> None:
    # T s^2 + (1 + k kp) s + k ki with T = 100: far slower than the loop, so that it is as good as integrating
    plant = Plant(gain=100.0, time_constants_s=(100.0,))
    sentence = said(truths(plant, None, Gains(kp=0.5, ki=0.0625)), "lower gain alone")
    assert sentence is not None
    assert sentence.startswith("A lower gain")


def test_a_raised_gain_is_said_with_numbers_a_lowered_one_is_not() -> None:
    sentence = said(changes(Gains(kp=2.0, ki=0.2), Gains(kp=3.0, ki=0.3)), "gain rises")
    assert sentence is not None
    assert "1.5 times" in sentence
    assert "from 2 to 3" in sentence
    assert "threefold" not in sentence
    assert changes(Gains(kp=2.0, ki=0.2), Gains(kp=1.0, ki=0.1)) == ()
    # of a plant with negative gain the magnitude counts
    assert said(changes(Gains(kp=-2.0), Gains(kp=-3.0)), "gain rises", "from 2 to 3")


@pytest.mark.parametrize(
    ("present", "proposed", "words"),
    [
        (Gains(kp=2.0), Gains(kp=0.5), "gain falls 4 times, from 2 to 0.5"),
        (Gains(kp=1.0), Gains(kp=3.5), "gain rises 3.5 times, from 1 to 3.5"),
        (Gains(kp=1.0, ki=0.01), Gains(kp=1.0, ki=0.04), "integral time falls 4 times, from 100 to 25 s"),
        (Gains(kp=1.0, ki=0.04), Gains(kp=1.0, ki=0.01), "integral time rises 4 times, from 25 to 100 s"),
        (Gains(kp=1.0, kd=1.0, filter_s=0.1), Gains(kp=1.0, kd=4.0, filter_s=0.1), "derivative time rises 4 times, from 1 to 4 s"),
    ],
)  # fmt: skip
def test_more_than_threefold_is_said(present: Gains, proposed: Gains, words: str) -> None:
    made = changes(present, proposed)
    sentence = said(made, words)
    assert sentence is not None
    assert "more than threefold" in sentence
    assert "unit" in made[-1]


def test_less_than_threefold_is_not_said() -> None:
    assert changes(Gains(kp=2.0, ki=0.1), Gains(kp=0.7, ki=0.1)) == ()
    assert changes(None, Gains(kp=50.0)) == ()


def test_terms_that_appear_or_go_and_a_sign_that_turns() -> None:
    assert said(changes(Gains(kp=1.0), Gains(kp=1.0, ki=0.1)), "integral action is new", "10 s")
    gone = changes(Gains(kp=1.0, kd=2.0, filter_s=0.1), Gains(kp=1.0))
    assert said(gone, "derivative action is taken away", "2 s")
    assert said(changes(Gains(kp=1.0, ki=0.1), Gains(kp=1.0, ki=0.1)), "action") is None
    assert said(changes(Gains(kp=-1.0), Gains(kp=1.0)), "changes its sign")


def test_a_level_is_not_to_be_tightened_without_need() -> None:
    plant = Plant(gain=0.01, time_constants_s=(2.0,), integrating=True)
    assert said(truths(plant, Gains(kp=1.0, ki=0.01), Gains(kp=2.0, ki=0.02)), "level")
    assert said(truths(plant, Gains(kp=1.0, ki=0.01), Gains(kp=1.0, ki=0.02)), "level")
    assert said(truths(plant, None, Gains(kp=2.0)), "level")
    assert said(truths(plant, Gains(kp=1.0, ki=0.01), Gains(kp=0.8, ki=0.005)), "level") is None
    assert said(truths(LAG, Gains(kp=0.1), Gains(kp=2.0)), "level") is None


@pytest.mark.parametrize(
    "gains", [Gains(kp=2.0), Gains(kp=2.0, kd=3.0, filter_s=0.3), Gains(kp=-0.5, kd=-3.0, filter_s=0.05)]
)
def test_noise_gain_against_a_controller_run_on_noise(gains: Gains) -> None:
    h, noise = 0.1, np.random.default_rng(3).normal(size=200_000)
    derivative, last, out = 0.0, 0.0, np.empty(noise.size)
    for k, y in enumerate(noise.tolist()):
        derivative = (gains.filter_s * derivative - gains.kd * (y - last)) / (gains.filter_s + h)
        out[k], last = -gains.kp * y + derivative, y
    # standard error of a standard deviation: below 1 / sqrt(n) = 0.22 % for values not far from independent
    assert noise_gain(gains, h) == pytest.approx(float(out[1:].std()), rel=0.01)


def test_derivative_noise_is_said_with_the_derivative_only() -> None:
    with_derivative = Gains(kp=1.5, ki=0.1, kd=1.5, filter_s=0.5)
    # kp + kd / Tf = 4.5 against 1.5, by hand
    assert said(truths(LAG, CALM, with_derivative), "derivative passes", "by 4.5", "present settings 1.5")
    scanned = said(
        truths(LAG, CALM, with_derivative, scan_s=0.1, noise=0.2), "derivative passes", "standard deviations"
    )
    assert scanned is not None
    # by hand: b = 1.5 / 0.6 = 2.5, a = 0.5 / 0.6; 4^2 + 6.25 (1 / 11) = 16.57, its root 4.07, times 0.2 = 0.814
    assert "by 0.814" in scanned
    assert "0.3)" in scanned
    assert said(truths(LAG, CALM, CALM, scan_s=0.1, noise=0.2), "derivative") is None


def test_a_long_scan_interval_is_said() -> None:
    assert said(truths(LAG, CALM, CALM, scan_s=2.0), "can interval is")
    assert said(truths(LAG, CALM, CALM, scan_s=0.05), "can interval") is None
    assert said(truths(LAG, CALM, CALM), "can interval") is None


def test_dead_time_that_dominates() -> None:
    assert said(
        truths(Plant(gain=1.0, time_constants_s=(2.0,), dead_time_s=3.0), None, Gains(kp=0.2, ki=0.1)),
        "Dead time",
        "3 s",
        "2 s",
    )
    assert said(truths(LAG, None, CALM), "Dead time") is None
    assert said(truths(Plant(gain=1.0, integrating=True, dead_time_s=3.0), None, Gains(kp=0.1)), "Dead time") is None


def test_a_plant_that_first_answers_the_wrong_way() -> None:
    lags = {"gain": 1.0, "time_constants_s": (10.0, 2.0)}
    assert said(truths(Plant(**lags, zero_s=-2.0), None, Gains(kp=0.5, ki=0.05)), "wrong direction")  # type: ignore[arg-type]
    assert said(truths(Plant(**lags, zero_s=2.0), None, Gains(kp=0.5, ki=0.05)), "wrong direction") is None  # type: ignore[arg-type]


def test_a_conditionally_stable_loop() -> None:
    # 1 / s^2 with kp 1, ki 0.5, kd 1 (short filter): s^3 + K s^2 + K s + K / 2 is stable above K = 1 / 2 (Routh)
    plant = Plant.of_transfer(transfer_of([1.0], [1.0, 0.0, 0.0]))
    sentence = said(truths(plant, None, Gains(kp=1.0, ki=0.5, kd=1.0, filter_s=1e-4)), "conditionally stable")
    assert sentence is not None
    assert "below 0.5 of" in sentence
    assert said(truths(LAG, None, CALM), "conditionally") is None


def test_a_plant_that_does_not_rest_in_manual() -> None:
    plant = Plant.of_transfer(transfer_of([1.0], [1.0, -1.0]))
    assert said(truths(plant, None, Gains(kp=3.0)), "manual is no safe place")
    assert said(truths(LAG, None, CALM), "manual is no safe place") is None
    assert said(truths(INTEGRATING, None, Gains(kp=3.0)), "manual is no safe place") is None


def test_setpoint_overshoot_of_the_zero_is_said_first_and_what_removes_it() -> None:
    """1 / s under PI, critically damped: wn = 0.25, y = 1 + (wn t - 1) exp(-wn t) ... the zero gives exp(-2) = 13.5 %."""
    gains = Gains(kp=0.5, ki=0.0625)
    # step response of (2 wn s + wn^2) / (s + wn)^2 is 1 - exp(-wn t) (1 - wn t): peak exp(-2) over 1 at wn t = 2, by hand
    assert overshoot_percent(INTEGRATING, gains) == pytest.approx(100.0 * math.exp(-2.0), abs=0.01)
    made = truths(INTEGRATING, None, gains)
    sentence = said(made, "setpoint step overshoots")
    assert sentence == made[0]
    assert sentence is not None
    assert "by 14 %" in sentence
    assert "not from poor damping" in sentence
    weight = float(re.findall(r"weight of (\d\.\d+)", sentence)[0])
    # with the weight b: 1 - exp(-wn t)(1 + (1 - 2 b) wn t); 1 % over for a peak (2 b - 1) exp(-2 b / (2 b - 1)) of 0.01
    assert (2.0 * weight - 1.0) * math.exp(-2.0 * weight / (2.0 * weight - 1.0)) < 0.01
    more = weight + 0.02
    assert (2.0 * more - 1.0) * math.exp(-2.0 * more / (2.0 * more - 1.0)) > 0.01
    assert "ramped" in sentence
    assert "--overshoot" in sentence


def test_no_overshoot_beyond_the_target_is_not_said() -> None:
    assert said(truths(LAG, None, CALM), "overshoots") is None
    # a target of 0.4 allows 25 %: 13.5 % is no news (exp(-pi 0.4 / sqrt(1 - 0.16)) = 0.254)
    assert said(truths(INTEGRATING, None, Gains(kp=0.5, ki=0.0625), damping_ratio=0.4), "overshoots") is None
    assert said(truths(LAG, None, Gains(kp=1.0)), "overshoots") is None


def test_overshoot_of_a_loop_that_swings_is_not_blamed_on_the_zero() -> None:
    sentence = said(truths(LAG, None, Gains(kp=4.0, ki=0.6)), "overshoots")
    assert sentence is not None
    assert "itself swings" in sentence
    assert "zero" not in sentence


def test_the_overshoot_that_is_printed_beside_is_the_one_that_is_said() -> None:
    foreseen = LoopFigures(stable=True, overshoot_percent=Quantity(21.0, 20.0, 22.0))
    assert said(cautions(INTEGRATING, None, Gains(kp=0.5, ki=0.0625), figures=foreseen), "overshoots by 21 %")
    little = LoopFigures(stable=True, overshoot_percent=Quantity(3.0, 2.0, 4.0))
    assert said(cautions(INTEGRATING, None, Gains(kp=0.5, ki=0.0625), figures=little), "overshoots") is None


def test_a_loop_that_is_not_stable_has_no_overshoot() -> None:
    assert overshoot_percent(LAG, Gains(kp=50.0)) is None
