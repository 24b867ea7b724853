"""The controller that a recorded output shows: least squares of the output on error, its integral and derivative."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np

from loopfit.core.arrays import Array

if TYPE_CHECKING:
    from numpy.typing import NDArray

LAGS = 3  # scans, either way
_FEWEST = 12  # rows without the clamp
_MOST_ROWS_A_SCAN = 10
_FILTERS = np.geomspace(0.03, 300.0, 17)  # filter times tried, in scans
_ACTS = 40.0  # likelihood ratio, rows corrected for colour, from which a derivative is there
_ALIKE = 9.0  # the same ratio below which two lags fit alike
_EXACT = 4.0  # times the rounding of the columns: the residual of a record of exactly this controller
_NEAR_LIMIT = 0.06  # of the range of the output: rows that are left out at first
_WHITE = 0.2  # correlation from row to row
_TERMS = ("kp", "weighted", "ki", "kd", "setpoint_kd")


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Acting:
    """What the output obeys; gains as in `Gains`, `doubt` an absolute band (two standard errors and what views differ).

    `values` and `doubt`: by name kp, ki, kd, filter_s, setpoint_weight, on_error (1: derivative on the error); a value
    that the record does not show has an infinite doubt.
    """

    values: dict[str, float]
    doubt: dict[str, float]
    share: dict[str, float]  # of the output's standard deviation that a unit of each gain moves
    r_squared: float
    lag_scans: float
    scan_s: float
    held: bool  # the output rests for several rows at a time
    exact: bool  # the residual is no more than rounding
    white: bool  # the residual is like the noise of a recorder
    derivative: bool


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class _Rows:
    """Rows at which the controller wrote, with what it may have read then."""

    scan_s: float
    setpoint: Array
    measurement: Array
    output: Array
    segment: NDArray[np.int64]  # number of the unclamped run, -1 where left out

    def columns(self, filter_s: float) -> Array:
        """-y, r, integral of the error, filtered -dy/dt and dr/dt, and the free decay of the filter: (n, 6)."""
        from scipy.signal import lfilter

        keep = filter_s / (filter_s + self.scan_s)
        seen = np.column_stack((self.measurement[0] - self.measurement, self.setpoint - self.setpoint[0]))
        slopes = np.vstack((np.zeros(2), np.diff(seen, axis=0)))
        filtered = lfilter([1.0 / (filter_s + self.scan_s)], [1.0, -keep], slopes, axis=0)
        total = self.scan_s * np.cumsum(self.setpoint - self.measurement)
        with np.errstate(under="ignore"):
            decay = keep ** np.arange(len(total), dtype=float)
        return np.column_stack((seen, total, filtered, decay))

    def within(self, columns: Array) -> Array:
        """Departures from the mean of each unclamped run, rows left out removed: an offset of its own for each."""
        used = self.segment >= 0
        number, values = self.segment[used], columns[used]
        count = np.bincount(number)
        means = np.column_stack([np.bincount(number, weights=column) / count for column in values.T])
        apart = values - means[number]
        apart[:, np.abs(apart).max(axis=0) <= 1e-12 * np.abs(values).max(axis=0)] = 0.0  # constant in each run
        return np.asarray(apart)

    def steps(self, columns: Array) -> Array:
        """Increments between rows of the same unclamped run."""
        beside = (self.segment[1:] >= 0) & (self.segment[1:] == self.segment[:-1])
        return np.asarray(np.diff(columns, axis=0)[beside])


def acting_controller(
    time: Array, setpoint: Array, measurement: Array, output: Array, limits: tuple[float, float] | None, hint_s: float
) -> Acting | str:
    """Return the controller that wrote the output, or in words why the record does not say.

    Parameters
    ----------
    time, setpoint, measurement, output : (n,) float
        Even in time.
    limits : (low, high), optional
        Of the output: rows there are left out.
    hint_s : float
        Filter time to try besides the others, 0 for none.

    Notes
    -----
    Ordinary least squares on levels with an offset for each unclamped run; lag and filter time by search. The bands
    are two standard errors widened for first-order colour (Bayley and Hammersley 1946), plus what the regression of
    the increments differs by beyond its own two (Hausman 1978: two estimates that agree only if the model is right).
    """
    free = _unclamped(output, measurement, limits)
    ends = [end for end in (float(output.min()), float(output.max())) if not free[output == end].all()]
    if limits is None:  # an extreme value that comes again and again while the measurement moves may be one
        unit = 3.0 * _rounding(measurement)
        ends = [
            end
            for end in (output.min(), output.max())
            if (output == end).sum() >= 3 and np.ptp(measurement[output == end]) > unit
        ]
    ends += [end for end in limits or () if float(np.abs(output - end).min()) < _NEAR_LIMIT * float(np.ptp(output))]
    if not ends:
        return _acting(time, setpoint, measurement, output, free, hint_s)
    # a controller may hold its integral at a scan that ends just off the limit: such rows part the runs as well
    beside = np.min([np.abs(output - end) for end in ends], axis=0)
    acting = _acting(time, setpoint, measurement, output, free & (beside > _NEAR_LIMIT * float(np.ptp(output))), hint_s)
    if isinstance(acting, str):
        return _acting(time, setpoint, measurement, output, free, hint_s)
    move = np.abs(acting.values["ki"]) * acting.scan_s * np.abs(setpoint - measurement)
    again = _acting(time, setpoint, measurement, output, free & (beside > 1.5 * move + _rounding(output)), hint_s)
    return acting if isinstance(again, str) or again.r_squared < acting.r_squared else again


def _acting(
    time: Array, setpoint: Array, measurement: Array, output: Array, free: NDArray[np.bool_], hint_s: float
) -> Acting | str:
    every = float(np.median(np.diff(time)))
    rows_a_scan, phase = _held_rows(output)
    if float(np.ptp(output)) == 0.0:
        return "the recorded output does not move: the controller was in manual, or held at a limit"
    if int(free.sum()) < _FEWEST * rows_a_scan:
        return "the output is at its limits nearly all the time"
    lags = range(-LAGS * rows_a_scan, LAGS * rows_a_scan + 1)
    tried = {}
    for lag in lags:
        rows = _rows(setpoint, measurement, output, free, every, rows_a_scan, phase, lag)
        if rows is not None:
            tried[lag] = (rows, *_best_filter(rows, hint_s))
    tried = {
        lag: found for lag, found in tried.items() if float(np.ptp(found[0].within(found[0].output[:, None]))) > 0.0
    }
    if not tried:
        return "too few rows in a row with the output off its limits"
    floor = _rounding(output) ** 2 / 50.0
    size = {lag: left / int((rows.segment >= 0).sum()) + floor for lag, (rows, _, left) in tried.items()}
    for lag in sorted(size, key=lambda one: size[one])[:3]:
        rows, filter_s, _ = tried[lag]
        if filter_s > 0.0:
            tried[lag] = (rows, *_best_filter(rows, hint_s, filter_s))
            size[lag] = tried[lag][2] / int((rows.segment >= 0).sum()) + floor
    lag = min(size, key=lambda one: (size[one], abs(one)))
    rows = tried[lag][0]
    best = _described(rows, tried[lag][1], _rounding(output), _rounding(measurement), hint_s)
    doubt = dict(best.doubt)
    n = int((rows.segment >= 0).sum())
    for other in (lag - 1, lag + 1):
        if other in size and n * (size[other] / size[lag] - 1.0) < _ALIKE:
            also = _described(tried[other][0], tried[other][1], _rounding(output), _rounding(measurement), hint_s)
            for name, value in also.values.items():
                doubt[name] += abs(value - best.values[name])
    return Acting(
        values=best.values, doubt=doubt, share=best.share, r_squared=best.r_squared,
        lag_scans=lag / rows_a_scan, scan_s=rows.scan_s, held=rows_a_scan > 1, exact=best.exact, white=best.white, derivative=best.derivative,
    )  # fmt: skip


def _rows(
    setpoint: Array, measurement: Array, output: Array, free: NDArray[np.bool_], every: float, stride: int, phase: int,
    lag: int,
) -> _Rows | None:  # fmt: skip
    at = np.arange(phase, len(output), stride)
    at = at[(at - lag >= 0) & (at - lag < len(output))]
    inside = free[at]
    starts = np.diff(inside.astype(np.int64), prepend=0) == 1
    number = np.where(inside, np.cumsum(starts) - 1, -1)
    if not inside.any():
        return None
    length = np.bincount(number[inside])
    keep = inside & (length[np.maximum(number, 0)] >= 4)
    if int(keep.sum()) < _FEWEST:
        return None
    number = np.where(keep, np.unique(np.where(keep, number, -1), return_inverse=True)[1] - int(not keep.all()), -1)
    return _Rows(
        scan_s=stride * every, setpoint=setpoint[at - lag], measurement=measurement[at - lag], output=output[at],
        segment=number.astype(np.int64),
    )  # fmt: skip


def _solved(columns: Array, wanted: Array, used: list[int]) -> tuple[Array, float, list[int]]:
    """Coefficients of the columns that move at all, sum of squares left, and which those are."""
    size = np.sqrt(np.mean(columns**2, axis=0))
    used = [k for k in used if size[k] > 0.0]
    solution = np.linalg.lstsq(columns[:, used] / size[used], wanted, rcond=1e-11)[0] / size[used]
    left = wanted - columns[:, used] @ solution
    return solution, float(left @ left), used


def _best_filter(rows: _Rows, hint_s: float, refine: float | None = None) -> tuple[float, float]:
    """Filter time of least squares, s, and the sum of squares; 0 where a derivative does not act.

    Of a grid, or near the time `refine`.
    """
    wanted = rows.within(rows.output[:, None])[:, 0]

    def left(filter_s: float) -> float:
        return _solved(rows.within(rows.columns(filter_s)), wanted, [0, 1, 2, 3, 4, 5])[1]

    if refine is None:
        choices = [(left(float(value)), float(value)) for value in rows.scan_s * _FILTERS]
    else:
        from scipy.optimize import minimize_scalar

        middle, reach = math.log(refine), math.log(_FILTERS[1] / _FILTERS[0])
        near = minimize_scalar(
            lambda x: left(math.exp(x)),
            bounds=(middle - reach, middle + reach),
            method="bounded",
            options={"xatol": 1e-5},
        )
        choices = [(float(near.fun), math.exp(float(near.x))), (left(refine), refine)]
        if hint_s > 0.0:
            choices.append((left(hint_s), hint_s))
    least, filter_s = min(choices)
    plain = _solved(rows.within(rows.columns(1.0)), wanted, [0, 1, 2])[1]
    floor = len(wanted) * _rounding(rows.output) ** 2 / 3.0  # twice the rounding: less is no sign of a derivative
    return (0.0, plain) if len(wanted) * ((plain + floor) / (least + floor) - 1.0) < _ACTS else (filter_s, least)


def _described(rows: _Rows, filter_s: float, unit: float, measured_unit: float, hint_s: float) -> Acting:
    derivative = filter_s > 0.0
    raw = rows.columns(filter_s if derivative else max(hint_s, rows.scan_s))
    wanted_raw = rows.output[:, None]
    levels, wanted = rows.within(raw), rows.within(wanted_raw)[:, 0]
    use = [0, 1, 2, 3, 4, 5] if derivative else [0, 1, 2]
    solution, left, used = _solved(levels, wanted, use)
    residual = wanted - levels[:, used] @ solution
    n = len(wanted)
    rho = min(max(_correlation(residual), 0.0), 0.98)
    spread = math.sqrt(left / max(n - len(used) - 1, 1) * (1.0 + rho) / (1.0 - rho))
    slope = np.zeros(len(raw))
    if derivative:  # joint with the filter time: the derivative of the fit to its logarithm
        full = np.zeros(6)
        full[used] = solution
        up, down = rows.columns(filter_s * 1.01), rows.columns(filter_s / 1.01)
        slope = ((up - down) @ full) / (2.0 * math.log(1.01))
    error, filter_error = _errors(levels[:, used], rows.within(slope[:, None])[:, 0], spread)
    diff, moved = rows.steps(raw), rows.steps(wanted_raw)[:, 0]
    again, more, usable = _solved(diff, moved, used)
    deviation = math.sqrt(more / max(len(moved) - len(usable), 1))
    own, _ = _errors(diff[:, usable], rows.steps(slope[:, None])[:, 0], deviation)
    estimate, doubt, share = dict.fromkeys(_TERMS, 0.0), dict.fromkeys(_TERMS, math.inf), dict.fromkeys(_TERMS, 0.0)
    total = float(np.std(wanted))
    for place, k in enumerate(used):
        if k == 5:
            continue
        name = _TERMS[k]
        estimate[name], doubt[name] = float(solution[place]), 2.0 * float(error[place])
        share[name] = float(np.std(levels[:, k])) / total
        if k in usable:
            j = usable.index(k)
            doubt[name] += max(0.0, abs(float(again[j] - solution[place])) - 2.0 * float(own[j]))
    kp, kd = estimate["kp"], estimate["kd"]
    if not derivative:
        # what a derivative could hide behind the residual
        room = 2.0 * spread / math.sqrt(n) / max(float(np.std(levels[:, 3])), 1e-300)
        doubt["kd"], share["kd"] = room, float(np.std(levels[:, 3])) / total
    weight, weight_doubt = _ratio(estimate, doubt, "weighted", "kp")
    on_error, on_error_doubt = _ratio(estimate, doubt, "setpoint_kd", "kd")
    rounding = math.hypot(unit, math.hypot(kp, math.sqrt(2.0) * kd / (filter_s + rows.scan_s)) * measured_unit)
    return Acting(
        values={"kp": kp, "ki": estimate["ki"], "kd": kd, "filter_s": filter_s, "setpoint_weight": weight, "on_error": on_error},
        doubt={
            "kp": doubt["kp"], "ki": doubt["ki"], "kd": doubt["kd"],
            "filter_s": 2.0 * filter_error * filter_s if derivative else math.inf,
            "setpoint_weight": weight_doubt, "on_error": on_error_doubt,
        },
        share=share, r_squared=1.0 - left / float(wanted @ wanted), lag_scans=0.0, scan_s=rows.scan_s, held=False,
        exact=math.sqrt(left / n) < _EXACT * rounding / math.sqrt(12.0), white=abs(_correlation(residual)) < _WHITE,
        derivative=derivative,
    )  # fmt: skip


def _ratio(estimate: dict[str, float], doubt: dict[str, float], over: str, under: str) -> tuple[float, float]:
    if estimate[under] == 0.0 or not math.isfinite(doubt[over]):
        return math.nan, math.inf
    ratio = estimate[over] / estimate[under]
    return ratio, (doubt[over] + doubt[under] * abs(ratio)) / abs(estimate[under])


def _errors(columns: Array, slope: Array, spread: float) -> tuple[Array, float]:
    """Standard errors of the coefficients, and of the logarithm of the filter time where `slope` is not 0."""
    joint = np.column_stack((columns, slope)) if np.any(slope) else columns
    size = np.sqrt(np.mean(joint**2, axis=0))
    inverse = np.linalg.pinv(joint / size, rcond=1e-11)
    error = spread * np.sqrt(np.sum(inverse**2, axis=1)) / size
    return error[: columns.shape[1]], float(error[-1]) if joint.shape[1] > columns.shape[1] else math.inf


def _correlation(residual: Array) -> float:
    """Of neighbouring rows."""
    size = float(residual @ residual)
    return float(residual[1:] @ residual[:-1]) / size if size > 0.0 else 0.0


def _rounding(values: Array) -> float:
    """Unit of rounding where the values lie on a grid, or what eight digits leave."""
    distinct = np.unique(values)[1:-1]  # the ends may be limits, off the grid
    least = 1e-8 * float(np.abs(values).max(initial=0.0))
    gaps = np.diff(distinct)
    gaps = gaps[gaps > least]
    if not len(gaps):
        return least
    places = (distinct - distinct[0]) / float(gaps.min())
    whole = float(np.abs(places - np.round(places)).max())
    return float(gaps.min()) if whole < 0.05 else least


def _held_rows(output: Array) -> tuple[int, int]:
    """Rows for which the output is held between scans, and the first at which it may move: the largest that fits."""
    moves = np.flatnonzero(np.diff(output) != 0.0) + 1
    if len(moves) < 5:
        return 1, 0
    stride = min(int(np.gcd.reduce(np.diff(moves))), _MOST_ROWS_A_SCAN)
    while stride > 1 and len(set((moves % stride).tolist())) > 1:
        stride -= 1
    return max(stride, 1), int(moves[0] % max(stride, 1))


def _unclamped(output: Array, measurement: Array, limits: tuple[float, float] | None) -> NDArray[np.bool_]:
    """Rows at which the output is off its limits.

    Where those were not typed: not resting at its highest or lowest value for three rows while the measurement moves.
    """
    near = max(1e-6 * float(np.ptp(output)), 1.01 * _rounding(output))
    free = np.ones(len(output), dtype=bool)
    if limits is not None:
        free &= (output > limits[0] + near) & (output < limits[1] - near)
    unit = _rounding(measurement)
    for end in (float(output.min()), float(output.max())):
        at = np.abs(output - end) <= 1e-6 * float(np.ptp(output))
        edges = np.flatnonzero(np.diff(at.astype(np.int64), prepend=0, append=0))
        for start, stop in edges.reshape(-1, 2):
            if stop - start >= 3 and float(np.ptp(measurement[start:stop])) > 3.0 * unit:
                free[start:stop] = False
    return free
