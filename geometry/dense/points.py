"""Vertices on a spline: the points with arc length, heading and radius of curvature."""

from dataclasses import dataclass

import numpy as np

from geometry.arrays import FloatArray
from geometry.bspline import Spline
from geometry.dense.measure import SplineMeasure
from geometry.polyline import Polyline

__all__ = ["CHUNK", "Dense", "dense_at"]

CHUNK = 16_384
"""Points that are worked on at a time, so that the values stay in the cache."""


@dataclass(frozen=True, slots=True, eq=False)
class Dense:
    """Consecutive points of a curve; of a closed one the last is the first again.

    Attributes:
        points: shape (m, d), drawing units.
        along: arc length from the start, shape (m,), drawing units.
        heading: direction of travel in x, y, radians, shape (m,); at a corner that in which the curve goes on.
        radius: of curvature, shape (m,), drawing units; positive where the curve turns left (in space: where it does so
            seen from above); infinite where it is straight.
        parameter: of the spline, shape (m,).
        closed: whether the last point is the first again.
    """

    points: FloatArray
    along: FloatArray
    heading: FloatArray
    radius: FloatArray
    parameter: FloatArray
    closed: bool

    def polyline(self) -> Polyline:
        """Return the points as a polyline; a closed one does not repeat the first."""
        return Polyline(self.points[:-1] if self.closed else self.points, self.closed)


def dense_at(measure: SplineMeasure, u: FloatArray) -> Dense:
    """Return the points of a spline at increasing parameters from its start to its end, shape (m,)."""
    spline, m = measure.spline, len(u)
    points, along, heading, radius = np.empty((m, spline.dimension)), np.zeros(m), np.empty(m), np.empty(m)
    for low in range(0, m, CHUNK):
        here = slice(low, min(low + CHUNK, m))
        points[here] = spline.evaluate(u[here])
        heading[here], radius[here] = _heading_and_radius(spline, u[here])
        along[low + 1 : low + CHUNK + 1] = measure.lengths(u[low : low + CHUNK + 1])
    ends = np.concatenate([spline.beziers[:, 0], spline.beziers[-1:, -1]])
    at = np.minimum(np.searchsorted(u, spline.breaks), m - 1)
    exact = u[at] == spline.breaks  # knots have their control points without rounding
    points[at[exact]] = ends[exact]
    if spline.closed:
        points[-1] = points[0]
    return Dense(points, np.cumsum(along), heading, radius, u, spline.closed)


def _heading_and_radius(spline: Spline, u: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return direction of travel in x, y and signed radius of curvature."""
    first, second = spline.evaluate(u, 1), spline.evaluate(u, 2)
    heading = np.arctan2(first[:, 1], first[:, 0])
    if first.shape[1] == 2:
        cross = first[:, 0] * second[:, 1] - first[:, 1] * second[:, 0]
    else:
        normal = np.cross(first, second)
        cross = np.copysign(np.linalg.norm(normal, axis=1), normal[:, 2])
    speed = np.linalg.norm(first, axis=1)
    # the second difference of a straight piece is rounding; it is told from a bend by the size of what it is made of
    floor = 1e-12 * speed * (np.linalg.norm(second, axis=1) + 1e-3 * speed / (spline.knots[-1] - spline.knots[0]))
    bent = np.abs(cross) > floor
    return heading, np.divide(speed**3, cross, out=np.full(len(u), np.inf), where=bent)
