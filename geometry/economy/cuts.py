"""Bends too tight to be followed: where a track turns almost on the spot it is cut, as at a corner."""

from dataclasses import replace

import numpy as np

from geometry.arrays import IntArray
from geometry.economy.track import Track

__all__ = ["cut_at", "sharp_nodes"]

TURN = 0.3  # radians a tight bend turns at least, and more than a cell of the table turns unless it holds a cusp


def sharp_nodes(track: Track, radius: float) -> IntArray:
    """Return the inner nodes in the middle of bends that turn by 0.3 radians or more with a radius under `radius`."""
    with np.errstate(invalid="ignore"):
        tight = np.abs(track.curvature) * radius > 1.0
    jump = (
        np.abs(np.diff(track.angle)) * track.cells > TURN
    )  # a cusp turns inside a cell and may look mild at both ends
    tight[:-1] |= jump
    tight[1:] |= jump
    edges = np.diff(np.concatenate([[0], tight.astype(np.int8), [0]]))
    out = []
    for begin, stop in zip(np.flatnonzero(edges == 1).tolist(), np.flatnonzero(edges == -1).tolist(), strict=True):
        piece = int(np.searchsorted(track.first, begin, side="right")) - 1
        low, high = max(begin - 1, int(track.first[piece])), min(stop, int(track.last[piece]))
        turns = np.abs(np.diff(track.angle[low : high + 1]))
        if turns.sum() < TURN:
            continue
        node = low + int(np.searchsorted(np.cumsum(turns), 0.5 * turns.sum())) + 1
        if track.first[piece] < node < track.last[piece]:
            out.append(node)
    return np.array(sorted(set(out)), dtype=np.intp)


def cut_at(track: Track, nodes: IntArray) -> Track:
    """Return the track cut into more pieces at some inner nodes."""
    if not len(nodes):
        return track
    if track.closed:
        track = _opened(track, int(nodes[0]))
        nodes = nodes[1:] - nodes[0]
        if not len(nodes):
            return track
    count = len(track.s)
    source = np.insert(np.arange(count), nodes, nodes)  # every cut node twice
    end = nodes + np.arange(len(nodes))  # where the first of the two stands: it ends a piece
    span, t, step, angle = track.span[source], track.t[source], track.step[source], track.angle[source]
    before = nodes - 1
    span[end], t[end], step[end] = track.span[before], track.t[before] + track.step[before], 0.0
    turn = track.angle[nodes] - track.angle[before]
    angle[end] = track.angle[before] + np.where(np.abs(turn) > TURN, 0.0, turn)
    lengths = np.diff(track.s, append=track.s[-1])[source]
    lengths[end] = 0.01 * float(track.lengths.sum())
    s = np.concatenate([[0.0], np.cumsum(lengths[:-1])])
    moved = np.searchsorted(nodes, track.first, side="right")
    first = np.sort(np.concatenate([track.first + moved, end + 1]))
    last = np.append(first[1:] - 1, len(s) - 1)
    return replace(
        track, first=first, last=last, s=s, angle=angle, curvature=track.curvature[source], span=span, t=t, step=step
    )


def _opened(track: Track, node: int) -> Track:
    """Return a closed track as an open one that begins and ends at a node."""
    last = len(track.s) - 1
    order = np.concatenate([np.arange(node, last), np.arange(node + 1)])
    later = np.arange(len(order)) >= last - node
    s = track.s[order] - track.s[node] + later * track.period
    angle = track.angle[order] + later * track.turn
    span, t, step = track.span[order], track.t[order], track.step[order]
    span[-1], t[-1], step[-1] = track.span[node - 1], track.t[node - 1] + track.step[node - 1], 0.0
    return replace(track, closed=False, s=s, angle=angle, curvature=track.curvature[order], span=span, t=t, step=step)
