"""Simulated step tests with noise, and how often the intervals read from them hold the true figures."""

from __future__ import annotations

from collections import defaultdict
from dataclasses import dataclass

import numpy as np
from scipy.signal import lfilter

from loopfit.figures.observed import observe
from loopfit.figures.unit_step import (
    decay_ratio,
    delay_time,
    overshoot,
    peak_time,
    rise_time,
    settling_time,
    step_value,
)

START, FINAL, DEAD = 10.0, 8.0, 0.5  # a step downwards; dead time in units of tau


@dataclass(frozen=True, kw_only=True)
class StepTest:
    """One step test: `length` in settling times, `colour` the noise's autoregressive coefficient."""

    damping: float
    rows: int
    signal_to_noise: float
    colour: float = 0.0
    length: float = 2.0
    rows_before: float = 1 / 6

    @property
    def shape(self) -> float:
        return 1 / (4 * self.damping**2)

    def times(self) -> tuple[np.ndarray, float]:
        before = int(self.rows * self.rows_before)
        span = self.length * (float(settling_time(self.shape)) + DEAD)
        return (np.arange(self.rows) - before) * span / (self.rows - before) + 100.0, 100.0

    def clean(self) -> np.ndarray:
        time, step = self.times()
        return START + (FINAL - START) * step_value(time - step - DEAD, self.shape)

    def noise(self, rng: np.random.Generator) -> np.ndarray:
        white = rng.normal(size=self.rows + 60) * np.sqrt(1 - self.colour**2)
        return lfilter([1.0], [1.0, -self.colour], white)[60:] * abs(FINAL - START) / self.signal_to_noise

    def truth(self) -> dict[str, float]:
        """Return the exact figures (these are tested against other programs in test_unit_step)."""
        over = float(overshoot(self.shape))
        return {
            "initial_value": START,
            "final_value": FINAL,
            "peak_value": FINAL + over * (FINAL - START),
            "overshoot_percent": 100 * over,
            "peak_time_s": float(peak_time(self.shape)) + DEAD,
            "rise_time_s": float(rise_time(self.shape)),
            "settling_time_s": float(settling_time(self.shape)) + DEAD,
            "delay_time_s": float(delay_time(self.shape)) + DEAD,
            "decay_ratio": float(decay_ratio(self.shape)),
        }


def coverage(test: StepTest, repeats: int, rng: np.random.Generator) -> dict[str, tuple[int, int, float]]:
    """Return per figure how often it was read, how often its interval held the truth, and the median width.

    A figure that does not exist (peak time without a peak) is left out.
    """
    truth, clean = test.truth(), test.clean()
    time, step = test.times()
    held: dict[str, list[bool]] = defaultdict(list)
    widths: dict[str, list[float]] = defaultdict(list)
    for _ in range(repeats):
        observed = observe(time, clean + test.noise(rng), step)
        for name, value in truth.items():
            found = getattr(observed, name)
            if found is None or np.isnan(value):
                continue
            held[name].append(found.low - 1e-9 <= value <= found.high + 1e-9)
            widths[name].append(found.high - found.low)
    return {name: (len(hits), sum(hits), float(np.median(widths[name]))) for name, hits in held.items()}
