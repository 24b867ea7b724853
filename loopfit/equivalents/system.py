"""A system whose equivalents are asked for: what the methods need to know of it."""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property
from typing import Protocol

import numpy as np

from loopfit.core.arrays import Array
from loopfit.equivalents.exact import Realisation, realise, step_of
from loopfit.equivalents.factors import cancelled, roots_of
from loopfit.model.transfer import Complex, Transfer, transfer_of


class System(Protocol):
    """Anything with a step response of its own.

    `numerator` and `denominator` (highest power first, without the dead time) are None for a system that is no
    rational function, such as a loop around a dead time; `poles` are then its slowest ones, `residues` those of the
    transfer function at `poles` (nan at a repeated one).
    """

    @property
    def numerator(self) -> tuple[float, ...] | None: ...  # noqa: D102
    @property
    def denominator(self) -> tuple[float, ...] | None: ...  # noqa: D102
    @property
    def dead_time_s(self) -> float: ...  # noqa: D102
    @property
    def poles(self) -> Complex: ...  # noqa: D102
    @property
    def zeros(self) -> Complex: ...  # noqa: D102
    @property
    def residues(self) -> Complex: ...  # noqa: D102
    @property
    def static_gain(self) -> float | None:
        """Final value of the unit step response; None for an integrating system."""
        ...

    @property
    def stable(self) -> bool:
        """Whether all poles lie in the left half plane (an integrating system is not stable)."""
        ...

    @property
    def integrating(self) -> bool:
        """Whether there is a pole at 0."""
        ...

    def step(self, time: Array) -> Array:
        """Return the unit step response at `time` (seconds from the step), exact; 0 before the dead time has passed."""
        ...


_FASTER = 1e12  # than the slowest pole: a lag that no response shows in the digits that a number holds


@dataclass(frozen=True)
class RationalSystem:
    """A rational transfer function with dead time, as a system.

    `known_poles` and `known_zeros`, in the order of `poles` and `zeros`, are those known better than the rounded
    coefficients tell them; `rounded` says that the coefficients given were floats, so that what rounding does to
    them is a doubt about the poles.
    """

    transfer: Transfer
    known_poles: tuple[complex, ...] | None = None
    known_zeros: tuple[complex, ...] | None = None
    rounded: bool = True

    @property
    def numerator(self) -> tuple[float, ...]:
        """Coefficients, highest power first."""
        return self.transfer.numerator

    @property
    def denominator(self) -> tuple[float, ...]:
        """Coefficients, highest power first."""
        return self.transfer.denominator

    @property
    def dead_time_s(self) -> float:
        """Dead time, s."""
        return self.transfer.dead_time_s

    @property
    def order(self) -> int:
        """Number of poles."""
        return len(self.denominator) - 1

    @cached_property
    def poles(self) -> Complex:
        """Poles, rad/s, slowest first; repeated ones are equal to the last digit."""
        return roots_of(self.denominator) if self.known_poles is None else np.array(self.known_poles, dtype=complex)

    @cached_property
    def zeros(self) -> Complex:
        """Zeros, rad/s, nearest to the imaginary axis first."""
        return roots_of(self.numerator) if self.known_zeros is None else np.array(self.known_zeros, dtype=complex)

    @property
    def static_gain(self) -> float | None:
        """Final value of the unit step response; None for an integrating system."""
        return None if self.integrating else self.numerator[-1] / self.denominator[-1]

    @property
    def integrating(self) -> bool:
        """Whether there is a pole at 0."""
        return self.denominator[-1] == 0.0

    @cached_property
    def stable(self) -> bool:
        """Whether all poles lie in the left half plane, by more than rounding."""
        return bool(np.all(self.poles.real < -1e-10 * np.abs(self.poles)))

    @cached_property
    def residues(self) -> Complex:
        """Residues of the rational part at `poles`; nan at a repeated pole."""
        poles, zeros = self.poles, self.zeros
        lead = self.numerator[0] / self.denominator[0]
        out = np.full(poles.size, np.nan + 0j)
        for i, pole in enumerate(poles):
            others = pole - np.delete(poles, i)
            if others.size == 0 or np.abs(others).min() > 0:
                # factor by factor in turn, so that no product of many overflows
                factors = np.append(pole - zeros, np.ones(others.size - zeros.size + 1))
                out[i] = lead * np.prod(factors[: others.size] / others) * np.prod(factors[others.size :])
        return out

    @cached_property
    def realisation(self) -> Realisation:
        """The rational part in state space."""
        return realise(self.poles, self.zeros, self.numerator[0] / self.denominator[0])

    def step(self, time: Array) -> Array:
        """Return the unit step response at `time`, s; at the end of the dead time the value after a jump, if any."""
        since = np.asarray(time, dtype=np.float64) - self.dead_time_s
        return np.where(since >= 0, step_of(self.realisation, np.maximum(since, 0.0)), 0.0)

    @property
    def biproper(self) -> bool:
        """Whether the input passes to the output at once: as many zeros as poles."""
        return len(self.numerator) == len(self.denominator)

    @property
    def rest(self) -> RationalSystem | None:
        """The system without one integration: s times this one; None where that would differentiate."""
        if self.biproper:
            return None
        transfer = transfer_of(self.numerator, self.denominator[:-1], self.dead_time_s)
        poles = list(self.poles)
        poles.remove(0j)
        return replace(self, transfer=transfer, known_poles=tuple(poles), known_zeros=tuple(self.zeros))

    @cached_property
    def without_fast(self) -> tuple[RationalSystem, tuple[str, ...]]:
        """The same system without poles and zeros too fast to show, and what was left out, in words."""
        fastest = _FASTER * np.abs(self.poles[self.poles != 0]).min(initial=np.inf)
        fast = np.abs(self.poles) > fastest
        if not fast.any() or not np.all(self.poles[fast].real < 0):
            return self, ()
        reason = f"poles and zeros more than {_FASTER:g} times faster than the slowest pole were left out"
        return self._of(self.poles[~fast], self.zeros[np.abs(self.zeros) <= fastest]), (reason,)

    @cached_property
    def without_cancellations(self) -> tuple[RationalSystem, tuple[str, ...]]:
        """The same system without the poles that a zero (nearly) cancels, and what was removed, in words."""
        poles, zeros, reasons = cancelled(self.poles, self.zeros)
        return (self._of(poles, zeros), reasons) if reasons else (self, ())

    def _of(self, poles: Complex, zeros: Complex) -> RationalSystem:
        """Return the system of these poles and zeros with the same behaviour at rest."""
        bottom = np.real(np.poly(poles)) if poles.size else np.ones(1)
        top = np.real(np.poly(zeros)) if zeros.size else np.ones(1)
        # the lowest coefficients that are not zero keep their ratio
        kept = _lowest(self.numerator) / _lowest(self.denominator) * _lowest(bottom) / _lowest(top)
        transfer = transfer_of(list(top * kept), list(bottom), self.dead_time_s)
        return replace(self, transfer=transfer, known_poles=tuple(poles), known_zeros=tuple(zeros))


def _lowest(coefficients: Array | tuple[float, ...]) -> float:
    return next(float(value) for value in reversed(coefficients) if value != 0.0)
