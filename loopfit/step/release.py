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
    if not _HELD_ROWS < first_away < values.size:
        return 0
    return first_away - 1 if _is_flat(values[: max(first_away - first_away // 4, _HELD_ROWS)], noise) else 0


def _is_flat(values: Array, noise: float) -> bool:
    """Tell whether rows are level: no slope or bend beyond their noise (a swing at its turning point has one)."""
    x = np.linspace(-1.0, 1.0, values.size)
    shapes = np.stack([x, x * x - np.mean(x * x)])
    shapes /= np.linalg.norm(shapes, axis=1, keepdims=True)
    moved = shapes @ (values - values.mean())
    return bool(np.all(np.abs(moved) <= _HELD * noise + 1e-12 * float(np.ptp(values))))
