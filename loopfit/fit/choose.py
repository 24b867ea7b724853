"""Which structure a record asks for: second order, with a zero, integrating, not at rest at the start."""

from __future__ import annotations

import math

import numpy as np

from loopfit.core.arrays import Array
from loopfit.fit.estimate import Fit, Structure, Trace, fit_trace
from loopfit.fit.warranted import warranted

_STRUCTURED = 4.0  # standard errors of the residual's neighbour correlation that raise doubt
_HALVED = 0.5  # a richer model must at least halve the structured residual
_EVIDENCE = 10.0  # difference of the information criterion that counts as very strong (Kass & Raftery 1995)
_BEYOND = 2.0  # time constants longer than this many spans: the record may be an integration
_REST_ROWS = 8
_WANDERS = 3.0
_WANDER_SHARE = 0.02


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
        best = rival if evidence(rival, best) > 0.0 else best
        plain = fit_trace(trace, Structure(), noise_floor=noise_floor)
        best = best if warranted(best, plain) else plain
    if _far_beyond(best, trace) and not best.structure.drift:
        rival = fit_trace(trace, Structure(rungs=(2,), first_order=True), noise_floor=noise_floor)
        if evidence(best, rival) <= 2.0:
            return rival
    if best.structure != Structure() or best.colour * math.sqrt(best.columns.target.size) < _STRUCTURED:
        return best  # a zero would follow a tail that is slower than the plant
    rivals = [Structure(rungs=(1, 0))]
    if wanders_before_step(trace, noise, abs(change_of(best, trace))):
        rivals.insert(0, Structure(moving_start=True))
    for structure in rivals:
        rival = fit_trace(trace, structure, noise_floor=noise_floor)
        clearly = evidence(rival, best) > _EVIDENCE
        if clearly and structured(rival, noise) < _HALVED * structured(best, noise) and not _far_beyond(rival, trace):
            return rival
    return best


def evidence(fit: Fit, against: Fit) -> float:
    """Return by how much Schwarz's information criterion (1978) is lower for one fit than for another.

    The samples are thinned for the colour of the fit that leaves more of it, both alike: with a number of rows for each
    the difference would depend on the unit of the measurement.
    """
    rows = [each.columns.target.size for each in (fit, against)]
    n = min(rows) / max(fit.inflation, against.inflation)
    gained = [math.log(max(each.sse, 1e-300) / count) for each, count in zip((against, fit), rows[::-1], strict=True)]
    more = _parameters(fit) - _parameters(against)
    return n * (gained[0] - gained[1]) - more * math.log(max(n, 2.0))


def _parameters(fit: Fit) -> int:
    return fit.linear.size + 2 + (not fit.structure.first_order)


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
    rows = float(np.sum(fit.columns.samples.root_count**2))
    return math.sqrt(max(fit.sse - noise**2 * fit.degrees, 0.0) / rows)


def clearly_structured(fit: Fit, noise: float) -> float:
    """Return the rms of the residual that noise does not explain even with its own sampling error allowed for.

    Two standard errors of both: the squares of the samples, and the noise from second differences of the rows.
    """
    rows = float(np.sum(fit.columns.samples.root_count**2))
    doubt = 1.0 + 2.0 * math.sqrt(2.0 / fit.degrees + 2.6 / rows)
    return math.sqrt(max(fit.sse - doubt * noise**2 * fit.degrees, 0.0) / rows)


def moves_before_step(trace: Trace, noise: float) -> bool:
    """Tell whether the measurement has a trend before the step that noise does not explain."""
    rows = trace.step_row
    if rows < _REST_ROWS:
        return False
    trend = clear_trend(trace.time[:rows], trace.values[:rows], noise)
    return trend is not None and abs(trend) > 0.03 * float(np.ptp(trace.values))


def clear_trend(t: Array, y: Array, noise: float) -> float | None:
    """Return how far a straight line travels over some rows; None where their noise, colour and all, explains it."""
    rows = t.size
    if rows < _REST_ROWS:
        return None
    centred = t - t.mean()
    width = float(centred @ centred)
    slope = float(centred @ y) / width
    rest = y - y.mean() - slope * centred
    neighbour = float(rest[1:] @ rest[:-1]) / max(float(rest @ rest), 1e-300)
    # what the line takes out of the lag-one correlation, to first order (after Kendall 1954, from memory)
    colour = min(max(neighbour, 0.0) + (2.0 + 4.0 * max(neighbour, 0.0)) / rows, 0.95)
    spread = max(float(rest @ rest) / (rows - 2), noise**2)
    error = math.sqrt(spread / width * (1.0 + colour) / (1.0 - colour))
    return slope * float(t[-1] - t[0]) if abs(slope) > 5.0 * error else None


def wanders_before_step(trace: Trace, noise: float, change: float) -> bool:
    """Tell whether the rows before the step hold a movement, without a trend, that fast noise does not explain."""
    rows = trace.step_row
    if rows < _REST_ROWS:
        return False
    moved = float(np.std(trace.values[:rows]))
    return moved > max(_WANDERS * noise, _WANDER_SHARE * change)


def _far_beyond(fit: Fit, trace: Trace) -> bool:
    """Tell whether a model's lags or zero are so long that the record cannot hold them."""
    T, _ = fit.columns.chart.lags(fit.theta[None])
    longest = float(T[0])
    if fit.structure.rungs == (1, 0) and fit.linear[0] != 0:
        longest = max(longest, abs(float(fit.columns.chart.scale(fit.theta[None])[0] * fit.linear[1] / fit.linear[0])))
    return longest > _BEYOND * trace.span
