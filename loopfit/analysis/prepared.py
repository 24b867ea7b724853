"""What the estimator gets of a record."""

from __future__ import annotations

from dataclasses import dataclass

from loopfit.analysis.result import StepUsed
from loopfit.core.finding import Finding
from loopfit.fit.estimate import Trace

AFTER_AT_LEAST = 5  # rows after a step


@dataclass(frozen=True, slots=True, kw_only=True)
class StatedStep:
    """A step that the user states: instant, s on the file's clock, and levels."""

    at_s: float
    from_: float
    to: float


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Prepared:
    """What the estimator gets, and what is known about the step.

    `held_before`: a record without a step begins with the measurement at rest. `separate`: where several steps
    are taken together, each one with the trace of its own.
    """

    trace: Trace
    step: StepUsed | None
    steps: tuple[StepUsed, ...]
    findings: tuple[Finding, ...]
    held_before: bool = False
    separate: tuple[tuple[StepUsed, Trace], ...] = ()
