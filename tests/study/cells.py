"""The cells of the study: one factor at a time around a centre."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from functools import cached_property, lru_cache
from typing import Literal

import numpy as np
from noises import FIVE_POINT_MEAN, TWO_FILTERS, WHITE, Array, Noise, autoregressive
from truths import EqualLags, Rational, SampledLoop, System, second_order

OMEGA = 0.37  # rad/s
GAIN = 1.7
LEVELS = (40.0, 50.0)  # of the input, before and after
REST = 12.3
_BEFORE = 0.12  # of the span lies before the step
_SPAN = 6.5  # slowest time constants after the step
_GAPS = (0.3, 1.7)  # uneven rows: each gap is that share of the mean one, evenly spread
_STEPS_UP_DOWN_UP = 3


@dataclass(frozen=True, kw_only=True)
class Cell:
    """One kind of record, simulated many times with fresh noise.

    `ratio` is the change of the measurement over the rms of the noise; `zeta` None where the truth is not second order.
    """

    group: str
    name: str
    zeta: float | None = 0.6
    dead_time: float = 0.5  # times omega
    ratio: float = 50.0
    rows: int = 400
    noise: Noise = field(default=WHITE)
    record: Literal["one step", "three steps", "closed loop"] = "one step"
    even: bool = True
    grid: float = 0.0  # resolution, of the change
    other: System | None = None

    @cached_property
    def system(self) -> System:
        """The true system."""
        if self.other is not None:
            return self.other
        assert self.zeta is not None
        return second_order(self.zeta, OMEGA, self.dead_time / OMEGA)

    @cached_property
    def known(self) -> dict[str, float]:
        """The true figures."""
        truth = dict(self.system.figures)
        if self.zeta is not None:
            truth |= {
                "damping_ratio": self.zeta,
                "natural_frequency_rad_s": OMEGA,
                "dead_time_s": self.dead_time / OMEGA,
            }
        truth["gain"] = 1.0 if self.record == "closed loop" else GAIN
        return truth

    @property
    def change(self) -> float:
        """Change of the measurement at the first step."""
        return (LEVELS[1] - LEVELS[0]) * self.known["gain"]

    @cached_property
    def time(self) -> Array:
        """Times of the rows, s, the first step in one of them."""
        slowest = max(self.system.slowest, 1.0 / OMEGA if self.other is None else 0.0)
        dead = 0.0 if isinstance(self.system, SampledLoop) else self.system.dead_time
        span = _SPAN * slowest + dead
        steps = _STEPS_UP_DOWN_UP if self.record == "three steps" else 1
        time: Array = np.linspace(-_BEFORE * span, steps * span, self.rows)
        if not self.even:
            gaps = np.random.default_rng(self.rows).uniform(*_GAPS, self.rows - 1)
            time = np.concatenate([[0.0], np.cumsum(gaps / gaps.sum())]) * float(np.ptp(time)) + time[0]
        if isinstance(self.system, SampledLoop):
            every = max(round(float(time[1] - time[0]) / self.system.scan), 1)
            first = every * int(np.argmax(time >= 0.0))
            return self.system.scan * (every * np.arange(self.rows, dtype=np.float64) - first)
        return time - time[int(np.argmax(time >= 0.0))]

    @cached_property
    def step_rows(self) -> list[int]:
        """Rows of the steps, which alternate."""
        first = int(np.argmax(self.time >= 0.0))
        if self.record != "three steps":
            return [first]
        third = float(self.time[-1]) / _STEPS_UP_DOWN_UP
        return [first, int(np.argmax(self.time >= third)), int(np.argmax(self.time >= 2.0 * third))]

    @cached_property
    def input(self) -> Array:
        """The stepped signal."""
        up = sum(sign * (np.arange(self.rows) >= row) for row, sign in zip(self.step_rows, (1, -1, 1), strict=False))
        out: Array = LEVELS[0] + (LEVELS[1] - LEVELS[0]) * np.asarray(up, dtype=np.float64)
        return out

    @cached_property
    def clean(self) -> Array:
        """The measurement without noise."""
        return REST + self.change * self.unit(self.system)

    def unit(self, system: System) -> Array:
        """Return the response of a system to the cell's steps, for a change of 1."""
        total = np.zeros(self.rows)
        for row, sign in zip(self.step_rows, (1.0, -1.0, 1.0), strict=False):
            total += sign * system.response(self.time - self.time[row])
        return total

    def measurement(self, rng: np.random.Generator) -> Array:
        """Return one measurement."""
        size = abs(self.change) / self.ratio
        if isinstance(self.system, SampledLoop):
            every = round(float(self.time[1] - self.time[0]) / self.system.scan)
            forget = 50 * every
            disturbed = self.system.disturbed(rng.standard_normal(forget + self.rows * every))[forget::every]
            return self.clean + size * disturbed / _rms_of_loop(self.system)
        noisy = self.clean + size * self.noise.draw(rng, self.rows)
        if self.grid == 0.0:
            return noisy
        grid = self.grid * abs(self.change)
        return grid * np.round(noisy / grid)

    @cached_property
    def bound(self) -> tuple[dict[str, float], Array] | None:
        """Cramer-Rao standard deviations (Cramer 1946; Rao 1945), and the weights of the estimator that meets them.

        Of damping ratio, natural frequency and gain with dead time and rest unknown and the noise known: the
        derivatives are central differences of the response. The rounding to a grid counts as white noise of
        grid / sqrt(12). None where the truth is not second order or the record is closed.
        """
        if self.zeta is None or self.record == "closed loop":
            return None
        truth = {"zeta": self.zeta, "omega": OMEGA, "dead_time": self.dead_time / OMEGA}
        rows = []
        for name, value in truth.items():
            h = 1e-4 * (value if value > 0 else 1.0 / OMEGA)
            sides = (h, -h) if value > 0 else (2.0 * h, 0.0)
            up, down = (self.unit(second_order(**(truth | {name: value + side}))) for side in sides)
            rows.append(self.change * (up - down) / (2.0 * h))
        rows += [self.change / GAIN * self.unit(self.system), np.ones(self.rows)]
        S = np.array(rows)
        lags = (self.change / self.ratio) ** 2 * self.noise.autocovariances(self.rows)
        lags[0] += (self.grid * self.change) ** 2 / 12.0
        covariance = lags[np.abs(np.subtract.outer(np.arange(self.rows), np.arange(self.rows)))]
        weighed = np.linalg.solve(covariance, S.T)
        inverse = np.linalg.inv(S @ weighed)
        index = [0, 1, 3]
        names = ("damping_ratio", "natural_frequency_rad_s", "gain")
        spreads = np.sqrt(np.diagonal(inverse))[index]
        weights: Array = (inverse @ weighed.T)[index]
        return dict(zip(names, spreads.tolist(), strict=True)), weights


@lru_cache
def _rms_of_loop(loop: SampledLoop) -> float:
    pulse = np.zeros(100 * loop.delay_scans)
    pulse[0] = 1.0
    return float(np.linalg.norm(loop.disturbed(pulse)))


CENTRE = Cell(group="centre", name="centre")
LOOP = SampledLoop(lags=(4.0, 1.2), proportional=1.3, integral_time=4.2, delay_scans=40, scan=0.04, slowest=5.0)


def _wrong(name: str, system: System) -> Cell:
    return Cell(group="wrong model", name=name, zeta=None, other=system)


def _reals(*lags: float) -> tuple[complex, ...]:
    return tuple(complex(-1.0 / lag) for lag in lags)


PAIR = (complex(-0.3 * OMEGA, np.sqrt(1 - 0.09) * OMEGA), complex(-0.3 * OMEGA, -np.sqrt(1 - 0.09) * OMEGA))
_LAG = 1.0 / OMEGA

CELLS: tuple[Cell, ...] = (
    CENTRE,
    *(
        replace(CENTRE, group="damping", name=f"damping {zeta:g}", zeta=zeta)
        for zeta in (0.05, 0.1, 0.2, 0.4, 0.7, 0.9, 1.0, 1.3, 2.0, 3.0, 5.0)
    ),
    *(replace(CENTRE, group="SNR", name=f"SNR {ratio:g}", ratio=ratio) for ratio in (5.0, 10.0, 20.0, 100.0, 200.0)),
    *(replace(CENTRE, group="rows", name=f"rows {rows}", rows=rows) for rows in (30, 60, 120, 1000, 3000)),
    *(replace(CENTRE, group="dead time", name=f"dead time {dead:g}/omega", dead_time=dead) for dead in (0.0, 1.0, 2.0)),
    *(
        replace(CENTRE, group="noise", name=noise.name, noise=noise)
        for noise in (
            autoregressive(0.5),
            autoregressive(0.7),
            autoregressive(0.9),
            TWO_FILTERS,
            FIVE_POINT_MEAN,
            autoregressive(0.9, white=0.5),
        )
    ),
    replace(CENTRE, group="noise", name="grid 1/20 of change", grid=0.05),
    replace(CENTRE, group="rows", name="uneven rows", even=False),
    replace(CENTRE, group="record", name="up, down, up", record="three steps"),
    Cell(group="record", name="closed PI loop", zeta=None, record="closed loop", other=LOOP),
    _wrong("three lags", Rational(poles=_reals(_LAG, 0.6 * _LAG, 0.35 * _LAG), dead_time=0.5 * _LAG)),
    _wrong("five equal lags", EqualLags(count=5, lag=_LAG)),
    _wrong("pair and lag", Rational(poles=(*PAIR, complex(-OMEGA / 0.8)), dead_time=0.5 * _LAG)),
    _wrong("two lags, lead", Rational(poles=_reals(_LAG, 0.4 * _LAG), zeros=(1.6 * _LAG,), dead_time=0.5 * _LAG)),
    _wrong("two lags, inverse", Rational(poles=_reals(_LAG, 0.4 * _LAG), zeros=(-0.6 * _LAG,), dead_time=0.5 * _LAG)),
)
