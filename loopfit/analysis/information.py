"""How closely a record that was not made would tell the figures: the Fisher information of the fitted model on its rows."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from loopfit.core.arrays import Array
from loopfit.fit.columns import Columns
from loopfit.fit.estimate import Fit
from loopfit.fit.samples import Samples
from loopfit.fit.separable import Flags
from loopfit.model.chart import R_SHIFT

_GROWTH = 1.05  # factors are told to 5 %
_POINTS_AT_MOST = 4000
_DIVISIONS = (1, 2, 4, 8)  # a row more often than that only counts as more rows
_SMALL_SAMPLE = 6.0  # as the intervals have it, see DEVELOPERS.md
_FEWEST_DEGREES = 4.0
_SEEN = 0.05  # of the time between rows

HalfWidths = dict[str, Array]


def factors(most: float) -> Array:
    """Return the factors that are tried (K,), from 1 to `most`."""
    count = int(np.floor(np.log(most) / np.log(_GROWTH)))
    tried: Array = np.power(_GROWTH, np.arange(count + 1, dtype=np.float64))
    return tried


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Hypothesis:
    """The fitted loop, and the noise that any other record of it would have.

    `rows_per_independent` is how many neighbouring rows tell as much as one row of white noise; 1 for white noise.
    """

    fit: Fit
    confidence: float
    rows_per_independent: float

    def of_larger_step(self, most: float) -> tuple[Array, HalfWidths]:
        """Return factors of the step (K,), and the half-widths of the intervals that each would give."""
        tried = factors(most)
        growing, steady = self._sensitivities(self.fit.working)
        cross = growing @ steady.T
        k = tried[:, None, None]
        information = k**2 * (growing @ growing.T) + k * (cross + cross.T) + steady @ steady.T
        return tried, self._half_widths(information, np.ones(tried.size))

    def of_longer_record(self, span: float, most: float) -> tuple[Array, HalfWidths]:
        """Return factors of the time after the step, `span` s in this record, and the half-widths each would give."""
        samples = self.fit.columns.samples
        every = float(np.median(np.diff(samples.centres)))
        most = min(most, 1.0 + max(_POINTS_AT_MOST - samples.centres.size, 1) * every / span)
        tried = factors(most)
        more = samples.centres[-1] + every * np.arange(1, int(span * (tried[-1] - 1.0) / every) + 2)
        plain = self.fit.columns
        added = _points(more, np.full(more.size, float(np.median(samples.root_count))))
        rows = np.concatenate(
            [
                np.sum(self._sensitivities(plain), axis=0),
                np.sum(self._sensitivities(replace(plain, samples=added)), axis=0),
            ],
            axis=1,
        )
        if self.fit.structure.drift:  # its column is centred on the rows of the record
            rows[-1, samples.centres.size :] = (more - samples.centres.mean()) * added.root_count
        if self.fit.whitener is not None:
            rows = self.fit.whitener(rows)
        summed = np.cumsum(rows[:, None, :] * rows[None, :, :], axis=2)
        last = samples.centres.size - 1 + np.floor(span * (tried - 1.0) / every).astype(np.intp)
        return tried, self._half_widths(np.moveaxis(summed[:, :, last], 2, 0), (last + 1) / samples.centres.size)

    def of_faster_sampling(self, most: float) -> tuple[Array, HalfWidths]:
        """Return factors of the sampling rate, and the half-widths each would give.

        Rows of white noise count fully; of coloured noise they soon tell nothing new. A first-order autoregression
        with the same number of independent rows is sampled faster: rho -> rho^(1 / k) (any text on stochastic processes).
        """
        tried = factors(most)
        samples = self.fit.columns.samples
        rho = (self.rows_per_independent - 1.0) / (self.rows_per_independent + 1.0)
        gain = tried.copy()
        if rho > 0:
            quick = rho ** (1.0 / tried)
            gain = tried * (1.0 - quick) / (1.0 + quick) * (1.0 + rho) / (1.0 - rho)
        finer = (1,) if samples.binned or rho > 0 else _DIVISIONS
        bases = np.stack([self._divided(j) for j in finer])
        base = np.searchsorted(finer, tried, side="right") - 1
        scaled = gain / np.array(finer)[base]
        return tried, self._half_widths(bases[base] * scaled[:, None, None], gain)

    def _divided(self, parts: int) -> Array:
        """Return the information with each interval between rows divided."""
        columns = self.fit.working
        if parts > 1:
            centres = columns.samples.centres
            size = (centres.size - 1) * parts + 1
            times = np.interp(np.arange(size) / parts, np.arange(centres.size), centres)
            columns = replace(columns, samples=_points(times, np.ones(size)))
        rows = np.sum(self._sensitivities(columns), axis=0)
        information: Array = rows @ rows.T
        return information

    @property
    def _free(self) -> Flags:
        """Coordinates that may move (3,): lags too short for the rows to show them are held."""
        fit = self.fit
        T, r = (float(value[0]) for value in fit.columns.chart.lags(fit.theta[None]))
        every = float(np.median(np.diff(fit.columns.samples.centres)))
        seen = T * max(1.0, math.sqrt(r)) > _SEEN * every
        free: Flags = fit.free & np.array([seen, seen, True])
        return free

    def _sensitivities(self, columns: Columns) -> tuple[Array, Array]:
        """Return derivatives of the rows in all parameters (q, n): the part that grows with the step, and the rest."""
        fit = self.fit
        matrix, slopes = (found[0] for found in columns.evaluate(fit.theta[None]))
        grows = np.arange(matrix.shape[0]) < (len(columns.rungs) if columns.input is not None else columns.moving_count)
        m = slopes.shape[1]
        weights = np.stack([np.where(grows[:m], fit.linear[:m], 0.0), np.where(grows[:m], 0.0, fit.linear[:m])])
        moved = np.einsum("km,pmn->kpn", weights, slopes[self._free])
        growing = np.concatenate([moved[0], np.where(grows[:, None], matrix, 0.0)])
        steady = np.concatenate([moved[1], np.where(grows[:, None], 0.0, matrix)])
        return growing, steady

    def _half_widths(self, information: Array, more: Array) -> HalfWidths:
        """Return half-widths (K,) from information matrices (K, q, q) of records with `more` (K,) times the rows."""
        fit = self.fit
        covariance = _inverse(information) * (fit.variance * fit.inflation)
        wide = self._quantile(more)
        free = self._free
        place = np.cumsum(free) - 1
        first = int(free.sum())
        chart = fit.columns.chart

        def spread(gradient: dict[int, float]) -> Array:
            row = np.zeros(covariance.shape[1])
            for at, value in gradient.items():
                row[at] = value
            found: Array = wide * np.sqrt(np.maximum(np.einsum("p,kpq,q->k", row, covariance, row), 0.0))
            return found

        _, r = (float(value[0]) for value in chart.lags(fit.theta[None]))
        out: HalfWidths = {}
        logarithm = {int(place[0]): 1.0}
        if free[1] and chart.by_lags:
            # r is what the response is nearly linear in: its interval is symmetric, that of the damping ratio is not
            width = spread({int(place[1]): r + R_SHIFT})
            low = np.maximum(r - width, 0.0)
            with np.errstate(divide="ignore"):
                out["damping_ratio"] = 0.25 * (1.0 / np.sqrt(low) - 1.0 / np.sqrt(r + width))
            logarithm[int(place[1])] = 0.5 * (r + R_SHIFT) / r
        elif free[1]:
            out["damping_ratio"] = spread({int(place[1]): 1.0})
        if free[0]:
            frequency = float(chart.frequency(fit.theta[None])[0])
            out["natural_frequency_rad_s"] = frequency * np.sinh(np.minimum(spread(logarithm), 50.0))
        if fit.columns.input is not None:
            out["gain"] = spread({first + (fit.columns.rungs.index(1) if 1 in fit.columns.rungs else 0): 1.0})
            width = spread({int(place[2]): 1.0})
            out["dead_time_s"] = 0.5 * (width + np.minimum(width, fit.theta[2]))
        return out

    def _quantile(self, more: Array) -> Array:
        """Return by how many standard errors the intervals reach, for `more` times the rows."""
        from scipy.special import stdtrit  # the intervals have loaded it

        fit = self.fit
        degrees, factor = fit.degrees / fit.inflation * more, np.ones_like(more)
        if fit.whitener is not None:
            rows = fit.whitener.effective_rows * more
            degrees, factor = np.minimum(degrees, rows - 5.0), 1.0 + _SMALL_SAMPLE / rows
        reach = stdtrit(np.maximum(degrees, _FEWEST_DEGREES), 0.5 + 0.5 * self.confidence) * np.sqrt(factor)
        return np.asarray(reach, dtype=np.float64)


def _points(times: Array, root_count: Array) -> Samples:
    """Return samples at points in time, each standing for so many rows."""
    return Samples(
        nodes=times,
        centres=times,
        values=np.zeros(times.size),
        root_count=root_count,
        binned=False,
        touching=False,
        row_interval=0.0,
        rows=times.size,
    )


def _inverse(information: Array) -> Array:
    """Return the inverses (K, q, q); infinite variances where a matrix has none."""
    size = np.sqrt(np.maximum(np.diagonal(information, axis1=1, axis2=2), 1e-300))
    scaled = information / size[:, :, None] / size[:, None, :]
    try:
        inverse = np.linalg.inv(scaled)
    except np.linalg.LinAlgError:
        return np.full_like(information, np.nan)
    return np.asarray(inverse / size[:, :, None] / size[:, None, :])
