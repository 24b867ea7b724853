"""From a fit to intervals: the noise made white, the likelihood-ratio surface, every figure on it."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from loopfit.core.arrays import Array
from loopfit.core.quantity import Quantity
from loopfit.fit.colour import whitener_of
from loopfit.fit.estimate import Fit, Trace, coarse_columns, search
from loopfit.fit.figures_of import figures_of, quantile_of_f
from loopfit.fit.separable import solve_linear
from loopfit.fit.start import scan
from loopfit.fit.surface import Surface, walk

_NOISE_ROUNDS = 2
_SMALL_SAMPLE = 6.0  # threshold x (1 + 6 / effective rows): chosen by simulation, see DEVELOPERS.md
_FEWEST_DEGREES = 4
_EVEN_WITHIN = 0.02


def whitened(fit: Fit, trace: Trace, *, noise_floor: float) -> Fit:
    """Return the fit under the likelihood of its own noise: coloured, where the residuals say so.

    The colour is estimated from the residuals, the model fitted anew from the optimum and from the first starts (a
    fit that took coloured noise for white can sit in a wrong valley), and both once more.
    """
    if not evenly_spaced(fit):
        return fit
    starts: Array | None = None
    for _ in range(_NOISE_ROUNDS):
        whitener = whitener_of(*residual_and_jacobian(fit))
        if whitener is None:
            return replace(fit, whitener=None, inflation=1.0)
        working = replace(fit.columns, whitener=whitener)
        if starts is None:
            starts = _starts(fit, trace)
        found = search(working, np.vstack([fit.theta[None], starts]), fit.free, thin=True, tolerance=1e-6, rounds=40)
        theta = found.theta[int(np.argmin(found.sse))]
        fit = _at(fit, theta, noise_floor=noise_floor)
        fit = replace(fit, whitener=whitener, inflation=1.0)
    return _at(fit, fit.theta, noise_floor=noise_floor)


def _at(fit: Fit, theta: Array, *, noise_floor: float) -> Fit:
    """Return the fit moved to other coordinates, its linear part and noise solved anew."""
    working = solve_linear(fit.working.evaluate(theta[None], derivatives=False)[0], fit.working.target)
    columns, _ = fit.columns.evaluate(theta[None], derivatives=False)
    rest = fit.columns.target - working.linear[0] @ columns[0]
    variance = max(float(working.sse[0]) / fit.degrees, noise_floor**2, 1e-300)
    return replace(fit, theta=theta, linear=working.linear[0], sse=float(rest @ rest), variance=variance)


def residual_and_jacobian(fit: Fit) -> tuple[Array, Array]:
    """Return the residuals (n,) of a fit and the derivatives (q, n) of its prediction in all parameters."""
    columns, slopes = fit.columns.evaluate(fit.theta[None])
    moved = (fit.linear[None, : slopes.shape[2]] @ slopes[0])[:, 0, :]
    return fit.columns.target - fit.linear @ columns[0], np.vstack([moved[fit.free], columns[0]])


def _starts(fit: Fit, trace: Trace) -> Array:
    if not fit.columns.chart.by_lags:
        return fit.theta[None]
    coarse, main = coarse_columns(trace, fit.structure)
    starts = scan(coarse, trace.span, main, release=trace.input is None)
    if fit.structure.first_order:
        starts[:, 1] = fit.columns.chart.lowest[1]
    return starts


def evenly_spaced(fit: Fit) -> bool:
    """Tell whether the samples are evenly spaced, within 2 % of the interval."""
    steps = np.diff(fit.columns.samples.centres)[1:-1]
    return steps.size > 0 and bool(np.ptp(steps) <= _EVEN_WITHIN * np.median(steps))


def surface_of(fit: Fit, *, confidence: float, band: float) -> Surface:
    """Return the likelihood-ratio surface of a fit at a confidence (a fraction)."""
    degrees, factor = int(fit.degrees / fit.inflation), 1.0
    if fit.whitener is not None:
        rows = fit.whitener.effective_rows
        degrees, factor = min(degrees, int(rows - 5.0)), 1.0 + _SMALL_SAMPLE / rows
    return walk(
        fit.working,
        fit.theta,
        free=fit.free,
        threshold=factor * quantile_of_f(confidence, max(degrees, _FEWEST_DEGREES)),
        variance=fit.variance * fit.inflation,
        band=band,
    )


def refine(fit: Fit, better: Array) -> Fit:
    """Return the fit restarted from a better point that a walker met."""
    found = search(fit.working, better[None], fit.free, tolerance=1e-7, rounds=60)
    here = solve_linear(fit.working.evaluate(fit.theta[None], derivatives=False)[0], fit.working.target)
    if found.sse[0] >= here.sse[0]:
        return fit
    moved = _at(fit, found.theta[0], noise_floor=0.0)
    return replace(moved, variance=min(fit.variance, moved.variance))


def quantities(fit: Fit, surface: Surface, band: float) -> dict[str, Quantity | None]:
    """Return every figure with its interval; None where the figure does not exist at the optimum."""
    table = figures_of(fit.columns, surface.points, band)
    out: dict[str, Quantity | None] = {}
    for name, values in table.items():
        value = float(values[0])
        if np.isnan(value):
            out[name] = None
            continue
        there = values[~np.isnan(values)]
        low, high = float(there.min()), float(there.max())
        if there.size < values.size:  # the figure ceases to exist inside the surface
            if name in ("peak_time_s", "damped_period_s"):
                high = np.inf
            elif name in ("damped_frequency_rad_s", "decay_ratio"):
                low = 0.0
        if name == "damping_ratio" and surface.open_damping:
            high = np.inf
        if name == "natural_frequency_rad_s" and surface.open_damping:
            high = np.inf
        out[name] = Quantity.spanning(value, low, high)
    return out
