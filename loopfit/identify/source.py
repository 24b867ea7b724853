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
from loopfit.loop.plant import Plant
from loopfit.loop.settings import Settings
from loopfit.model.transfer import Transfer
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
    source : path, Record, Analysis, Plant, Transfer, or a sequence of records or of plants
        Several are several operating points of one loop; plants that are given count alike, the first is the one shown.
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
        if any(isinstance(item, Plant | Transfer) for item in source):
            return _given(source, reading)
        from loopfit.identify.several import of_one_loop, together

        found = [_one(item, settings, confidence, reading) for item in source]
        of_one_loop([one.record for one in found if one.record is not None])
        return together(found)
    if isinstance(source, Plant | Transfer):
        return _given([source], reading)
    return _one(source, settings, confidence, reading)


def _given(source: Sequence[Any], reading: Mapping[str, Any]) -> Identified:
    """Return plants as operating points; one alone has no draws."""
    if reading:
        raise UsageError(f"{', '.join(sorted(reading))}: only a record is read; a plant was given")
    if not all(isinstance(item, Plant | Transfer) for item in source):
        raise UsageError("give records or plants, not both: a given plant is certain, and a record is not")
    plants = tuple(item if isinstance(item, Plant) else Plant.of_transfer(item) for item in source)
    if len({plant.gain > 0.0 for plant in plants}) > 1:
        raise UsageError("the plants have gains of both signs: no controller serves both")
    every = plants if len(plants) > 1 else ()
    return Identified(plant=plants[0], how="given", draws=every, fresh=every)


def _one(source: Any, settings: Settings | None, confidence: float, reading: Mapping[str, Any]) -> Identified:
    if isinstance(source, Analysis | Record):
        if reading:
            raise UsageError(f"{', '.join(sorted(reading))}: only for a file; this has been read already")
        record = source.record if isinstance(source, Analysis) else source
        return replace(identify(source, settings=settings, confidence=confidence), record=record)
    if not isinstance(source, str | os.PathLike):
        raise UsageError(
            f"a source is a file, a Record, an Analysis, a Plant or a Transfer, not {type(source).__name__}"
        )
    given = {name: value for name, value in reading.items() if value is not None}
    if any(name in given for name in _STEP):
        analysis = analyze(source, **given)
        found = identify(analysis, settings=settings, confidence=confidence)
        return replace(found, record=analysis.record)
    record = read_record(source, **given)
    return replace(identify(record, settings=settings, confidence=confidence), record=record)
