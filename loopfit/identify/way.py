"""In which way a record tells its plant, and what is missing where it tells none."""

from __future__ import annotations

from typing import Literal

import numpy as np

from loopfit.core.arrays import Array
from loopfit.core.errors import RecordError
from loopfit.identify.gaps import gaps_in
from loopfit.loop.settings import Settings
from loopfit.record.record import Record
from loopfit.step.detect import find_steps

Way = Literal["open step", "closed", "load", "through the loop"]

_FEW = 20  # changes of an output that a person makes by hand
_HELD = 2.0  # noise levels of an output that rests between its moves
_APART = 3  # rows within which changes are one
_ALIKE = 0.9  # of the rows in which a setpoint that follows the measurement equals it
SLOWER = 1.5  # scans in a row from which the output was not seen at the scan rate


def way_of(record: Record, settings: Settings | None) -> Way:
    """Return the way in which a record tells its plant.

    Raises
    ------
    RecordError
        If there is none.
    """
    stepped = setpoint_steps(record) is not None
    output = None if record.output is None else record.output.values
    if output is None:
        if not stepped:
            raise RecordError(
                record.source,
                "nothing that moves the plant was recorded: record the controller's output, or step the setpoint in automatic "
                "and give the controller's settings",
            )
        if settings is None:
            raise RecordError(
                record.source,
                "a closed-loop record without the controller's output tells the plant only with the settings of the "
                "controller during the record: give them, or record the output at every scan",
            )
        _check_even(record)
        return "through the loop"
    if np.ptp(output) == 0.0:
        raise RecordError(
            record.source,
            "the output is the same in every row: "
            + ("the setpoint steps, but the controller is in manual" if stepped else "nothing was moved")
            + ", or the wrong column was taken (choose with --output); step the output in manual, or the setpoint in "
            "automatic",
            column=None if record.output is None else record.output.name,
        )
    if not stepped and _by_hand(record.time, output):
        return "open step"
    _check_even(record)
    scan = None if settings is None else settings.scan_s
    if scan is not None and stepped and record.sample_interval_s > SLOWER * scan:
        return "through the loop"
    return "closed" if stepped else "load"


def _check_even(record: Record) -> None:
    if gaps_in(record) is None:
        raise RecordError(
            record.source,
            "the rows are at uneven times, so that the output between them is not known: log at even times, best at every scan",
        )


def setpoint_steps(record: Record) -> float | None:
    """Return where the setpoint steps first, s; None where it does not, or merely follows the measurement in manual."""
    if record.setpoint is None:
        return None
    values = record.setpoint.values
    span = float(np.ptp(record.measurement.values))
    if np.mean(np.abs(values - record.measurement.values) <= 1e-9 * span) > _ALIKE:
        return None
    found = find_steps(record.time, values, "setpoint")
    if found.steps:
        return found.steps[0].time_s
    moves = np.flatnonzero(np.diff(values))
    return float(record.time[moves[0] + 1]) if found.always_moving and moves.size else None


def _by_hand(time: Array, output: Array) -> bool:
    """Tell whether an output is held between a few moves: the controller is in manual."""
    found = find_steps(time, output, "output")
    if not found.steps:
        return False
    if found.noise == 0.0:
        return 1 + int(np.sum(np.diff(found.rows) > _APART)) <= _FEW
    held = np.concatenate([part - part.mean() for part in np.split(output, found.rows)])  # its sensor is noisy
    return float(np.std(held)) < _HELD * found.noise
