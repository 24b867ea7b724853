"""The loop of a case: the plant that its record tells, under the controller that it names."""

from __future__ import annotations

from loopfit.case.arguments import reading_arguments, settings_of
from loopfit.case.schema import Case
from loopfit.case.words import CaseError
from loopfit.loop.loop import Loop


def loop_of(case: Case) -> Loop:
    """Return the loop of a case.

    Raises
    ------
    CaseError, UsageError, RecordError
        If the case names no controller, or its record tells no plant.
    """
    from loopfit.identify.source import identify_source

    settings = settings_of(case.controller)
    if settings is None:
        raise CaseError(case.file, "controller", "the loop of a case needs its controller: give [controller]")
    reading = reading_arguments(case.reading)
    reading.pop("band_percent", None)
    confidence = reading.pop("confidence_percent", 95.0)
    sources = list(case.records)
    found = identify_source(
        sources[0] if len(sources) == 1 else sources, settings, confidence=confidence / 100.0, reading=reading
    )
    return Loop(found.plant, settings)
