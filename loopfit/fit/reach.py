"""One step of a walker: to where its figure is extreme on the likelihood-ratio surface, seen from where it stands."""

from __future__ import annotations

import numpy as np

from loopfit.core.arrays import Array
from loopfit.fit.separable import combined

ARRIVED = 0.01  # a step's share of a walker's way: as re-aiming converges quadratically, the next is below 1e-3
_FLAT = 1e-9
_FELT = 1e-200
_CAPS = np.array([0.8, 1.2, np.inf])


def quadratic(matrix: Array, slopes: Array, linear: Array, residual: Array, variance: float) -> tuple[Array, Array]:
    """Return curvature (W, p + q, p + q) and gradient (W, p + q) of half the sum of squares, over the variance."""
    jacobian = np.concatenate([combined(linear, slopes), matrix], axis=1)
    H = jacobian @ jacobian.swapaxes(1, 2)
    b = (jacobian @ residual[:, :, None])[:, :, 0]
    H /= variance
    b /= variance
    return H, b


def reach(
    H: Array,
    b: Array,
    rise: Array,
    aims: Array,
    free: np.ndarray,
    at: Array,
    lowest: Array,
    highest: Array,
    threshold: float,
    caps: Array = _CAPS,
) -> Array:
    """Return each walker's step (W, p + q) to where its own figure is extreme on the surface; see `quadratic`."""
    W, size = b.shape
    p = caps.size
    limit = np.broadcast_to(caps, (W, p))
    held = np.zeros((W, size), dtype=bool)
    held[:, :p] = ~free
    # a coordinate that the record does not feel over a whole step says nothing of the figures
    stiffness = H.diagonal(axis1=1, axis2=2)[:, :p] * np.minimum(limit, np.abs(at) + 1.0) ** 2
    held[:, :p] |= stiffness < _FLAT * threshold
    move = np.zeros((W, size))
    nearest, farthest = lowest - at, np.minimum(limit, highest - at)
    for _ in range(6):
        step = _step_to_surface(H, b, aims, rise, held, move, threshold)
        # a bound first: without it the rest of the step may be short enough
        moved, loose = step[:, :p], ~held[:, :p]
        bounded = np.maximum(moved, nearest)
        crossing = (bounded - moved > 1e-12) & loose
        capped = np.minimum(np.maximum(moved, -limit), farthest)
        leaping = (capped != moved) & loose & ~crossing.any(axis=1, keepdims=True)
        now = crossing | leaping
        if not now.any():
            break
        move[:, :p] = np.where(crossing, bounded, np.where(leaping, capped, move[:, :p]))
        held[:, :p] |= now
    return step


def _step_to_surface(
    H: Array, b: Array, aims: Array, rise: Array, held: np.ndarray, move: Array, threshold: float
) -> Array:
    """Solve for the extreme of a linear figure on a quadratic surface, some coordinates held at a given move."""
    size = b.shape[1]
    stiffness = H.diagonal(axis1=1, axis2=2)
    kept = ~held & (stiffness > _FELT)  # a column that vanished has no say
    pull = b - (H @ move[:, :, None])[:, :, 0]
    b_free, c = pull * kept, aims * kept
    # scaled to a unit diagonal, so that the units of the parameters do not matter
    scale = kept / np.sqrt(np.maximum(stiffness, _FELT))
    inner = H * scale[:, :, None]
    inner *= scale[:, None, :]
    inner += np.where(kept, 1e-13, 1.0)[:, :, None] * np.eye(size)
    both = np.linalg.solve(inner, np.stack([b_free * scale, c * scale], axis=2)) * scale[:, :, None]
    to_bottom, along = both[:, :, 0], both[:, :, 1]
    bottom = rise - (move * (b + pull) + b_free * to_bottom).sum(axis=1)
    stretch = (c * along).sum(axis=1)
    length = np.sqrt(np.maximum(threshold - bottom, 0.0) / np.maximum(stretch, 1e-300))
    length[~(stretch > 1e-300)] = 0.0
    return np.where(held, move, to_bottom + length[:, None] * along)
