"""The order of points that come without one: along a short path through all of them."""

import numpy as np

from geometry.arrays import FloatArray, IntArray
from geometry.errors import GeometryError, NotFiniteError

__all__ = ["nearest_order"]

_NEIGHBOURS = 8
_ROUNDS = 200
_LEAST_GAIN = 1e-12  # of the extent: less is rounding


def nearest_order(points: FloatArray, closed: bool = False) -> IntArray:
    """Return an order of points along a short path, or a short round trip when closed.

    The shortest path of many points is out of reach; this one is built from the shortest links that fit (greedy edges)
    and then improved by exchanging two links for two others (2-opt) between near neighbours until none gains. Points
    that stand closer along a curve than its branches stand apart come out in the order of the curve.

    Args:
        points: shape (n, d), finite, drawing units.
        closed: whether the path returns to its first point.

    Returns:
        Rows in order, shape (n,). A round trip begins at row 0, towards the lower of the rows beside it; a path begins
        at the end with the lower row.

    Raises:
        NotFiniteError, GeometryError: the points cannot be used.

    Sources: J. L. Bentley, "Fast algorithms for geometric traveling salesman problems", ORSA Journal on Computing 4
        (1992), pp. 387-411 (greedy edges, neighbour lists); G. A. Croes, "A method for solving traveling-salesman
        problems", Operations Research 6 (1958), pp. 791-812 (2-opt).
    """
    p = np.asarray(points, dtype=np.float64)
    if p.ndim != 2:
        raise GeometryError(f"points of shape {p.shape} cannot be put in order; they must have the shape (n, d)")
    bad = np.flatnonzero(~np.isfinite(p).all(axis=1))
    if bad.size:
        raise NotFiniteError(int(bad[0]))
    n = len(p)
    if n < 3:
        return np.arange(n)
    from scipy.spatial import cKDTree

    p = p - p.mean(axis=0)
    near = np.asarray(cKDTree(p).query(p, min(_NEIGHBOURS + 1, n))[1], dtype=np.intp)
    order = _improved(p, _greedy(p, near), near, closed)
    if closed:
        order = np.roll(order, -int(np.argmin(order)))
        return np.concatenate([order[:1], order[:0:-1]]) if order[1] > order[-1] else order
    return order[::-1] if order[0] > order[-1] else order


def _greedy(p: FloatArray, near: IntArray) -> IntArray:
    """Return a path from the shortest links between near neighbours, its parts joined by the shortest links left."""
    n = len(p)
    links: list[list[int]] = [[] for _ in range(n)]
    root = list(range(n))

    def top(i: int) -> int:
        while root[i] != i:
            root[i] = root[root[i]]
            i = root[i]
        return i

    def join(first: IntArray, second: IntArray) -> None:
        length = np.linalg.norm(p[first] - p[second], axis=1)
        shortest = np.argsort(length, kind="stable")
        for i, j in zip(first[shortest].tolist(), second[shortest].tolist(), strict=True):
            if len(links[i]) < 2 and len(links[j]) < 2 and (a := top(i)) != (b := top(j)):
                links[i].append(j)
                links[j].append(i)
                root[a] = b

    join(np.repeat(np.arange(n), near.shape[1]), near.ravel())
    while True:  # parts that no near neighbours join: their ends among themselves
        ends = np.array([i for i in range(n) if len(links[i]) < 2], dtype=np.intp)
        if len({top(i) for i in ends.tolist()}) == 1:
            break
        from scipy.spatial import cKDTree

        look = min(len(ends), 24)
        beside = np.asarray(cKDTree(p[ends]).query(p[ends], look)[1], dtype=np.intp)
        before = sum(map(len, links))
        join(np.repeat(ends, look), ends[beside.ravel()])
        if sum(map(len, links)) == before:  # many ends on one spot hide the others: take all pairs of a few
            some = np.unique([top(i) for i in ends.tolist()], return_index=True)[1][:64]
            first, second = np.triu_indices(len(some), 1)
            join(ends[some][first], ends[some][second])
    start = int(next((i for i in range(n) if len(links[i]) < 2), 0))
    order, before_it, at = [start], -1, start
    while len(order) < n:
        following = next(j for j in links[at] if j != before_it)
        order.append(following)
        before_it, at = at, following
    return np.array(order, dtype=np.intp)


def _improved(p: FloatArray, order: IntArray, near: IntArray, closed: bool) -> IntArray:
    """Exchange two links for two others while that makes the path shorter.

    Reversing the rows i + 1 to j replaces the links (i, i + 1) and (j, j + 1). An open path has no link behind its end,
    so that a part up to the end can be reversed as well; for a part from the start the path is turned round.
    """
    n = len(order)
    least = _LEAST_GAIN * float(np.ptp(p, axis=0).max())
    order, turned = order.copy(), False

    def link(a: IntArray, b: IntArray, at: IntArray) -> FloatArray:
        length = np.linalg.norm(p[a] - p[b], axis=-1)
        return length if closed else np.where(at == n - 1, 0.0, length)

    for _ in range(_ROUNDS):
        place = np.empty(n, dtype=np.intp)
        place[order] = np.arange(n)
        following = np.roll(order, -1)
        here = np.arange(n)
        own = link(order, following, here)
        i = np.repeat(here, near.shape[1])
        j = place[near[order]].ravel()  # a new link joins order[i] and order[j], and their followers
        i, j = np.concatenate([i, (i - 1) % n]), np.concatenate([j, (j - 1) % n])  # or the same with those before
        if not closed:  # and every link with the one that has no length
            i, j = np.concatenate([i, here]), np.concatenate([j, np.full(n, n - 1)])
        low, high = np.minimum(i, j), np.maximum(i, j)
        gap = np.linalg.norm(p[following[low]] - p[following[high]], axis=1)
        gap = gap if closed else np.where(high == n - 1, 0.0, gap)
        first = np.linalg.norm(p[order[low]] - p[order[high]], axis=1)
        gain = own[low] + own[high] - first - gap
        gain[low == high] = 0.0
        best = np.flatnonzero(gain > least)
        if not len(best):
            if closed or turned:
                break
            order, turned = order[::-1].copy(), True
            continue
        turned = False
        taken = np.zeros(n, dtype=np.bool_)
        done: list[tuple[int, int]] = []
        for k in best[np.argsort(-gain[best])].tolist():
            a, b = int(low[k]), int(high[k])
            if taken[a : b + 2].any():  # stretches that do not overlap are reversed in one round
                continue
            taken[a : b + 2] = True
            done.append((a, b))
        for a, b in done:
            order[a + 1 : b + 1] = order[a + 1 : b + 1][::-1].copy()
    return order
