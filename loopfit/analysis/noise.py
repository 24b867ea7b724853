"""The noise of a record as far as its model shows it: strength, colour, resolution."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from loopfit.core.arrays import Array
from loopfit.fit.estimate import Fit, Trace
from loopfit.fit.samples import rows_as_samples

_PAIRS = 500
_CLEAR = 3.0  # standard errors of a correlation


@dataclass(frozen=True, slots=True, kw_only=True)
class Noise:
    """Noise of a row: `rms` from row to row, without a model, and what the model leaves over.

    `correlation` is that of neighbouring rows, `order` that of the autoregression that describes them (None where none
    could be fitted: uneven rows); `rows_per_independent` rows tell a mean as well as one row of white noise.
    `resolution` is the grid of the measurement, its units; None where none shows. Without a model there is no colour.
    """

    rms: float
    colour: Literal["white", "coloured"] | None
    correlation: float | None
    order: int | None
    rows_per_independent: float | None
    resolution: float | None


def noise_of(trace: Trace, fit: Fit | None, *, rms: float, grid: float) -> Noise:
    """Return the noise of a fitted trace.

    Parameters
    ----------
    trace : Trace
        Its rows.
    fit : Fit, optional
        The model, under the likelihood of its own noise; None when it was refused.
    rms, grid : float
        Noise from row to row, and the step of the values (0 for none), measurement units.
    """
    resolution = float(f"{grid:.9g}") if grid > 0 else None  # differences of decimals carry rounding
    if fit is None:
        return Noise(
            rms=rms, colour=None, correlation=None, order=None, rows_per_independent=None, resolution=resolution
        )
    whitener = fit.whitener
    alike = fit.inflation if whitener is None else whitener.rows / whitener.effective_rows
    if not fit.columns.samples.binned:
        correlation, error = fit.colour, 1.0 / math.sqrt(fit.columns.samples.rows)
    else:
        correlation, error, power = _neighbours(trace, fit)
        alike *= fit.sse / fit.degrees / max(power, 1e-300)  # were rows white, a bin would have the power of a row
    coloured = whitener is not None or fit.inflation > 1.0 or correlation > _CLEAR * error
    return Noise(
        rms=rms,
        colour="coloured" if coloured else "white",
        correlation=correlation,
        order=None if fit.inflation > 1.0 else 0 if whitener is None else whitener.phi.size,
        rows_per_independent=alike if coloured else 1.0,
        resolution=resolution,
    )


def _neighbours(trace: Trace, fit: Fit) -> tuple[float, float, float]:
    """Return the correlation of neighbouring rows of a binned record, its error, and the power of a row."""
    first = np.unique(np.linspace(0, trace.time.size - 2, _PAIRS).astype(np.intp))
    rows = np.unique(np.concatenate([first, first + 1]))
    rest = _residuals(trace, fit, rows)
    at = np.searchsorted(rows, first)
    power = float(rest @ rest) / rows.size
    both = float(rest[at] @ rest[at + 1]) / first.size
    return both / max(power, 1e-300), 1.0 / math.sqrt(first.size), power


def _residuals(trace: Trace, fit: Fit, rows: NDArray[np.intp]) -> Array:
    columns = replace(fit.columns, samples=rows_as_samples(trace.time[rows], trace.values[rows]))
    matrix, _ = columns.evaluate(fit.theta[None], derivatives=False)
    linear = fit.linear.copy()
    if fit.structure.drift:  # its column is centred on the samples of the fit
        linear[-2] += linear[-1] * (columns.samples.centres.mean() - fit.columns.samples.centres.mean())
    out: Array = trace.values[rows] - linear @ matrix[0]
    return out
