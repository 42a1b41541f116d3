"""The polyline handed in, as fairing sees it: points by arc length and distances to stretches of it."""

import numpy as np

from geometry.arrays import BoolArray, FloatArray, IntArray

__all__ = ["Trace", "near", "ragged_ranges", "segment_distance"]

_SAME_WAY = 1e-6  # change of direction that still counts as straight on, radians
_RISER, _TREAD_REACH = 1.5, 3.0
_EDGE, _KNOTS_A_EDGE, _WIDEST = 0.4, 2.0, 1.6


class Trace:
    """A polyline in units of the tolerance, moved to a local origin.

    Attributes:
        path: vertices in order of travel, the first one repeated at the end when closed, shape (n + 1, d).
        alongs: arc length at every vertex of the path, shape (n + 1,).
        closed: whether the path is a loop.
        knot_step: distance of the knots of a curve that follows it.
    """

    def __init__(self, path: FloatArray, closed: bool) -> None:
        self.path, self.closed = path, closed
        self.edges = np.diff(path, axis=0)
        self.edge_lengths = np.sqrt((self.edges**2).sum(axis=1))
        self.alongs = np.concatenate([[0.0], np.cumsum(self.edge_lengths)])
        self.length = float(self.alongs[-1])
        self.dimension = int(path.shape[1])
        # points far apart say nothing of what is finer; of a staircase the risers are looked at, half of all edges
        edge = float(np.quantile(self.edge_lengths, _EDGE))
        self.knot_step = min(max(1.0, edge / _KNOTS_A_EDGE), _WIDEST)
        self._treads: tuple[FloatArray, FloatArray] | None = None

    def at(self, along: FloatArray) -> FloatArray:
        """Return the points at arc lengths (wrapped when closed), shape of `along` with d appended."""
        u = np.mod(along, self.length) if self.closed else along
        return np.stack([np.interp(u, self.alongs, self.path[:, k]) for k in range(self.dimension)], axis=-1)

    def tread(self, along: FloatArray) -> FloatArray:
        """Return the length of the longest tread of a staircase within 3 of arc lengths, 0 where there is none, (n,).

        A tread is a straight run of edges beside a riser, a run of 1.5 at most.
        """
        if self._treads is None:
            unit = self.edges / np.maximum(self.edge_lengths, 1e-300)[:, None]
            straight_on = np.abs(np.diff(unit, axis=0)).max(axis=1) <= _SAME_WAY
            cuts = np.concatenate([[0], 1 + np.flatnonzero(~straight_on), [len(unit)]])
            runs = np.diff(self.alongs[cuts])
            if self.closed and len(runs) > 2 and np.abs(unit[0] - unit[-1]).max() <= _SAME_WAY:
                runs[0] = runs[-1] = runs[0] + runs[-1]
            riser = np.minimum(np.roll(runs, 1), np.roll(runs, -1)) <= _RISER
            self._treads = self.alongs[cuts], np.where(riser, runs, 0.0)
        starts, lengths = self._treads
        longest = np.zeros(len(along))
        for shift in (-_TREAD_REACH, 0.0, _TREAD_REACH):
            u = along + shift
            u = np.mod(u, self.length) if self.closed else np.clip(u, 0.0, self.length)
            run = np.clip(np.searchsorted(starts, u, side="right") - 1, 0, len(lengths) - 1)
            longest = np.maximum(longest, lengths[run])
        return longest

    def distance(self, points: FloatArray, along: FloatArray, half: float | FloatArray) -> FloatArray:
        """Return the distance of points to the stretch of the polyline within `half` of an arc length each, (n,)."""
        count = len(self.edges)
        low, high = along - half, along + half
        if self.closed:
            turns = np.floor(low / self.length)
            low, high = low - turns * self.length, high - turns * self.length
            high = np.minimum(high, low + self.length)
            first = np.searchsorted(self.alongs, low, side="right") - 1
            over = np.floor(high / self.length)
            last = np.searchsorted(self.alongs, high - over * self.length, side="right") - 1
            last = last + over.astype(np.intp) * count
        else:
            first = np.searchsorted(self.alongs, np.maximum(low, 0.0), side="right") - 1
            last = np.searchsorted(self.alongs, np.minimum(high, self.length), side="right") - 1
        first = np.clip(first, 0, count - 1) if not self.closed else first
        last = np.clip(last, first, None if self.closed else count - 1)
        owner, segment, starts = ragged_ranges(first, last + 1)
        segment = np.mod(segment, count) if self.closed else segment
        gap = segment_distance(points[owner], self.path[segment], self.edges[segment])
        return np.minimum.reduceat(gap, starts)


def ragged_ranges(first: IntArray, stop: IntArray) -> tuple[IntArray, IntArray, IntArray]:
    """Lay the ranges [first, stop) one behind another: owners, members, and where each range starts."""
    counts = stop - first
    starts = np.cumsum(counts) - counts
    owner = np.repeat(np.arange(len(counts)), counts)
    return owner, np.arange(counts.sum()) - starts[owner] + first[owner], starts


def segment_distance(points: FloatArray, start: FloatArray, edge: FloatArray) -> FloatArray:
    """Return the distance of each point to its own segment, all of shape (n, d); result (n,)."""
    gap = points - start
    square = (edge * edge).sum(axis=1)
    foot = np.clip((gap * edge).sum(axis=1) / np.where(square > 0.0, square, 1.0), 0.0, 1.0)
    gap = gap - foot[:, None] * edge
    return np.sqrt((gap * gap).sum(axis=1))


def near(flags: BoolArray, piece: IntArray, reach: int, wrap: bool) -> BoolArray:
    """Return flags spread to neighbours at most `reach` away in the same piece."""
    total = np.concatenate([[0], np.cumsum(flags)])
    n = len(flags)
    if wrap:
        total = np.concatenate([[0], np.cumsum(np.tile(flags, 3))])
        at = np.arange(n, 2 * n)
        return (total[np.minimum(at + reach + 1, 3 * n)] - total[np.maximum(at - reach, 0)]) > 0
    bounds = np.concatenate([[0], 1 + np.flatnonzero(np.diff(piece)), [n]])
    counts = np.diff(bounds)
    low = np.maximum(np.arange(n) - reach, np.repeat(bounds[:-1], counts))
    high = np.minimum(np.arange(n) + reach + 1, np.repeat(bounds[1:], counts))
    return (total[high] - total[low]) > 0
