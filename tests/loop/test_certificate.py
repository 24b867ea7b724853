"""No root is missed: counts by the argument principle against counts written otherwise."""

from __future__ import annotations

import numpy as np
import pytest
from random_loops import Loop, count_in_rectangle, random_loops

from loopfit.core.errors import UsageError
from loopfit.loop.certificate import certified_roots, count_right_of, stable_among
from loopfit.loop.gains import Gains
from loopfit.loop.plant import Plant
from loopfit.loop.roots import all_found, characteristic


def missed(loops: list[Loop]) -> list[str]:
    """Loops whose certificate says no, or whose roots another count or a much finer line does not confirm."""
    out = []
    for plant, gains in loops:
        function = characteristic(plant, gains)
        certified = certified_roots(function)
        if not certified.complete:
            out.append(f"not certified: {plant}, {gains}")
            continue
        line = certified.right_of
        if not np.isfinite(line):  # a polynomial, all its roots found
            line = float(certified.roots.real.min()) - 0.5
        mine = certified.roots[certified.roots.real > line]
        if count_in_rectangle(plant, gains, line) != len(mine):
            out.append(f"rectangle: {plant}, {gains}")
        if plant.dead_time_s > 0.0:
            finer = all_found(function, 60) / function.unit_s
            finer = np.sort_complex(finer[finer.real > line])
            upper = np.sort_complex(mine[mine.imag >= 0.0])
            # 1e-6 of the root: roots are polished to 1e-8 of f; a double root holds half the digits
            if len(finer) != len(upper) or (np.abs(finer - upper) > 1e-6 * np.abs(upper)).any():
                out.append(f"60 nodes: {plant}, {gains}")
    return out


def test_no_root_missed_in_100_random_loops() -> None:
    assert missed(random_loops(3, 100)) == []


@pytest.mark.study
def test_no_root_missed_in_1000_random_loops() -> None:
    loops = random_loops(4, 1000)
    unstable = sum(not certified_roots(characteristic(*loop)).roots[0].real < 0.0 for loop in loops)
    assert unstable > 100  # the set does reach beyond the limit
    assert missed(loops) == []


@pytest.mark.parametrize("dead_time", [1e-6, 1e-3, 10.0, 30.0, 100.0])
def test_dead_times_far_from_the_lag(dead_time: float) -> None:
    rng = np.random.default_rng(8)
    for _ in range(12):
        plant = Plant(
            gain=1.0, damping_ratio=float(rng.uniform(0.2, 2.0)), natural_frequency_rad_s=1.0, dead_time_s=dead_time
        )
        gains = Gains(kp=float(rng.uniform(0.05, 0.6)), ki=float(rng.uniform(0.1, 0.6)) / (1.0 + dead_time))
        certified = certified_roots(characteristic(plant, gains))
        assert certified.complete
        line = certified.right_of
        assert count_in_rectangle(plant, gains, line) == int((certified.roots.real > line).sum())


def test_finer_lines_are_taken_where_16_nodes_do_not_do() -> None:
    # a hardly damped plant turns 10 times within its dead time: 16 nodes do not resolve that
    plant = Plant(gain=1.0, damping_ratio=0.1, natural_frequency_rad_s=1.0, dead_time_s=60.0)
    gains = Gains(kp=0.3, ki=0.01)
    function = characteristic(plant, gains)
    certified = certified_roots(function)
    assert certified.complete
    assert certified.nodes > 16
    assert count_in_rectangle(plant, gains, certified.right_of) == int(
        (certified.roots.real > certified.right_of).sum()
    )


def test_counts_in_extended_precision() -> None:
    """At lines through the spectrum, 64-bit mantissa where the platform has it."""
    for plant, gains in random_loops(21, 4):
        function = characteristic(plant, gains)
        real = np.unique(np.round(certified_roots(function).roots.real, 9))
        for line in 0.5 * (real[1:] + real[:-1]):
            assert count_right_of(function, line) == count_in_rectangle(plant, gains, line, np.clongdouble)


@pytest.mark.parametrize(("gain", "unstable"), [(7.99, 0), (8.01, 2)])
def test_cube_of_lags_is_unstable_above_8(gain: float, unstable: int) -> None:
    """1 / (s + 1)^3, ultimate gain 8 (every text; (jw + 1)^3 = -8 at w = sqrt 3)."""
    function = characteristic(Plant(gain=1.0, time_constants_s=(1.0, 1.0, 1.0)), Gains(kp=gain))
    assert count_right_of(function, 0.0) == unstable


def test_count_between_the_branches_of_lambert() -> None:
    """exp(-s) / s with P: s = W_k(-K); the pairs of K = 1 have real parts -0.318, -2.062, -2.653 (Corless et al., 1996)."""
    from scipy.special import lambertw

    function = characteristic(Plant(gain=1.0, integrating=True, dead_time_s=1.0), Gains(kp=1.0))
    real = [float(lambertw(-1.0, k).real) for k in range(6)]
    for k in range(5):
        assert count_right_of(function, 0.5 * (real[k] + real[k + 1])) == 2 * (k + 1)


def test_a_root_on_the_line_is_said() -> None:
    function = characteristic(Plant(gain=1.0, integrating=True), Gains(kp=2.0))
    with pytest.raises(UsageError, match="on the line"):
        count_right_of(function, -2.0)


def test_infinitely_many_roots_are_said() -> None:
    function = characteristic(Plant(gain=1.0, dead_time_s=1.0), Gains(kp=0.5))
    assert count_right_of(function, -0.5) == 0
    with pytest.raises(UsageError, match="infinitely many"):
        count_right_of(function, -0.7)  # all lie on ln 0.5 = -0.693


def test_many_gains_at_once_as_one_by_one() -> None:
    rng = np.random.default_rng(12)
    some = every = 0
    for plant, _ in random_loops(13, 6):
        kp = np.exp(rng.uniform(-3.5, 2.3, 60))
        ki, kd, none = kp * np.exp(rng.uniform(-3.0, 1.0, 60)), kp * rng.uniform(0.05, 0.6, 60), np.zeros(60)
        filter_s = 0.03 * (1.0 + plant.dead_time_s)
        for sets in ((kp, ki, kd, filter_s), (kp, ki, none, 0.0), (none, ki, none, 0.0)):
            stable = stable_among(plant, *sets)
            for k in range(60):
                gains = Gains(kp=sets[0][k], ki=sets[1][k], kd=sets[2][k], filter_s=sets[3])
                try:
                    function = characteristic(plant, gains)
                except UsageError:
                    assert not stable[k]
                    continue
                assert stable[k] == (all_found(function, 32)[0].real < 0.0)
                some += int(stable.sum())
                every += 60
    assert 0.1 * every < some < 0.9 * every
