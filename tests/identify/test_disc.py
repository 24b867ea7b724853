"""The uncertainty disc: a known error of the model comes out as its size at each frequency."""

from __future__ import annotations

import numpy as np
import pytest
from recorded_plants import closed_record, many_lags, open_record, plain_fit
from scipy.signal import lsim

from loopfit.identify.disc import disc_of
from loopfit.loop.gains import Gains

TIME = 0.05 * np.arange(1500)
STEP = np.where(np.arange(1500) < 150, 0.0, 1.0)


def test_a_known_error_of_the_model() -> None:
    """Error .3 / (.5 s + 1), its answer to the output by scipy's lsim: the disc has its magnitude, in the lower bands.

    The band of a wavelet of 3 rad is a third of its frequency wide: within a quarter up to where the error falls away.
    """
    left = lsim(([0.3], [0.5, 1.0]), STEP, TIME, interp=False)[1]
    frequency, radius = disc_of(TIME, STEP, left)
    exact = np.abs(0.3 / (0.5j * frequency + 1.0))
    low = frequency < 6.0
    assert low.sum() > 25
    assert radius[low] == pytest.approx(exact[low], rel=0.25)
    assert np.all(radius >= 0.95 * exact)


def test_shape_and_bands() -> None:
    disc = disc_of(TIME, STEP, 0.0 * TIME)
    assert disc.shape == (2, 48)
    assert disc[0, [0, -1]] == pytest.approx([6.0 / 75.0, np.pi / 0.05])
    assert disc[0, 1:] / disc[0, :-1] == pytest.approx(disc[0, 1] / disc[0, 0])
    assert not disc[1].any()
    assert not disc.flags.writeable


def test_in_proportion_to_what_is_left_and_to_the_output() -> None:
    left = np.random.default_rng(1).standard_normal(1500)
    radius = disc_of(TIME, STEP, left)[1]
    assert disc_of(TIME, STEP, 3.0 * left)[1] == pytest.approx(3.0 * radius)
    assert disc_of(TIME, 4.0 * STEP, left)[1] == pytest.approx(0.25 * radius)


def test_a_still_output_says_nothing() -> None:
    assert np.isinf(disc_of(TIME, 0.0 * STEP, TIME)[1]).all()


def test_bands_that_were_never_excited_cost() -> None:
    """A slow ramp holds little of the fast bands: their disc is wider than after a step, with the same noise left."""
    left = 0.01 * np.random.default_rng(2).standard_normal(1500)
    ramp = np.clip((TIME - 7.5) / 20.0, 0.0, 1.0)
    fast = disc_of(TIME, STEP, left)[0] > 5.0
    assert np.all(disc_of(TIME, ramp, left)[1][fast] > 2.0 * disc_of(TIME, STEP, left)[1][fast])


def test_the_disc_holds_the_true_plant() -> None:
    """Plants of three to eight lags fitted as second order, from open and closed records: most bands, nearly wholly."""
    rng = np.random.default_rng(3)
    inside = []
    for _ in range(2):
        plant, total = many_lags(rng)
        for record in (
            open_record(plant, scan_s=total / 40.0, scans=600, rng=rng),
            closed_record(plant, Gains(kp=0.6, ki=0.5 / total), scan_s=total / 40.0, scans=600, rng=rng),
        ):
            model, left = plain_fit(record)
            frequency, radius = disc_of(record.time, record.output, left)
            off = np.abs(plant.transfer(1j * frequency) - model.transfer(1j * frequency))
            inside.append(np.mean(off <= 1.3 * radius))
    assert np.mean(inside) > 0.85


def test_too_few_rows() -> None:
    with pytest.raises(ValueError, match="too few"):
        disc_of(TIME[:10], STEP[:10], STEP[:10])
