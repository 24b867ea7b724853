"""How a loop swings, with its scan interval where there is one."""

from __future__ import annotations

from loopfit.core.errors import UsageError
from loopfit.loop.gains import Gains
from loopfit.loop.plant import Plant
from loopfit.loop.sampled import sampled_swing
from loopfit.loop.visible import Swing, swing_of


def swing_with(plant: Plant, gains: Gains, scan_s: float | None, *, late: bool = False) -> Swing:
    """Return the swing of the continuous loop, or of the sampled one where `scan_s` is given.

    Raises
    ------
    UsageError
        If the loop has no meaning.
    """
    return swing_of(plant, gains) if scan_s is None else sampled_swing(plant, gains, scan_s, late=late)


def swing_on(plant: Plant, gains: Gains, scan_s: float | None, *, late: bool = False) -> Swing | None:
    """Return the same; None where the loop has no meaning."""
    try:
        return swing_with(plant, gains, scan_s, late=late)
    except UsageError:
        return None
