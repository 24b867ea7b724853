"""A plant as a record tells it, with its uncertainty."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Literal

from loopfit.core.arrays import Array
from loopfit.core.finding import Finding
from loopfit.loop.plant import Plant

if TYPE_CHECKING:
    from loopfit.analysis.result import Analysis
    from loopfit.fit.estimate import Fit
    from loopfit.record.record import Record

How = Literal["open step", "output to measurement", "through the loop", "load", "given"]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Identified:
    """A plant and what is known of it.

    `draws` and `fresh`: plants that the record allows as well, in proportion to their probability, two independent
    sets (none for a plant that was given); `refused`: why no settings may be proposed, in one sentence, or None;
    `disc`: (2, n) frequency, rad/s, and how far the plant may be from its model there, in its own unit, or None;
    `most_sensitivity`: limit of the sensitivity that a design must keep because of what the record cannot show, or None;
    `record`: what was read, None for a plant that was given or told by several records.
    """

    plant: Plant
    how: How
    draws: tuple[Plant, ...] = ()
    fresh: tuple[Plant, ...] = ()
    findings: tuple[Finding, ...] = ()
    refused: str | None = None
    disc: Array | None = None
    fit: Fit | None = None
    analysis: Analysis | None = None
    record: Record | None = None
    most_sensitivity: float | None = None
