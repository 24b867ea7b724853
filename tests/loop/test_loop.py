"""A loop as a user meets it: what the parts say is what the whole says."""

from __future__ import annotations

import math

import control
import numpy as np
import pytest

import loopfit
from loopfit.equivalents.choose import equivalents_of


def test_integrator_under_pi_has_the_textbook_damping() -> None:
    """zeta = sqrt(k Kc Ti) / 2 (Seborg, Edgar, Mellichamp, Process Dynamics and Control, ch. 12, from memory); no dead time."""
    loop = loopfit.Loop(
        loopfit.Plant(gain=0.5, integrating=True), loopfit.Settings("ideal", gain=0.8, integral_time_s=4.0)
    )
    zeta = math.sqrt(0.5 * 0.8 * 4.0) / 2.0
    assert loop.damping_ratio == pytest.approx(zeta, rel=1e-9)
    assert loop.design_damping == pytest.approx(zeta, rel=1e-9)
    assert loop.stable


def test_closed_loop_is_that_of_a_high_pade_order() -> None:
    """python-control, Pade of order 12: step response to 2e-4, poles near ours to 1e-4, residues by them."""
    plant = loopfit.Plant(gain=1.0, time_constants_s=(1.0, 0.4), dead_time_s=0.5)
    loop = loopfit.Loop(plant, loopfit.Settings("ideal", gain=1.1, integral_time_s=1.2))
    num, den = control.pade(0.5, 12)
    process = control.tf([1.0], np.convolve([1.0, 1.0], [0.4, 1.0])) * control.tf(num, den)
    closed = control.feedback(process * control.tf([1.1 * 1.2, 1.1], [1.2, 0.0]), 1)
    time = np.linspace(0.0, 15.0, 301)
    assert loop.respond(time).measurement == pytest.approx(control.step_response(closed, time).outputs, abs=2e-4)
    theirs = control.poles(closed)
    for root in loop.closed.poles[:3]:
        assert np.min(np.abs(theirs - root)) < 1e-4 * abs(root)
    # the response is what the poles with their residues make of it, once the first moments have passed
    s, residues = loop.closed.poles, loop.closed.residues
    late = time[time > 2.0]
    made = 1.0 + (residues / s * np.exp(np.outer(late - 0.5, s))).sum(axis=1).real
    assert made == pytest.approx(loop.respond(late).measurement, abs=1e-3)


def test_equivalent_of_a_loop_says_what_the_loop_does() -> None:
    loop = loopfit.Loop(
        loopfit.Plant(gain=1.0, time_constants_s=(1.0,), dead_time_s=0.5),
        loopfit.Settings("ideal", gain=1.2, integral_time_s=1.0),
    )
    found = equivalents_of(loop.closed)
    assert found.adequate
    exact = loop.respond(np.linspace(0.0, 20.0, 20001)).measurement
    assert found.response.overshoot_percent.value == pytest.approx(100.0 * (exact.max() - 1.0), abs=1e-3)


def test_scan_interval_lowers_the_damping() -> None:
    """A sampled controller answers later: common practice adds half a scan interval to the dead time."""
    plant = loopfit.Plant(gain=1.0, time_constants_s=(2.0,), dead_time_s=0.5)
    calm = loopfit.Loop(plant, loopfit.Settings("ideal", gain=1.5, integral_time_s=2.0))
    scanned = loopfit.Loop(plant, loopfit.Settings("ideal", gain=1.5, integral_time_s=2.0, scan_s=0.4))
    late = loopfit.Loop(
        loopfit.Plant(gain=1.0, time_constants_s=(2.0,), dead_time_s=0.7),
        loopfit.Settings("ideal", gain=1.5, integral_time_s=2.0),
    )
    assert scanned.damping_ratio < calm.damping_ratio
    assert scanned.damping_ratio == pytest.approx(late.damping_ratio, abs=0.05)


@pytest.mark.parametrize("wrong", [0.5, None, "plant"])
def test_what_is_no_plant_is_refused(wrong: object) -> None:
    with pytest.raises(loopfit.UsageError, match="needs a Plant"):
        loopfit.Loop(wrong, loopfit.Settings("ideal", gain=1.0))  # type: ignore[arg-type]
