"""Find and place the true corners of a traced outline, before any fairing.

A soft fit proposes candidates; at each, a wedge is compared with the same wedge rounded by a fillet; a score made of
the turn, the gain of the wedge over the fillet, the quality of the fit and the bend of its sides decides. Close pairs
and blunt tips are told apart by a chain of two corners. All fits are local and batched, so the time is linear.

The weights of the score come from a logistic regression on traced outlines with known corners (staircases, chamfered
contours, hand-digitised points); they are empirical, and nothing here is a proven bound.
"""

from dataclasses import dataclass

import numpy as np

from geometry.arrays import FloatArray
from geometry.circle import whole_circle
from geometry.corners.candidates import candidates
from geometry.corners.outline import even_outline
from geometry.corners.search import Search
from geometry.polyline import Polyline

__all__ = ["Corners", "corners_by_angle", "find_corners", "jaggedness_scale"]


@dataclass(frozen=True, slots=True)
class Corners:
    """Corners of an outline in order of travel.

    Attributes:
        along: arc length of the polyline at each corner, shape (n,), drawing units.
        points: places of the corners, shape (n, d), drawing units; they need not lie on the polyline.
        turns: turn at each, shape (n,), radians; left positive in 2-D.
    """

    along: FloatArray
    points: FloatArray
    turns: FloatArray

    def __len__(self) -> int:
        return len(self.along)


def jaggedness_scale(polyline: Polyline, tolerance: float) -> float:
    """Return the length below which detail is jaggedness: half the median edge, held to [1, 2] tolerances."""
    return float(np.clip(0.5 * np.median(polyline.edge_lengths()), tolerance, 2.0 * tolerance))


def corners_by_angle(polyline: Polyline, angle: float) -> Corners:
    """Take every vertex as a corner at which the polyline turns by more than an angle.

    Args:
        polyline: cleaned.
        angle: radians; 0 takes every vertex that turns, pi none.
    """
    edges = np.diff(polyline.path(), axis=0)
    unit = edges / np.linalg.norm(edges, axis=1)[:, None]
    before, after = (np.roll(unit, 1, axis=0), unit) if polyline.closed else (unit[:-1], unit[1:])
    # half the turn by its sine and cosine: exact near 0 and near pi
    turns = 2.0 * np.arctan2(np.linalg.norm(after - before, axis=1), np.linalg.norm(after + before, axis=1))
    if polyline.dimension == 2:
        turns = np.copysign(turns, before[:, 0] * after[:, 1] - before[:, 1] * after[:, 0])
    first = 0 if polyline.closed else 1
    taken = np.flatnonzero(np.abs(turns) > max(angle, 1e-9))
    index = taken + first
    return Corners(polyline.alongs()[index], polyline.points[index], turns[taken])


def find_corners(polyline: Polyline, tolerance: float) -> Corners:
    """Find the true corners of a jagged planar outline.

    Args:
        polyline: cleaned, 2-D; closed, or open (its ends are no corners).
        tolerance: largest distance that fairing may move the outline, drawing units; about the size of the jaggedness.

    Returns:
        The corners, sharpened: each lies where its two sides meet, at most 0.95 of the tolerance off the polyline.
    """
    scale = jaggedness_scale(polyline, tolerance)
    none = Corners(np.zeros(0), np.zeros((0, 2)), np.zeros(0))
    if polyline.length() < 8.0 * scale or whole_circle(polyline, tolerance) is not None:
        return none  # small circles are short enough for corners to be seen in them
    outline = even_outline(polyline, scale)
    index, fair = candidates(outline, scale)
    if not index.size:
        return none
    search = Search(outline, fair, scale, tolerance, float(np.median(polyline.edge_lengths())))
    search.start(index)
    search.remove_weak()
    search.test_pairs()
    search.test_splits()
    search.place()
    return Corners(*search.result())
