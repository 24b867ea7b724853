"""The curve under a noisy record, with its pointwise error, and the noise, white or coloured.

Rows are averaged in blocks of equal count. In the cosine transform of the blocks the curve (smooth: its power
falls steeply beyond some frequency) and the noise (first-order autoregressive) are both diagonal, so many
combinations of smoothness and colour are weighed by their likelihood at once and averaged (Whittle 1953 for the
likelihood; Wahba 1983 for reading a smooth curve's error from its prior). The noise level comes out of the same
likelihood, from the rows before the step, which hold noise only, and from how the power of the rows after it
falls over all frequencies.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from loopfit.core.arrays import Array

MOST_BLOCKS = 256
_COLOURS = np.array([0.0, 0.2, 0.4, 0.6, 0.75, 0.87, 0.94])
_STIFFNESSES = 10.0 ** np.arange(-4.0, 13.0)
# Power of the curve over frequency: it falls with this power of it, beyond this corner (radians per block).
# 4 without corner is the cubic smoothing spline; 6 suits a response without a kink; corners suit many swings.
_FORMS = ((4, 0.0), (6, 0.0), (6, 0.1), (6, 0.3), (6, 0.8))
# The likelihood finds the stiffness that suits the whole record; a transient bends more than its average.
# A curve softer by this factor costs a few tenths more noise and has much less bias in the transient.
_SOFTER = 10.0


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Curve:
    """A smoothed record: times (m,), s, values (m,), standard errors (m,).

    `interval` is the time between independent readings, `freedom` the number of independent values in the curve,
    `long_variance` the variance that one row contributes to a long mean (variance of the mean x rows), and
    `noise_rms` the scatter of the block means.
    """

    time: Array
    value: Array
    error: Array
    interval: float
    freedom: float
    long_variance: float
    noise_rms: float


@lru_cache(maxsize=32)
def _transform(size: int, rows: int) -> tuple[Array, Array, Array, Array]:
    """Return the cosine transform (size, size), its inverse on a finer grid, and the shapes of curve and noise.

    The inverse undoes the averaging within blocks.
    """
    index = np.arange(size)
    scale = np.full((size, 1), np.sqrt(2 / size))
    scale[0] = np.sqrt(1 / size)
    basis = scale * np.cos(np.pi / size * np.outer(index, index + 0.5))
    frequency = np.pi * index / size
    blur = np.ones(size)
    blur[1:] = np.sin(frequency[1:] / 2) / (rows * np.sin(frequency[1:] / (2 * rows)))
    fine = np.linspace(0, size - 1, (size - 1) * finer(size) + 1)
    inverse = scale * np.cos(np.pi / size * np.outer(index, fine + 0.5)) / blur[:, None]
    square = 2 - 2 * np.cos(frequency[1:])
    roughness = np.stack([(square + corner**2) ** (power / 2) for power, corner in _FORMS])
    return basis, inverse, roughness, _colours(size)


def finer(size: int) -> int:
    """Return how many points of the curve go to one block."""
    return 2 if size > MOST_BLOCKS // 2 else 4


@lru_cache(maxsize=32)
def _colours(size: int) -> Array:
    cosine = np.cos(np.pi * np.arange(size) / size)
    return np.asarray(1 / (1 - 2 * _COLOURS[:, None] * cosine + _COLOURS[:, None] ** 2))


def _means(values: Array, rows: int) -> Array:
    """Return means of consecutive rows; last rows that fill no block are left out."""
    count = values.size // rows
    return values if rows == 1 else values[: count * rows].reshape(count, rows).mean(1)


def blocks(time: Array, measurement: Array) -> tuple[Array, Array, int]:
    """Return block means of time and measurement, at most MOST_BLOCKS, and the rows in a block."""
    rows = -(-time.size // MOST_BLOCKS)
    return _means(time, rows), _means(measurement, rows), rows


def long_variance(rest: Array) -> float:
    """Return what one of the rows at rest contributes to the variance of a long mean: variance x count.

    From these rows alone, the colours weighed by their likelihood; 0 for fewer than 8 rows.
    """
    if rest.size < 8:
        return 0.0
    shape = _colours(rest.size)
    excess, logarithm = _quiet(rest)
    fit = -0.5 * (logarithm + (rest.size - 1) * np.log(np.maximum(excess, 1e-300)))
    weight = np.exp(fit - fit.max())
    return float(weight @ (shape[:, 0] * excess) / weight.sum() / (rest.size - 1))


def _quiet(rest: Array) -> tuple[Array, Array]:
    """Return, per colour, sum of power over shape and of the log shape, for rows that hold noise only."""
    shape = _colours(rest.size)[:, 1:]
    power = (_transform(rest.size, 1)[0][1:] @ rest) ** 2
    return (power / shape).sum(1), np.log(shape).sum(1)


def smooth(time: Array, measurement: Array, before: Array, least_noise: float = 0.0) -> Curve:
    """Return the curve under the rows after a step.

    `before` (k,) are rows at rest, noise only, possibly none. `least_noise` is a known scatter of the rows
    (rms), below which the noise is not put.
    """
    time, measurement, rows = blocks(time, measurement)
    size = time.size
    basis, inverse, roughness, colour = _transform(size, rows)
    content = basis @ measurement
    power = content[1:] ** 2
    quiet = _means(before[-MOST_BLOCKS * rows :], rows)
    known = quiet.size >= 8
    rest, rest_log = _quiet(quiet) if known else (np.zeros(len(_COLOURS)), np.zeros(len(_COLOURS)))
    total = size - 1 + (quiet.size - 1 if known else 0)
    bend = 1 / (roughness[:, None] * _STIFFNESSES[:, None])  # (form, stiffness, frequency)
    # single precision is enough to weigh the combinations and halves the time
    spectrum = colour[:, None, None, 1:].astype(np.float32) + bend.astype(np.float32)
    largest = max(float(power.max()), 1e-300)
    excess = ((1 / spectrum) @ (power / largest).astype(np.float32)).astype(np.float64) * largest + rest[:, None, None]
    floor = max(least_noise**2 / rows, (1e-9 * float(np.ptp(measurement))) ** 2, 1e-300)
    scale = np.maximum(excess / total, floor * (1 - _COLOURS[:, None, None] ** 2))
    logarithm = np.log(spectrum).sum(-1, dtype=np.float64) + rest_log[:, None, None]
    fit = -0.5 * (logarithm + total * np.log(scale) + excess / scale)
    weight = np.exp(fit - fit.max())
    chosen = np.nonzero(weight > 0.02)
    weight = weight[chosen] / weight[chosen].sum()
    scale = scale[chosen]
    if known:  # no form of the curve fits exactly: the noise must not come out below that of the rows at rest
        scale = np.maximum(scale, rest[chosen[0]] / (quiet.size - 1))
    noise = colour[chosen[0]] * scale[:, None]
    kept = np.ones_like(noise)
    curve = scale[:, None] * bend[chosen[1:]] * _SOFTER
    kept[:, 1:] = curve / (curve + noise[:, 1:])
    values = (kept * content) @ inverse
    value = weight @ values
    spread = (weight @ (kept * noise)) @ inverse**2 + weight @ (values - value) ** 2
    between = np.linspace(0, size - 1, value.size)
    return Curve(
        time=np.interp(between, np.arange(size), time),
        value=value,
        error=np.sqrt(spread),
        interval=float(time[-1] - time[0]) / (size - 1),
        freedom=float(weight @ kept.sum(1)),
        long_variance=float(weight @ noise[:, 0]) * rows,
        noise_rms=float(np.sqrt(weight @ (scale / (1 - _COLOURS[chosen[0]] ** 2)))),
    )
