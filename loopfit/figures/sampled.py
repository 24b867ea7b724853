"""Figures of responses that are given as samples, many at a time."""

from __future__ import annotations

import numpy as np

from loopfit.core.arrays import Array


def sampled_figures(time: Array, response: Array, band: float) -> dict[str, Array]:
    """Return the figures of unit responses (B,) read off their samples, straight lines between them.

    Parameters
    ----------
    time : (m,) array
        From the step on, rising, fine against the response, s.
    response : (B, m) array
        As fractions of the final change; at rest within the band at the end.
    band : float
        Settling band, a fraction.
    """
    top = np.argmax(response, axis=1)
    rows = np.arange(response.shape[0])
    peak = response[rows, top]
    over = np.maximum(peak - 1.0, 0.0)
    return {
        "overshoot_percent": 100.0 * over,
        "peak_time_s": np.where(over > 1e-6, time[top], np.nan),
        "rise_time_s": first_crossing(time, response, 0.9) - first_crossing(time, response, 0.1),
        "delay_time_s": first_crossing(time, response, 0.5),
        "settling_time_s": last_entry(time, response, band)[0],
    }


def first_crossing(time: Array, response: Array, level: float) -> Array:
    """Return when each response (B, m) first reaches a level (B,); nan where it does not."""
    above = response >= level
    k = np.maximum(np.argmax(above, axis=1), 1)
    rows = np.arange(response.shape[0])
    before, after = response[rows, k - 1], response[rows, k]
    share = (level - before) / np.where(after > before, after - before, 1.0)
    return np.where(above.any(axis=1), time[k - 1] + np.clip(share, 0.0, 1.0) * (time[k] - time[k - 1]), np.nan)


def last_entry(time: Array, response: Array, band: float) -> tuple[Array, Array]:
    """Return the last entry into the band (B,), and the edge crossed: 1 above, -1 below, 0 where there is none."""
    away = np.abs(response - 1.0)
    outside = away > band
    k = response.shape[1] - 1 - np.argmax(outside[:, ::-1], axis=1)  # the last sample outside
    rows = np.arange(response.shape[0])
    after = np.minimum(k + 1, response.shape[1] - 1)
    fall = away[rows, k] - away[rows, after]
    share = (away[rows, k] - band) / np.where(fall > 0, fall, 1.0)
    entry = time[k] + np.clip(share, 0.0, 1.0) * (time[after] - time[k])
    never, some = outside[:, -1], outside.any(axis=1)
    edge = np.where(some & ~never, np.sign(response[rows, k] - 1.0), 0.0)
    return np.where(never, np.inf, np.where(some, entry, 0.0)), edge
