"""Turning points and passages of swings, against numpy's own least squares."""

from __future__ import annotations

import numpy as np

from loopfit.figures.swings import find_swings


def test_swings_against_polynomials() -> None:
    """Height and instant of each top by numpy's polyfit of second degree, passages by that of first."""
    rng = np.random.default_rng(5)
    time = 1e4 + np.linspace(0.0, 20.0, 801)
    clean = np.exp(-0.05 * (time - 1e4)) * np.sin(1.3 * (time - 1e4) + 0.2)
    values = clean + rng.normal(0.0, 0.01, time.size)
    swings = find_swings(time, values, 0.01)
    assert swings.heights.size >= 6
    for k, (begin, end) in enumerate(zip(swings.passes[:-1], swings.passes[1:], strict=True)):
        inside = (time >= begin) & (time <= end)
        t, y = time[inside], np.abs(values[inside])
        near = y > 0.7 * y.max()
        bend, tilt, level = np.polyfit(t[near] - begin, y[near], 2)
        assert np.isclose(swings.turns[k], begin - 0.5 * tilt / bend, rtol=0.0, atol=1e-7)
        assert np.isclose(swings.heights[k], level - 0.25 * tilt**2 / bend, rtol=1e-9)
    clear = np.flatnonzero(np.abs(values) > 0.04)
    first = np.flatnonzero(np.diff(np.sign(values[clear])) != 0)[0]
    rows = slice(clear[first], clear[first + 1] + 1)
    slope, at = np.polyfit(values[rows], time[rows] - 1e4, 1)
    assert np.isclose(swings.passes[0], 1e4 + at, rtol=0.0, atol=1e-9)
    assert slope != 0
