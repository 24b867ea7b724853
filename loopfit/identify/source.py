"""A plant from whatever a user holds: a file, an analysis, several records; with every check that the record allows."""

from __future__ import annotations

import os
from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import Any

from loopfit.analysis.analyze import analyze
from loopfit.analysis.result import Analysis
from loopfit.core.errors import UsageError
from loopfit.identify.from_record import identify
from loopfit.identify.identified import Identified
from loopfit.loop.settings import Settings
from loopfit.record.read import read_record
from loopfit.record.record import Record

_READ = ("columns", "interval_s", "window_s")
_STEP = ("step", "step_at_s", "step_from", "step_to")


def identify_source(
    source: Any, settings: Settings | None, *, confidence: float, reading: Mapping[str, Any]
) -> Identified:
    """Return the plant that a source tells of.

    Parameters
    ----------
    source : path, Record, Analysis, or a sequence of them
    settings : Settings, optional
        In the controller during the record.
    confidence : float
        A fraction.
    reading : mapping
        What `analyze` takes besides the source.

    Raises
    ------
    UsageError, RecordError
        If the source is none of these, or tells no plant.
    """
    unknown = set(reading) - {*_READ, *_STEP}
    if unknown:
        raise UsageError(f"{', '.join(sorted(unknown))}: no such argument")
    if isinstance(source, Sequence) and not isinstance(source, str | bytes):
        if not source:
            raise UsageError("give at least one record")
        from loopfit.identify.several import together

        return together([_one(item, settings, confidence, reading) for item in source])
    return _one(source, settings, confidence, reading)


def _one(source: Any, settings: Settings | None, confidence: float, reading: Mapping[str, Any]) -> Identified:
    if isinstance(source, Analysis | Record):
        if reading:
            raise UsageError(f"{', '.join(sorted(reading))}: only for a file; this has been read already")
        record = source.record if isinstance(source, Analysis) else source
        return replace(identify(source, settings=settings, confidence=confidence), record=record)
    if not isinstance(source, str | os.PathLike):
        raise UsageError(f"a record is a file, an Analysis or a Plant, not {type(source).__name__}")
    given = {name: value for name, value in reading.items() if value is not None}
    if any(name in given for name in _STEP):
        analysis = analyze(source, **given)
        found = identify(analysis, settings=settings, confidence=confidence)
        return replace(found, record=analysis.record)
    record = read_record(source, **given)
    return replace(identify(record, settings=settings, confidence=confidence), record=record)
