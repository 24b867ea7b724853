"""A plant in a loop: gain, lags or an oscillating pair, zero, dead time, integration."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from loopfit.core.errors import UsageError
from loopfit.model.transfer import Transfer, transfer_of


@dataclass(frozen=True, slots=True, kw_only=True)
class Plant:
    """gain (zero_s s + 1) exp(-dead_time_s s) / product of (T s + 1), or over (s / wn)^2 + 2 zeta s / wn + 1.

    `gain` is in measurement units per output unit, with its sign; for an `integrating` plant, which has 1/s besides,
    per second. Give either `time_constants_s` (any number of lags, none for pure dead time) or `damping_ratio` with
    `natural_frequency_rad_s`. Any other rational plant comes from `Plant.of_transfer`, with its own `rational`.

    Raises
    ------
    UsageError
        If a figure is not what it should be, or figures contradict each other.
    """

    gain: float
    time_constants_s: tuple[float, ...] | None = None
    damping_ratio: float | None = None
    natural_frequency_rad_s: float | None = None
    dead_time_s: float = 0.0
    zero_s: float | None = None
    integrating: bool = False
    rational: Transfer | None = None

    def __post_init__(self) -> None:
        _finite("gain", self.gain)
        if self.gain == 0.0:
            raise UsageError("a plant of gain 0 does not answer its input")
        _finite("dead_time_s", self.dead_time_s, least=0.0)
        if self.rational is not None:
            return
        pair = (self.damping_ratio, self.natural_frequency_rad_s)
        if self.time_constants_s is not None:
            if pair != (None, None):
                raise UsageError("give time constants, or a damping ratio with a natural frequency, not both")
            object.__setattr__(self, "time_constants_s", _lags(self.time_constants_s))
        elif None in pair:
            if pair != (None, None):
                raise UsageError("a damping ratio needs a natural frequency, and the other way round")
            object.__setattr__(self, "time_constants_s", ())
        else:
            _finite("damping_ratio", self.damping_ratio)
            _finite("natural_frequency_rad_s", self.natural_frequency_rad_s, above=0.0)
        if self.zero_s is not None:
            _finite("zero_s", self.zero_s)
            if self.zero_s != 0.0 and len(self.denominator) < 2:
                raise UsageError("a zero without a lag would differentiate; give a time constant")

    @classmethod
    def of_transfer(cls, transfer: Transfer) -> Plant:
        """Return the plant of any rational transfer function with dead time."""
        poles_at_zero = len(transfer.denominator) - len(np.trim_zeros(np.array(transfer.denominator), "b"))
        rest = np.polydiv(np.array(transfer.denominator), np.append(1.0, np.zeros(poles_at_zero)))[0]
        gain = float(np.polyval(transfer.numerator, 0.0) / rest[-1])
        if gain == 0.0:
            raise UsageError("the transfer function is 0 at rest: such a plant cannot be held at a value")
        return cls(gain=gain, dead_time_s=transfer.dead_time_s, integrating=poles_at_zero > 0, rational=transfer)

    @property
    def numerator(self) -> tuple[float, ...]:
        """Coefficients of the rational part's numerator, highest power first."""
        if self.rational is not None:
            return self.rational.numerator
        if not self.zero_s:
            return (self.gain,)
        return (self.gain * self.zero_s, self.gain)

    @property
    def denominator(self) -> tuple[float, ...]:
        """Coefficients of the rational part's denominator, highest power first."""
        if self.rational is not None:
            return self.rational.denominator
        out = np.ones(1)
        if self.damping_ratio is not None and self.natural_frequency_rad_s is not None:
            wn = self.natural_frequency_rad_s
            out = np.array([1.0 / wn**2, 2.0 * self.damping_ratio / wn, 1.0])
        for lag in self.time_constants_s or ():
            out = np.convolve(out, [lag, 1.0])
        if self.integrating:
            out = np.append(out, 0.0)
        return tuple(float(value) for value in out)

    @property
    def transfer(self) -> Transfer:
        """The plant as a transfer function."""
        return transfer_of(self.numerator, self.denominator, self.dead_time_s)


def _finite(name: str, value: float | None, *, least: float | None = None, above: float | None = None) -> None:
    if (
        value is None
        or isinstance(value, bool)
        or not isinstance(value, int | float | np.number)
        or not math.isfinite(value)
    ):
        raise UsageError(f"{name} is a finite number, not {value!r}")
    if least is not None and not value >= least:
        raise UsageError(f"{name} is at least {least:g}, not {value:g}")
    if above is not None and not value > above:
        raise UsageError(f"{name} is above {above:g}, not {value:g}")


def _lags(values: Sequence[float]) -> tuple[float, ...]:
    if isinstance(values, int | float):
        values = (values,)
    for value in values:
        _finite("a time constant", value, least=0.0)
    return tuple(float(value) for value in values if value > 0.0)
