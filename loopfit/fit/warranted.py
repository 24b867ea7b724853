"""Whether a movement of its own is in the record, or only noise that wanders."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from loopfit.fit.colour import whitener_of
from loopfit.fit.estimate import Fit, search
from loopfit.fit.intervals import evenly_spaced, residual_and_jacobian

_CONFIDENCE = 0.9999  # one false movement in ten thousand records: it moves the gain by many times its error
_SMALL_SAMPLE = 6.0  # as for the intervals
_FEWEST_DEGREES = 4.0


def warranted(rich: Fit, plain: Fit) -> bool:
    """Tell whether an even record needs the linear parameters that one fit has beyond another.

    An F test under the colour of the richer fit's residuals: that fit has taken the movement out, if there is one. Both
    are fitted anew with the noise white, on the samples of the richer one. True where the rows are uneven: there is no
    colour to test with.

    Parameters
    ----------
    rich, plain : Fit
        The second nested in the first.
    """
    from scipy.special import fdtri  # scipy.stats would cost half a second of start-up

    if not evenly_spaced(rich):
        return True
    whitener = whitener_of(*residual_and_jacobian(rich))
    squares = []
    for fit in (rich, plain):
        columns = replace(fit.columns, samples=rich.columns.samples, whitener=whitener)
        same_chart = fit.columns.chart is rich.columns.chart
        starts = np.unique([fit.theta, rich.theta if same_chart else fit.theta], axis=0)
        squares.append(float(np.min(search(columns, starts, fit.free, thin=True, tolerance=1e-5, rounds=40).sse)))
    more, degrees, factor = rich.linear.size - plain.linear.size, float(rich.degrees), 1.0
    if whitener is not None:
        rows = whitener.effective_rows
        degrees, factor = max(min(degrees, rows - 5.0), _FEWEST_DEGREES), 1.0 + _SMALL_SAMPLE / rows
    ratio = (squares[1] - squares[0]) / more / max(squares[0] / rich.degrees, 1e-300)
    return ratio > factor * float(fdtri(more, degrees, _CONFIDENCE))
