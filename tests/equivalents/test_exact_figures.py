"""Figures of the exact response against printed values, laws and a fine reading by scipy."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.optimize import brentq
from scipy.special import gammaincinv

from loopfit.core.quantity import Quantity
from loopfit.equivalents.course import course_of
from loopfit.equivalents.response import figures_of
from loopfit.equivalents.result import ExactFigures
from loopfit.equivalents.system import RationalSystem
from loopfit.model.transfer import transfer_of


def figures(
    numerator: Sequence[float], denominator: Sequence[float], dead_time: float = 0.0, band: float = 2.0
) -> ExactFigures:
    system = RationalSystem(transfer_of(numerator, denominator, dead_time))
    assert system.static_gain is not None
    return figures_of(system, course_of(system, system.static_gain), band)


def value(quantity: Quantity | None) -> float:
    assert quantity is not None
    assert quantity.low == quantity.value == quantity.high
    return quantity.value


# computed to full precision apart from this code (no printed source): a pair (zeta 0.404, wn 4.954) alone and with a third
# pole at -10 and at -3; Nise, Control Systems Engineering, 6th ed. 2011, Example 4.8 has the pair
TABLE = [
    ([24.542], [1.0, 4.0, 24.542], {"rise": 0.29659575, "settle_2": 1.6973107, "settle_5": 1.5289113, "settle_1": 2.2816024, "peak_time": 0.69315205, "overshoot": 24.999757, "delay": 0.24983319, "decay": 0.062498783}),
    ([245.42], [1.0, 14.0, 64.542, 245.42], {"rise": 0.33947403, "settle_2": 1.7939973, "settle_5": 1.5840208, "peak_time": 0.80705113, "overshoot": 21.648819, "peak": 1.2164882}),
    ([73.626], [1.0, 7.0, 36.542, 73.626], {"rise": 0.52589133, "settle_2": 1.8628876, "settle_5": 0.81606717, "peak_time": 1.0673804, "overshoot": 3.6997119, "peak": 1.0369971}),
]  # fmt: skip


@pytest.mark.parametrize(("numerator", "denominator", "expected"), TABLE)
@pytest.mark.parametrize("dead_time", [0.0, 1.25])
def test_figures_as_computed_elsewhere(
    numerator: list[float], denominator: list[float], expected: dict[str, float], dead_time: float
) -> None:
    whole = figures(numerator, denominator, dead_time)
    found = {
        "rise": value(whole.rise_time_s),
        "peak_time": value(whole.peak_time_s) - dead_time,
        "overshoot": value(whole.overshoot_percent),
        "peak": value(whole.peak_value),
        "delay": value(whole.delay_time_s) - dead_time,
        "decay": value(whole.decay_ratio),
    }
    for band in (1, 2, 5):
        settling = figures(numerator, denominator, dead_time, band).settling_time_s
        found[f"settle_{band}"] = value(settling) - dead_time
    for name, printed in expected.items():
        assert found[name] == pytest.approx(printed, rel=1e-7), name  # eight digits are given


@given(damping=st.floats(0.02, 0.7), wn=st.floats(0.01, 100), gain=st.sampled_from([-4.0, 1.0]))
def test_swinging_pair_obeys_its_laws(damping: float, wn: float, gain: float) -> None:
    """Overshoot, peak time and decay ratio of an underdamped pair: closed forms of any text (e.g. Ogata, section 5-3)."""
    found = figures([gain], [1 / wn**2, 2 * damping / wn, 1.0])
    root = math.sqrt(1 - damping**2)
    assert value(found.overshoot_percent) == pytest.approx(100 * math.exp(-math.pi * damping / root), rel=1e-8)
    assert value(found.peak_time_s) == pytest.approx(math.pi / (wn * root), rel=1e-7)
    assert value(found.decay_ratio) == pytest.approx(math.exp(-2 * math.pi * damping / root), rel=1e-6)


@pytest.mark.parametrize("lags", [1, 2, 4, 8, 20])
def test_equal_lags_have_the_quantiles_of_the_gamma_distribution(lags: int) -> None:
    found = figures([2.0], np.poly([-1.0] * lags).tolist(), 0.5)
    quantile = {p: float(gammaincinv(lags, p)) for p in (0.1, 0.5, 0.9, 0.98)}
    assert value(found.rise_time_s) == pytest.approx(quantile[0.9] - quantile[0.1], rel=1e-9)
    assert value(found.delay_time_s) == pytest.approx(0.5 + quantile[0.5], rel=1e-9)
    assert value(found.settling_time_s) == pytest.approx(0.5 + quantile[0.98], rel=1e-9)
    assert value(found.overshoot_percent) == 0
    assert found.peak_time_s is None
    assert found.decay_ratio is None
    assert len(found.reasons) == 2


@pytest.mark.parametrize("damping", [0.003, 0.02, 0.2, 0.3, 0.45, 0.7797, 0.779, 0.9])
def test_settling_is_the_last_entry(damping: float) -> None:
    """Of the closed form: the last extreme outside the band, then its crossing by scipy."""
    root, band = math.sqrt(1 - damping**2), 0.02

    def deviation(t: float) -> float:
        return -math.exp(-damping * t) * (math.cos(root * t) + damping / root * math.sin(root * t))

    extremes = [k * math.pi / root for k in range(3000)]
    last = max(t for t in extremes if abs(deviation(t)) > band)
    edge = math.copysign(band, deviation(last))
    expected = brentq(lambda t: deviation(t) - edge, last, last + math.pi / root, xtol=1e-13)
    assert value(figures([1.0], [1.0, 2 * damping, 1.0]).settling_time_s) == pytest.approx(expected, rel=1e-8)


def test_a_jump_is_its_own_peak() -> None:
    found = figures([3.0, 1.0], [1.0, 1.0], 2.0)  # 1 + 2 exp(-t)
    assert value(found.overshoot_percent) == pytest.approx(200, rel=1e-12)
    assert value(found.peak_time_s) == pytest.approx(2, rel=1e-12)
    assert value(found.rise_time_s) == 0
    assert value(found.settling_time_s) == pytest.approx(2 + math.log(100), rel=1e-10)


def test_largest_excursion_may_be_a_later_peak() -> None:
    """A slow lag under a lively pair: overshoot is the highest peak, peak time that of the first."""
    denominator = np.convolve(np.convolve([1, 0.02, 1], [0.1, 0.2, 1]), [5, 1]).tolist()
    found = figures([1.0], denominator)
    time = np.linspace(0, 100, 400001)
    y = RationalSystem(transfer_of([1.0], denominator)).step(time)
    assert value(found.peak_value) == pytest.approx(y.max(), rel=0, abs=1e-8)
    first = int(np.argmax((y[1:-1] > y[:-2]) & (y[1:-1] >= y[2:]) & (y[1:-1] > 1))) + 1
    assert value(found.peak_time_s) == pytest.approx(time[first], rel=0, abs=2 * time[1])


def test_samples_that_only_rounding_tells_apart_are_no_second_peak() -> None:
    """The lags have died out by the first peak (e^-9.7 = 6e-5), so that the decay is that of the pair: any text's closed form."""
    found = figures([1.0, 2.0], np.polymul([1.0, 0.4, 1.0], [1.0, 8.0, 15.0]).tolist())
    assert value(found.decay_ratio) == pytest.approx(math.exp(-2 * math.pi * 0.2 / math.sqrt(0.96)), rel=1e-3)


@given(
    damping=st.floats(0.05, 0.5),
    fast=st.lists(st.sampled_from([6.0, 7.0, 9.0, 12.0, 15.0]), min_size=1, max_size=4, unique=True),
)
def test_decay_ratio_is_that_of_the_slow_pair(damping: float, fast: list[float]) -> None:
    """Lags of at most 1/6 s beside a pair of 1 rad/s: at the first peak, 3 s or later, e^-18 is left of them."""
    found = figures([1.0], np.polymul([1.0, 2 * damping, 1.0], np.poly([-rate for rate in fast])).tolist())
    expected = math.exp(-2 * math.pi * damping / math.sqrt(1 - damping**2))
    assert value(found.decay_ratio) == pytest.approx(expected, rel=1e-5)
