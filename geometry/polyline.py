"""Polylines: points joined by straight segments, in drawing units."""

from dataclasses import dataclass

import numpy as np

from geometry.arrays import FloatArray, IntArray
from geometry.errors import NotFiniteError, TooFewPointsError

__all__ = ["Polyline", "clean", "merge_collinear", "points_at", "polygon_area"]


@dataclass(frozen=True, slots=True, eq=False)
class Polyline:
    """Points joined by straight segments.

    Attributes:
        points: vertices, shape (n, d), d = 2 or 3, drawing units; a closed polyline does not repeat its first vertex.
        closed: whether a segment joins the last vertex to the first.
    """

    points: FloatArray
    closed: bool = False

    @property
    def dimension(self) -> int:
        """Number of coordinates of a point."""
        return int(self.points.shape[1])

    def path(self) -> FloatArray:
        """Return the vertices in order of travel, the first one repeated at the end when closed."""
        return np.vstack([self.points, self.points[:1]]) if self.closed else self.points

    def edge_lengths(self) -> FloatArray:
        """Return the length of every segment, shape (n,) closed or (n - 1,) open."""
        return np.linalg.norm(np.diff(self.path(), axis=0), axis=1)

    def alongs(self) -> FloatArray:
        """Return arc length from the first vertex to every vertex of `path()`; the last one is the length."""
        return np.concatenate([[0.0], np.cumsum(self.edge_lengths())])

    def length(self) -> float:
        """Return the length."""
        return float(self.edge_lengths().sum())

    def area(self) -> float:
        """Return the signed area, anticlockwise positive; 0 when open or not planar in x, y."""
        return polygon_area(self.points) if self.closed and self.dimension == 2 else 0.0

    def bounds(self) -> tuple[FloatArray, FloatArray]:
        """Return the least and the greatest coordinates."""
        return self.points.min(axis=0), self.points.max(axis=0)

    def reversed(self) -> "Polyline":
        """Return the same polyline travelled the other way (a closed one keeps its first vertex)."""
        if self.closed:
            return Polyline(np.roll(self.points[::-1], 1, axis=0), True)
        return Polyline(self.points[::-1], False)

    def moved(self, by: FloatArray) -> "Polyline":
        """Return the polyline shifted by a vector of shape (d,)."""
        return Polyline(self.points + by, self.closed)

    def flatten(self, delta: float) -> "Polyline":
        """Return the polyline itself: it already is within any `delta` of itself."""
        del delta
        return self

    def at(self, along: FloatArray) -> FloatArray:
        """Return the points at given arc lengths (wrapped when closed, held to the ends when open)."""
        return points_at(self.path(), self.alongs(), along, self.closed)


def points_at(path: FloatArray, alongs: FloatArray, along: FloatArray, closed: bool) -> FloatArray:
    """Return points of a path at arc lengths; `alongs` belongs to `path`, shape (n,)."""
    if closed:
        along = np.mod(along, alongs[-1])
    return np.stack([np.interp(along, alongs, column) for column in path.T], axis=-1)


def polygon_area(points: FloatArray) -> float:
    """Return the signed area of a closed polygon, shape (n, 2), anticlockwise positive (shoelace formula)."""
    x, y = (points - points[0]).T
    return 0.5 * float(np.dot(x, np.roll(y, -1)) - np.dot(np.roll(x, -1), y))


def clean(polyline: Polyline, least: float = 0.0) -> tuple[Polyline, IntArray]:
    """Drop vertices that lie within `least` of the one kept before them, and at the end of a closed one of the first.

    Args:
        polyline: any polyline.
        least: distance, drawing units, at or under which a vertex repeats its predecessor.

    Returns:
        The cleaned polyline and the indices of the vertices kept.

    Raises:
        NotFiniteError: a coordinate is NaN or infinite.
        TooFewPointsError: fewer than 2 (open) or 3 (closed) distinct vertices remain.
    """
    points = np.asarray(polyline.points, dtype=np.float64)
    bad = np.flatnonzero(~np.isfinite(points).all(axis=1))
    if bad.size:
        raise NotFiniteError(int(bad[0]))
    steps = np.linalg.norm(np.diff(points, axis=0), axis=1)
    kept = np.concatenate([[0], 1 + np.flatnonzero(steps > least)]) if len(points) else np.zeros(0, dtype=np.intp)
    if least > 0.0 and len(kept) < len(points):  # runs of short steps may still add up
        kept = _walk(points, least)
    while polyline.closed and len(kept) > 1 and np.linalg.norm(points[kept[-1]] - points[kept[0]]) <= least:
        kept = kept[:-1]
    needed = 3 if polyline.closed else 2
    if len(kept) < needed:
        raise TooFewPointsError(len(kept), needed)
    return Polyline(points[kept], polyline.closed), kept.astype(np.intp)


def _walk(points: FloatArray, least: float) -> IntArray:
    kept, last = [0], points[0]
    for index in range(1, len(points)):
        if np.linalg.norm(points[index] - last) > least:
            kept.append(index)
            last = points[index]
    return np.array(kept, dtype=np.intp)


def merge_collinear(polyline: Polyline, angle: float = 1e-9) -> tuple[Polyline, IntArray]:
    """Drop vertices where the direction turns by no more than `angle` radians.

    Args:
        polyline: cleaned (no segment of zero length).
        angle: largest turn, radians, that counts as straight.

    Returns:
        The shorter polyline and the indices of the vertices kept; its segments cover the same set.
    """
    edges = np.diff(polyline.path(), axis=0)
    unit = edges / np.linalg.norm(edges, axis=1)[:, None]
    if polyline.closed:
        before, after = np.roll(unit, 1, axis=0), unit
    else:
        before, after = unit[:-1], unit[1:]
    # |difference of unit vectors| = 2 sin(turn / 2): exact near 0, where a cosine is not
    turns = np.linalg.norm(after - before, axis=1) > 2.0 * np.sin(0.5 * angle)
    if not polyline.closed:
        turns = np.concatenate([[True], turns, [True]])
    kept = np.flatnonzero(turns)
    if len(kept) < (3 if polyline.closed else 2):
        return polyline, np.arange(len(polyline.points))
    return Polyline(polyline.points[kept], polyline.closed), kept
