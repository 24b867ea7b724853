"""All dampings of an overdamped release, one by one.

Displacement, push and rest value are all free, so that quite different pairs of lags explain such a record: the
likelihood has several valleys, and a walk from one does not reach the next. The profile over the shape does.
"""

from __future__ import annotations

import numpy as np

from loopfit.fit.columns import Columns
from loopfit.fit.figures_of import Points
from loopfit.fit.separable import minimise, solve_linear
from loopfit.model.chart import R_SHIFT

_SHAPES = 28
_LARGEST_R = 2.0
_SLOWNESS = (0.02, 0.06, 0.18, 0.5)  # of the span


def over_all_shapes(columns: Columns, *, threshold: float, variance: float, sse: float) -> Points | None:
    """Return the best model of each shape that the record allows; None where it allows none.

    Parameters
    ----------
    columns : Columns
        Of a release, in the lags' chart.
    threshold, variance, sse : float
        Allowed rise in units of the variance, and the least sum of squares.
    """
    shapes = np.linspace(columns.chart.lowest[1], np.log(_LARGEST_R + R_SHIFT), _SHAPES)
    scales = np.log(np.array(_SLOWNESS) * np.ptp(columns.samples.centres))
    u, log_scale = (grid.ravel() for grid in np.meshgrid(shapes, scales, indexing="ij"))
    theta = np.column_stack([log_scale, u, np.zeros(u.size)])
    found = minimise(
        columns.evaluate, columns.target, theta, lowest=columns.chart.lowest, highest=columns.highest,
        free=np.array([True, False, False]), tolerance=1e-4, rounds=25,
    )  # fmt: skip
    rows = np.flatnonzero((found.sse - sse) / variance <= threshold)
    if rows.size == 0:
        return None
    linear = solve_linear(columns.evaluate(found.theta[rows], derivatives=False)[0], columns.target).linear
    return Points(theta=found.theta[rows], linear=linear)
