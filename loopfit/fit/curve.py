"""The fitted response over time, with the band of all models that the record allows."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from loopfit.core.arrays import Array, read_only
from loopfit.fit.estimate import Fit
from loopfit.fit.figures_of import Points
from loopfit.fit.samples import rows_as_samples

_GRID = 600
_MODELS = 120


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class FittedCurve:
    """The model beside the record: times (m,), s, values, and the band of models the record allows.

    `final_value` is where the model comes to rest (None for an integrating one).
    """

    time: Array
    value: Array
    low: Array
    high: Array
    final_value: float | None


def curve_of(fit: Fit, points: Points, window_s: tuple[float, float]) -> FittedCurve:
    """Return the best model's response over the rows of a record, and the band of the allowed models.

    Parameters
    ----------
    fit : Fit
    points : Points
        Models on the likelihood-ratio surface, the best first.
    window_s : (begin, end)
        Of the curve, s.
    """
    grid = np.linspace(*window_s, _GRID)
    if fit.columns.input is not None:
        steps = fit.columns.input.times
        steps = steps[(steps >= grid[0]) & (steps <= grid[-1])][:50]
        grid = np.unique(np.concatenate([grid, steps]))
    samples = rows_as_samples(grid, np.zeros(grid.size))
    columns = replace(fit.columns, samples=samples)
    if fit.structure.drift:  # the drift column is centred on the samples of the fit
        shift = grid.mean() - fit.columns.samples.centres.mean()
        linear = points.linear.copy()
        linear[:, -2] += linear[:, -1] * shift
    else:
        linear = points.linear
    every = max(1, points.theta.shape[0] // _MODELS)
    theta, linear = points.theta[::every], linear[::every]
    matrix, _ = columns.evaluate(theta, derivatives=False)
    curves = (linear[:, None, :] @ matrix)[:, 0, :]
    offset = float(linear[0, fit.columns.moving_count])
    final: float | None = offset
    if fit.columns.input is not None:
        final = offset + float(linear[0, 0] * np.sum(fit.columns.input.sizes)) if 1 in fit.structure.rungs else None
    return FittedCurve(
        time=read_only(grid),
        value=read_only(curves[0]),
        low=read_only(curves.min(axis=0)),
        high=read_only(curves.max(axis=0)),
        final_value=final,
    )
