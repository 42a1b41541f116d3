"""Bounds on the distance from chords to segments, tightened by branch and bound.

The bounds are those of the largest distance from a chord, and so from its piece of curve, to the target.

What is proved. Let f be the distance to the set of all segments of the target, f_j that to segment j alone; f <= f_j,
f_j is convex along a straight interval [p0, p1] (distance to a convex set), and f changes by no more than the way gone.
With segments j0 and j1 near to p0 and p1, and a = f_j0, b = f_j1, each of these bounds f over the whole interval:

- (a(p0) + b(p1) + length) / 2;
- max(a(p0), a(p1)), and max(b(p0), b(p1));
- max(a(p0), a(s), b(s), b(p1)) for any s between: left of s by j0, right of s by j1.

The last is tightest where a(s) = b(s), and there mostly equal to the truth, which is why splitting at that s ends the
search even where two targets are equally near all along. A piece of curve within eA of its chord and a target within
eT of its chords add eA + eT. From below: f at a point of the curve, less eT; at a point inside a chord, less eA + eT.
"""

from dataclasses import dataclass

import numpy as np

from geometry.arrays import BoolArray, FloatArray, IntArray
from geometry.chords import Chords
from geometry.nearest import SegmentSearch

__all__ = ["ChordBounds", "bound_chords"]

_WORST = 64  # points looked at exactly at first
_ROUNDS = 60


@dataclass(frozen=True, slots=True, eq=False)
class ChordBounds:
    """Bounds on the distance from chords and their pieces of curve to a target, drawing units, rounding apart.

    Attributes:
        lower: no more than the largest distance of any point of the curve pieces; may be below 0.
        point: where `lower` was found, on a chord, shape (d,).
        chord: index of that chord.
        share: where on that chord the point lies, 0 its start, 1 its end.
        upper: for every chord, no less than the largest distance of any point of its piece, shape (m,).
        farthest: for every chord, its point found to be farthest from the target, shape (m, d).
    """

    lower: float
    point: FloatArray
    chord: int
    share: float
    upper: FloatArray
    farthest: FloatArray


class _Intervals:
    """Parts [t0, t1] of chords with a near segment at each end; coordinates first, shape (d, n).

    Points are always computed from the chord's own ends, so that their rounding does not add up from cut to cut.
    """

    __slots__ = ("d0", "d1", "j0", "j1", "owner", "p0", "p1", "t0", "t1")

    def __init__(
        self,
        owner: IntArray,
        t0: FloatArray,
        t1: FloatArray,
        p0: FloatArray,
        p1: FloatArray,
        j0: IntArray,
        j1: IntArray,
        d0: FloatArray,
        d1: FloatArray,
    ) -> None:
        self.owner, self.t0, self.t1, self.p0, self.p1 = owner, t0, t1, p0, p1
        self.j0, self.j1, self.d0, self.d1 = j0, j1, d0, d1

    def take(self, index: IntArray) -> "_Intervals":
        return _Intervals(
            self.owner[index],
            self.t0[index],
            self.t1[index],
            np.take(self.p0, index, axis=1),
            np.take(self.p1, index, axis=1),
            self.j0[index],
            self.j1[index],
            self.d0[index],
            self.d1[index],
        )

    def halves(self, t: FloatArray, s: FloatArray, j: IntArray, d: FloatArray) -> "_Intervals":
        """Both parts of every interval cut at t, at the points s with near segment j at distance d."""
        return _Intervals(
            np.concatenate([self.owner, self.owner]),
            np.concatenate([self.t0, t]),
            np.concatenate([t, self.t1]),
            np.concatenate([self.p0, s], axis=1),
            np.concatenate([s, self.p1], axis=1),
            np.concatenate([self.j0, j]),
            np.concatenate([j, self.j1]),
            np.concatenate([self.d0, d]),
            np.concatenate([d, self.d1]),
        )


def bound_chords(
    chords: Chords,
    target: SegmentSearch,
    target_error: float,
    slack: float,
    tolerance: float | None = None,
    every: bool = False,
) -> ChordBounds:
    """Bound the distance from every chord and its piece of curve to a target.

    Args:
        chords: of the curve to measure from, about the local origin.
        target: segments of the curve to measure to.
        target_error: eT, largest chord error of the target, drawing units.
        slack: how far the largest upper bound may stay above what the chord errors leave open, drawing units, > 0.
        tolerance: where given, nothing below it is refined, and the search ends as soon as `lower` passes it.
        every: refine every chord against `tolerance`, not only those that may hold the largest distance.

    Returns:
        The bounds. The largest of `upper` is at most lower + slack + 2 (eA + eT), eA the largest error of the chords,
        or at most max(tolerance, lower + slack + 2 (eA + eT)), unless the search ended early, was cut off by its limit
        of work (60 rounds, or 20,000 intervals and 4 more for every chord and segment) or left a nearest segment open;
        the bounds hold all the same.
    """
    search = _Search(chords, target, target_error, slack, tolerance, every)
    search.run()
    return search.result()


class _Search:
    def __init__(
        self,
        chords: Chords,
        target: SegmentSearch,
        target_error: float,
        slack: float,
        tolerance: float | None,
        every: bool,
    ) -> None:
        self.target, self.target_error, self.tolerance = target, target_error, tolerance
        self.every, self.error = every and tolerance is not None, chords.error
        self.both = chords.error + target_error
        self.room = slack + 2.0 * (float(chords.error.max()) + target_error)
        self.start, self.end = chords.start.T.copy(), chords.end.T.copy()
        self.lower, self.owner = -np.inf, 0
        self.point = self.start[:, 0]
        self.nodes, self.first = _nodes(self.start, self.end)

    def limit(self) -> float:
        """An upper bound at or under this is good enough."""
        if self.tolerance is None:
            return self.lower + self.room
        return max(self.tolerance, (self.tolerance if self.every else self.lower) + self.room)

    def decided(self) -> bool:
        """Whether the tolerance is proven to be passed."""
        return self.tolerance is not None and not self.every and self.lower > self.tolerance

    def raise_lower(self, low: FloatArray, points: FloatArray, owner: IntArray) -> None:
        best = int(np.argmax(low))
        if low[best] > self.lower:
            self.lower, self.point, self.owner = float(low[best]), points[:, best], int(owner[best])

    def look(self, index: IntArray) -> None:
        """Measure nodes exactly; they lie on the curve, so only the target's error is taken off."""
        points = np.take(self.nodes, index, axis=1)
        self.j[index], self.d[index], low = self.target.exact(points)
        self.raise_lower(low - self.target_error, points, self.node_owner(index))

    def node_owner(self, index: IntArray) -> IntArray:
        return np.maximum(np.searchsorted(self.first, index, side="right") - 1, 0)

    def run(self) -> None:
        first, second = self.first, self.first + 1
        self.j, self.d = self.target.near(self.nodes)
        count = len(self.d)
        worst = np.argpartition(self.d, count - _WORST)[count - _WORST :] if count > _WORST else np.arange(count)
        self.look(worst)
        d0, d1 = self.d[first], self.d[second]
        difference = self.end - self.start
        length = np.sqrt(np.add.reduce(difference * difference))
        self.upper = 0.5 * (d0 + d1 + length) + self.both
        self.far_d, self.farthest = np.maximum(d0, d1), np.where(d0 >= d1, self.start, self.end)
        open_ = np.flatnonzero(self.upper > self.limit())
        if self.decided() or not open_.size:
            return
        intervals = self.part(open_)
        self.upper[open_] = np.minimum(self.upper[open_], self.one_target(intervals))
        open_ = open_[self.upper[open_] > self.limit()]
        needed = np.zeros(count, dtype=np.bool_)
        needed[first[open_]] = needed[second[open_]] = True
        needed[worst] = False
        if needed.any():
            self.look(np.flatnonzero(needed))
        intervals = self.part(open_)
        most = 4 * (len(first) + len(self.target)) + 20_000
        for _ in range(_ROUNDS):
            upper, t = self.two_targets(intervals)
            if intervals.owner is open_:  # first round: intervals are whole chords
                upper = np.minimum(upper, self.upper[open_])
                self.upper[open_] = 0.0
            limit = self.limit()
            stay = upper > limit
            if self.every:
                # no cut brings a bound under what an end already has
                stay &= np.maximum(intervals.d0, intervals.d1) + self.both[intervals.owner] <= limit
            if self.decided() or np.count_nonzero(stay) > most:
                stay[:] = False
            self.close(intervals.owner, upper, ~stay)
            keep = np.flatnonzero(stay)
            if not keep.size:
                return
            intervals = self.cut(intervals.take(keep), t[keep])
        upper, _ = self.two_targets(intervals)
        self.close(intervals.owner, upper, np.ones(len(upper), dtype=np.bool_))

    def part(self, chosen: IntArray) -> _Intervals:
        """Whole chords as intervals."""
        i0 = self.first[chosen]
        i1 = i0 + 1
        ends = np.take(self.start, chosen, axis=1), np.take(self.end, chosen, axis=1)
        zero = np.zeros(len(chosen))
        return _Intervals(chosen, zero, zero + 1.0, *ends, self.j[i0], self.j[i1], self.d[i0], self.d[i1])

    def close(self, owner: IntArray, upper: FloatArray, closed: BoolArray) -> None:
        np.maximum.at(self.upper, owner[closed], upper[closed])

    def one_target(self, part: _Intervals) -> FloatArray:
        left = np.maximum(part.d0, self.target.distance(part.p1, part.j0))
        right = np.maximum(part.d1, self.target.distance(part.p0, part.j1))
        return np.minimum(left, right) + self.both[part.owner]

    def two_targets(self, part: _Intervals) -> tuple[FloatArray, FloatArray]:
        """Least of the three bounds over each interval, and the share of it at which to cut it."""
        target, along = self.target, part.p1 - part.p0
        ends = np.maximum(part.d0, part.d1)
        t = _meeting(target, part, along)
        s = part.p0 + t * along
        split = np.maximum(np.maximum(target.distance(s, part.j0), target.distance(s, part.j1)), ends)
        left = np.maximum(part.d0, target.distance(part.p1, part.j0))
        right = np.maximum(part.d1, target.distance(part.p0, part.j1))
        lipschitz = 0.5 * (part.d0 + part.d1 + np.sqrt(np.add.reduce(along * along)))
        upper = np.minimum(np.minimum(split, lipschitz), np.minimum(left, right)) + self.both[part.owner]
        middle = (t < 0.02) | (t > 0.98) | (part.j0 == part.j1)
        return upper, np.where(middle, 0.5, t)

    def cut(self, part: _Intervals, share: FloatArray) -> _Intervals:
        t = part.t0 + share * (part.t1 - part.t0)
        start = np.take(self.start, part.owner, axis=1)
        s = start + t * (np.take(self.end, part.owner, axis=1) - start)
        j, d, low = self.target.exact(s)
        self.raise_lower(low - self.both[part.owner], s, part.owner)
        farther = d > self.far_d[part.owner]
        if farther.any():
            order = np.flatnonzero(farther)
            order = order[np.argsort(d[order])]  # the farthest of a chord is written last
            self.far_d[part.owner[order]] = d[order]
            self.farthest[:, part.owner[order]] = s[:, order]
        return part.halves(t, s, j, d)

    def result(self) -> ChordBounds:
        start, along = self.start[:, self.owner], self.end[:, self.owner] - self.start[:, self.owner]
        square = float(along @ along)
        share = float((self.point - start) @ along) / square if square > 0.0 else 0.0
        return ChordBounds(
            self.lower, self.point.copy(), self.owner, min(max(share, 0.0), 1.0), self.upper, self.farthest.T
        )


def _nodes(start: FloatArray, end: FloatArray) -> tuple[FloatArray, IntArray]:
    """Ends of all chords, those that two chords share once; and the index of each chord's start (its end is next)."""
    count = start.shape[1]
    gap = (start[:, 1:] != end[:, :-1]).any(axis=0)
    first = np.arange(count)
    first[1:] += np.cumsum(gap)
    nodes = np.empty((len(start), int(first[-1]) + 2))
    nodes[:, first + 1] = end
    nodes[:, first] = start
    return nodes, first


def _meeting(target: SegmentSearch, part: _Intervals, along: FloatArray) -> FloatArray:
    """Return t in [0, 1] where the distances to both near segments are equal, shape (n,).

    The difference of the squared distances is a quadratic between the places where a foot reaches the end of its
    segment: find the one of these stretches over which it changes sign, and solve the quadratic there. It need not be
    exact, since the bound holds for any t.
    """
    t = np.zeros((6, len(part.owner)))
    for row, j in ((1, part.j0), (3, part.j1)):
        at_start, at_end = target.reach(part.p0, along, j)
        t[row], t[row + 1] = at_start, at_end
    t[5] = 1.0
    t.sort(axis=0)
    places = part.p0[:, None] + t * along[:, None]
    g = target.squared(places, part.j0[None]) - target.squared(places, part.j1[None])
    g[0], g[-1] = np.minimum(g[0], 0.0), np.maximum(g[-1], 0.0)
    last = np.argmax(g >= 0.0, axis=0)
    last = np.maximum(last, 1)
    every = np.arange(t.shape[1])
    low, high, g0, g1 = t[last - 1, every], t[last, every], np.minimum(g[last - 1, every], 0.0), g[last, every]
    place = part.p0 + 0.5 * (low + high) * along
    middle = target.squared(place, part.j0) - target.squared(place, part.j1)
    bend = 2.0 * (g0 + g1 - 2.0 * middle)
    slope = g1 - g0 - bend
    bottom = slope + np.sqrt(np.maximum(slope * slope - 4.0 * bend * g0, 0.0))
    x = np.divide(-2.0 * g0, bottom, out=np.full(len(bottom), 0.5), where=bottom > 0.0)
    return np.asarray(low + np.minimum(x, 1.0) * (high - low))
