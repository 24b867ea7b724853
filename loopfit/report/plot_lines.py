"""What a picture draws: the part of the record in view, its rows thinned to pixels, the envelope of the swing."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from loopfit.analysis.result import Analysis
from loopfit.core.arrays import Array
from loopfit.fit.curve import FittedCurve, curve_of

_COLUMNS = 1000  # about the pixels of the axes' width in a png
_RESTS = 3.0  # settling times in view: more rest tells nothing and makes the response narrow
_WORTH_CUTTING = 0.7  # of what follows the step; a view that would show more shows all
_BEFORE = 0.2  # of the time after the step, shown before it
_AT_LEAST_BEFORE = 0.04
_SWINGS_BELOW = 0.7  # damping ratio beyond which no envelope is seen


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Envelope:
    """The two curves between which the response swings: times (m,), s, and the values of both (m,)."""

    time: Array
    low: Array
    high: Array


def begins(analysis: Analysis) -> float:
    """Return the instant of the step or of the release, s on the record's clock."""
    return analysis.window_s[0] if analysis.step is None else analysis.step.time_s


def until(analysis: Analysis) -> float:
    """Return when the response to the step ends, s: at the next step of a record with several, else with the record."""
    later = [step.time_s for step in analysis.steps if begins(analysis) < step.time_s <= analysis.window_s[1]]
    return min(later, default=analysis.window_s[1])


def curve_in(analysis: Analysis, view: tuple[float, float]) -> FittedCurve | None:
    """Return the model's response over the part of its window that is in view; None without a model.

    Its final value is where the step leads that the figures are of, not the steps that follow it.
    """
    if analysis.model is None:
        return None
    window = (max(view[0], analysis.window_s[0]), min(view[1], analysis.window_s[1]))
    curve = curve_of(analysis.fit, analysis.points, window)
    later = [step.size for step in analysis.steps if until(analysis) <= step.time_s <= analysis.window_s[1]]
    if curve.final_value is None or analysis.model.gain is None or not later:
        return curve
    return replace(curve, final_value=curve.final_value - analysis.model.gain.value * sum(later))


def band_width(analysis: Analysis, curve: FittedCurve) -> float | None:
    """Return the half-width of the settling band, measurement units; None without a final value."""
    model = analysis.model
    if model is None or curve.final_value is None:
        return None
    if analysis.step is None:
        change = float(curve.value[0]) - curve.final_value
    elif model.gain is None:
        return None
    else:
        change = model.gain.value * analysis.step.size
    return abs(change) * analysis.band_percent / 100.0


def view_of(analysis: Analysis) -> tuple[float, float]:
    """Return the times to show, s: the step and what follows it; the whole record where there is no model."""
    time = analysis.record.time
    if analysis.model is None:
        return float(time[0]), float(time[-1])
    begin, (first, last) = begins(analysis), analysis.window_s
    end = last
    settling = None if analysis.response is None else analysis.response.settling_time_s
    doubtful = not analysis.model.adequate or any(finding.severity == "warning" for finding in analysis.findings)
    alone = until(analysis) == last
    if settling is not None and math.isfinite(settling.value) and alone and not doubtful:
        bound = settling.high if math.isfinite(settling.high) else settling.value
        enough = _RESTS * bound
        if enough < _WORTH_CUTTING * (last - begin):
            end = begin + enough
    span = end - begin
    moving = any(finding.code == "moving_before_step" for finding in analysis.findings)
    if analysis.step is None:
        return max(float(time[0]), begin - _BEFORE * span), end
    start = max(first, begin - (1.0 if moving else _BEFORE) * span)
    return min(start, begin - _AT_LEAST_BEFORE * span), end


def in_view(time: Array, view: tuple[float, float]) -> slice:
    """Return the rows in view, and one more on either side so that lines run out of the picture."""
    first = max(int(np.searchsorted(time, view[0])) - 1, 0)
    return slice(first, int(np.searchsorted(time, view[1], side="right")) + 1)


def thinned(time: Array, values: Array, columns: int = _COLUMNS) -> tuple[Array, Array]:
    """Return a record's rows for drawing: of a long one, the least and the greatest of each pixel column.

    Parameters
    ----------
    time, values : (n,) array
        Rising times.
    columns : int
        Pixel columns over the whole time; up to four rows for each, all rows are returned.

    Returns
    -------
    tuple of arrays
        Times and values of the rows kept, in order; a nan parts rows between which there is a gap.
    """
    if time.size <= 4 * columns:
        return time, values
    column = ((time - time[0]) * (columns / (time[-1] - time[0]))).astype(np.intp)
    by_value = np.lexsort((values, column))
    starts = np.flatnonzero(np.diff(column, prepend=-1))
    ends = np.append(starts[1:], time.size)
    kept = np.unique(np.concatenate([by_value[starts], by_value[ends - 1], starts, ends - 1]))
    time_kept, values_kept = time[kept], values[kept]
    steps = np.diff(time)
    gaps = np.flatnonzero(steps > max(10.0 * float(np.median(steps)), 3.0 * (time[-1] - time[0]) / columns)) + 1
    where = np.searchsorted(kept, gaps)
    return np.insert(time_kept, where, np.nan), np.insert(values_kept, where, np.nan)


def envelope_of(analysis: Analysis, curve: FittedCurve) -> Envelope | None:
    """Return the envelope of an underdamped response; None where there is none to be seen.

    Notes
    -----
    After its dead time a step response lies between final value ± change exp(-zeta omega_n t) / sqrt(1 - zeta^2)
    (Ogata, Modern Control Engineering, 5th ed. 2010, section 5-3). With a release, a zero or a moving start only
    the factor before the exponential is another: so it is always taken from the curve, as the length of the swing
    a cos(omega_d t) + b sin(omega_d t) there. A curve that is no such swing (drift) has no envelope.
    """
    model = analysis.model
    if model is None or curve.final_value is None:
        return None
    damping, frequency = model.damping_ratio, model.natural_frequency_rad_s
    if damping is None or frequency is None or not 0.0 < damping.value < _SWINGS_BELOW:
        return None
    start = begins(analysis)
    for finding in analysis.findings:
        if finding.code == "gradual_change" and finding.at_s is not None:
            start = max(start, finding.at_s[1])
    if model.dead_time_s is not None and analysis.step is not None:
        start += model.dead_time_s.value
    after = np.flatnonzero((curve.time >= start) & (curve.time <= until(analysis)))
    if after.size < 8:
        return None
    since = curve.time[after] - start
    away = curve.value[after] - curve.final_value
    damped = frequency.value * math.sqrt(1.0 - damping.value**2)
    decay = np.exp(-damping.value * frequency.value * since)
    columns = np.stack([decay * np.cos(damped * since), decay * np.sin(damped * since)], axis=1)
    shares = np.linalg.lstsq(columns, away, rcond=None)[0]
    size = float(np.hypot(*shares))
    if not float(np.max(np.abs(away - columns @ shares))) <= 0.01 * size:
        return None
    time = np.concatenate([[start], curve.time[after]])
    half = size * np.concatenate([[1.0], decay])
    return Envelope(time=time, low=curve.final_value - half, high=curve.final_value + half)
