"""Settings as they are keyed in: the controller's own form, units and digits, and what rounding does to them."""

from __future__ import annotations

from dataclasses import replace

from loopfit.loop.gains import Gains
from loopfit.loop.settings import Settings

_DIGITS = 4


def entered(gains: Gains, like: Settings | None, digits: int | None) -> tuple[Settings, Gains]:
    """Return designed gains as the controller shows them, and the gains that it then has.

    Parameters
    ----------
    gains : Gains
        As designed.
    like : Settings, optional
        The present settings, whose form, units and action are kept; ideal form in seconds without them.
    digits : int, optional
        Significant digits that the screen takes; 4 by default, which moves a setting by 0.05 % at most.

    Raises
    ------
    UsageError
        If the gains do not exist in that form.
    """
    if like is not None:
        weight = gains.setpoint_weight if like.setpoint_weight is not None else like.own_weight(gains)
        gains = replace(gains, setpoint_weight=weight, derivative_on_error=like.derivative_on == "error")
        shown = Settings.from_gains(gains, like=like)
    else:
        shown = Settings.from_gains(gains, form="ideal")
    shown = shown.rounded(_DIGITS if digits is None else digits)
    return shown, shown.gains
