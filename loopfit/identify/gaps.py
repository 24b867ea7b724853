"""Rows that are missing from an even record."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from loopfit.fit.convolution import even_grid
from loopfit.record.record import Record, Signal

_MISSING_AT_MOST = 0.05  # of the rows


def gaps_in(record: Record) -> int | None:
    """Return how many rows are missing from an even record; None where its rows are not even, or too many are missing."""
    grid = even_grid(record.time)
    if grid is None:
        return None
    whole = int(grid[1][-1]) + 1
    missing = whole - record.time.size
    return missing if missing <= _MISSING_AT_MOST * whole else None


def without_gaps(record: Record) -> tuple[Record, int]:
    """Return the record with its missing rows filled, and how many there were.

    The measurement is led over the gap; output and setpoint keep the value they had. A clock that jitters a little is
    made even.
    """
    grid = even_grid(record.time)
    if grid is None:
        return record, 0
    (first, interval), places = grid
    every = np.arange(places[-1] + 1)
    time = first + interval * every
    last = np.searchsorted(places, every, side="right") - 1

    def held(signal: Signal | None) -> Signal | None:
        return None if signal is None else replace(signal, values=signal.values[last])

    values = np.interp(every, places, record.measurement.values)
    filled = replace(
        record,
        time=time,
        measurement=replace(record.measurement, values=values),
        setpoint=held(record.setpoint),
        output=held(record.output),
        others=(),
    )
    return filled, int(every.size - places.size)
