"""Corners that the user has marked by points."""

import numpy as np

from geometry.arrays import BoolArray, FloatArray
from geometry.corners.find import Corners
from geometry.polyline import Polyline

__all__ = ["pin_corners"]


def pin_corners(found: Corners, outline: Polyline, marks: FloatArray, reach: float) -> tuple[Corners, BoolArray]:
    """Add a corner at every mark near an outline; it takes the place of found ones within two reaches.

    Args:
        found: corners found otherwise.
        outline: cleaned polyline, drawing units.
        marks: points, shape (n, d) of the outline's dimension.
        reach: distance at or under which a mark belongs to the outline, drawing units.

    Returns:
        The corners in order of travel, and which marks belong to the outline, shape (n,).
    """
    path, alongs = outline.path(), outline.alongs()
    edges = np.diff(path, axis=0)
    square = np.maximum((edges * edges).sum(axis=1), 1e-300)
    used = np.zeros(len(marks), dtype=np.bool_)
    own = np.zeros(len(marks))
    for k, mark in enumerate(marks):
        foot = np.clip(((mark - path[:-1]) * edges).sum(axis=1) / square, 0.0, 1.0)
        gap = np.linalg.norm(path[:-1] + foot[:, None] * edges - mark, axis=1)
        best = int(gap.argmin())
        used[k] = gap[best] <= reach
        own[k] = alongs[best] + foot[best] * (alongs[best + 1] - alongs[best])
    if not used.any():
        return found, used
    away = np.abs(found.along[:, None] - own[used][None])
    if outline.closed:
        away = np.minimum(away, alongs[-1] - away)
    rest = away.min(axis=1) > 2.0 * reach if len(found) else np.zeros(0, dtype=np.bool_)
    along = np.concatenate([found.along[rest], own[used]])
    order = np.argsort(along, kind="stable")
    points = np.concatenate([found.points[rest], marks[used]])[order]
    # a marked corner is never given up for a sharper neighbour
    turns = np.concatenate([found.turns[rest], np.full(int(used.sum()), np.pi)])[order]
    return Corners(along[order], points, turns), used
