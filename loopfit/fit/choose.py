"""Which structure a record asks for: second order, with a zero, integrating, not at rest at the start."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np

from loopfit.fit.estimate import Fit, Structure, Trace, fit_trace

_STRUCTURED = 4.0  # standard errors of the residual's neighbour correlation that raise doubt
_HALVED = 0.5  # a richer model must at least halve the structured residual
_EVIDENCE = 10.0  # difference of the information criterion that counts as very strong (Kass & Raftery 1995)
_BEYOND = 2.0  # time constants longer than this many spans: the record may be an integration
_REST_ROWS = 8


def choose(trace: Trace, noise: float, *, noise_floor: float) -> Fit:
    """Return the fit of the simplest structure that the record does not clearly reject.

    Parameters
    ----------
    trace : Trace
    noise : float
        Fast noise of a row, rms, without a model.
    noise_floor : float
        Least noise that the resolution allows.
    """
    start = Structure(moving_start=trace.input is not None and moves_before_step(trace, noise))
    best = fit_trace(trace, start, noise_floor=noise_floor)
    if trace.input is None:
        return best
    if start.moving_start:  # a drift is considered only where the rows before the step show movement
        rival = fit_trace(trace, Structure(drift=True), noise_floor=noise_floor)
        best = min(best, rival, key=criterion)
    if _may_integrate(best, trace) and not best.structure.drift:
        rival = fit_trace(trace, Structure(rungs=(2,), first_order=True), noise_floor=noise_floor)
        if criterion(rival) <= criterion(best) + 2.0:
            return rival
    if best.colour * math.sqrt(best.columns.target.size) < _STRUCTURED:
        return best
    rival = fit_trace(trace, replace(best.structure, rungs=(1, 0)), noise_floor=noise_floor)
    clearly = criterion(rival) < criterion(best) - _EVIDENCE
    return rival if clearly and structured(rival, noise) < _HALVED * structured(best, noise) else best


def criterion(fit: Fit) -> float:
    """Return Schwarz's information criterion (1978), with the samples thinned for their colour."""
    n = fit.columns.target.size / fit.inflation
    parameters = fit.linear.size + 2 + (not fit.structure.first_order)
    return n * math.log(max(fit.sse, 1e-300) / fit.columns.target.size) + parameters * math.log(max(n, 2.0))


def change_of(fit: Fit, trace: Trace) -> float:
    """Return the change of the measurement that the model says, with its sign.

    The gain times the travel of the input; the largest excursion from rest, for a release; the whole travel, where an
    integrating plant has no final value.
    """
    columns, _ = fit.columns.evaluate(fit.theta[None], derivatives=False)
    moving = fit.linear[: fit.columns.moving_count] @ columns[0, : fit.columns.moving_count]
    if trace.input is None:
        return float(np.max(np.abs(moving / fit.columns.samples.root_count)))
    if 1 in fit.structure.rungs:
        return float(fit.linear[0] * np.ptp(np.append(0.0, np.cumsum(trace.input.sizes))))
    return float(np.ptp(moving / fit.columns.samples.root_count))


def structured(fit: Fit, noise: float) -> float:
    """Return the rms of the residual that white noise does not explain, measurement units.

    Parameters
    ----------
    fit : Fit
    noise : float
        Fast noise of a row, rms.
    """
    return math.sqrt(max(fit.sse - noise**2 * fit.degrees, 0.0) / float(np.sum(fit.columns.samples.root_count**2)))


def moves_before_step(trace: Trace, noise: float) -> bool:
    """Tell whether the measurement has a trend before the step that noise does not explain."""
    rows = trace.step_row
    if rows < _REST_ROWS:
        return False
    t, y = trace.time[:rows], trace.values[:rows]
    centred = t - t.mean()
    width = float(centred @ centred)
    slope = float(centred @ y) / width
    rest = y - y.mean() - slope * centred
    neighbour = float(rest[1:] @ rest[:-1]) / max(float(rest @ rest), 1e-300)
    colour = min(max(neighbour, 0.0) + 2.0 / rows, 0.95)
    spread = max(float(rest @ rest) / (rows - 2), noise**2)
    error = math.sqrt(spread / width * (1.0 + colour) / (1.0 - colour))
    travelled = abs(slope) * float(t[-1] - t[0])
    return abs(slope) > 5.0 * error and travelled > 0.03 * float(np.ptp(trace.values))


def _may_integrate(fit: Fit, trace: Trace) -> bool:
    T, _ = fit.columns.chart.lags(fit.theta[None])
    return bool(T[0] > _BEYOND * trace.span)
