"""Where a record without a step begins to return to rest."""

from __future__ import annotations

import numpy as np

from loopfit.core.arrays import Array

_HELD = 5.0  # noise levels within which the measurement counts as held
_HELD_ROWS = 5


def release_row(values: Array, noise: float) -> int:
    """Return the row from which the measurement moves freely: the last one held at the first level, or 0.

    Parameters
    ----------
    values : (n,) array
        Measurement.
    noise : float
        Its noise, rms.
    """
    level = float(np.median(values[:_HELD_ROWS]))
    near = np.abs(values - level) <= _HELD * noise + 1e-12 * float(np.ptp(values))
    away = np.flatnonzero(~near)
    first_away = int(away[0]) if away.size else values.size
    return first_away - 1 if _HELD_ROWS < first_away < values.size else 0
