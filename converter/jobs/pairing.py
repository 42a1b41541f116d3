"""Which profile of one revision stands for which of the other, without names: by handle, by layer and place."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from converter.jobs.figures import Figure
from geometry.arrays import FloatArray, IntArray

__all__ = ["Pairing", "pair_up"]

_SAMPLES = 48  # a figure: enough to tell which of two is nearer
_REACH = 0.5  # of the size: figures that lie farther apart than this stand for different things
_AGREES = 1.5  # a handle agrees while its partner lies no farther than so many times the nearest of either
_ALIKE = 3.0  # sizes of partners by handle that lie far from one another differ by no more than this factor
_BLOCK = 4096  # candidates whose distances are computed at once


@dataclass(frozen=True, slots=True)
class Pairing:
    """What stands for what.

    Attributes:
        pairs: (index in old, index in new, how), in the order of old; how is "handle", "place", "place on another
            layer" or "nothing else".
        only_old, only_new: indices of what has no partner.
    """

    pairs: list[tuple[int, int, str]]
    only_old: list[int]
    only_new: list[int]


def pair_up(old: Sequence[Figure], new: Sequence[Figure]) -> Pairing:
    """Pair the profiles of two revisions.

    Open profiles pair with open ones and closed with closed. First by handle, where the handle agrees with the place:
    same layer, and neither of the two has another candidate that lies much nearer (drawings that were exported again
    have new handles, which agree by chance only); partners by handle may lie anywhere, for parts are moved. Then, on
    each layer, so that the sum of their distances is least, among those that lie within half their size of one
    another; then the rest likewise without regard to layers. What is the only closed (or open) profile of both drawings
    pairs wherever it lies and whatever its size.

    The distance is that of samples, both ways, about as large as the Hausdorff distance.

    Args:
        old, new: in the same coordinates.
    """
    first = _candidates(old, new)
    partner: dict[int, tuple[int, str]] = {}
    taken: set[int] = set()
    for i, j in _by_handle(old, new, first):
        partner[i] = (j, "handle")
        taken.add(j)
    for same_layer, word in ((True, "place"), (False, "place on another layer")):
        for i, j in _by_place(old, new, first, set(partner), taken, same_layer):
            partner[i] = (j, word)
            taken.add(j)
    for closed in (True, False):
        here, there = ([k for k, f in enumerate(group) if f.closed == closed] for group in (old, new))
        if len(here) == len(there) == 1 and here[0] not in partner and there[0] not in taken:
            partner[here[0]] = (there[0], "nothing else")
            taken.add(there[0])
    pairs = [(i, *partner[i]) for i in sorted(partner)]
    return Pairing(
        pairs,
        [i for i in range(len(old)) if i not in partner],
        [j for j in range(len(new)) if j not in taken],
    )


@dataclass(frozen=True, slots=True, eq=False)
class _Candidates:
    """Pairs that lie near one another: rows of old and new and their distance, shape (k,) each."""

    old: IntArray
    new: IntArray
    distance: FloatArray

    def nearest(self, count_old: int, count_new: int) -> tuple[FloatArray, FloatArray]:
        """Return the distance of the nearest candidate of every old and every new figure, infinite where none is."""
        by_old, by_new = np.full(count_old, np.inf), np.full(count_new, np.inf)
        np.minimum.at(by_old, self.old, self.distance)
        np.minimum.at(by_new, self.new, self.distance)
        return by_old, by_new


def _candidates(old: Sequence[Figure], new: Sequence[Figure]) -> _Candidates:
    """Return all pairs of one kind whose boxes reach one another within half the larger size."""
    empty = np.zeros(0, dtype=np.intp)
    if not old or not new:
        return _Candidates(empty, empty, np.zeros(0))
    from shapely import STRtree, box

    boxes = [np.array([[*f.curve.bounds()[0][:2], *f.curve.bounds()[1][:2]] for f in group]) for group in (old, new)]
    sizes = [np.array([f.size for f in group]) for group in (old, new)]
    grown = boxes[0] + _REACH * sizes[0][:, None] * np.array([-1.0, -1.0, 1.0, 1.0])
    i, j = (np.asarray(a, dtype=np.intp) for a in STRtree(box(*boxes[1].T)).query(box(*grown.T)))
    # a distance within reach leaves no corner of one box farther than that from the other's
    apart = np.abs(boxes[0][i] - boxes[1][j]).max(axis=1)
    closed = [np.array([f.closed for f in group]) for group in (old, new)]
    kept = (closed[0][i] == closed[1][j]) & (apart <= _REACH * np.maximum(sizes[0][i], sizes[1][j]))
    i, j = i[kept], j[kept]
    distance = _distances(_samples(old), _samples(new), i, j)
    near = distance <= _REACH * np.maximum(sizes[0][i], sizes[1][j])
    return _Candidates(i[near], j[near], distance[near])


def _samples(figures: Sequence[Figure]) -> FloatArray:
    """Return points evenly along every figure, shape (n, samples, 2), in plan."""
    out = np.empty((len(figures), _SAMPLES, 2))
    for k, figure in enumerate(figures):
        flat = figure.curve.flatten(max(1e-3 * figure.size, 1e-300))
        out[k] = flat.at(np.linspace(0.0, flat.length(), _SAMPLES))[:, :2]  # a closed one ends where it begins
    return out


def _distances(old: FloatArray, new: FloatArray, i: IntArray, j: IntArray) -> FloatArray:
    """Return the largest distance from a sample of either figure to the nearest segment of the other's samples."""
    out = np.zeros(len(i))
    for at in range(0, len(i), _BLOCK // _SAMPLES):
        block = slice(at, at + _BLOCK // _SAMPLES)
        a, b = old[i[block]], new[j[block]]
        out[block] = np.maximum(_farthest(a, b), _farthest(b, a))
    return out


def _farthest(points: FloatArray, path: FloatArray) -> FloatArray:
    """Return, for every figure, the largest distance from its points to the segments of a path, shape (k,)."""
    start, step = path[:, None, :-1], np.diff(path, axis=1)[:, None]
    to = points[:, :, None] - start
    share = np.clip((to * step).sum(axis=3) / np.maximum((step * step).sum(axis=3), 1e-300), 0.0, 1.0)
    return np.sqrt(((to - share[..., None] * step) ** 2).sum(axis=3).min(axis=2).max(axis=1))


def _by_handle(old: Sequence[Figure], new: Sequence[Figure], near: _Candidates) -> list[tuple[int, int]]:
    """Return the pairs whose handles agree and whose places do not speak against it."""
    by_id = {figure.id: j for j, figure in enumerate(new)}
    alike = [
        (i, by_id[figure.id])
        for i, figure in enumerate(old)
        if figure.id in by_id
        and figure.layer == new[by_id[figure.id]].layer
        and figure.closed == new[by_id[figure.id]].closed
    ]
    if not alike:
        return []
    i, j = (np.array(side, dtype=np.intp) for side in zip(*alike, strict=True))
    by_old, by_new = near.nearest(len(old), len(new))
    samples = (_samples(old), _samples(new))
    distance = _distances(*samples, i, j)
    size = np.array([[old[a].size, new[b].size] for a, b in alike])
    ratio = size.max(axis=1) / np.maximum(size.min(axis=1), 1e-300)
    close = distance <= _REACH * size.max(axis=1)
    agrees = (distance <= _AGREES * np.minimum(by_old[i], by_new[j])) & (close | (ratio <= _ALIKE))
    return [alike[k] for k in np.flatnonzero(agrees).tolist()]


def _by_place(
    old: Sequence[Figure],
    new: Sequence[Figure],
    near: _Candidates,
    used_old: set[int],
    used_new: set[int],
    same_layer: bool,
) -> list[tuple[int, int]]:
    """Return the pairs of least distance in all among what is left, as many of them as can be had."""
    rows = [
        k
        for k, (i, j) in enumerate(zip(near.old.tolist(), near.new.tolist(), strict=True))
        if i not in used_old and j not in used_new and (not same_layer or old[i].layer == new[j].layer)
    ]
    if not rows:
        return []
    from scipy.optimize import linear_sum_assignment
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import connected_components

    i, j, distance = near.old[rows], near.new[rows], near.distance[rows]
    count = len(old) + len(new)
    graph = coo_array((np.ones(len(rows)), (i, len(old) + j)), shape=(count, count))
    _, group = connected_components(graph, directed=False)
    pairs = []
    order = np.argsort(group[i], kind="stable")
    for part in np.split(order, np.flatnonzero(np.diff(group[i][order])) + 1):
        own, other = np.unique(i[part]), np.unique(j[part])
        missing = 1.0 + len(part) * float(distance[part].max())  # dearer than any set of real pairs: used only in need
        cost = np.full((len(own), len(other)), missing)
        cost[np.searchsorted(own, i[part]), np.searchsorted(other, j[part])] = distance[part]
        for a, b in zip(*linear_sum_assignment(cost), strict=True):
            if cost[a, b] < missing:
                pairs.append((int(own[a]), int(other[b])))
    return pairs
