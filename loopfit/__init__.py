"""Damping of a control loop from a recorded step test, with its interval."""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

from loopfit.core.version import VERSION

if TYPE_CHECKING:
    from loopfit.analysis.analyze import analyze
    from loopfit.analysis.interchange import to_control
    from loopfit.analysis.result import Analysis
    from loopfit.core.errors import LoopfitError, RecordError, UsageError
    from loopfit.core.finding import Finding
    from loopfit.core.quantity import Quantity
    from loopfit.equivalents.public import equivalent
    from loopfit.loop.gains import Gains
    from loopfit.loop.loop import Loop
    from loopfit.loop.plant import Plant
    from loopfit.loop.settings import Settings
    from loopfit.tuning.retune import retune

__version__ = VERSION
__all__ = [
    "Analysis",
    "Finding",
    "Gains",
    "Loop",
    "LoopfitError",
    "Plant",
    "Quantity",
    "RecordError",
    "Settings",
    "UsageError",
    "analyze",
    "equivalent",
    "retune",
    "to_control",
]

_HOMES = {
    "Analysis": "loopfit.analysis.result",
    "Finding": "loopfit.core.finding",
    "Gains": "loopfit.loop.gains",
    "Loop": "loopfit.loop.loop",
    "LoopfitError": "loopfit.core.errors",
    "Plant": "loopfit.loop.plant",
    "Quantity": "loopfit.core.quantity",
    "RecordError": "loopfit.core.errors",
    "Settings": "loopfit.loop.settings",
    "UsageError": "loopfit.core.errors",
    "analyze": "loopfit.analysis.analyze",
    "equivalent": "loopfit.equivalents.public",
    "retune": "loopfit.tuning.retune",
    "to_control": "loopfit.analysis.interchange",
}


def __getattr__(name: str) -> Any:
    if name not in _HOMES:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    return getattr(import_module(_HOMES[name]), name)
