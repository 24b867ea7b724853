"""Whatever has a transfer function as a python-control system."""

from __future__ import annotations

from typing import TYPE_CHECKING

from loopfit.analysis.result import Analysis
from loopfit.core.errors import UsageError
from loopfit.equivalents.interchange import to_control as transfer_to_control
from loopfit.equivalents.result import Equivalent, Equivalents
from loopfit.loop.plant import Plant
from loopfit.model.transfer import Transfer, transfer_of

if TYPE_CHECKING:
    from control import TransferFunction


def to_control(
    system: Analysis | Transfer | Equivalent | Equivalents | Plant, *, pade_order: int | None = None
) -> TransferFunction:
    """Return a transfer function as a python-control system.

    Parameters
    ----------
    system : Analysis, Transfer, Equivalent, Equivalents or Plant
        Of an analysis, its model from the stepped signal to the measurement (a release has no gain). Of `Equivalents`,
        the chosen one, with the integration of an integrating system.
    pade_order : int, optional
        Order of the Padé approximation of the dead time. A system that has one is refused without it, since a loop
        judged without its dead time looks better than it is.

    Raises
    ------
    UsageError
        If there is no model, no gain, a dead time and no order for it, or it is something else.
    """
    if isinstance(system, Analysis):
        return transfer_to_control(_of_model(system), pade_order=pade_order)
    if isinstance(system, Plant):
        return transfer_to_control(system.transfer, pade_order=pade_order)
    if isinstance(system, Transfer | Equivalent | Equivalents):
        return transfer_to_control(system, pade_order=pade_order)
    raise UsageError(
        f"{type(system).__name__} has no transfer function to give: an analysis, a plant, an equivalent or a Transfer has"
    )


def _of_model(analysis: Analysis) -> Transfer:
    model = analysis.model
    if model is None or model.gain is None:
        raise UsageError("only the model of a step test has a transfer function")
    dead = 0.0 if model.dead_time_s is None else model.dead_time_s.value
    lag = 0.0 if model.lag_plus_dead_time_s is None else model.lag_plus_dead_time_s.value - dead
    square = 0.0
    if model.kind == "integrating":
        denominator = [lag, 1.0, 0.0]
    else:
        if model.kind != "first_order" and model.natural_frequency_rad_s is not None:
            square = model.natural_frequency_rad_s.value**-2
        denominator = [square, lag, 1.0]
    zero = 0.0 if model.zero_s is None else model.zero_s.value
    return transfer_of([model.gain.value * zero, model.gain.value], denominator, dead)
