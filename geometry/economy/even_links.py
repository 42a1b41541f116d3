"""Vertices at even shares of the demand for links: the fewest there can be where the curve bends evenly, as a circle.

Greedy links lose up to a link a block; even shares lose none where they fit at all. They are tried and kept only
where they take fewer vertices and a check finds them within the chord error.
"""

import numpy as np

from geometry.arrays import FloatArray, IntArray
from geometry.economy.check import two_sided
from geometry.economy.gates import Limits, link_density
from geometry.economy.track import ComplexArray, Track

__all__ = ["even_vertices"]

MARGINS = (1.0, 1.002)  # links tried, in multiples of the demand
MANY = 5_000  # links on a piece from which the greedy ones are as good


def even_vertices(track: Track, limits: Limits, present: IntArray) -> dict[int, ComplexArray]:
    """Return, for pieces where even shares take fewer links than now, their vertices without the last one.

    Args:
        track: the curve.
        limits: the chord error; without caps on step and turn.
        present: links laid so far on every piece, shape (p,).
    """
    if present.min() > MANY:
        return {}
    running = track.integral(_density(track.curvature, limits))
    demand = running[track.last] - running[track.first]
    out: dict[int, ComplexArray] = {}
    for margin in MARGINS:
        counts = np.maximum(np.ceil(margin * demand - 1e-9).astype(np.intp), 3 if track.closed else 1)
        tried = [
            piece
            for piece in np.flatnonzero(counts < present).tolist()
            if piece not in out and counts[piece] <= MANY and _may_fit(track, piece, limits)
        ]
        if not tried:
            continue
        laid = [_laid(track, piece, int(counts[piece]), running, limits) for piece in tried]
        start = np.concatenate([points[:-1] for points, _ in laid])
        end = np.concatenate([points[1:] for points, _ in laid])
        s = np.concatenate([np.stack([along[:-1], along[1:]], axis=1) for _, along in laid])
        group = np.repeat(np.arange(len(laid)), [len(along) - 1 for _, along in laid])
        errors = two_sided(track, start, end, np.zeros(len(start)), s, group, limits.chord_error)
        for index, (piece, (points, _)) in enumerate(zip(tried, laid, strict=True)):
            if errors[group == index].max() <= limits.chord_error:
                out[piece] = points[:-1]
    return out


def _density(curvature: FloatArray, limits: Limits) -> FloatArray:
    """Return links per arc length as on a circle of that curvature: exact where the small-error formula is not."""
    rise = np.minimum(np.abs(curvature) * limits.chord_error, 0.9)
    exact = np.arccos(1.0 - rise) if limits.on_curve else np.arccos((1.0 - rise) / (1.0 + rise))
    coarse = rise > 1e-4
    turned = np.abs(curvature) / np.where(coarse, 2.0 * exact, 1.0)
    return np.where(coarse, turned, link_density(curvature, limits))


def _may_fit(track: Track, piece: int, limits: Limits) -> bool:
    """Tell whether a piece is of the sort that even shares serve: free vertices need a bend to one side all round."""
    if limits.on_curve:
        return True
    bend = track.curvature[track.first[piece] : track.last[piece] + 1]
    return track.closed and bool(bend.min() > 0.0 or bend.max() < 0.0)


def _laid(track: Track, piece: int, count: int, running: FloatArray, limits: Limits) -> tuple[ComplexArray, FloatArray]:
    """Return the vertices of a piece with its end, and their arc lengths.

    Free vertices stand off as far outside as the middle of a link then lies inside: by r tan^2(x / 2) on a circle of
    radius r for links that turn by 2 x.
    """
    a, b = int(track.first[piece]), int(track.last[piece])
    share = np.linspace(running[a], running[b], count + 1)
    s = np.interp(share, running[a : b + 1], track.s[a : b + 1])
    s[0], s[-1] = track.s[a], track.s[b]
    points, angle, bend = track.frames(s)
    points[-1] = track.node_points[b]
    if not limits.on_curve:
        half = 0.5 * np.diff(angle)
        half = 0.5 * (half + np.roll(half, 1))
        points[:-1] -= 1j * np.exp(1j * angle[:-1]) * np.tan(0.5 * half) ** 2 / bend[:-1]
        points[-1] = points[0]
    return points, s
