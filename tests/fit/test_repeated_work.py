"""Work that is left out must not be missed: remembered evaluations, starts told apart early, walkers that have arrived."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from functools import partialmethod

import numpy as np
import pytest

import loopfit.fit.jumps
import loopfit.fit.surface
from loopfit.core.arrays import Array
from loopfit.fit.columns import Columns, Input
from loopfit.fit.estimate import Structure, Trace, coarse_columns, fit_trace
from loopfit.fit.intervals import quantities, surface_of
from loopfit.fit.separable import solve_linear
from loopfit.fit.start import scan
from loopfit.model.chart import LAGS

Evaluate = Callable[..., tuple[Array, Array]]


def record(zeta: float, noise: float, seed: int) -> Trace:
    """Return a step response of omega_n 1 rad/s, dead time 0.4 s, gain 2, from the characteristic roots."""
    time = np.linspace(-3.0, 25.0, 600)
    x = np.maximum(time - 0.4, 0.0)
    s = np.roots([1.0, 2.0 * zeta, 1.0]).astype(complex)
    clean = (1.0 + (s[1] * np.exp(s[0] * x) - s[0] * np.exp(s[1] * x)) / (s[0] - s[1])).real
    values = 5.0 + 2.0 * clean + np.random.default_rng(seed).normal(0.0, noise, time.size)
    row = int(np.searchsorted(time, 0.0))
    step = Input(times=time[row : row + 1], sizes=np.array([1.0]))
    return Trace(time=time, values=values, input=step, begins=float(time[row]), step_row=row)


def test_a_model_asked_for_again_is_the_same() -> None:
    columns = fit_trace(record(0.3, 0.02, 1), Structure()).columns
    one, other = (LAGS.locate(np.array([z]), np.array([1.0]), np.array([0.3])) for z in (0.3, 0.4))
    matrix, slopes = columns.evaluate(one)
    assert not np.array_equal(columns.evaluate(other, derivatives=False)[0], matrix)
    again, none = columns.evaluate(one, derivatives=False)
    assert again is matrix
    assert none.shape[1] == 0
    fresh = replace(columns, drift=False)  # has nothing to remember
    assert np.array_equal(fresh.evaluate(one)[0], matrix)
    assert np.array_equal(fresh.evaluate(one)[1], slopes)
    with pytest.raises(ValueError, match="read-only"):
        matrix[0, 0, 0] = 1.0


def noting(
    columns: Columns, theta: Array, *, derivatives: bool, seen: list[Array], evaluate: Evaluate = Columns.evaluate
) -> tuple[Array, Array]:
    """Evaluate, and keep what was asked for."""
    seen.append(theta)
    return evaluate(columns, theta, derivatives=derivatives)


def test_starts_are_those_of_full_least_squares() -> None:
    """The first start has the least sum of squares of all on the grid, by the solution with every column at once."""
    trace = record(0.3, 0.02, 2)
    for structure in (Structure(), Structure(rungs=(1, 0)), Structure(drift=True)):
        columns, main = coarse_columns(trace, structure)
        seen: list[Array] = []
        with pytest.MonkeyPatch.context() as patch:
            patch.setattr(Columns, "evaluate", partialmethod(noting, seen=seen))
            starts = scan(columns, trace.span, main, release=False)
        sse = solve_linear(columns.evaluate(seen[0], derivatives=False)[0], columns.target).sse
        assert np.array_equal(starts[0], seen[0][np.argmin(sse)])
        starts[:] = 0.0  # the caller may write on its copy
        assert np.any(scan(columns, trace.span, main, release=False) != 0.0)


@pytest.mark.parametrize("zeta", [0.1, 0.35, 0.75, 1.6])
def test_walkers_that_have_arrived_miss_nothing(zeta: float) -> None:
    """Every interval is within 1e-3 of its width of that from all rounds; and fewer models were evaluated."""
    fit = fit_trace(record(zeta, 0.02, 3), Structure())
    early_surface = surface_of(fit, confidence=0.95, band=0.02)
    with pytest.MonkeyPatch.context() as patch:
        for module in (loopfit.fit.surface, loopfit.fit.jumps):
            patch.setattr(module, "ARRIVED", -1.0)
        full_surface = surface_of(fit, confidence=0.95, band=0.02)
    assert early_surface.points.theta.shape[0] < full_surface.points.theta.shape[0]
    early, full = (quantities(fit, surface, 0.02) for surface in (early_surface, full_surface))
    compared = 0
    for name, quantity in full.items():
        other = early[name]
        if quantity is None or other is None or not np.isfinite([quantity.low, quantity.high]).all():
            assert quantity == other or (quantity is not None and other is not None)
            continue
        width = 1e-3 * (quantity.high - quantity.low)
        assert other.low == pytest.approx(quantity.low, abs=width), name
        assert other.high == pytest.approx(quantity.high, abs=width), name
        compared += 1
    assert compared > 6
