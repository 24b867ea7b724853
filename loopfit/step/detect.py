"""Finding the steps in a setpoint or an output column."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Literal

import numpy as np

from loopfit.core.arrays import Array

Stepped = Literal["setpoint", "output"]

_CLEAR = 8.0  # noise levels by which a change must stand out in a noisy column
_SMALLEST_SHARE = 0.02  # of the column's range
_MOVING_SHARE = 0.3
_WANDERS = 3.0  # a column that spreads this many noise levels is no constant
_BESIDE = 8  # rows whose median tells a level
_ONE_MOVE = 3  # changes that follow each other within so many rows are one move


@dataclass(frozen=True, slots=True, kw_only=True)
class Step:
    """A deliberate change: the first row that shows it, the row at which it is complete, and its levels."""

    signal: Stepped
    row: int
    last_row: int
    time_s: float
    from_: float
    to: float

    @property
    def size(self) -> float:
        """Change of the stepped signal."""
        return self.to - self.from_


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class StepsFound:
    """The steps of one column, and every change of its level: `rows` (J,), `sizes` (J,).

    `noise`: the column's own noise, 0 when it is clean. `always_moving`: no levels can be told. `blips`: rows that
    differ alone from equal rows on both sides, taken for false readings and not counted as changes.
    """

    steps: tuple[Step, ...]
    rows: np.ndarray
    sizes: Array
    noise: float
    always_moving: bool
    blips: tuple[int, ...] = ()


def column_noise(values: Array) -> float:
    """Return the noise of a column that is mostly constant, from its differences; 0 when it is clean.

    The median absolute difference (Hampel 1974) does not see a few steps.
    """
    differences = np.abs(np.diff(values))
    return float(np.median(differences) / (0.6745 * np.sqrt(2.0)))


def find_steps(time: Array, values: Array, signal: Stepped) -> StepsFound:
    """Return the steps of a column.

    Parameters
    ----------
    time, values : (n,) arrays
        Rising times, s; the column.
    signal : str
        What the column is.
    """
    nothing = StepsFound(steps=(), rows=np.zeros(0, dtype=np.intp), sizes=np.zeros(0), noise=0.0, always_moving=False)
    spread = float(np.ptp(values))
    if spread == 0:
        return nothing
    blips = _lone_rows(values)
    if blips:
        values = values.copy()
        for row in blips:
            values[row] = values[row - 1]
        return replace(find_steps(time, values, signal), blips=blips)
    differences = np.diff(values)
    noise = column_noise(values)
    if noise == 0:
        rows = np.flatnonzero(np.abs(differences) > 1e-9 * spread) + 1
        if rows.size > _MOVING_SHARE * values.size:
            return replace(nothing, always_moving=True)
        sizes = differences[rows - 1]
    else:
        rows, sizes = _noisy_changes(values, noise, spread)
    if rows.size == 0:
        return replace(nothing, noise=noise, always_moving=float(np.std(values)) > _WANDERS * noise > 0)
    return StepsFound(
        steps=_moves(time, values, rows, sizes, signal, noise), rows=rows, sizes=sizes, noise=noise, always_moving=False
    )


def _lone_rows(values: Array) -> tuple[int, ...]:
    """Return rows that differ alone while three rows on each side are equal to each other."""
    n = values.size
    if n < 8:
        return ()
    inside = np.arange(3, n - 3)
    sides = [values[inside + k] for k in (-3, -2, -1, 1, 2, 3)]
    level = sides[2]
    alone = np.all([side == level for side in sides], axis=0) & (values[inside] != level)
    return tuple(int(row) for row in inside[alone])


def _noisy_changes(values: Array, noise: float, spread: float) -> tuple[np.ndarray, Array]:
    """Return rows and sizes of the changes that stand out of the noise, from the levels beside them."""
    least = max(_CLEAR * noise, _SMALLEST_SHARE * spread)
    candidates = np.flatnonzero(np.abs(np.diff(values)) > least) + 1
    kept: list[int] = []
    for row in candidates.tolist():
        if not kept or row - kept[-1] > 1:
            kept.append(row)
    bounds = [0, *kept, values.size]
    rows, sizes = [], []
    for i, at in enumerate(kept, start=1):
        before = np.median(values[max(bounds[i - 1], at - _BESIDE) : at])
        after = np.median(values[at : min(bounds[i + 1], at + _BESIDE)])
        if abs(after - before) > least:
            rows.append(at)
            sizes.append(_level(values, at, bounds[i + 1]) - _level(values, bounds[i - 1], at))
    return np.array(rows, dtype=np.intp), np.array(sizes, dtype=np.float64)


def _level(values: Array, begin: int, end: int) -> float:
    return float(np.mean(values[begin:end]))


def _moves(
    time: Array, values: Array, rows: np.ndarray, sizes: Array, signal: Stepped, noise: float
) -> tuple[Step, ...]:
    """Join changes that follow each other into one move, and keep the moves worth naming."""
    breaks = np.flatnonzero(np.diff(rows) > _ONE_MOVE)
    firsts = np.concatenate([[0], breaks + 1])
    lasts = np.concatenate([breaks, [rows.size - 1]])
    totals = np.add.reduceat(sizes, firsts)
    least = 0.05 * np.max(np.abs(totals))
    out = []
    for first, last, total in zip(firsts, lasts, totals, strict=True):
        if abs(total) < least:
            continue
        begin = rows[first - 1] if first > 0 else 0
        start = float(values[rows[first] - 1]) if noise == 0 else _level(values, begin, rows[first])
        out.append(
            Step(
                signal=signal,
                row=int(rows[first]),
                last_row=int(rows[last]),
                time_s=float(time[rows[first]]),
                from_=start,
                to=start + float(total),
            )
        )
    return tuple(out)
