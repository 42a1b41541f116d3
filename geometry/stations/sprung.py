"""What a sprung curve does between its stations: a common view for the checks of it."""

from dataclasses import dataclass

import numpy as np

from geometry.arrays import BoolArray, FloatArray
from geometry.bspline import Spline

__all__ = ["Intervals", "intervals_of"]

_SAMPLES = 48


@dataclass(frozen=True, slots=True, eq=False)
class Intervals:
    """The pieces of a curve between neighbouring stations.

    Attributes:
        start, end: the stations at both ends of every piece, shapes (m, d).
        points: samples of the pieces, both ends included, shape (m, k, d).
        parameters: of the samples, shape (m, k).
        turning: turn of the curve from sample to sample, unsigned, radians, shape (m, k - 2).
        before, after: angle by which the stations' path turns at the start and at the end of every piece, signed (left
            positive) in the plane, radians, shapes (m,); NaN at open ends and at corners.
    """

    start: FloatArray
    end: FloatArray
    points: FloatArray
    parameters: FloatArray
    turning: FloatArray
    before: FloatArray
    after: FloatArray

    @property
    def chords(self) -> FloatArray:
        """Distances between neighbouring stations, shape (m,)."""
        return np.asarray(np.linalg.norm(self.end - self.start, axis=1))

    @property
    def turns(self) -> FloatArray:
        """Whole turn of every piece, radians, shape (m,)."""
        return np.asarray(self.turning.sum(axis=1))


def intervals_of(spline: Spline, parameters: FloatArray) -> Intervals:
    """Return the pieces of a spline between its stations.

    Args:
        spline: any; closed ones begin at a station.
        parameters: of the stations, strictly increasing, shape (n,); for a closed spline with the end of the knots as
            the return to the first station, shape (n + 1,).
    """
    u = np.asarray(parameters, dtype=np.float64)
    at = u[:-1, None] + np.diff(u)[:, None] * np.linspace(0.0, 1.0, _SAMPLES + 1)
    points = spline.evaluate(at)
    stations = np.vstack([points[:, 0], points[-1:, -1]])
    edges = np.diff(points, axis=1)
    turning = np.abs(_angles(edges[:, :-1], edges[:, 1:]))
    chords = np.diff(stations, axis=0)
    inner = _angles(chords[:-1], chords[1:])
    seam = _angles(chords[-1:], chords[:1]) if spline.closed and spline.smooth_seam else np.array([np.nan])
    corner = _is_corner(spline, u[1:-1])
    inner = np.where(corner, np.nan, inner)
    before, after = np.concatenate([seam, inner]), np.concatenate([inner, seam])
    return Intervals(stations[:-1], stations[1:], points, at, turning, before, after)


def _is_corner(spline: Spline, u: FloatArray) -> BoolArray:
    corners = spline.breaks[spline.corner_breaks] if spline.degree > 1 else spline.breaks[:0]
    if not len(corners):
        return np.zeros(len(u), dtype=np.bool_)
    near = np.abs(u[:, None] - corners).min(axis=1)
    return np.asarray(near <= 1e-12 * (spline.knots[-1] - spline.knots[0]))


def _angles(a: FloatArray, b: FloatArray) -> FloatArray:
    """Return angles from vectors to others, signed in the plane, 0 where one has no length."""
    along = (a * b).sum(axis=-1)
    if a.shape[-1] == 2:
        return np.asarray(np.arctan2(a[..., 0] * b[..., 1] - a[..., 1] * b[..., 0], along))
    return np.asarray(np.arctan2(np.linalg.norm(np.cross(a, b), axis=-1), along))
