"""Whether two curves pass the same places in the same order: a bound that a plain distance between sets cannot give.

Two strands that lie close together may be swapped, or a loop left out and drawn over, without the Hausdorff distance
noticing. The Frechet distance does: it is the least r for which both curves can be travelled from end to end, never
backwards, in such a way that the two travellers are never farther apart than r.

Upper bound, proved. Take any pairing, in order, of places on two polylines that has a node at every vertex of either.
Between two nodes both travellers move along straight lines; the distance between them is convex in time, hence largest
at a node. So the Frechet distance is at most the largest distance at the nodes; chords within eA and eT of their curves
in order of travel add eA + eT. Any pairing will do: a poor one gives a poor bound, never a wrong one.

Lower bound, proved. Let every point of b within r of some place a1 come after every point of b within r of a later
place a2 of a (or let there be none at all). A pairing in order with all distances at most r would give a1 a partner
before that of a2: there is none, so the Frechet distance is at least r. Samples of b every g stand for the points
within g / 2 of them along b, so looking within r + g / 2 for samples finds all points within r. A broken order need not
show in this way, so a small lower bound says nothing.

Rounding: each node's distance takes fewer operations than those counted in `geometry.deviation`; the same allowance is
added to the upper and taken off the lower bound.

Source: H. Alt, M. Godau, "Computing the Frechet distance between two polygonal curves", International Journal of
Computational Geometry and Applications 5 (1995), for the distance itself (from memory).
"""

from bisect import bisect_right
from dataclasses import dataclass

import numpy as np

from geometry.arrays import BoolArray, FloatArray
from geometry.chords import anchors, whole_chords
from geometry.curve import Curve
from geometry.errors import GeometryError
from geometry.nearest import SegmentSearch
from geometry.polyline import points_at

__all__ = ["TravelOrder", "travel_order"]

_U = 2.0**-53
_SHARE = 1.0 / 100.0  # of the tolerance: the chord error
_PLACES, _SAMPLES = 300, 2_000  # of a and of b in the lower bound


@dataclass(frozen=True, slots=True)
class TravelOrder:
    """Bounds on the distance between two curves travelled in the same order, drawing units.

    Attributes:
        certified: proven upper bound on the Frechet distance.
        at_least: proven lower bound; 0 where none was looked for: for closed curves, whose pairing may start anywhere,
            and where `certified` is within the tolerance.
        dropped: share of the vertices of the first curve whose nearest place on the second is out of order.
        stretches: from and to, along the first curve, where nodes of the pairing are over the tolerance; equal where
            the first curve waits for the second. On a closed curve one may run past the start, to over the length.
    """

    certified: float
    at_least: float
    dropped: float
    stretches: tuple[tuple[float, float], ...]


def travel_order(a: Curve, b: Curve, tolerance: float) -> TravelOrder:
    """Bound the distance between two curves that are travelled in the same order.

    The direction of travel itself is not judged: b is turned round where that fits better (closed: where it turns
    the other way; open: where its ends fit better so). A closed curve is never in one order with an open one.

    Args:
        a, b: polyline, arc chain or spline, both open or both closed, both 2-D or both 3-D, drawing units.
        tolerance: sets the chord error (1/100 of it) and tells the stretches to list, drawing units, > 0.

    Returns:
        The bounds. `certified` at or under the tolerance proves the same order of travel within it; above it, the order
        is not proven in the stretches listed, and `at_least` above the tolerance proves that it is broken.

    Raises:
        NotFiniteError, TooFewPointsError: a curve cannot be used.
        GeometryError: one is open and one closed, the dimensions differ or the tolerance is not a number above 0.
    """
    if not 0.0 < tolerance < np.inf:
        raise GeometryError(f"a tolerance of {tolerance:g} cannot be used; it must be a number above 0")
    if a.closed != b.closed or a.dimension != b.dimension:
        raise GeometryError(
            "the order of travel needs two open or two closed curves, both in 2 or both in 3 dimensions"
        )
    first, second = anchors(a), anchors(b)
    middle = 0.5 * np.minimum(first.min(axis=0), second.min(axis=0))
    middle += 0.5 * np.maximum(first.max(axis=0), second.max(axis=0))
    sides = [whole_chords(curve, -middle).split(_SHARE * tolerance) for curve in (a, b)]
    reach = max(side.elements.reach for side in sides)
    spare = (100.0 + sum(side.elements.rounding for side in sides)) * _U * reach
    error = sum(float(side.error.max()) for side in sides)
    p, q = (_path(np.vstack([side.start, side.end[-1:]])) for side in sides)
    if _opposed(p, q, a.closed):
        q = q[::-1].copy()
    origin, total = 0.0, float(_alongs(p)[-1])
    if a.closed:
        p, q, origin = _cut(p, q)
    over, along, apart, dropped = _pair(p, q, tolerance - error - spare)
    certified = float(apart.max()) + error + spare
    at_least = 0.0
    if certified > tolerance and not a.closed:
        at_least = max(0.0, _lower(p, q, error) - error - spare)
    return TravelOrder(certified, at_least, dropped, _stretches(over, along, origin, total if a.closed else np.inf))


def _path(points: FloatArray) -> FloatArray:
    """Drop vertices that repeat the one before; two are left at least."""
    keep = np.concatenate([[True], (points[1:] != points[:-1]).any(axis=1)])
    return points[keep] if keep.sum() > 1 else points[:2]


def _alongs(path: FloatArray) -> FloatArray:
    return np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(path, axis=0), axis=1))])


def _opposed(p: FloatArray, q: FloatArray, closed: bool) -> bool:
    if not closed:
        same = np.sum((p[0] - q[0]) ** 2) + np.sum((p[-1] - q[-1]) ** 2)
        return bool(np.sum((p[0] - q[-1]) ** 2) + np.sum((p[-1] - q[0]) ** 2) < same)
    # area vectors: x y' - y x' for each pair of axes, summed over the edges
    pairs = [(0, 1)] if p.shape[1] == 2 else [(0, 1), (1, 2), (2, 0)]
    areas = [[np.sum(c[:-1, i] * c[1:, j] - c[:-1, j] * c[1:, i]) for i, j in pairs] for c in (p - p[0], q - q[0])]
    return bool(np.dot(areas[0], areas[1]) < 0.0)


def _feet(p: FloatArray, q: FloatArray) -> FloatArray:
    """Arc length along path q of the point near to each vertex of p."""
    search = SegmentSearch(q[:-1].T.copy(), q[1:].T.copy())
    index, _ = search.near(p.T.copy())
    alongs = _alongs(q)
    t = search.foot(p.T, index)
    return np.minimum(alongs[index] + t * (alongs[index + 1] - alongs[index]), alongs[index + 1])


def _cut(p: FloatArray, q: FloatArray) -> tuple[FloatArray, FloatArray, float]:
    """Start both closed paths at a pair of places that fits the rest best; also where on p that is."""
    along_p, along_q, feet = _alongs(p), _alongs(q), _feet(p, q)
    ahead = 2.0 * np.pi * (feet / max(along_q[-1], 1e-300) - along_p / max(along_p[-1], 1e-300))
    mean = np.angle(np.exp(1j * ahead).sum())
    start = int(np.argmin(np.abs(np.angle(np.exp(1j * (ahead[:-1] - mean))))))
    turned = np.vstack([p[start:-1], p[:start], p[start : start + 1]])
    foot = feet[start]
    after = int(np.searchsorted(along_q, foot, side="right"))
    place = points_at(q, along_q, np.array([foot]), False)
    return turned, _path(np.vstack([place, q[after:-1], q[:after], place])), float(along_p[start])


def _pair(p: FloatArray, q: FloatArray, limit: float) -> tuple[BoolArray, FloatArray, FloatArray, float]:
    """Pair two paths in order; for each node whether it is over the limit, its place along p and the distance there."""
    along_p, along_q = _alongs(p), _alongs(q)
    feet = _feet(p, q)
    feet[0], feet[-1] = 0.0, along_q[-1]
    kept = _longest_rise(feet)
    feet = np.interp(along_p, along_p[kept], feet[kept])
    apart_p = np.linalg.norm(p - points_at(q, along_q, feet, False), axis=1)
    # each vertex of q between the feet of i and i + 1 goes to the nearest point of edge i, but never back
    i = np.clip(np.searchsorted(feet, along_q, side="right") - 1, 0, len(p) - 2)
    search = SegmentSearch(p[:-1].T.copy(), p[1:].T.copy())
    t = search.foot(q.T, i)
    t[0], t[-1] = 0.0, 1.0
    t = np.maximum.accumulate(i + t) - i
    apart_q = np.linalg.norm(q - (p[i] + t[:, None] * (p[i + 1] - p[i])), axis=1)
    along = np.concatenate([along_p, along_p[i] + t * (along_p[i + 1] - along_p[i])])
    apart = np.concatenate([apart_p, apart_q])
    order = np.argsort(along, kind="stable")
    return apart[order] > limit, along[order], apart[order], 1.0 - float(kept.mean())


def _longest_rise(values: FloatArray) -> BoolArray:
    """Which values make up a longest subsequence that never falls; the first, a least, and the last, a largest, do."""
    kept = np.ones(len(values), dtype=np.bool_)
    if (values[1:] >= values[:-1]).all():
        return kept
    tops: list[float] = []  # least last value of a rise of each length, and where it stands
    ends: list[int] = []
    before = [0] * len(values)
    for index, value in enumerate(values[:-1].tolist()):
        place = bisect_right(tops, value)
        before[index] = ends[place - 1] if place else -1
        if place == len(tops):
            tops.append(value)
            ends.append(index)
        else:
            tops[place], ends[place] = value, index
    kept[:-1] = False
    index = ends[-1]
    while index >= 0:
        kept[index] = True
        index = before[index]
    kept[0] = True
    return kept


def _stretches(over: BoolArray, along: FloatArray, origin: float, total: float) -> tuple[tuple[float, float], ...]:
    """Runs of nodes over the limit, each from the last good node before to the first good one after."""
    edge = np.diff(np.concatenate([[False], over, [False]]).astype(np.int8))
    first, last = np.flatnonzero(edge == 1), np.flatnonzero(edge == -1)
    low = along[np.maximum(first - 1, 0)] + origin
    high = along[np.minimum(last, len(along) - 1)] + origin
    back = np.where(low >= total, total, 0.0) if np.isfinite(total) else np.zeros(len(low))
    return tuple(zip((low - back).tolist(), (high - back).tolist(), strict=True))


def _lower(p: FloatArray, q: FloatArray, error: float) -> float:
    """Greatest r, to a thousandth, for which the order of two open paths is broken at r."""
    along_p, along_q = _alongs(p), _alongs(q)
    places = points_at(p, along_p, np.linspace(0.0, along_p[-1], _PLACES), False)
    samples = points_at(q, along_q, np.linspace(0.0, along_q[-1], _SAMPLES), False)
    half = 0.5 * float(along_q[-1]) / (_SAMPLES - 1) + error
    apart = np.linalg.norm(places[:, None] - samples[None], axis=2) - half

    def broken(r: float) -> bool:
        near = apart <= r
        if not near.any(axis=1).all():
            return True
        first, last = near.argmax(axis=1), _SAMPLES - 1 - near[:, ::-1].argmax(axis=1)
        return bool((np.maximum.accumulate(first)[:-1] > last[1:]).any())

    low, high = 0.0, float(apart.max())
    if not broken(low):
        return 0.0
    while high - low > 1e-3 * high:
        middle = 0.5 * (low + high)
        low, high = (middle, high) if broken(middle) else (low, middle)
    return low
