"""One plant from several records, at several operating points: a joint one where they agree, else a set that one setting must serve."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np

from loopfit.core.arrays import Array
from loopfit.core.errors import UsageError
from loopfit.core.finding import Finding
from loopfit.core.quantity import Quantity
from loopfit.core.rounding import decimals_of, number
from loopfit.fit.columns import Columns
from loopfit.fit.estimate import Fit
from loopfit.fit.separable import minimise, solve_linear
from loopfit.identify.identified import Identified
from loopfit.identify.plants import plants_of, times_of
from loopfit.identify.posterior import degrees_of, drawn, lowest_of
from loopfit.loop.plant import Plant
from loopfit.model.chart import LAGS
from loopfit.record.record import Record, Signal
from loopfit.record.units import split_unit
from loopfit.record.words import weight as role_weight
from loopfit.record.words import words_of

_SEED = 61131
_SLACK = 1.25  # several comparisons at 95 % each: intervals are stretched before they are called apart
_CHANCE = 3.3  # chi-squared over its degrees of freedom, 99 % for four
_TAILS = (0.025, 0.975)
_STATED = 2  # weight of a name that states its role and no quantity: it may stand for any
_TAG_DIGITS = 3  # of the number of a loop in a tag; shorter ones count sensors or columns
_WORDS = ("gain", "sum of lags and dead time", "dead time")


def together(found: Sequence[Identified]) -> Identified:
    """Return the plant of several records.

    Parameters
    ----------
    found : sequence of Identified
        What each record tells; those refused are left out, unless all are.

    Returns
    -------
    Identified
        One plant with the draws of a joint fit where the records agree; else the most certain record's plant, with the
        draws of all records side by side, so that a setting must serve each. The finding says which.

    Raises
    ------
    UsageError
        If there is none, or the plants' gains have different signs.
    """
    if not found:
        raise UsageError("give at least one record")
    usable = [one for one in found if one.refused is None]
    if len(found) == 1 or not usable:
        return found[0]
    left_out = [_left_out(i, one) for i, one in enumerate(found, start=1) if one.refused is not None]
    own = tuple(dict.fromkeys(finding for one in usable for finding in one.findings))  # each once, in order
    if len(usable) == 1:
        return replace(usable[0], findings=(*own, *left_out))
    if len({one.plant.gain > 0.0 for one in usable}) > 1:
        raise UsageError(
            "the records give plants with gains of both signs: no controller serves both; check the columns and the operating points"
        )
    apart = _apart(usable)
    fits = [one.fit for one in usable if one.fit is not None]
    alike = len({(fit.structure.rungs, fit.structure.first_order) for fit in fits}) == 1
    if not apart and len(fits) == len(usable) and alike:
        return replace(_joint(usable, fits), findings=(*own, *left_out, _agree(len(usable))))
    best = min(usable, key=_uncertainty)
    return replace(
        best,
        draws=_side_by_side([one.draws for one in usable]),
        fresh=_side_by_side([one.fresh for one in usable]),
        findings=(*own, *left_out, _differ(len(usable), apart)),
    )


def of_one_loop(records: Sequence[Record]) -> None:
    """Check that records can be of one loop.

    Raises
    ------
    UsageError
        If their measurements or outputs have different units, or names that cannot be of one signal.
    """
    for role in ("measurement", "output"):
        signals = [signal for record in records if (signal := getattr(record, role)) is not None]
        for i, one in enumerate(signals):
            for other in signals[i + 1 :]:
                if _of_another_loop(one, other, role):
                    raise UsageError(
                        f"the records are not of one loop: the {role} is {_named(one)} in one and {_named(other)} in another; "
                        "several records must have the same signals in the same units"
                    )


def _named(signal: Signal) -> str:
    return repr(signal.name) if signal.unit is None else f"{signal.name!r} in {signal.unit}"


def _of_another_loop(one: Signal, other: Signal, role: str) -> bool:
    if one.unit is not None and other.unit is not None and one.unit != other.unit:
        return True
    words = [words_of(split_unit(signal.name)[0]) for signal in (one, other)]
    tags = [{word for word in each if word.isdigit() and len(word) >= _TAG_DIGITS} for each in words]
    if all(tags) and tags[0] != tags[1]:
        return True
    if _STATED in (role_weight(one.name, role), role_weight(other.name, role)):
        return False
    letters = [[word for word in each if word.isalpha() and len(word) > 1] for each in words]
    # "temp" and "temperature" are alike
    alike = any(a.startswith(b) or b.startswith(a) for a in letters[0] for b in letters[1])
    return all(letters) and not alike


@dataclass(frozen=True, kw_only=True, eq=False)
class Stacked:
    """Models of several records with one set of coordinates and one answer to the input; the rest is each record's own.

    `parts`: whitened columns in one chart; `weights` one over the noise of each.
    """

    parts: tuple[Columns, ...]
    weights: tuple[float, ...]

    @cached_property
    def target(self) -> Array:
        """Measurements (n,), in units of their noise."""
        return np.concatenate([part.target * weight for part, weight in zip(self.parts, self.weights, strict=True)])

    def evaluate(self, theta: Array, *, derivatives: bool = True) -> tuple[Array, Array]:
        """Return columns (B, q, n) and the derivatives (B, 3, m, n) of the first m of them."""
        shared = len(self.parts[0].rungs)
        counts = [part.target.size for part in self.parts]
        moving = shared + sum(part.moving_count - shared for part in self.parts)
        q = moving + sum(part.fixed.shape[0] for part in self.parts)
        columns = np.zeros((theta.shape[0], q, sum(counts)))
        slopes = np.zeros((theta.shape[0], 3 if derivatives else 0, moving, sum(counts)))
        row, mine, fixed = 0, shared, moving
        for part, weight, count in zip(self.parts, self.weights, counts, strict=True):
            matrix, by = part.evaluate(theta, derivatives=derivatives)
            rows = slice(row, row + count)
            m = part.moving_count
            own, rest = slice(mine, mine + m - shared), slice(fixed, fixed + matrix.shape[1] - m)
            columns[:, :shared, rows] = weight * matrix[:, :shared]
            columns[:, own, rows] = weight * matrix[:, shared:m]
            columns[:, rest, rows] = weight * matrix[:, m:]
            if derivatives:
                slopes[:, :, :shared, rows] = weight * by[:, :, :shared]
                slopes[:, :, own, rows] = weight * by[:, :, shared:]
            row, mine, fixed = rows.stop, own.stop, rest.stop
        return columns, slopes


def _joint(usable: Sequence[Identified], fits: Sequence[Fit]) -> Identified:
    """Return the plant that all records share."""
    factors = [degrees_of(fit.degrees, fit.inflation, fit.whitener) for fit in fits]
    variances = [fit.variance * fit.inflation * factor for fit, (_, factor) in zip(fits, factors, strict=True)]
    parts = tuple(replace(fit.working, chart=LAGS) for fit in fits)
    stacked = Stacked(parts=parts, weights=tuple(1.0 / math.sqrt(variance) for variance in variances))
    starts = np.concatenate([_in_lags(fit) for fit in fits])
    free = fits[0].free
    highest = np.max([part.highest for part in parts], axis=0)
    found = minimise(
        stacked.evaluate,
        stacked.target,
        starts,
        lowest=LAGS.lowest,
        highest=highest,
        free=free,
        caps=lambda at: np.stack([np.full(at.shape[0], 0.5), np.full(at.shape[0], 0.8), LAGS.scale(at)], axis=1),
        tolerance=1e-7,
        rounds=60,
    )
    theta = found.theta[int(np.argmin(found.sse))]
    apart = [
        float(solve_linear(part.evaluate(start[None], derivatives=False)[0], part.target).sse[0]) / variance
        for part, start, variance in zip(parts, starts, variances, strict=True)
    ]
    more = (len(fits) - 1) * (int(free.sum()) + len(parts[0].rungs))
    wider = (float(np.min(found.sse)) - sum(apart)) / more
    wider = wider if wider > _CHANCE else 1.0  # what the joint plant leaves over beyond chance widens its draws
    structure, times = fits[0].structure, times_of(fits[0].columns)
    lowest = np.min([lowest_of(part, theta) for part in parts], axis=0)
    solved = solve_linear(stacked.evaluate(theta[None], derivatives=False)[0], stacked.target)
    sets = []
    for seed, count in zip(np.random.SeedSequence(_SEED).spawn(2), _counts(usable), strict=True):
        points, linear = drawn(
            stacked,
            theta,
            free=free,
            lowest=lowest,
            highest=highest,
            variance=wider,
            degrees=sum(degrees for degrees, _ in factors),
            count=count,
            rng=np.random.default_rng(seed),
        )
        sets.append(tuple(plants_of(LAGS, structure, points, linear, times=times)))
    plant = plants_of(LAGS, structure, theta[None], solved.linear, times=times)[0]
    return Identified(plant=plant, how=usable[0].how, draws=sets[0], fresh=sets[1])


def _in_lags(fit: Fit) -> Array:
    """Return the coordinates of a fit in the chart of lags (1, 3)."""
    chart, theta = fit.columns.chart, fit.theta[None]
    if chart.by_lags:
        return theta
    return LAGS.locate(np.maximum(chart.damping(theta), 1e-3), chart.frequency(theta), theta[:, 2])


def _counts(usable: Sequence[Identified]) -> tuple[int, int]:
    return max(len(one.draws) for one in usable), max(len(one.fresh) for one in usable)


def _side_by_side(sets: Sequence[tuple[Plant, ...]]) -> tuple[Plant, ...]:
    """Return as many draws as the largest set has, in turn from each record."""
    each = -(-max(len(draws) for draws in sets) // len(sets))
    return tuple(draw for row in zip(*(draws[:each] for draws in sets), strict=False) for draw in row)


def _figures(plant: Plant) -> tuple[float, float, float]:
    """Return gain, sum of lags and dead time, s, and dead time, s."""
    denominator = np.array(plant.denominator)
    if plant.integrating:
        denominator = denominator[:-1]
    lags = float(denominator[-2] / denominator[-1]) if denominator.size > 1 else 0.0
    return plant.gain, lags + plant.dead_time_s, plant.dead_time_s


def _intervals(one: Identified) -> list[Quantity]:
    values = np.array([_figures(plant) for plant in (*one.draws, *one.fresh)])
    lows, highs = np.quantile(values, _TAILS, axis=0)
    middle = _figures(one.plant)
    return [Quantity.spanning(*each) for each in zip(middle, lows.tolist(), highs.tolist(), strict=True)]


def _apart(usable: Sequence[Identified]) -> list[str]:
    """Return in words what differs between the records by more than their intervals allow."""
    if len({one.plant.integrating for one in usable}) > 1:
        return ["some integrate within their record and some do not"]
    if any(not (one.draws or one.fresh) for one in usable):
        return []
    texts = []
    for words, quantities in zip(_WORDS, zip(*map(_intervals, usable), strict=True), strict=True):
        lows = [q.value - _SLACK * (q.value - q.low) for q in quantities]
        highs = [q.value + _SLACK * (q.high - q.value) for q in quantities]
        if max(lows) > min(highs):
            least, most = (pick(quantities, key=lambda q: q.value) for pick in (min, max))
            texts.append(f"{words} from {_short(least)} to {_short(most)}")
    return texts


def _short(quantity: Quantity) -> str:
    return number(quantity.value, decimals_of(quantity))


def _uncertainty(one: Identified) -> float:
    """Return the width of the gain's interval over the gain."""
    gain = _intervals(one)[0] if one.draws or one.fresh else Quantity(1.0, 1.0, 1.0)
    return (gain.high - gain.low) / abs(gain.value)


def _left_out(place: int, one: Identified) -> Finding:
    return Finding(
        code="record_left_out",
        severity="warning",
        text=f"Record {place} is left out: {one.refused or 'it tells no plant'}",
    )


def _agree(count: int) -> Finding:
    return Finding(
        code="records_agree",
        severity="note",
        text=f"The {count} records agree within their uncertainty and are fitted together.",
    )


def _differ(count: int, apart: Sequence[str]) -> Finding:
    if not apart:
        return Finding(
            code="records_side_by_side",
            severity="note",
            text=f"The {count} records do not contradict each other, but cannot be fitted together; each counts as much as the "
            "others.",
        )
    return Finding(
        code="plant_depends_on_record",
        severity="warning",
        text=f"The {count} records do not share one plant ({'; '.join(apart)}): it depends on the operating point, or it changed. "
        "The settings must serve all of them; settings for each operating point would serve better.",
    )
