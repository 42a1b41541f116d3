"""What is wrong with the segments of a drawing: of no length, drawn twice, crossing one another."""

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np

from converter.drawing import AnyCurve, Profile
from geometry.arcs import ArcChain
from geometry.arrays import FloatArray
from geometry.bspline import Spline
from geometry.polyline import Polyline

__all__ = ["SegmentLengths", "repeated_segments", "segment_lengths", "self_crossings"]


@dataclass(frozen=True, slots=True)
class SegmentLengths:
    """Lengths of lines and arcs between vertices, drawing units; those of no length are counted only."""

    count: int
    shortest: float
    median: float
    longest: float
    of_no_length: int


def segment_lengths(profile: Profile) -> SegmentLengths | None:
    """Return the segment lengths of a profile, or None where it has no segments (splines only)."""
    found = [_lengths(part) for part in profile.parts if not isinstance(part, Spline)]
    if not found:
        return None
    lengths = np.concatenate(found)
    real = lengths[lengths > 0.0]
    if not len(real):
        return None
    shortest, median, longest = (float(value) for value in (real.min(), np.median(real), real.max()))
    return SegmentLengths(len(lengths), shortest, median, longest, int(len(lengths) - len(real)))


def _lengths(part: AnyCurve) -> FloatArray:
    if isinstance(part, Polyline):
        return part.edge_lengths()
    assert isinstance(part, ArcChain)
    b = np.abs(part.bulges)
    bent = np.where(b > 1e-8, b, 1.0)
    return part.chord_lengths() * np.where(b > 1e-8, np.arctan(bent) * (1.0 + bent * bent) / bent, 1.0)


def repeated_segments(profiles: Iterable[Profile]) -> int:
    """Return how many lines and arcs repeat another one exactly, in either direction, on the same layer."""
    by_layer: dict[str, list[FloatArray]] = {}
    for profile in profiles:
        for part in profile.parts:
            if not isinstance(part, Spline):
                by_layer.setdefault(profile.layer.lower(), []).append(_segments(profile, part))
    repeats = 0
    for rows in by_layer.values():
        every = np.concatenate(rows)
        repeats += len(every) - len(np.unique(every, axis=0))
    return repeats


def _segments(profile: Profile, part: Polyline | ArcChain) -> FloatArray:
    """Return rows of first end, second end and bulge in an order that does not depend on the direction of travel."""
    path = profile.frame.to_world(part.path()) + 0.0  # turns -0.0 into 0.0
    start, end = path[:-1], path[1:]
    bulge = part.bulges if isinstance(part, ArcChain) else np.zeros(len(start))
    differ = start != end
    axis = np.argmax(differ, axis=1)
    row = np.arange(len(start))
    turn = start[row, axis] > end[row, axis]
    first, second = np.where(turn[:, None], end, start), np.where(turn[:, None], start, end)
    return np.column_stack([first, second, np.where(turn, -bulge, bulge) + 0.0])[differ.any(axis=1)]


def self_crossings(outline: Polyline) -> FloatArray:
    """Return the places where a polyline crosses, touches or retraces itself, shape (m, 2).

    Neighbours meet at their common vertex by nature; they count only where one turns back over the other.

    Args:
        outline: cleaned, 2-D.
    """
    import shapely

    path = outline.path()
    count = len(path) - 1
    if count < 2:
        return np.zeros((0, 2))
    segments = shapely.linestrings(np.stack([path[:-1], path[1:]], axis=1))
    a, b = shapely.STRtree(segments).query(segments, predicate="intersects")
    ahead = a < b
    a, b = a[ahead], b[ahead]
    edges = np.diff(path, axis=0)
    neighbours = (b == a + 1) | (outline.closed & (a == 0) & (b == count - 1))
    cross = edges[a, 0] * edges[b, 1] - edges[a, 1] * edges[b, 0]
    back = (cross == 0.0) & (np.sum(edges[a] * edges[b], axis=1) < 0.0)
    met = ~neighbours | back
    places = shapely.centroid(shapely.intersection(segments[a[met]], segments[b[met]]))
    points = shapely.get_coordinates(places).reshape(-1, 2)
    grain = 1e-9 * float(np.ptp(path, axis=0).max())
    _, kept = np.unique(np.round(points / grain), axis=0, return_index=True)
    return points[np.sort(kept)]
