"""How far the plant may be from its model at each frequency, from what the model leaves of the record."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import ArrayLike

from loopfit.core.arrays import Array, read_only

FREQUENCIES = 48
_LOWEST = 6.0  # over the length of the record
_WIDTHS = (3.0, 9.0)  # rad of the wavelet's Gaussian
_AFTER = 2.0  # Gaussian widths after the largest move that still count
_FEWEST = 16


def disc_of(time: ArrayLike, output: ArrayLike, residual: ArrayLike) -> Array:
    """Return (2, 48): frequency, rad/s, and the radius D of the disc that the plant may lie in around its model.

    D is in the plant's own unit, measurement per output, so that a loop with controller C is good for every plant in the
    disc when |1 + L| - |C| D keeps its distance; divided by |G| of the model it is relative.

    Parameters
    ----------
    time, output, residual : (n,) float
        Even in time, s; the output as recorded, and what the model leaves of the measurement.

    Notes
    -----
    At frequency w the wavelet transform exp(i w t - (w t / width)^2 / 2) of the differenced residual over that of the
    differenced output, root mean squares from the largest move of the output in that band to two Gaussian widths after
    it; widths of 3 and 9 rad, the larger ratio. 48 frequencies from 6 / length to the Nyquist frequency, even in the
    logarithm. A band that the output never excited holds only noise, and D is large there; a record without any move
    gives an infinite D.

    Raises
    ------
    ValueError
        If there are fewer than 16 rows.
    """
    t, u, left = (np.asarray(column, dtype=np.float64) for column in (time, output, residual))
    n = len(t)
    if n < _FEWEST:
        raise ValueError(f"{n} rows are too few for a band-wise comparison; at least {_FEWEST}")
    every = float(np.median(np.diff(t)))
    frequencies = np.geomspace(_LOWEST / (every * n), math.pi / every, FREQUENCIES)
    radius = np.zeros(FREQUENCIES)
    for width in _WIDTHS:
        for k, w in enumerate(frequencies):
            radius[k] = max(radius[k], _ratio(np.diff(left), np.diff(u), float(w) * every, width))
    return read_only(np.vstack((frequencies, radius)))


def _ratio(left: Array, moved: Array, turn: float, width: float) -> float:
    """Size of the residual in a band over that of the output, at and after its largest move; `turn`: rad a row."""
    reach = min(math.ceil(4.0 * width / turn), len(moved))
    at = np.arange(-reach, reach + 1)
    wavelet = np.exp(1j * turn * at - 0.5 * (turn * at / width) ** 2)
    size = 1 << (len(moved) + 2 * reach).bit_length()
    spectrum = np.fft.fft(wavelet, size)
    band = [np.abs(np.fft.ifft(np.fft.fft(x, size) * spectrum)[reach : reach + len(moved)]) ** 2 for x in (left, moved)]
    top = int(band[1].argmax())
    rows = slice(top, top + math.ceil(_AFTER * width / turn) + 1)
    answered, excited = float(band[0][rows].mean()), float(band[1][rows].mean())
    return math.sqrt(answered / excited) if excited > 0.0 else math.inf
