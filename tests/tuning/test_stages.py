"""Stages from present to proposed settings, their stability counted anew by another way."""

from __future__ import annotations

import math
from dataclasses import replace
from itertools import pairwise

import numpy as np
import pytest

from loopfit.core.errors import UsageError
from loopfit.loop.gains import Gains
from loopfit.loop.plant import Plant
from loopfit.loop.sampled import sampled_roots
from loopfit.loop.visible import swing_of
from loopfit.tuning.stage_proof import proven_between
from loopfit.tuning.stages import FIRST, Staged, stages


def unstable_roots(plant: Plant, gains: Gains, points: int = 15_001) -> int:
    """Roots on the right of D s (Tf s + 1) + N (kp s (Tf s + 1) + ki (Tf s + 1) + kd s^2) exp(-th s).

    Mikhailov's criterion, the phase summed on a grid far denser than the code's; a factor s stays where ki is 0 and is
    passed by a root at 0, which turns nothing.
    """
    filtered = np.poly1d([gains.filter_s, 1.0]) if gains.kd else np.poly1d([1.0])
    s = np.poly1d([1.0, 0.0])
    if gains.ki:
        acts, below = gains.kp * s * filtered + gains.ki * filtered + gains.kd * s * s, s * filtered
    else:
        acts, below = gains.kp * filtered + gains.kd * s, filtered
    a, b = np.poly1d(plant.denominator) * below, np.poly1d(plant.numerator) * acts
    end = 1e4 * max(1.0, *(np.abs(np.append(a.roots, b.roots)).tolist() or [1.0]))
    w = np.unique(np.concatenate([np.linspace(0.0, 60.0, points), np.geomspace(1e-6, end, points)]))
    value = a(1j * w) + b(1j * w) * np.exp(-1j * w * plant.dead_time_s)
    turn = np.angle(value[1:] / value[:-1])
    if np.abs(turn).max() > 1.0:  # too coarse for this loop
        assert points < 1_000_000
        return unstable_roots(plant, gains, 8 * points)
    return round((0.5 * math.pi * a.order - float(turn.sum())) / math.pi)


def between(before: Gains, after: Gains, share: float) -> Gains:
    kp, ki, kd = (
        getattr(before, name) + float(share) * (getattr(after, name) - getattr(before, name))
        for name in ("kp", "ki", "kd")
    )
    filter_s = (after if before.kd == 0.0 else before).filter_s
    return Gains(kp=kp, ki=ki, kd=kd, filter_s=filter_s if kd else 0.0)


def random_plant(rng: np.random.Generator) -> Plant:
    dead = float(rng.uniform(0.0, 2.0))
    if rng.random() < 0.25:
        return Plant(gain=1.0, time_constants_s=(float(rng.uniform(0.1, 2.0)),), integrating=True, dead_time_s=dead)
    damping = float(np.exp(rng.uniform(math.log(0.2), math.log(4.0))))
    return Plant(gain=-1.0, damping_ratio=damping, natural_frequency_rad_s=1.0, dead_time_s=dead)


def random_gains(rng: np.random.Generator, plant: Plant) -> Gains:
    kp = math.copysign(float(np.exp(rng.uniform(-3.0, 1.0))), plant.gain) / (1.0 + plant.dead_time_s)
    kd = kp * float(np.exp(rng.uniform(-2.0, 0.7))) if rng.random() < 0.5 else 0.0
    return Gains(kp=kp, ki=kp / float(np.exp(rng.uniform(-0.5, 2.3))), kd=kd, filter_s=0.05 if kd else 0.0)


def random_pairs(seed: int, count: int) -> list[tuple[Plant, Gains, Gains]]:
    rng, out = np.random.default_rng(seed), []
    while len(out) < count:
        plant = random_plant(rng)
        found: list[Gains] = []
        for _ in range(60):
            gains = random_gains(rng, plant)
            swing = swing_of(plant, gains)
            if swing.stable and swing.design_damping > (0.1 if not found else 0.5):
                found.append(gains)
            if len(found) == 2:
                out.append((plant, found[0], found[1]))
                break
    return out


def settings_of(gains: Gains) -> list[float]:
    return [gains.kp, gains.ki, gains.kd, gains.ki / gains.kp, gains.kd / gains.kp]


PAIRS = random_pairs(11, 16)


@pytest.mark.parametrize(("plant", "present", "proposed"), PAIRS)
def test_no_stage_and_nothing_between_is_unstable(plant: Plant, present: Gains, proposed: Gains) -> None:
    staged = stages(plant, present, proposed)
    assert staged.stages[-1].gains == proposed
    assert 1 <= len(staged.stages) <= 5
    assert all(stage.proven and not stage.in_manual for stage in staged.stages)
    points = [present, *(stage.gains for stage in staged.stages)]
    for stage, before, after in zip(staged.stages, points, points[1:], strict=False):
        assert stage.restore == before
        for share in (0.25, 0.5, 0.75, 1.0):
            assert unstable_roots(plant, between(before, after, share)) == 0
    worse = min(swing_of(plant, gains).design_damping for gains in (present, proposed))
    assert staged.dips is not None or all(stage.swing.design_damping >= worse - 0.02 for stage in staged.stages)


@pytest.mark.parametrize(("plant", "present", "proposed"), PAIRS)
def test_no_stage_changes_a_gain_or_time_much_more_than_twofold(plant: Plant, present: Gains, proposed: Gains) -> None:
    staged = stages(plant, present, proposed)
    whole = max(
        abs(math.log(y / x)) for x, y in zip(settings_of(present), settings_of(proposed), strict=True) if x and y
    )
    # where five stages are too few, and in the lattice, a stage may take two fifths of the whole
    most = max(math.log(2.0), 0.4 * whole) + 1e-9
    points = [present, *(stage.gains for stage in staged.stages)]
    ends = list(zip(settings_of(present), settings_of(proposed), strict=True))
    for before, after in pairwise(points):
        for (x, y), (first, last) in zip(zip(settings_of(before), settings_of(after), strict=True), ends, strict=True):
            if first and last:  # a term that appears or goes does so in equal parts
                assert abs(math.log(y / x)) <= most


def test_small_changes_go_in_one_stage() -> None:
    plant = Plant(gain=1.0, time_constants_s=(5.0,), dead_time_s=1.0)
    assert len(stages(plant, Gains(kp=2.0, ki=0.4), Gains(kp=2.2, ki=0.4)).stages) == 1


def test_the_proof_ends_where_the_limit_of_stability_is() -> None:
    # k exp(-th s) / s is stable up to k kp th = pi / 2, by hand
    plant = Plant(gain=2.0, integrating=True, dead_time_s=0.5)
    assert proven_between(plant, Gains(kp=0.5), Gains(kp=0.999 * math.pi / 2.0))
    assert not proven_between(plant, Gains(kp=0.5), Gains(kp=1.001 * math.pi / 2.0))


def test_the_proof_holds_where_an_integral_appears_with_the_right_sign_only() -> None:
    plant = Plant(gain=1.0, time_constants_s=(1.0,), dead_time_s=0.2)
    assert proven_between(plant, Gains(kp=1.0), Gains(kp=1.0, ki=1.0))
    assert not proven_between(plant, Gains(kp=1.0), Gains(kp=1.0, ki=-0.1))
    # pure integration: s^2 + k kp s + k ki is stable for all positive gains
    integrating = Plant(gain=1.0, integrating=True)
    assert proven_between(integrating, Gains(kp=1.0), Gains(kp=0.3, ki=5.0))


def test_nothing_proven_has_a_root_crossing() -> None:
    """Random segments, unstable ends among them: what is proven keeps its number of roots on the right all along."""
    rng = np.random.default_rng(5)
    proven = crossing = 0
    for _ in range(50):
        plant = random_plant(rng)
        before, after = random_gains(rng, plant), random_gains(rng, plant)
        counts = {unstable_roots(plant, between(before, after, share)) for share in np.linspace(0.0, 0.999, 7)}
        if len(counts) > 1:
            crossing += 1
        if proven_between(plant, before, replace(after, filter_s=before.filter_s or after.filter_s)):
            proven += 1
            assert len(counts) == 1
    assert proven >= 10
    assert crossing >= 10


def test_pi_to_pid_says_which_stage_brings_the_derivative_and_its_filter() -> None:
    plant = Plant(gain=2.0, time_constants_s=(10.0, 3.0), dead_time_s=2.0)
    staged = stages(plant, Gains(kp=1.5, ki=0.2), Gains(kp=1.5, ki=0.1, kd=2.0, filter_s=0.3, setpoint_weight=0.6))
    first, last = staged.stages[0], staged.stages[-1]
    assert {"derivative", "derivative filter"} <= set(first.moves)
    assert first.gains.kd == pytest.approx(2.0 / len(staged.stages))
    assert "derivative filter" not in last.moves
    assert "gain" not in last.moves
    # the weight moves in the last stage alone
    assert ["setpoint weight" in stage.moves for stage in staged.stages] == [False] * (len(staged.stages) - 1) + [True]
    back = stages(plant, Gains(kp=1.5, ki=0.1, kd=2.0, filter_s=0.3), Gains(kp=1.2, ki=0.1))
    assert all(stage.proven for stage in back.stages)
    assert back.stages[-1].gains == Gains(kp=1.2, ki=0.1)


@pytest.mark.parametrize("filters", [(0.1, 0.5), (0.5, 0.1)])
def test_a_filter_that_differs_moves_at_one_stage(filters: tuple[float, float]) -> None:
    plant = Plant(gain=2.0, time_constants_s=(10.0, 3.0), dead_time_s=2.0)
    present = Gains(kp=0.7, ki=0.05, kd=0.6, filter_s=filters[0])
    staged = stages(plant, present, Gains(kp=1.5, ki=0.1, kd=2.0, filter_s=filters[1]))
    assert sum("derivative filter" in stage.moves for stage in staged.stages) == 1
    assert all(stage.proven for stage in staged.stages)


def test_an_unstable_present_loop_is_left_in_manual() -> None:
    plant = Plant(gain=1.0, time_constants_s=(5.0,), dead_time_s=2.0)
    present, proposed = Gains(kp=6.0, ki=2.0), Gains(kp=1.0, ki=0.2)
    assert unstable_roots(plant, present) > 0
    staged = stages(plant, present, proposed)
    assert staged.reason is not None
    assert "unstable" in staged.reason
    assert "manual" in staged.reason
    first, *rest = staged.stages
    assert first.in_manual
    assert not first.proven
    assert first.restore is None
    assert "leave the loop in manual" in first.stop
    assert all(stage.proven and not stage.in_manual for stage in rest)
    assert all(unstable_roots(plant, stage.gains) == 0 for stage in staged.stages)
    assert staged.stages[-1].gains == proposed


def test_unknown_settings_start_low_where_that_is_as_well_damped() -> None:
    plant = Plant(gain=1.0, time_constants_s=(5.0,), dead_time_s=2.0)
    proposed = Gains(kp=1.0, ki=0.2)
    first, last = stages(plant, None, proposed).stages
    assert (first.gains.kp, first.gains.ki) == pytest.approx((0.5, 0.1))
    assert first.in_manual
    assert last.gains == proposed
    # an integrating plant, k kp Ti = 4: half of both gives a damping ratio of 0.71 for 1 (0.5 sqrt(k kp Ti)), so that
    # the integral has to be quartered for half the gain
    integrating = Plant(gain=1.0, integrating=True)
    first, _ = stages(integrating, None, Gains(kp=1.0, ki=0.25)).stages
    assert (first.gains.kp, first.gains.ki) == pytest.approx((0.5, 0.0625))


def test_unknown_settings_without_a_gentler_start_give_no_stages() -> None:
    # 1 / (s - 1) under P is stable above a gain of 1 only: neither half of the gain nor the same one is gentler
    from loopfit.model.transfer import transfer_of

    plant = Plant.of_transfer(transfer_of([1.0], [1.0, -1.0]))
    staged = stages(plant, None, Gains(kp=1.5))
    assert staged.stages == ()
    assert staged.reason is not None
    assert "no gentler start" in staged.reason


def test_a_gain_of_the_opposite_sign_has_no_gradual_way() -> None:
    plant = Plant(gain=1.0, time_constants_s=(5.0,), dead_time_s=2.0)
    staged = stages(plant, Gains(kp=-1.0, ki=-0.2), Gains(kp=1.0, ki=0.2))
    assert staged.reason is not None
    assert "sign" in staged.reason
    assert staged.stages[0].in_manual


def test_a_way_that_cannot_but_dip_says_so() -> None:
    # only the derivative moves, and the damping between the ends is worse than at both (found by search)
    plant = Plant(
        gain=1.0, damping_ratio=0.9145095984701521, natural_frequency_rad_s=1.0, dead_time_s=1.3343389343208196
    )
    present = Gains(kp=0.3538649147711413, ki=0.05353222756192466, kd=0.4838438041910398, filter_s=0.07003016802962458)
    proposed = replace(present, kd=1.9318354660484096 * present.kd)
    staged = stages(plant, present, proposed)
    worse = min(swing_of(plant, gains).design_damping for gains in (present, proposed))
    lowest = min(stage.swing.design_damping for stage in staged.stages)
    assert lowest < worse - 0.02
    assert staged.dips is not None
    assert f"damping ratio {lowest:.2f} against {worse:.2f}" in staged.dips
    assert f"{worse - lowest:.2f} less" in staged.dips
    assert all(stage.proven for stage in staged.stages)


def test_the_lattice_finds_a_way_that_the_plain_paths_miss() -> None:
    # found by search: geometric, straight and straight in the times dip, one gain after the other does not
    plant = Plant(
        gain=1.0, damping_ratio=3.128422168353202, natural_frequency_rad_s=1.0, dead_time_s=0.7280655390755237
    )
    staged = stages(plant, Gains(kp=0.11484292, ki=0.05608368), Gains(kp=2.3758253, ki=0.66931617))
    share = [
        (math.log(stage.gains.kp / 0.11484292) / math.log(2.3758253 / 0.11484292),
         math.log(stage.gains.ki / 0.05608368) / math.log(0.66931617 / 0.05608368))
        for stage in staged.stages
    ]  # fmt: skip
    assert any(abs(x - y) > 0.1 for x, y in share)
    assert staged.dips is None
    assert all(stage.proven for stage in staged.stages)


def test_stages_of_a_sampled_loop_are_stable_by_its_own_roots() -> None:
    plant = Plant(gain=2.0, time_constants_s=(10.0, 3.0), dead_time_s=2.0)
    staged = stages(plant, Gains(kp=1.5, ki=0.15), Gains(kp=0.8, ki=0.05), scan_s=1.0, late=True)
    assert all(stage.proven for stage in staged.stages)
    for stage in staged.stages:
        assert abs(sampled_roots(plant, stage.gains, 1.0, late=True)[0]) < 1.0
    # the scan is felt: the same stage swings more than in the continuous loop
    assert staged.stages[0].swing.visible_swing > swing_of(plant, staged.stages[0].gains).visible_swing


def test_draws_give_the_share_that_is_stable_and_when_to_stop() -> None:
    # k kp th < pi / 2 decides: gains of 1 and 1.2 hold at kp = 1.2, those of 1.4 and 1.6 do not
    plant = Plant(gain=1.0, integrating=True, dead_time_s=1.0)
    draws = [replace(plant, gain=gain) for gain in (1.0, 1.2, 1.4, 1.6)]
    first, last = stages(plant, Gains(kp=0.3), Gains(kp=1.2), draws=draws).stages
    assert first.probability_stable == 1.0
    assert last.probability_stable == 0.5
    alone = stages(plant, Gains(kp=0.3), Gains(kp=1.2)).stages[0]
    assert alone.probability_stable is None
    assert alone.stop_swing == pytest.approx(alone.swing.visible_swing + 0.1)
    assert first.stop_swing > alone.stop_swing


def test_order_within_a_stage_is_free_only_where_every_mixture_is_stable() -> None:
    # without dead time every PI of positive gains holds an integration; with it a high gain and a short time do not
    free = stages(Plant(gain=1.0, integrating=True), Gains(kp=1.0, ki=0.2), Gains(kp=1.9, ki=0.9)).stages
    assert all(stage.any_order for stage in free)
    plant = Plant(gain=1.0, integrating=True, dead_time_s=1.0)
    present, proposed = Gains(kp=1.5, ki=0.15), Gains(kp=0.75, ki=0.15)
    tight = stages(plant, present, proposed).stages
    points = [present, *(stage.gains for stage in tight)]
    for stage, a, b in zip(tight, points, points[1:], strict=False):
        mixed = [Gains(kp=a.kp, ki=a.kp * b.ki / b.kp), Gains(kp=b.kp, ki=b.kp * a.ki / a.kp)]
        assert stage.any_order == all(unstable_roots(plant, gains) == 0 for gains in mixed)
    assert not tight[0].any_order


def test_words_for_the_person() -> None:
    plant = Plant(gain=1.0, time_constants_s=(5.0,), dead_time_s=2.0)
    staged = stages(plant, Gains(kp=2.0, ki=0.4), Gains(kp=0.7, ki=0.14))
    assert "Write down" in FIRST
    first, last = staged.stages[0], staged.stages[-1]
    assert f"{100 * first.swing.visible_swing:.0f} %" in first.expect
    assert "put the earlier settings back" in first.stop
    assert "no swing" in last.expect
    assert last.swing.visible_swing < 0.005


def test_nothing_to_do_and_nothing_to_go_to() -> None:
    plant = Plant(gain=1.0, time_constants_s=(5.0,), dead_time_s=2.0)
    same = stages(plant, Gains(kp=1.0), Gains(kp=1.0))
    assert isinstance(same, Staged)
    assert same.stages == ()
    assert same.reason is not None
    with pytest.raises(UsageError, match="do not hold"):
        stages(plant, Gains(kp=1.0), Gains(kp=30.0))
