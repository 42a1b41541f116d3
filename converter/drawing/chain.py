"""Pieces that meet end to end become one profile, whatever their order and direction.

Only pieces of one layer are joined, and only where exactly two ends meet: a place where three or more meet is a
junction, which is never resolved silently. Work and memory grow nearly in proportion to the number of pieces.
"""

from dataclasses import dataclass

import numpy as np

from converter.drawing.entities import Piece
from converter.drawing.model import NearGap
from geometry.arrays import BoolArray, FloatArray, IntArray

__all__ = ["Chain", "Chaining", "Junction", "chain_pieces", "near_pairs"]

_Walks = list[tuple[list[tuple[int, bool]], bool]]
_SHORT = 3.0  # a chain is not closed over a gap of more than a third of its length


@dataclass(frozen=True, slots=True)
class Chain:
    """Pieces in order of travel, each turned to travel forward, and whether the last end meets the first start."""

    pieces: tuple[Piece, ...]
    closed: bool


@dataclass(frozen=True, slots=True)
class Junction:
    """A place where three or more ends meet, in world coordinates."""

    place: tuple[float, float, float]
    ends: int
    layer: str


@dataclass(frozen=True, slots=True)
class Chaining:
    """What became of the open pieces of one layer."""

    chains: list[Chain]
    junctions: list[Junction]
    near_gaps: list[NearGap]


def chain_pieces(pieces: list[Piece], gap: float, touching: float, near: float) -> Chaining:
    """Join open pieces of one layer.

    Ends within `touching` are taken as one point first; with a larger `gap`, chains are then joined at free ends that
    have no other free end within the gap than one another. A gap may therefore exceed the length of the pieces.

    Args:
        pieces: open pieces of one layer in drawing order.
        gap, touching: distances, drawing units, 0 <= touching <= gap.
        near: distance, drawing units, within which ends left free are reported.

    Returns:
        Chains in drawing order of their earliest piece, which travels forward as drawn in each of them.
    """
    ends = np.concatenate([piece.ends() for piece in pieces]) if pieces else np.zeros((0, 3))
    lengths = np.array([piece.part.length() for piece in pieces])
    layer = pieces[0].layer if pieces else ""
    link = np.full(len(ends), -1, dtype=np.intp)
    taken = np.zeros(len(ends), dtype=bool)
    junctions = _link_touching(ends, link, taken, touching, layer)
    if gap > touching:
        junctions += _link_free(ends, link, taken, _walk(link), lengths, gap, layer)
    walks = _walk(link)
    chains = [
        Chain(tuple(pieces[i] if forward else pieces[i].reversed() for i, forward in walk), closed)
        for walk, closed in walks
    ]
    return Chaining(chains, junctions, _near_gaps(ends, link, taken, walks, lengths, gap, near, pieces))


def _link_touching(ends: FloatArray, link: IntArray, taken: BoolArray, radius: float, layer: str) -> list[Junction]:
    """Link the two ends of every place where exactly two meet; return the places where more do."""
    if not len(ends):
        return []
    labels = _clusters(ends, radius)
    counts = np.bincount(labels)
    order = np.argsort(labels, kind="stable")
    starts = np.cumsum(counts) - counts
    pair = starts[counts == 2]
    first, second = order[pair], order[pair + 1]
    link[first], link[second] = second, first
    junctions = []
    for label in np.flatnonzero(counts > 2):
        meeting = order[starts[label] : starts[label] + counts[label]]
        taken[meeting] = True
        junctions.append(_junction(ends[meeting[0]], len(meeting), layer))
    return junctions


def _junction(place: FloatArray, count: int, layer: str) -> Junction:
    return Junction((float(place[0]), float(place[1]), float(place[2])), count, layer)


def _link_free(
    ends: FloatArray,
    link: IntArray,
    taken: BoolArray,
    walks: _Walks,
    lengths: FloatArray,
    gap: float,
    layer: str,
) -> list[Junction]:
    free = np.flatnonzero((link < 0) & ~taken)
    a, b = _free_pairs(ends, free, walks, lengths, gap)
    degree = np.bincount(np.concatenate([a, b]), minlength=len(ends))
    single = (degree[a] == 1) & (degree[b] == 1)
    link[a[single]], link[b[single]] = b[single], a[single]
    junctions = []
    crowded = np.flatnonzero(degree > 1)
    taken[a[~single]], taken[b[~single]] = True, True
    told = np.zeros(len(ends), dtype=bool)
    neighbours: dict[int, list[int]] = {}
    for i, j in zip(a[~single].tolist(), b[~single].tolist(), strict=True):
        neighbours.setdefault(i, []).append(j)
        neighbours.setdefault(j, []).append(i)
    for end in crowded.tolist():
        if not told[end]:
            told[neighbours[end]] = True
            junctions.append(_junction(ends[end], 1 + len(neighbours[end]), layer))
    return junctions


def _free_pairs(
    ends: FloatArray,
    free: IntArray,
    walks: _Walks,
    lengths: FloatArray,
    radius: float,
) -> tuple[IntArray, IntArray]:
    """Return pairs of free ends within a distance, those of one short chain left out."""
    owner, size = _owners(walks, lengths)
    a, b, distance = near_pairs(ends[free], radius)
    a, b = free[a], free[b]
    own = owner[a // 2] == owner[b // 2]
    fit = ~own | (size[owner[a // 2]] > _SHORT * distance)
    return a[fit], b[fit]


def _owners(walks: _Walks, lengths: FloatArray) -> tuple[IntArray, FloatArray]:
    owner = np.zeros(len(lengths), dtype=np.intp)
    for number, (walk, _) in enumerate(walks):
        owner[[i for i, _ in walk]] = number
    size = np.bincount(owner, weights=lengths, minlength=len(walks)).astype(np.float64)
    return owner, size


def _walk(link: IntArray) -> _Walks:
    """Follow the links: each walk is a list of (piece, travelled forward) and whether it comes back to its start.

    End 2 i is the start of piece i, end 2 i + 1 its end.
    """
    partner = link.tolist()
    seen = [False] * (len(partner) // 2)
    walks = []
    for seed in range(len(seen)):
        if seen[seed]:
            continue
        seen[seed] = True
        ahead, closed = _follow(partner, seen, 2 * seed + 1, 2 * seed)
        behind: list[tuple[int, bool]] = []
        if not closed:
            behind, _ = _follow(partner, seen, 2 * seed, 2 * seed + 1)
        walks.append(([(i, not forward) for i, forward in reversed(behind)] + [(seed, True)] + ahead, closed))
    return walks


def _follow(partner: list[int], seen: list[bool], leave: int, home: int) -> tuple[list[tuple[int, bool]], bool]:
    out: list[tuple[int, bool]] = []
    while (enter := partner[leave]) >= 0:
        if enter == home:
            return out, True
        piece = enter // 2
        seen[piece] = True
        out.append((piece, enter % 2 == 0))
        leave = enter ^ 1
    return out, False


def _near_gaps(
    ends: FloatArray,
    link: IntArray,
    taken: BoolArray,
    walks: _Walks,
    lengths: FloatArray,
    gap: float,
    near: float,
    pieces: list[Piece],
) -> list[NearGap]:
    """Return pairs of free ends that are nearest to one another and lie between `gap` and `near` apart."""
    free = np.flatnonzero((link < 0) & ~taken)
    if len(free) < 2 or not near > gap:
        return []
    a, b = _free_pairs(ends, free, walks, lengths, near)
    distance = np.linalg.norm(ends[a] - ends[b], axis=1)
    order = np.argsort(distance, kind="stable")
    found, used = [], np.zeros(len(ends), dtype=bool)
    heads = [pieces[walk[0][0]].handle for walk, _ in walks]
    owner, _ = _owners(walks, lengths)
    for k in order.tolist():
        i, j = int(a[k]), int(b[k])
        if used[i] or used[j]:
            continue
        used[[i, j]] = True
        x, y, z = (0.5 * (ends[i] + ends[j])).tolist()
        ids = (heads[owner[i // 2]], heads[owner[j // 2]])
        found.append(NearGap(float(distance[k]), (x, y, z), pieces[0].layer, ids))
    return found


def _clusters(points: FloatArray, radius: float) -> IntArray:
    """Return a label for every point, the same for points that are linked by steps of at most `radius`."""
    unique, labels = np.unique(points, axis=0, return_inverse=True)
    labels = labels.reshape(-1)
    a, b, _ = near_pairs(unique, radius)
    if not len(a):
        return labels
    root = np.arange(len(unique))
    while True:  # every point takes the least label of its neighbours until nothing changes
        least = np.minimum(root[a], root[b])
        new = root.copy()
        np.minimum.at(new, a, least)
        np.minimum.at(new, b, least)
        new = new[new]  # halves the depth of the trees each time
        if np.array_equal(new, root):
            break
        root = new
    return np.asarray(np.unique(root, return_inverse=True)[1].reshape(-1)[labels], dtype=np.intp)


def near_pairs(points: FloatArray, radius: float) -> tuple[IntArray, IntArray, FloatArray]:
    """Return every pair of points within a distance, and that distance: indices a < b, shapes (m,).

    Points are sorted into cells of the radius, so only the 27 cells around each are looked at.

    Args:
        points: shape (n, 3), finite.
        radius: drawing units, 0 or more; 0 finds points that coincide.
    """
    n = len(points)
    if n < 2:
        return np.zeros(0, dtype=np.intp), np.zeros(0, dtype=np.intp), np.zeros(0)
    extent = float(np.ptp(points, axis=0).max())
    side = max(radius * (1.0 + 1e-9), 1e-15 * extent, 1e-300)  # cell numbers stay within 64 bits
    cell = np.floor((points - points.min(axis=0)) / side).astype(np.int64)
    keys = _cell_keys(cell)
    order = np.argsort(keys, kind="stable")
    ordered = keys[order]
    firsts, seconds = [], []
    for offset in np.stack(np.meshgrid(*[[-1, 0, 1]] * 3, indexing="ij"), axis=-1).reshape(-1, 3):
        wanted = _cell_keys(cell + offset)
        low, high = np.searchsorted(ordered, wanted, "left"), np.searchsorted(ordered, wanted, "right")
        count = high - low
        first = np.repeat(np.arange(n), count)
        rank = np.arange(len(first)) - np.repeat(np.cumsum(count) - count, count)
        second = order[np.repeat(low, count) + rank]
        ahead = first < second
        firsts.append(first[ahead])
        seconds.append(second[ahead])
    # cells that share a key by chance give candidates too, perhaps twice: distances decide, and pairs are made unique
    code = np.unique(np.concatenate(firsts).astype(np.int64) * n + np.concatenate(seconds))
    a, b = (code // n).astype(np.intp), (code % n).astype(np.intp)
    distance = np.linalg.norm(points[a] - points[b], axis=1)
    near = distance <= radius
    return a[near], b[near], distance[near]


def _cell_keys(cell: IntArray) -> IntArray:
    """Mix three cell numbers into one key (64-bit wrap-around; equal cells give equal keys)."""
    odd = np.array([0x9E3779B97F4A7C15, 0xC2B2AE3D27D4EB4F, 0x165667B19E3779F9], dtype=np.uint64)
    mixed = cell.astype(np.uint64) * odd
    return np.asarray(mixed[:, 0] ^ mixed[:, 1] ^ mixed[:, 2]).view(np.int64)
