"""The rows of one recorded test."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from loopfit.core.arrays import Array
from loopfit.core.finding import Finding


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Signal:
    """One column of a record: its name in the file, its unit if the file tells it, its values (n,)."""

    name: str
    unit: str | None
    values: Array


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Record:
    """A recorded test: rising times in seconds on the file's own clock, and the signals.

    `rows` counts the data rows of the file; `time` and the signals hold the rows used.
    `others` are numeric columns without a role. `findings` say what reading noticed.
    """

    source: str
    rows: int
    time: Array
    time_name: str | None
    measurement: Signal
    setpoint: Signal | None
    output: Signal | None
    others: tuple[Signal, ...]
    findings: tuple[Finding, ...]

    @property
    def duration_s(self) -> float:
        """Time from the first row to the last, s."""
        return float(self.time[-1] - self.time[0])

    @property
    def sample_interval_s(self) -> float:
        """Median time between rows, s."""
        return float(np.median(np.diff(self.time)))
