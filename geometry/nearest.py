"""Nearest segments to points, in near-linear time and in any number of dimensions.

Arrays here hold coordinates first, shape (d, n): the sums over a point's coordinates then run over whole rows.

Segments are found through a k-d tree of their middles. A segment whose middle is D from a point is at least D - r from
it, r the largest half length, so once the k-th nearest middle is at least r farther than the best segment found, no
other segment can be nearer. Long segments are cut for the tree only (to at most twice the mean length: that makes less
than half as many again), so that r stays of the size of a usual segment.
"""

from typing import Any

import numpy as np

from geometry.arrays import FloatArray, IntArray

__all__ = ["SegmentSearch"]

_U = 2.0**-53
_PAIRS = 20_000  # up to here every point is compared with every segment: cheaper than a tree
_BLOCK = 1_000_000  # pairs held in memory at a time
_OPEN = 50_000_000  # pairs spent on points that many segments are about equally near to
_THREADS = 50_000  # points from which a query is worth threads


class SegmentSearch:
    """Segments that points can be measured to.

    Attributes:
        start, along: first end and end minus start of every segment, shape (d, m), drawing units.
    """

    __slots__ = ("_inverse", "_owner", "_radius", "_tree", "along", "start")

    def __init__(self, start: FloatArray, end: FloatArray) -> None:
        """Prepare segments given by their ends, shape (d, m), finite; segments without length are points."""
        self.start = start
        self.along = end - start
        square = np.add.reduce(self.along * self.along)
        # a segment this short (1e-100) counts as its start, so that no quotient below can overflow
        self._inverse = np.divide(1.0, square, out=np.zeros_like(square), where=square > 1e-200)
        self._tree: Any = None
        self._owner: IntArray | None = None
        self._radius = 0.0

    def __len__(self) -> int:
        return int(self.start.shape[1])

    def foot(self, points: FloatArray, index: IntArray) -> FloatArray:
        """Return the parameter in [0, 1] of the point of segment `index` nearest to each point, shape (...).

        Args:
            points: shape (d, ...). index: shape that broadcasts with points.shape[1:].
        """
        offset = points - self.start[:, index]
        t = np.add.reduce(offset * self.along[:, index]) * self._inverse[index]
        return np.asarray(np.minimum(np.maximum(t, 0.0), 1.0))

    def distance(self, points: FloatArray, index: IntArray) -> FloatArray:
        """Return the distance from each point to the segment of that index, shape (...); arguments as for `foot`."""
        return np.sqrt(self.squared(points, index))

    def squared(self, points: FloatArray, index: IntArray) -> FloatArray:
        """Return the squared distance; arguments as for `foot`."""
        along = np.take(self.along, index, axis=1)
        offset = points - np.take(self.start, index, axis=1)
        t = np.add.reduce(offset * along) * np.take(self._inverse, index)
        offset -= np.minimum(np.maximum(t, 0.0, out=t), 1.0, out=t) * along
        offset *= offset
        return np.asarray(np.add.reduce(offset))

    def reach(self, points: FloatArray, step: FloatArray, index: IntArray) -> FloatArray:
        """Return where on the lines points + t step, t in [0, 1], the foot reaches the start and the end of a segment.

        Args:
            points, step: shape (d, n). index: segment of each, shape (n,).

        Returns:
            t, shape (2, n), held to [0, 1]; 0 where the foot does not move.
        """
        along, inverse = self.along[:, index], self._inverse[index]
        foot = np.add.reduce((points - self.start[:, index]) * along) * inverse
        speed = np.add.reduce(step * along) * inverse
        moves = np.abs(speed) > 1e-150
        t = np.stack([-foot, 1.0 - foot])
        t = np.divide(t, speed, out=np.zeros_like(t), where=moves)
        return np.asarray(np.minimum(np.maximum(t, 0.0), 1.0))

    def near(self, points: FloatArray) -> tuple[IntArray, FloatArray]:
        """Return for each point a near segment and the distance to it: never below the least, and mostly the least.

        Args:
            points: shape (d, n), drawing units.

        Returns:
            Index and distance, shape (n,).
        """
        if points.shape[1] * len(self) <= _PAIRS:
            return self._compare(points)
        _, middle = self._query(points, 1)
        index = np.take(self._owner, middle) if self._owner is not None else middle
        around = np.stack([np.maximum(index - 1, 0), index, np.minimum(index + 1, len(self) - 1)])
        squared = self.squared(points[:, None], around)
        best = np.argmin(squared, axis=0)
        every = np.arange(len(best))
        return around[best, every], np.sqrt(squared[best, every])

    def exact(self, points: FloatArray) -> tuple[IntArray, FloatArray, FloatArray]:
        """Return for each point the nearest segment found and bounds on the distance to the nearest of all.

        The bounds are equal except where over a thousand segments are nearly equally near to very many points (a small
        curve about the centre of a large circle).

        Args:
            points: shape (d, n), drawing units.

        Returns:
            Index, upper bound (the distance to that segment) and lower bound, shape (n,); both up to rounding.
        """
        count = points.shape[1]
        if count * len(self) <= _PAIRS:
            index, high = self._compare(points)
            return index, high, high
        index = np.zeros(count, dtype=np.intp)
        high, low = np.full(count, np.inf), np.zeros(count)
        todo = np.arange(count)
        for k in (4, 16, 64, 256):
            todo = self._settle(points, todo, k, index, high, low)
            if not todo.size:
                return index, high, low
        todo = todo[: _OPEN // len(self)]
        for block in np.array_split(todo, 1 + todo.size * len(self) // _BLOCK):
            if block.size:
                index[block], high[block] = self._compare(points[:, block])
                low[block] = high[block]
        return index, high, low

    def _settle(
        self, points: FloatArray, todo: IntArray, k: int, index: IntArray, high: FloatArray, low: FloatArray
    ) -> IntArray:
        """Look at the k nearest middles of each point to do, update the results and return the points still open."""
        left = []
        for block in np.array_split(todo, 1 + todo.size * k // _BLOCK):
            chosen = points[:, block]
            reach, middle = (found.reshape(block.size, -1) for found in self._query(chosen, k))
            candidates = middle.T
            if self._owner is not None:
                candidates = np.take(self._owner, candidates)
            squared = self.squared(chosen[:, None], candidates)
            best = np.argmin(squared, axis=0)
            every = np.arange(block.size)
            index[block], high[block] = candidates[best, every], np.sqrt(squared[best, every])
            if reach.shape[1] < self._tree.n:
                floor = reach[:, -1] * (1.0 - 8.0 * _U) - self._radius
            else:
                floor = np.full(block.size, np.inf)  # every segment was looked at
            low[block] = np.minimum(high[block], np.maximum(floor, 0.0))
            left.append(block[high[block] > floor])
        return np.concatenate(left)

    def _compare(self, points: FloatArray) -> tuple[IntArray, FloatArray]:
        along = self.along[:, None]
        offset = points[:, :, None] - self.start[:, None]
        t = np.add.reduce(offset * along)
        t *= self._inverse
        offset -= np.minimum(np.maximum(t, 0.0, out=t), 1.0, out=t) * along
        offset *= offset
        squared = np.add.reduce(offset)
        index = np.argmin(squared, axis=1)
        return index, np.sqrt(squared[np.arange(len(index)), index])

    def _query(self, points: FloatArray, k: int) -> Any:
        """Distances to the k nearest middles and their indices, shape (n, k), or (n,) for k = 1."""
        if self._tree is None:
            self._plant()
        count, k = points.shape[1], min(k, self._tree.n)
        return self._tree.query(points.T, k=k, workers=-1 if count >= _THREADS else 1)

    def _plant(self) -> None:
        from scipy.spatial import cKDTree  # a fifth of a second: only where it is needed

        lengths = np.sqrt(np.add.reduce(self.along * self.along))
        longest, mean = lengths.max(), lengths.mean()
        if longest <= 2.0 * mean:
            middles = self.start + 0.5 * self.along
        else:
            parts = np.maximum(np.ceil(lengths / (2.0 * mean)), 1.0).astype(np.intp)
            owner = np.repeat(np.arange(len(parts)), parts)
            step = np.arange(len(owner)) - np.repeat(np.cumsum(parts) - parts, parts)
            middles = self.start[:, owner] + (step + 0.5) / parts[owner] * self.along[:, owner]
            longest, self._owner = (lengths / parts).max(), owner
        reach = np.abs(self.start).max() + longest
        self._radius = 0.5 * longest + 32.0 * _U * reach
        self._tree = cKDTree(middles.T, balanced_tree=False, compact_nodes=False)
