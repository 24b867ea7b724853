"""Plants from the coordinates and linear parameters of fitted models."""

from __future__ import annotations

import numpy as np

from loopfit.core.arrays import Array
from loopfit.fit.columns import Columns
from loopfit.fit.estimate import Fit, Structure
from loopfit.loop.plant import Plant
from loopfit.model.chart import Chart

SMALLEST_R = 0.002  # 1 / (4 zeta^2) of a plant: no record tells a damping ratio above 11 from a single lag
SHORTEST = 0.02  # of the time between rows: a single lag below it is none


def times_of(columns: Columns) -> tuple[float, float]:
    """Return time between rows and span of the rows of a model, s."""
    return columns.samples.interval, float(np.ptp(columns.samples.centres))


def plant_of(fit: Fit) -> Plant:
    """Return the plant that a fit of output -> measurement found."""
    columns = fit.columns
    return plants_of(columns.chart, fit.structure, fit.theta[None], fit.linear[None], times=times_of(columns))[0]


def plants_of(
    chart: Chart, structure: Structure, theta: Array, linear: Array, *, times: tuple[float, float]
) -> list[Plant]:
    """Return the plants of B models.

    Parameters
    ----------
    chart : Chart
    structure : Structure
        Its rungs say what the first linear parameters are.
    theta : (B, 3) array
        Coordinates.
    linear : (B, q) array
        Linear parameters: the gain first, per second where the plant integrates.
    times : (float, float)
        Time between rows and span of the record, s: the second lag is at least 0.002 of the sum of both, or of the span.

    Raises
    ------
    UsageError
        If a gain is 0.
    """
    T, r = chart.lags(theta)
    zeta, frequency = chart.damping(theta), chart.frequency(theta)
    integrating = structure.rungs == (2,)
    out = []
    for i in range(theta.shape[0]):
        gain, dead = float(linear[i, 0]), float(theta[i, 2])
        zero = None
        if structure.rungs == (1, 0) and linear[i, 1] != 0.0:
            zero = float(chart.scale(theta[i : i + 1])[0] * linear[i, 1] / linear[i, 0])
        if r[i] > 0.25 and not structure.first_order:
            out.append(
                Plant(
                    gain=gain,
                    damping_ratio=float(zeta[i]),
                    natural_frequency_rad_s=float(frequency[i]),
                    dead_time_s=dead,
                    zero_s=zero,
                    integrating=integrating,
                )
            )
            continue
        if structure.first_order:
            lags: tuple[float, ...] = (float(T[i]),) if T[i] > SHORTEST * times[0] else ()
        else:
            least = SMALLEST_R * min(1.0, times[1] / float(T[i]))
            quick = 2.0 * float(T[i]) * max(float(r[i]), least)
            quick /= 1.0 + float(np.sqrt(1.0 - 4.0 * max(float(r[i]), least)))
            lags = (float(T[i]) - quick, quick)
        out.append(Plant(gain=gain, time_constants_s=lags, dead_time_s=dead, zero_s=zero, integrating=integrating))
    return out
