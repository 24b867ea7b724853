"""Exact figures of a release against the matrix exponential and laws."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from scipy.linalg import expm

from loopfit.figures.release import release_crossings, release_settling_time, release_value
from loopfit.figures.unit_step import settling_time

shapes = st.floats(0.01, 400)
ratios = st.one_of(st.just(0.0), st.floats(-4, 4))


def reference(x: float, shape: float, ratio: float) -> float:
    """Return the motion by the matrix exponential (scipy), from y = 1 and y' = ratio/r."""
    return float((expm(np.array([[0, 1], [-1 / shape, -1 / shape]]) * x) @ np.array([1.0, ratio / shape]))[0])


@given(shape=shapes, ratio=ratios, x=st.floats(0, 10))
def test_value(shape: float, ratio: float, x: float) -> None:
    assert float(release_value(x, shape, ratio)) == pytest.approx(reference(x, shape, ratio), rel=1e-8, abs=1e-9)


@given(shape=shapes, ratio=ratios, band=st.floats(0.002, 0.5))
def test_settling_is_the_last_entry(shape: float, ratio: float, band: float) -> None:
    settled = float(release_settling_time(shape, band, ratio))
    assert abs(reference(settled, shape, ratio)) == pytest.approx(band, rel=1e-6)
    later = settled * np.linspace(1, 3, 400)[1:] + 1e-6
    assert np.all(np.abs(release_value(later, shape, ratio)) <= band * (1 + 1e-9))


@given(shape=shapes, band=st.floats(0.002, 0.5))
def test_let_go_from_rest_it_is_the_error_of_the_step(shape: float, band: float) -> None:
    assert release_settling_time(shape, band) == settling_time(shape, band)


@given(shape=st.floats(0.0, 0.25), ratio=ratios)
def test_with_real_lags_it_passes_rest_at_most_once(shape: float, ratio: float) -> None:
    slower = (1 + np.sqrt(1 - 4 * shape)) / 2  # thrown back faster than the slower lag alone moves: y' < -y/T1
    assume(abs(ratio + slower) > 1e-9)  # rounding decides there
    assert float(release_crossings(shape, ratio)) == (1 if ratio < -slower else 0)


@given(shape=st.floats(0.3, 30), ratio=ratios, band=st.floats(0.01, 0.5))
def test_passages_of_a_swinging_motion_are_those_that_leave_the_band_again(
    shape: float, ratio: float, band: float
) -> None:
    end = float(release_settling_time(shape, band, ratio))
    motion = np.asarray(release_value(np.linspace(0, end, 20001), shape, ratio))
    changes = np.count_nonzero(np.diff(np.sign(motion[np.abs(motion) > 1e-9])))
    assert float(release_crossings(shape, ratio, band)) == changes
    assert np.isinf(release_crossings(shape, ratio))
