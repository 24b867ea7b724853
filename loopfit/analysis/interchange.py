"""The fitted model as a python-control system."""

from __future__ import annotations

from typing import TYPE_CHECKING

from loopfit.analysis.result import Analysis
from loopfit.core.errors import UsageError

if TYPE_CHECKING:
    from control import TransferFunction


def to_control(analysis: Analysis, *, pade_order: int | None = None) -> TransferFunction:
    """Return the model's transfer function from the stepped signal to the measurement.

    Parameters
    ----------
    analysis : Analysis
        Of a step; a release has no gain.
    pade_order : int, optional
        Order of the Padé approximation of the dead time; without it the dead time is left out, and a model
        that has one is refused, since a loop judged without its dead time looks better than it is.

    Raises
    ------
    UsageError
        If there is no model, no gain, or a dead time and no order for it.
    """
    import control

    model = analysis.model
    if model is None or model.gain is None:
        raise UsageError("only the model of a step test has a transfer function")
    dead = 0.0 if model.dead_time_s is None else model.dead_time_s.value
    if dead > 0 and pade_order is None:
        raise UsageError(f"the model has a dead time of {dead:.4g} s: give pade_order= to approximate it")
    lag = 0.0 if model.lag_plus_dead_time_s is None else model.lag_plus_dead_time_s.value - dead
    square = 0.0
    if model.kind == "integrating":
        denominator = [lag, 1.0, 0.0]
    else:
        if model.kind != "first_order" and model.natural_frequency_rad_s is not None:
            square = model.natural_frequency_rad_s.value**-2
        denominator = [square, lag, 1.0]
    zero = 0.0 if model.zero_s is None else model.zero_s.value
    system = control.tf([model.gain.value * zero, model.gain.value], denominator)
    if dead > 0:
        system = system * control.tf(*control.pade(dead, pade_order))
    return system
