"""Signed deviation: how far, and to which side, points lie from a curve in the plane.

The sign: + is outside a closed curve, and left of travel of an open one. It is taken at the nearest point. Where that
lies inside a segment, the segment's own side is the side. Where it is a vertex, the own side of either segment may be
wrong (beside a sharp corner the line of one of them has been passed); the vector from the vertex to the point then lies
in the cone between the normals of both, so the side against the sum of their unit tangents is right, unless the curve
turns straight back and the sum vanishes.
"""

from dataclasses import dataclass

import numpy as np

from geometry.arrays import BoolArray, FloatArray, IntArray
from geometry.chords import Chords, anchors, whole_chords
from geometry.curve import Curve
from geometry.errors import GeometryError
from geometry.nearest import SegmentSearch
from geometry.polyline import polygon_area

__all__ = [
    "Course",
    "DeviationStatistics",
    "SignedTo",
    "course_along",
    "deviation_statistics",
    "signed_distances",
]

_U = 2.0**-53
_SHARE = 1.0 / 400.0  # of the tolerance: the chord error that signed deviations are taken to


@dataclass(frozen=True, slots=True)
class DeviationStatistics:
    """Deviation of a curve from a reference, every stretch weighted by its length; drawing units.

    Attributes:
        rms: root mean square.
        mean_signed: mean, + outside a closed reference or left of an open one; None in 3-D, where there are no sides.
        max_plus: largest on the plus side, 0 where there is none; None in 3-D.
        max_minus: largest on the minus side as a number <= 0, 0 where there is none; None in 3-D.
        percentile_95: the size that 95% of the length does not pass.
    """

    rms: float
    mean_signed: float | None
    max_plus: float | None
    max_minus: float | None
    percentile_95: float


@dataclass(frozen=True, slots=True, eq=False)
class Course:
    """Deviation from end to end of a curve.

    Attributes:
        along: arc length from the start to each sample, shape (n,), drawing units.
        points: the samples, on the curve, shape (n, d).
        weights: length of the stretch each sample stands for, in the middle of which it lies, shape (n,); 0 at vertices
            and knots.
        deviation: signed in 2-D, unsigned in 3-D, shape (n,), drawing units.
    """

    along: FloatArray
    points: FloatArray
    weights: FloatArray
    deviation: FloatArray

    def statistics(self) -> DeviationStatistics:
        """Return the statistics of the deviation, weighted by length."""
        share = (
            self.weights / self.weights.sum()
            if self.weights.any()
            else np.full(len(self.weights), 1.0 / len(self.weights))
        )
        size = np.abs(self.deviation)
        order = np.argsort(size)
        rank = min(int(np.searchsorted(np.cumsum(share[order]), 0.95)), len(order) - 1)
        flat = self.points.shape[1] == 2
        return DeviationStatistics(
            rms=float(np.sqrt(np.dot(share, size * size))),
            mean_signed=float(np.dot(share, self.deviation)) if flat else None,
            max_plus=max(0.0, float(self.deviation.max())) if flat else None,
            max_minus=min(0.0, float(self.deviation.min())) if flat else None,
            percentile_95=float(size[order[rank]]),
        )


def signed_distances(points: FloatArray, curve: Curve, chord_error: float, crossing: bool = False) -> FloatArray:
    """Return the signed distance from points to a planar curve.

    Args:
        points: shape (n, 2), finite, drawing units.
        curve: polyline, arc chain or spline in the plane.
        chord_error: how far the curve's chords may lie from it, drawing units, > 0.
        crossing: the closed curve crosses or touches itself, so that inside and outside are told by the even-odd rule
            over all of it instead of by its nearest part (slower).

    Returns:
        Distances, shape (n,): within `chord_error` of the true ones in size; + outside a closed curve, + left of travel
        of an open one (beyond an end: of the end tangent; beyond the tip of a spike that turns straight back: of the
        edge that leads there). A point nearer to the curve than `chord_error` may be given either sign, one within
        rounding of the chords is at 0.

    Raises:
        NotFiniteError, TooFewPointsError: the curve cannot be used.
        GeometryError: the curve is not planar, has no length, or the chord error is not above 0.
    """
    if curve.dimension != 2 or points.shape[1] != 2:
        raise GeometryError("there are no sides in 3 dimensions; measure without sign, or give a planar curve")
    return SignedTo(curve, chord_error, crossing)(points)


def deviation_statistics(curve: Curve, reference: Curve, tolerance: float) -> DeviationStatistics:
    """Return the statistics of how a curve deviates from a reference; arguments and errors as `course_along`.

    They come from samples: the certified largest deviation is another matter.
    """
    return course_along(curve, reference, tolerance).statistics()


def course_along(
    curve: Curve, reference: Curve, tolerance: float, crossing: bool = False, chord_error: float | None = None
) -> Course:
    """Return, all along a curve, how far and to which side of a reference it lies: + outside it or left of it.

    Left is that of the reference's own travel, whichever way the curve runs.

    Args:
        curve: polyline, arc chain or spline; samples are taken all along it, in the middle of short stretches and at
            every vertex or knot.
        reference: what it is measured to, of the same dimension.
        tolerance: sets how closely samples follow each other, drawing units, > 0.
        crossing: as for `signed_distances`, about the reference.
        chord_error: how far the chords of either curve may lie from it, drawing units, > 0; None takes 1/400 of the
            tolerance.

    Raises:
        As `signed_distances`.
    """
    error = _SHARE * tolerance if chord_error is None else chord_error
    along, points, weights = _samples(curve, reference, tolerance, error)
    return Course(along, points, weights, SignedTo(reference, error, crossing)(points))


def _samples(
    curve: Curve, other: Curve, tolerance: float, chord_error: float
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Points on a curve, with arc length to each and the length it stands for; about 4 an edge of the finer curve."""
    if not 0.0 < tolerance < np.inf:
        raise GeometryError(f"a tolerance of {tolerance:g} cannot be used; it must be a number above 0")
    chords = whole_chords(curve).split(chord_error)
    lengths = np.linalg.norm(chords.end - chords.start, axis=1)
    total = float(lengths.sum())
    step = max(tolerance, total / (400.0 + 4.0 * (len(anchors(other)) + len(lengths))))
    parts = np.maximum(np.ceil(lengths / step), 1.0).astype(np.intp)
    chord = np.repeat(np.arange(len(parts)), parts)
    share = (np.arange(len(chord)) - np.repeat(np.cumsum(parts) - parts, parts) + 0.5) / parts[chord]
    t = chords.low[chord] + share * (chords.high - chords.low)[chord]
    weights = (lengths / parts)[chord]
    alongs, points = np.cumsum(weights) - 0.5 * weights, chords.elements.at(chords.element[chord], t)
    # ends of edges, arcs and spans stand for no length, but that is where a spike has its tip
    tip = np.flatnonzero(chords.low == 0.0)
    row = (np.cumsum(parts) - parts)[tip]
    before = np.cumsum(lengths) - lengths
    out = [
        np.insert(alongs, row, before[tip]),
        np.insert(points, row, chords.start[tip], axis=0),
        np.insert(weights, row, 0.0),
    ]
    if not curve.closed:
        out = [np.append(out[0], total), np.vstack([out[1], chords.end[-1:]]), np.append(out[2], 0.0)]
    return out[0], out[1], out[2]


class SignedTo:
    """A reference made ready to measure points to: signed distances in 2-D, plain ones in 3-D."""

    def __init__(self, reference: Curve, chord_error: float, crossing: bool = False) -> None:
        """Prepare a reference; arguments and errors as `signed_distances`, but for the dimension."""
        if not 0.0 < chord_error < np.inf:
            raise GeometryError(f"a chord error of {chord_error:g} cannot be used; it must be a number above 0")
        defining = anchors(reference)
        self._middle = 0.5 * defining.min(axis=0) + 0.5 * defining.max(axis=0)
        chords = whole_chords(reference, -self._middle).split(chord_error)
        long = np.flatnonzero((chords.start != chords.end).any(axis=1))
        if not long.size:
            raise GeometryError("the curve to measure to has no length; give one with two distinct points")
        self._chords = chords.take(long)
        self._search = SegmentSearch(self._chords.start.T.copy(), self._chords.end.T.copy())
        self._unit = self._search.along / np.sqrt(np.add.reduce(self._search.along * self._search.along))
        self._closed, self._crossing = reference.closed, crossing
        self._left_turning = len(defining[0]) == 2 and polygon_area(self._chords.start) > 0.0

    def __call__(self, points: FloatArray) -> FloatArray:
        """Return the distance of points, shape (n, d), of the reference's dimension; shape (n,), drawing units."""
        if points.shape[1] != len(self._middle):
            raise GeometryError(
                "curves of different dimensions cannot be measured to each other; give both in 2 or both in 3"
            )
        chords = self._chords
        local = (points - self._middle).T.copy()
        index, size, _ = self._search.exact(local)
        if len(local) != 2:
            return size
        reach = max(chords.elements.reach, float(np.abs(local).max(initial=0.0)))
        size[size <= (100.0 + chords.elements.rounding) * _U * reach] = 0.0
        if self._closed and self._crossing:
            return np.where(_inside(chords, local), -size, size)
        left, doubtful = _left(self._search, self._unit, local, index, self._closed)
        if not self._closed:
            return np.where(left, size, -size)
        outside = left != self._left_turning
        if doubtful.any():
            outside[doubtful] = ~_inside(chords, local[:, doubtful])
        return np.where(outside, size, -size)


def _left(
    search: SegmentSearch, unit: FloatArray, points: FloatArray, index: IntArray, closed: bool
) -> tuple[BoolArray, BoolArray]:
    """Whether points lie left of travel at their nearest segments, and where that cannot be told.

    Args:
        unit: direction of every segment, shape (2, m).
    """
    count = len(search)
    t = search.foot(points, index)
    tangent = unit[:, index].copy()
    doubtful = np.zeros(len(index), dtype=np.bool_)
    for at_vertex, step in ((t <= 0.0, -1), (t >= 1.0, 1)):
        vertex = np.flatnonzero(at_vertex)
        other = index[vertex] + step
        if closed:
            other %= count
        else:  # beyond an end its own tangent counts
            other = np.clip(other, 0, count - 1)
        both = unit[:, index[vertex]] + unit[:, other]
        back = np.hypot(*both) < 1e-7  # of two unit vectors: a turn of all but 180 degrees
        both[:, back] = unit[:, index[vertex[back]] if step > 0 else other[back]]
        tangent[:, vertex] = both
        doubtful[vertex[back]] = True
    offset = points - search.start[:, index] - t * search.along[:, index]
    return tangent[0] * offset[1] - tangent[1] * offset[0] > 0.0, doubtful


def _inside(chords: Chords, points: FloatArray) -> BoolArray:
    """Whether points lie inside the closed polygon of the chords, by the even-odd rule, at any crossing of itself."""
    y0, y1 = chords.start[:, 1], chords.end[:, 1]
    inside = np.zeros(points.shape[1], dtype=np.bool_)
    # the ray towards +x from a point at height y crosses the edges with one end at or under y and one above it
    low, high = np.minimum(y0, y1), np.maximum(y0, y1)
    order = np.argsort(points[1])
    height = points[1][order]
    first, last = np.searchsorted(height, low, side="left"), np.searchsorted(height, high, side="left")
    hits = last - first
    block = np.concatenate([[0], 1 + np.flatnonzero(np.diff(np.cumsum(hits) // 1_000_000))])
    for begin, end in zip(block, np.append(block[1:], len(hits)), strict=True):
        edges = np.repeat(np.arange(begin, end), hits[begin:end])
        if not edges.size:
            continue
        before = np.cumsum(hits[begin:end]) - hits[begin:end]
        which = order[first[edges] + np.arange(len(edges)) - np.repeat(before, hits[begin:end])]
        x0, x1 = chords.start[edges, 0], chords.end[edges, 0]
        crossing = x0 + (points[1, which] - y0[edges]) / (y1[edges] - y0[edges]) * (x1 - x0)
        inside ^= (np.bincount(which[crossing > points[0, which]], minlength=len(inside)) % 2).astype(np.bool_)
    return inside
