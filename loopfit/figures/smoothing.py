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
from numpy.typing import NDArray

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


@lru_cache(maxsize=16)
def _basis(size: int) -> Array:
    """Return the cosine transform (size, size)."""
    index = np.arange(size)
    return np.asarray(_scale(size) * np.cos(np.pi / size * np.outer(index, index + 0.5)))


@lru_cache(maxsize=16)
def _inverse(size: int, rows: int) -> tuple[Array, Array]:
    """Return the inverse of the transform on a finer grid, the averaging within blocks undone; and its square."""
    index = np.arange(size)
    frequency = np.pi * index / size
    blur = np.ones(size)
    blur[1:] = np.sin(frequency[1:] / 2) / (rows * np.sin(frequency[1:] / (2 * rows)))
    fine = np.linspace(0, size - 1, (size - 1) * finer(size) + 1)
    inverse = _scale(size) * np.cos(np.pi / size * np.outer(index, fine + 0.5)) / blur[:, None]
    return inverse, inverse**2


def _scale(size: int) -> Array:
    scale = np.full((size, 1), np.sqrt(2 / size))
    scale[0] = np.sqrt(1 / size)
    return scale


@lru_cache(maxsize=8)
def _spectra(size: int) -> tuple[Array, Array, NDArray[np.float32]]:
    """Return the spectra of all combinations of colour, form and stiffness, which no record changes.

    Of the curve (form, stiffness, frequency); of the sum with the noise its logarithm, summed over frequency (colour,
    form, stiffness), and its reciprocal, in single precision: enough to weigh the combinations, in half the time.
    """
    square = 2 - 2 * np.cos(np.pi / size * np.arange(1, size))
    roughness = np.stack([(square + corner**2) ** (power / 2) for power, corner in _FORMS])
    bend = 1 / (roughness[:, None] * _STIFFNESSES[:, None])
    spectrum = _colours(size)[:, None, None, 1:].astype(np.float32) + bend.astype(np.float32)
    logarithm: Array = np.log(spectrum).sum(-1, dtype=np.float64)
    return bend, logarithm, np.reciprocal(spectrum)


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
    power = (_basis(rest.size)[1:] @ rest) ** 2
    return (power / shape).sum(1), np.log(shape).sum(1)


def smooth(time: Array, measurement: Array, before: Array, least_noise: float = 0.0) -> Curve:
    """Return the curve under the rows after a step.

    `before` (k,) are rows at rest, noise only, possibly none. `least_noise` is a known scatter of the rows
    (rms), below which the noise is not put.
    """
    time, measurement, rows = blocks(time, measurement)
    size = time.size
    inverse, inverse_squared = _inverse(size, rows)
    bend, spectrum_log, reciprocal = _spectra(size)
    colour = _colours(size)
    content = _basis(size) @ measurement
    power = content[1:] ** 2
    quiet = _means(before[-MOST_BLOCKS * rows :], rows)
    known = quiet.size >= 8
    rest, rest_log = _quiet(quiet) if known else (np.zeros(len(_COLOURS)), np.zeros(len(_COLOURS)))
    total = size - 1 + (quiet.size - 1 if known else 0)
    largest = max(float(power.max()), 1e-300)
    excess = (reciprocal @ (power / largest).astype(np.float32)).astype(np.float64) * largest + rest[:, None, None]
    floor = max(least_noise**2 / rows, (1e-9 * float(np.ptp(measurement))) ** 2, 1e-300)
    scale = np.maximum(excess / total, floor * (1 - _COLOURS[:, None, None] ** 2))
    logarithm = spectrum_log + rest_log[:, None, None]
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
    spread = (weight @ (kept * noise)) @ inverse_squared + weight @ (values - value) ** 2
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
