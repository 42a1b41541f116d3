"""Corners of an outline as the job sees them: found, stated by an angle, or marked by hand."""

import numpy as np

from geometry.arrays import BoolArray, FloatArray
from geometry.bspline import Spline
from geometry.corners import Corners, corners_by_angle, find_corners, pin_corners
from geometry.polyline import Polyline

__all__ = ["corner_turns", "outline_corners"]


def outline_corners(
    outline: Polyline, tolerance: float, angle: float | None, marks: FloatArray, pitch: float = 0.0
) -> tuple[Corners, BoolArray]:
    """Return the corners of an outline, and which marks belong to it.

    Args:
        outline: cleaned, 2-D or 3-D.
        tolerance: drawing units; marks farther from the outline do not belong to it.
        angle: turn, radians, above which a vertex is a corner; None finds the true corners.
        marks: points that the user has marked as corners, shape (n, 2 or 3).
        pitch: of the raster that the outline was traced from, drawing units, 0 where it was not: steps of that size
            say nothing of corners, however small the tolerance is.
    """
    scale = max(tolerance, pitch)
    if angle is not None:
        found = corners_by_angle(outline, angle)
    elif outline.dimension == 2:
        found = find_corners(outline, scale)
    else:
        found = _spatial_corners(outline, scale)
    return pin_corners(found, outline, marks, tolerance)


def _spatial_corners(outline: Polyline, tolerance: float) -> Corners:
    """Find corners in the plane that a 3-D outline lies nearest to, and carry them back to the outline."""
    centre = outline.points.mean(axis=0)
    _, _, axes = np.linalg.svd(outline.points - centre, full_matrices=False)
    flat = Polyline((outline.points - centre) @ axes[:2].T, outline.closed)
    steps = flat.edge_lengths()
    if (steps <= 0.0).any():  # a stretch square to the plane has no direction in it
        return Corners(np.zeros(0), np.zeros((0, 3)), np.zeros(0))
    found = find_corners(flat, tolerance)
    own = np.interp(found.along, flat.alongs(), outline.alongs())
    return Corners(own, outline.at(own), found.turns)


def corner_turns(spline: Spline) -> tuple[FloatArray, FloatArray]:
    """Return places and turns (radians, left positive in 2-D) of the corners of a spline."""
    pieces = spline.beziers
    at = spline.corner_breaks
    before, after = pieces[at - 1], pieces[at]
    if spline.closed and not spline.smooth_seam:
        before, after = np.concatenate([before, pieces[-1:]]), np.concatenate([after, pieces[:1]])
    d1, d2 = _end_direction(before[:, ::-1]) * -1.0, _end_direction(after)
    dot = (d1 * d2).sum(axis=1)
    if spline.dimension == 2:
        turn = np.arctan2(d1[:, 0] * d2[:, 1] - d1[:, 1] * d2[:, 0], dot)
    else:
        turn = np.arctan2(np.linalg.norm(np.cross(d1, d2), axis=1), dot)
    return after[:, 0], turn


def _end_direction(pieces: FloatArray) -> FloatArray:
    """Return the direction in which Bezier pieces leave their first point: to the first control point off it."""
    steps = pieces[:, 1:] - pieces[:, :1]
    size = np.linalg.norm(steps, axis=2)
    first = np.argmax(size > 1e-9 * np.maximum(size.max(axis=1, keepdims=True), 1e-300), axis=1)
    step = steps[np.arange(len(pieces)), first]
    return step / np.maximum(np.linalg.norm(step, axis=1), 1e-300)[:, None]
