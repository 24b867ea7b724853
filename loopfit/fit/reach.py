"""One step of a walker: to where its figure is extreme on the likelihood-ratio surface, seen from where it stands."""

from __future__ import annotations

import numpy as np

from loopfit.core.arrays import Array

_FLAT = 1e-9
_FELT = 1e-200
_CAPS = (0.8, 1.2)


def reach(
    matrix: Array,
    slopes: Array,
    linear: Array,
    residual: Array,
    rise: Array,
    aims: Array,
    free: np.ndarray,
    at: Array,
    lowest: Array,
    highest: Array,
    threshold: float,
    variance: float,
) -> Array:
    """Return each walker's step (W, 3 + q) to where its own figure is extreme on the surface."""
    m = slopes.shape[2]
    jacobian = np.concatenate([(linear[:, None, None, :m] @ slopes)[:, :, 0, :], matrix], axis=1)
    H = jacobian @ np.swapaxes(jacobian, 1, 2) / variance
    b = (jacobian @ residual[:, :, None])[:, :, 0] / variance
    W, size = b.shape
    limit = np.full((W, 3), np.inf)
    limit[:, 0], limit[:, 1] = _CAPS
    held = np.zeros((W, size), dtype=bool)
    held[:, :3] = ~free
    # a coordinate that the record does not feel over a whole step says nothing of the figures
    stiffness = np.diagonal(H, axis1=1, axis2=2)[:, :3] * np.minimum(limit, np.abs(at) + 1.0) ** 2
    held[:, :3] |= stiffness < _FLAT * threshold
    move = np.zeros((W, size))
    for _ in range(6):
        step = _step_to_surface(H, b, aims, rise, held, move, threshold)
        # a bound first: without it the rest of the step may be short enough
        bounded = np.maximum(step[:, :3], lowest - at)
        crossing = (bounded - step[:, :3] > 1e-12) & ~held[:, :3]
        capped = np.clip(step[:, :3], -limit, np.minimum(limit, highest - at))
        leaping = (capped != step[:, :3]) & ~held[:, :3] & ~crossing.any(axis=1, keepdims=True)
        if not (crossing | leaping).any():
            break
        move[:, :3] = np.where(crossing, bounded, np.where(leaping, capped, move[:, :3]))
        held[:, :3] |= crossing | leaping
    return step


def _step_to_surface(
    H: Array, b: Array, aims: Array, rise: Array, held: np.ndarray, move: Array, threshold: float
) -> Array:
    """Solve for the extreme of a linear figure on a quadratic surface, some coordinates held at a given move."""
    size = b.shape[1]
    stiffness = np.diagonal(H, axis1=1, axis2=2)
    kept = ~held & (stiffness > _FELT)  # a column that vanished has no say
    pull = b - (H @ move[:, :, None])[:, :, 0]
    b_free, c = np.where(kept, pull, 0.0), np.where(kept, aims, 0.0)
    pairs = kept[:, :, None] & kept[:, None, :]
    # scaled to a unit diagonal, so that the units of the parameters do not matter
    scale = np.where(kept, 1.0 / np.sqrt(np.maximum(stiffness, _FELT)), 1.0)
    inner = np.where(pairs, H * scale[:, :, None] * scale[:, None, :], 0.0)
    inner = inner + np.where(kept, 1e-13, 1.0)[:, :, None] * np.eye(size)
    both = np.linalg.solve(inner, np.stack([b_free * scale, c * scale], axis=2)) * scale[:, :, None]
    to_bottom, along = both[:, :, 0], both[:, :, 1]
    bottom = rise - 2.0 * np.einsum("bp,bp->b", b, move) + np.einsum("bp,bp->b", move, b - pull)
    bottom = bottom - np.einsum("bp,bp->b", b_free, to_bottom)
    stretch = np.einsum("bp,bp->b", c, along)
    length = np.sqrt(np.maximum(threshold - bottom, 0.0) / np.maximum(stretch, 1e-300))
    length = np.where(stretch > 1e-300, length, 0.0)
    return np.where(held, move, to_bottom + length[:, None] * along)
