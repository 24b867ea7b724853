"""Controllers and plants as python-control systems, and back."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from loopfit.core.errors import UsageError
from loopfit.loop.gains import Gains
from loopfit.loop.plant import Plant
from loopfit.model.transfer import transfer_of

if TYPE_CHECKING:
    from control import TransferFunction

_SAME = 1e-9  # relative: rounding of coefficients that were multiplied out


def controller_to_control(gains: Gains) -> TransferFunction:
    """Return C(s) = kp + ki/s + kd s/(filter_s s + 1), from the error to the output."""
    return _parallel(gains.kp, gains.ki, gains.kd, gains.filter_s)


def setpoint_path_to_control(gains: Gains) -> TransferFunction:
    """Return F(s) = b kp + ki/s, and the derivative where it is on the error: u = F r - C y."""
    kd = gains.kd if gains.derivative_on_error else 0.0
    return _parallel(gains.setpoint_weight * gains.kp, gains.ki, kd, gains.filter_s)


def gains_from_control(controller: TransferFunction, setpoint_path: TransferFunction | None = None) -> Gains:
    """Return the gains of a controller C(s), and of its setpoint path F(s) when that is not C(s) itself.

    Raises
    ------
    UsageError
        If the system is not continuous with one input and one output, is more than a PID controller with filter, or the
        two do not belong to one controller.
    """
    kp, ki, kd, filter_s = _terms(controller, "controller")
    if setpoint_path is None:
        return Gains(kp=kp, ki=ki, kd=kd, filter_s=filter_s, derivative_on_error=kd != 0.0)
    path_kp, path_ki, path_kd, path_filter = _terms(setpoint_path, "setpoint path")
    size = abs(kp) + abs(ki) * filter_s + (abs(kd) / filter_s if filter_s > 0.0 else 0.0)
    on_error = kd != 0.0 and path_kd != 0.0
    fits = abs(path_ki - ki) <= _SAME * abs(ki)
    if on_error:
        fits = fits and abs(path_kd - kd) <= _SAME * abs(kd) and abs(path_filter - filter_s) <= _SAME * filter_s
    elif path_kd != 0.0:
        fits = False
    if not fits or (kp == 0.0 and abs(path_kp) > _SAME * size):
        raise UsageError("the setpoint path is not b kp + ki/s, with or without the derivative, of this controller")
    weight = 1.0 if kp == 0.0 else path_kp / kp
    return Gains(kp=kp, ki=ki, kd=kd, filter_s=filter_s, setpoint_weight=weight, derivative_on_error=on_error)


def plant_to_control(plant: Plant, *, pade_order: int | None = None) -> TransferFunction:
    """Return the plant's transfer function.

    Parameters
    ----------
    plant : Plant
        Any.
    pade_order : int, optional
        Order of the Padé approximation of the dead time. A plant with dead time is refused without it: a loop judged
        without its dead time looks better than it is.

    Raises
    ------
    UsageError
        If there is a dead time and no order for it, or the order is no whole number above 0.
    """
    import control

    if pade_order is not None and (isinstance(pade_order, bool) or not isinstance(pade_order, int) or pade_order < 1):
        raise UsageError(f"pade_order is a whole number above 0, not {pade_order!r}")
    system = control.tf(list(plant.numerator), list(plant.denominator))
    if plant.dead_time_s == 0.0:
        return system
    if pade_order is None:
        raise UsageError(f"the plant has a dead time of {plant.dead_time_s:.4g} s: give pade_order= to approximate it")
    return system * control.tf(*control.pade(plant.dead_time_s, pade_order))


def plant_from_control(system: TransferFunction, *, dead_time_s: float = 0.0) -> Plant:
    """Return the plant of a continuous system with one input and one output, and a dead time besides."""
    top, bottom = _coefficients(system, "plant")
    return Plant.of_transfer(transfer_of(top, bottom, dead_time_s))


def _parallel(kp: float, ki: float, kd: float, filter_s: float) -> TransferFunction:
    import control

    top, bottom = np.array([kp, ki]), np.array([1.0, 0.0])
    if ki == 0.0:
        top, bottom = np.array([kp]), np.array([1.0])
    if kd != 0.0:
        slow = np.array([filter_s, 1.0])
        top, bottom = np.polyadd(np.polymul(top, slow), kd * np.polymul([1.0, 0.0], bottom)), np.polymul(bottom, slow)
    return control.tf(top, bottom)


def _terms(system: TransferFunction, name: str) -> tuple[float, float, float, float]:
    """kp, ki, kd, filter_s of one system."""
    coefficients = _coefficients(system, name)
    if not any(coefficients[0]):
        return 0.0, 0.0, 0.0, 0.0
    transfer = transfer_of(*coefficients)
    top, bottom = np.array(transfer.numerator), np.array(transfer.denominator)
    integrates = bottom[-1] == 0.0
    lags = bottom[:-1] if integrates else bottom
    if len(lags) > 2 or lags[-1] == 0.0 or (len(lags) == 2 and not lags[0] / lags[-1] > 0.0):
        raise UsageError(f"the {name} is no PID controller: it has more than an integral and one filter")
    filter_s = float(lags[0] / lags[-1]) if len(lags) == 2 else 0.0
    wide = np.concatenate([np.zeros(3 - len(top)), top]) / lags[-1]
    if not integrates:
        wide = np.append(wide[1:], 0.0)  # as over s (filter_s s + 1)
    ki = float(wide[2])
    kp = float(wide[1]) - ki * filter_s
    kd = float(wide[0]) - kp * filter_s
    if abs(kd) <= _SAME * (abs(wide[0]) + abs(kp) * filter_s):
        kd = 0.0
    return kp, ki, kd, filter_s if kd != 0.0 else 0.0


def _coefficients(system: TransferFunction, name: str) -> tuple[list[float], list[float]]:
    import control

    if not isinstance(system, control.TransferFunction | control.StateSpace):
        raise UsageError(f"the {name} is a python-control system, not {type(system).__name__}")
    if not system.issiso():
        raise UsageError(f"the {name} has more than one input or output")
    if not system.isctime():
        raise UsageError(f"the {name} is sampled: give its continuous form")
    made = control.tf(system)
    return [float(value) for value in made.num[0][0]], [float(value) for value in made.den[0][0]]
