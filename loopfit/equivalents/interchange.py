"""Systems of python-control as transfer functions, and the other way round."""

from __future__ import annotations

import math
import sys
from typing import TYPE_CHECKING, Any

import numpy as np

from loopfit.core.arrays import Array
from loopfit.core.errors import RecordError, UsageError
from loopfit.equivalents.rational import MOST_POWERS
from loopfit.equivalents.result import Equivalent, Equivalents
from loopfit.model.transfer import Transfer, transfer_of

if TYPE_CHECKING:
    from control import TransferFunction

_ROUNDING = 100.0  # times the sum of sizes times eps: what a product of matrices may leave of 0


def is_control_system(value: object) -> bool:
    """Tell whether a value is a system of python-control; the library is not imported for it."""
    control = sys.modules.get("control")
    return control is not None and isinstance(value, control.InputOutputSystem)


def from_control(system: Any, *, dead_time_s: float = 0.0) -> Transfer:
    """Return the transfer function of a python-control system, which is left as it is.

    Parameters
    ----------
    system : TransferFunction or StateSpace
        Continuous, one input and one output; a time base that is not stated counts as continuous.
    dead_time_s : float
        Dead time, s, which such a system cannot hold itself.

    Raises
    ------
    UsageError
        If it is of another kind: several signals, discrete, nonlinear, or frequency response data.
    RecordError
        If it differentiates its input or is 0.

    Notes
    -----
    Of a state space A, B, C, D the poles are the eigenvalues of A, the zeros the finite generalised eigenvalues of the
    system matrix [[A - s I, B], [C, D]] (Emami-Naeini & Van Dooren, Automatica 18, 1982); how many there are, and the
    factor before them, is told by the first of D, C B, C A B, ... that is not 0.
    """
    import control

    if isinstance(system, control.FRD):
        raise UsageError(
            "frequency response data has no poles of its own: give a transfer function fitted to it, or an expression in s"
        )
    if not isinstance(system, control.TransferFunction | control.StateSpace):
        raise UsageError(
            f"{type(system).__name__} is no linear system: give a TransferFunction or a StateSpace, "
            "such as a linearisation about the operating point"
        )
    if system.ninputs != 1 or system.noutputs != 1:
        raise UsageError(
            f"the system has {system.ninputs} inputs and {system.noutputs} outputs: give one of its channels, "
            "such as system[0, 0]"
        )
    if system.isdtime(strict=True):
        raise UsageError(
            f"the system is discrete (dt = {system.dt}): equivalents are those of a continuous system; "
            "give the continuous one it was made from"
        )
    if isinstance(system, control.StateSpace):
        top, bottom = _of_state_space(
            *(np.array(matrix, dtype=float) for matrix in (system.A, system.B, system.C, system.D))
        )
    else:
        top, bottom = (np.array(side[0][0], dtype=float) for side in (system.num, system.den))
    return usable_transfer(top, bottom, dead_time_s, source="python-control system")


def usable_transfer(numerator: Any, denominator: Any, dead_time_s: float = 0.0, *, source: str) -> Transfer:
    """Return the transfer function of coefficients, highest power first.

    Raises
    ------
    UsageError
        If the coefficients are no finite numbers.
    RecordError
        If they are those of no usable system: improper, zero, or with a dead time below 0.
    """
    try:
        top, bottom = (np.atleast_1d(np.asarray(side, dtype=float)) for side in (numerator, denominator))
        dead_time = float(dead_time_s)
    except (TypeError, ValueError):
        raise UsageError(
            "the coefficients are two lists of real numbers, highest power first, and the dead time is a number"
        ) from None
    for name, side in (("numerator", top), ("denominator", bottom)):
        if side.ndim != 1 or side.size == 0:
            raise UsageError(f"the {name} is one list of real coefficients, highest power first")
        if not np.all(np.isfinite(side)):
            raise UsageError(f"the {name} has a coefficient that is not a finite number")
        if not np.any(side):
            raise RecordError(source, f"the {name} is zero")
    degrees = [side.size - 1 - int(np.flatnonzero(side)[0]) for side in (top, bottom)]
    if degrees[0] > degrees[1]:
        raise RecordError(
            source,
            f"the numerator is of degree {degrees[0]}, the denominator of degree {degrees[1]}: a system that "
            "differentiates its input does not exist; give the small lags that it has in truth",
        )
    if max(degrees) > MOST_POWERS:
        raise RecordError(source, f"it is of degree {max(degrees)} in s; the limit is {MOST_POWERS}")
    if not math.isfinite(dead_time):
        raise UsageError(f"the dead time is a finite number, not {dead_time}")
    if dead_time < 0:
        raise RecordError(source, f"a dead time of {dead_time:g} s would answer before the input: no system predicts")
    return transfer_of(list(top), list(bottom), dead_time)


def to_control(system: Transfer | Equivalent | Equivalents, *, pade_order: int | None = None) -> TransferFunction:
    """Return a transfer function or an equivalent as a python-control system.

    Parameters
    ----------
    system : Transfer, Equivalent or Equivalents
        Of `Equivalents` the chosen one, with the integration of an integrating system.
    pade_order : int, optional
        Order of the Padé approximation of the dead time; a system that has one is refused without it, since a loop
        judged without its dead time looks better than it is.

    Raises
    ------
    UsageError
        If there is no model, or a dead time and no order for it.
    """
    import control

    if isinstance(system, Equivalents):
        if system.best is None:
            raise UsageError("no method gives an equivalent of this system")
        transfer = transfer_of_equivalent(system.best, integrating=system.system.integrating)
    else:
        transfer = transfer_of_equivalent(system) if isinstance(system, Equivalent) else system
    out = control.tf(list(transfer.numerator), list(transfer.denominator))
    if transfer.dead_time_s == 0.0:
        return out
    if pade_order is None:
        raise UsageError(f"there is a dead time of {transfer.dead_time_s:.4g} s: give pade_order= to approximate it")
    if isinstance(pade_order, bool) or not isinstance(pade_order, int) or pade_order < 1:
        raise UsageError(f"pade_order is a whole number of at least 1, not {pade_order!r}")
    return out * control.tf(*control.pade(transfer.dead_time_s, pade_order))


def transfer_of_equivalent(equivalent: Equivalent, *, integrating: bool = False) -> Transfer:
    """Return the transfer function of an equivalent; of an `integrating` system's, with the integration that it is to have.

    Raises
    ------
    UsageError
        If the method gave no model.
    """
    if equivalent.gain is None:
        raise UsageError(f"{equivalent.method} gives no model here: {equivalent.reason}")
    if equivalent.damping_ratio is not None and equivalent.natural_frequency_rad_s is not None:
        frequency = equivalent.natural_frequency_rad_s
        bottom = np.array([frequency**-2, 2.0 * equivalent.damping_ratio / frequency, 1.0])
    else:
        bottom = np.ones(1)
        for lag in equivalent.time_constants_s or ():
            bottom = np.convolve(bottom, [lag, 1.0])
    if integrating:
        bottom = np.append(bottom, 0.0)
    top = [equivalent.gain * (equivalent.zero_s or 0.0), equivalent.gain]
    return transfer_of(top, list(bottom), equivalent.dead_time_s or 0.0)


def _of_state_space(A: Array, B: Array, C: Array, D: Array) -> tuple[Array, Array]:
    """Return numerator and denominator, highest power first."""
    from scipy import linalg

    states = len(A)
    bottom = _real_polynomial(np.linalg.eigvals(A))
    lead, relative = float(D[0, 0]), 0
    row, sizes = C, np.abs(C)
    while lead == 0.0 and relative < states:
        size, value = float((sizes @ np.abs(B))[0, 0]), float((row @ B)[0, 0])
        relative += 1
        if abs(value) > _ROUNDING * states * np.finfo(float).eps * size:
            lead = value
        row, sizes = row @ A, sizes @ np.abs(A)
    if lead == 0.0:
        return np.zeros(1), bottom
    whole = np.block([[A, B], [C, D]])
    mask = np.zeros_like(whole)
    mask[:states, :states] = np.eye(states)
    pairs = np.asarray(linalg.eigvals(whole, mask, homogeneous_eigvals=True), dtype=complex)
    finite = np.argsort(-np.abs(pairs[1]) / np.linalg.norm(pairs, axis=0), kind="stable")[: states - relative]
    return lead * _real_polynomial(pairs[0, finite] / pairs[1, finite]), bottom


def _real_polynomial(roots: Any) -> Array:
    return np.asarray(np.real(np.poly(roots)), dtype=float) if len(roots) else np.ones(1)
