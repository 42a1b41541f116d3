"""Cutting polylines and arc chains at given places along them."""

import numpy as np

from geometry.arcs import ArcChain, bulge_points
from geometry.arrays import FloatArray
from geometry.polyline import Polyline

__all__ = ["cut_at", "piece_lengths"]

_SNAP = 1e-9  # of a piece: a cut nearer than this to a vertex is made there


def piece_lengths(curve: Polyline | ArcChain) -> FloatArray:
    """Return the length of every edge or arc, shape (n,) closed or (n - 1,) open, drawing units."""
    if isinstance(curve, Polyline):
        return curve.edge_lengths()
    half = 2.0 * np.arctan(curve.bulges)
    bent = np.abs(half) > 1e-8  # below that an arc is longer than its chord by less than rounding
    return curve.chord_lengths() * np.where(bent, half / np.where(bent, np.sin(half), 1.0), 1.0)


def cut_at(curve: Polyline | ArcChain, alongs: FloatArray) -> list[Polyline | ArcChain]:
    """Return the parts of a curve between its start, the given places and its end, all of them open.

    Args:
        curve: polyline of any dimension, or arc chain; a closed one is cut at its first vertex too.
        alongs: arc length from the start to each cut, rising, within 0 and the length, shape (m,), drawing units.

    Returns:
        Parts in order of travel, m + 1 at most: of two cuts at the same place (within 1e-9 of an edge or arc) the
        second makes none. Parts of an arc are arcs of the same circle.
    """
    bulges = np.zeros(len(curve.path()) - 1) if isinstance(curve, Polyline) else curve.bulges
    path, lengths = curve.path(), piece_lengths(curve)
    ends = np.concatenate([[0.0], np.cumsum(lengths)])
    count = len(lengths)
    piece = np.clip(np.searchsorted(ends, alongs, side="right") - 1, 0, count - 1)
    share = (alongs - ends[piece]) / np.where(lengths[piece] > 0.0, lengths[piece], 1.0)
    place = piece + np.where(share < _SNAP, 0.0, np.where(share > 1.0 - _SNAP, 1.0, share))
    cuts = np.unique(place)
    cuts = cuts[(cuts > 0.0) & (cuts < count)]
    inner = cuts[cuts != np.floor(cuts)]
    nodes = np.sort(np.concatenate([np.arange(count + 1.0), inner]))
    of = np.minimum(np.floor(nodes).astype(np.intp), count - 1)
    t = nodes - of
    chord = np.diff(path, axis=0)
    points = path[of] + t[:, None] * chord[of]
    bent = (bulges[of] != 0.0) & (t > 0.0) & (t < 1.0)
    if bent.any():
        points[bent] = bulge_points(path[of[bent]], chord[of[bent]], bulges[of[bent]], t[bent])
    whole = t == np.floor(t)
    points[whole] = path[np.rint(nodes[whole]).astype(np.intp)]
    # a part of an arc turns by its share of the sweep
    turned = np.tan(np.diff(nodes) * np.arctan(bulges[of[:-1]]))
    turned[np.diff(nodes) == 1.0] = bulges[of[:-1]][np.diff(nodes) == 1.0]
    stops = np.concatenate([[0], np.searchsorted(nodes, cuts), [len(nodes) - 1]])
    parts: list[Polyline | ArcChain] = []
    for first, last in zip(stops[:-1].tolist(), stops[1:].tolist(), strict=True):
        part = points[first : last + 1]
        parts.append(Polyline(part) if isinstance(curve, Polyline) else ArcChain(part, turned[first:last]))
    return parts
