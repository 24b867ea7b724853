"""All methods together: the choice, what is said of awkward systems, and the document."""

from __future__ import annotations

import json
import time as clock
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from loopfit.equivalents import choose
from loopfit.equivalents.choose import chosen_of, equivalents_of
from loopfit.equivalents.interchange import transfer_of_equivalent
from loopfit.equivalents.result import Equivalent, Equivalents, share_words
from loopfit.equivalents.system import RationalSystem
from loopfit.model.transfer import transfer_of


def product(*factors: list[float]) -> list[float]:
    out = np.ones(1)
    for factor in factors:
        out = np.convolve(out, factor)
    return [float(value) for value in out]


def found_for(numerator: list[float], denominator: list[float], dead_time: float = 0.0) -> Equivalents:
    return equivalents_of(RationalSystem(transfer_of(numerator, denominator, dead_time)))


def strict(found: Equivalents) -> dict[str, Any]:
    """Parse the document as JSON that has neither NaN nor Infinity."""

    def refuse(word: str) -> None:
        raise AssertionError(word)

    document: dict[str, Any] = json.loads(found.to_json(), parse_constant=refuse)
    return document


TENTH = (
    product([2, 1], [-0.1, 1]),
    product([5, 1], [3, 1], [1, 1], [1, 1], [0.5, 1], [0.2, 1], [0.1, 1], [0.05, 1], [0.2, 0.3, 1]),
)

KINDS = [
    ("tenth order", *TENTH, 0.7),
    ("inverse response", [-2.0, 1.0], product(*[[1.0, 1.0]] * 3), 0.0),
    ("direct term", [1.0, 3.0, 1.0], [1.0, 1.2, 1.0], 0.0),
    ("direct term, one lag", [3.0, 1.0], [1.0, 1.0], 0.0),
    ("near cancellation", product([1, 1], [2, 1]), product([1.0001, 1], [1, 1], [3, 1], [2.5, 1]), 0.0),
    ("repeated pair", [1.0], product(*[[1.0, 0.6, 1.0]] * 3), 0.0),
    ("gain with dead time", [3.0], [1.0], 2.0),
    ("first order", [2.0], [3.0, 1.0], 1.0),
    ("second order", [2.0], [1.0, 1.0, 1.0], 1.0),
    ("integrating", [1.0], product([1, 0], [1, 1], [1, 1], [0.5, 1]), 0.3),
    ("integrator alone", [1.0], [1.0, 0.0], 0.3),
    ("twice integrating", [1.0], product([1, 0], [1, 0], [1, 1]), 0.0),
    ("integrating and unstable", [1.0], product([1, 0], [1, -1]), 0.0),
    ("unstable pair", [1.0], [1.0, -1.0, 1.0], 0.0),
    ("unstable of higher order", [1.0], product([1, -0.2, 1], [0.1, 1], [0.2, 1]), 0.0),
    ("one unstable lag", [1.0], product([1, -1], [1, 3, 2]), 0.0),
    ("two unstable lags", [1.0], product([1, -1], [1, -2], [1, 2]), 0.0),
    ("undamped pair alone", [1.0], [1.0, 0.0, 1.0], 0.0),
    ("undamped", [1.0], product([1, 0, 1], [1, 1]), 0.0),
    ("no static gain", [1.0, 0.0], product(*[[1.0, 1.0]] * 3), 0.0),
    ("hidden unstable lag", product([1, -1]), product([1, -1], [1, 1], [1, 2], [1, 3]), 0.0),
    ("lively pair under a slow lag", [1.0], product([1, 0.02, 1], [0.1, 0.2, 1], [5, 1]), 0.0),
    ("complex zeros", [1.0, 0.2, 1.0], product([1, 1], [2, 1], [3, 1]), 0.0),
    ("zeros only on the right", product([-1, 1], [-1, 1], [-1, 1]), product(*[[1.0, 1.0]] * 3), 0.0),
    ("sixty equal lags", [1.0], product(*[[1.0, 1.0]] * 60), 0.0),
    ("slow and fast by 1e9", [1.0], product([1e6, 1], [1e-3, 1], [1, 1]), 0.0),
]


@pytest.mark.parametrize(("kind", "numerator", "denominator", "dead_time"), KINDS, ids=[row[0] for row in KINDS])
def test_every_kind_gets_a_document_of_plain_numbers(
    kind: str, numerator: list[float], denominator: list[float], dead_time: float
) -> None:
    found = found_for(numerator, denominator, dead_time)
    document = strict(found)
    assert {"document", "version", "system", "equivalents", "chosen", "adequate", "reasons", "response"} <= set(
        document
    )
    assert {"expression", "poles", "zeros", "dead_time_s"} <= set(document["system"])
    assert document["reasons"], kind
    for one in document["equivalents"]:
        keys = {"method", "gain", "damping_ratio", "natural_frequency_rad_s", "dead_time_s", "time_constants_s"}
        assert keys | {"step_error_max_percent", "step_error_rms_percent"} <= set(one)
        assert one["gain"] is not None or one["reason"]
    names = {"overshoot_percent", "peak_time_s", "rise_time_s", "settling_time_s", "delay_time_s", "decay_ratio"}
    assert names <= set(document["response"])
    if document["response"]["overshoot_percent"] is None:
        assert document["response"]["reasons"], kind
    assert (found.best is None) == (found.chosen is None)


def test_tenth_order_is_fast() -> None:
    """All methods of a tenth-order system are under 100 ms on one core; ten times that here, for a busy machine."""
    system = transfer_of(*TENTH, 0.7)
    equivalents_of(RationalSystem(system))  # imports
    begin = clock.process_time()
    equivalents_of(RationalSystem(system))
    assert clock.process_time() - begin < 1.0


@settings(max_examples=10, deadline=None)
@given(
    gain=st.sampled_from([-1.0, 1e-9, 4e6]),
    slower=st.sampled_from([1e-6, 0.01, 60.0, 3.15e7]),
    which=st.sampled_from([0, 1, 4, 22]),
)
def test_units_change_nothing(gain: float, slower: float, which: int) -> None:
    """Another unit of time or of the measurement gives the same equivalents in those units."""
    _, numerator, denominator, dead_time = KINDS[which]
    plain = found_for(numerator, denominator, dead_time)
    powers = [slower**k for k in range(len(denominator) - 1, -1, -1)]
    top = [gain * value * power for value, power in zip(numerator, powers[-len(numerator) :], strict=True)]
    bottom = [value * power for value, power in zip(denominator, powers, strict=True)]
    other = found_for(top, bottom, dead_time * slower)
    assert other.chosen == plain.chosen
    for one, two in zip(plain.equivalents, other.equivalents, strict=True):
        assert one.method == two.method
        if one.exists and one.method not in (choose.DIRECT, choose.DIRECT_ZERO):  # a search stops within its tolerance
            assert two.gain == pytest.approx(gain * (one.gain or 0), rel=1e-6)
            assert two.damping_ratio == pytest.approx(one.damping_ratio, rel=1e-5)
        if not one.exists:
            assert not two.exists
            continue
        assert two.step_error_max_percent == pytest.approx(one.step_error_max_percent, rel=1e-2, abs=1e-6)
        assert two.step_error_rms_percent == pytest.approx(one.step_error_rms_percent, rel=1e-2, abs=1e-6)
    settling = (plain.response.settling_time_s, other.response.settling_time_s)
    assert settling[0] is not None
    assert settling[1] is not None
    assert settling[1].value == pytest.approx(slower * settling[0].value, rel=1e-6)


def test_same_system_same_answer() -> None:
    assert found_for(*TENTH).to_json() == found_for(*TENTH).to_json()


@pytest.mark.parametrize("damping", [0.05, 0.5, 1.0, 3.0])
def test_a_second_order_is_its_own_equivalent(damping: float) -> None:
    found = found_for([6.0 * 0.3, 6.0], [3.0 * 4, 3.0 * 4 * damping, 3.0], 1.5)
    assert found.best is not None
    assert found.adequate
    assert found.chosen == choose.ITSELF
    assert (found.best.gain, found.best.damping_ratio, found.best.natural_frequency_rad_s) == pytest.approx(
        (2, damping, 0.5)
    )
    assert (found.best.dead_time_s, found.best.zero_s, found.best.step_error_max_percent) == pytest.approx(
        (1.5, 0.3, 0)
    )
    assert (found.best.time_constants_s is None) == (damping < 1)


def test_factors_of_s_cancel_and_third_pole_is_seen() -> None:
    # a third pole five times further left still moves the overshoot from 25.0 to 21.6 % (computed apart from this code)
    plain = found_for([245.42, 0.0], [1.0, 14.0, 64.542, 245.42, 0.0])
    assert plain.response.overshoot_percent is not None
    assert plain.response.overshoot_percent.value == pytest.approx(21.648819, rel=1e-7)
    assert plain.adequate


def test_no_second_order_stands_for_a_jump() -> None:
    found = found_for([1.0, 3.0, 1.0], [1.0, 1.2, 1.0])
    assert not found.adequate


def test_integrating_equivalents_are_those_of_the_rest() -> None:
    whole = found_for([1.0], product([1, 0], [1, 1], [1, 1], [0.5, 1]), 0.3)
    rest = found_for([1.0], product([1, 1], [1, 1], [0.5, 1]), 0.3)
    assert whole.equivalents == rest.equivalents
    assert whole.response.settling_time_s is None
    assert any("integrates" in reason for reason in whole.reasons)


def test_unstable_pair_has_a_negative_damping_ratio() -> None:
    found = found_for([1.0], product([1, -0.2, 1], [0.1, 1], [0.2, 1]))
    assert found.best is not None
    assert (found.best.damping_ratio, found.best.natural_frequency_rad_s) == pytest.approx((-0.1, 1), rel=1e-9)
    assert found.best.step_error_max_percent is None
    assert not found.adequate


def test_hidden_unstable_part_is_not_adequate() -> None:
    found = found_for(product([1, -1]), product([1, -1], [1, 1], [1, 2], [1, 3]))
    assert not found.adequate
    assert any("not stable" in reason for reason in found.reasons)


def test_what_was_removed_still_counts_in_the_error() -> None:
    """(1.0005 s + 1)/(s + 1) before a second order; at rest 1, and its own share by hand: at most 0.0005 of the rest."""
    found = found_for([1.0005, 1.0], product([1, 1], [1, 3, 1]))
    assert found.chosen == choose.ITSELF
    assert found.best is not None
    assert found.best.step_error_max_percent is not None
    assert 1e-4 < found.best.step_error_max_percent < 0.05


class NoRationalFunction:
    """A system that has only poles, residues and a response, as a loop around a dead time has."""

    numerator = denominator = None
    integrating, stable = False, True

    def __init__(self, inner: RationalSystem) -> None:
        self.dead_time_s, self.poles, self.zeros = inner.dead_time_s, inner.poles, inner.zeros
        self.residues, self.static_gain, self.step = inner.residues, inner.static_gain, inner.step


def test_systems_without_coefficients_have_dominant_poles_and_the_reference() -> None:
    inner = RationalSystem(transfer_of([245.42], [1.0, 14.0, 64.542, 245.42], 0.4))
    whole, found = equivalents_of(inner), equivalents_of(NoRationalFunction(inner))
    strict(found)
    assert found.response == whole.response
    for one in found.equivalents:
        if one.method in (choose.DOMINANT, choose.DIRECT):
            other = next(each for each in whole.equivalents if each.method == one.method)
            assert one.step_error_rms_percent == pytest.approx(other.step_error_rms_percent, rel=1e-3)
        elif one.method != choose.DIRECT_ZERO:
            assert not one.exists


def entry(method: str, error: float) -> Equivalent:
    return Equivalent(method=method, gain=1.0, step_error_max_percent=error, step_error_rms_percent=error)


RULE = [  # errors of two published methods, of the fit and of the fit with a zero; which is chosen, by the stated rule
    ((3.0, 2.0, 1.5, 1.4), "b"),
    ((0.9, 2.0, 0.1, 0.1), "a"),
    ((3.0, 2.0, 0.9, 0.6), choose.DIRECT),
    ((3.0, 2.0, 1.5, 0.5), choose.DIRECT_ZERO),
    ((6.0, 7.0, 4.9, 4.8), choose.DIRECT),
    ((9.0, 8.0, 7.0, 6.0), "b"),
    ((9.0, 9.0, 7.0, 6.0), "a"),
]


@pytest.mark.parametrize(("errors", "chosen"), RULE)
def test_choice(errors: tuple[float, ...], chosen: str) -> None:
    methods = ("a", "b", choose.DIRECT, choose.DIRECT_ZERO)
    best = chosen_of([entry(*pair) for pair in zip(methods, errors, strict=True)])
    assert best is not None
    assert best.method == chosen


def test_an_integration_with_a_jump_is_its_own_equivalent() -> None:
    """(3 s + 2) / (2 s) = (1.5 s + 1) / s by hand."""
    found = found_for([3.0, 2.0], [2.0, 0.0], 0.7)
    assert found.chosen == choose.ITSELF
    assert found.adequate
    best = found.best
    assert best is not None
    assert (best.gain, best.zero_s, best.dead_time_s) == pytest.approx((1.0, 1.5, 0.7))
    assert best.time_constants_s == ()
    own = transfer_of_equivalent(best, integrating=True)
    assert own(np.array([0.3j])) == pytest.approx((0.45j + 1) / 0.3j * np.exp(-0.21j), rel=1e-12)
    strict(found)


def test_an_integration_with_a_jump_and_a_lag_has_a_reason() -> None:
    found = found_for([1.0, 3.0, 2.0], [1.0, 3.0, 0.0])
    assert found.best is None
    assert not found.adequate
    assert any("jump" in reason for reason in found.reasons)
    strict(found)


def test_a_jump_is_told() -> None:
    """(2 s^2 + s + 4)/(s^2 + s + 1) begins at 2 and comes to 4, by hand: 50 %."""
    found = found_for([2.0, 1.0, 4.0], [1.0, 1.0, 1.0])
    assert any("a jump of 50 % of the final value" in reason for reason in found.reasons)


def test_nothing_is_left_out_of_an_integration_with_two_lags() -> None:
    found = found_for([2.0], product([1, 0], [1, 1], [0.3, 1]), 0.2)
    assert found.chosen == choose.ITSELF
    assert found.best is not None
    assert found.best.step_error_max_percent == 0.0


@pytest.mark.parametrize(
    ("percent", "words"),
    [(0.0, "0"), (6.7e-14, "0"), (0.0123, "0.012"), (4.96, "5"), (99.6, "100"), (4321.0, "4321"), (2e9, "2e+09")],
)
def test_a_share_in_two_figures(percent: float, words: str) -> None:
    assert share_words(percent) == words
