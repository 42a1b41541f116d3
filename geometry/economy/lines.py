"""Fewest vertices: the polyline of least count within a chord error of a spline."""

from dataclasses import replace

import numpy as np

from geometry.arrays import FloatArray
from geometry.bspline import Spline
from geometry.economy.check import two_sided
from geometry.economy.cuts import cut_at, sharp_nodes
from geometry.economy.even_links import even_vertices
from geometry.economy.gates import PER_LINK, Gates, Limits, place_gates
from geometry.economy.links import Vertices, lay_free_links, lay_on_curve_links
from geometry.economy.space_lines import fewest_space_vertices
from geometry.economy.track import ComplexArray, Track, track_of
from geometry.errors import GeometryError
from geometry.polyline import Polyline

__all__ = ["fewest_vertices"]

TURN_ROUNDS = 12
# gates a link, share of the chord error and whether on the curve, tried in turn
_TRIES = (
    (PER_LINK, 1.0, False),
    (PER_LINK, 1.0, False),
    (PER_LINK, 1.0, True),
    (2 * PER_LINK, 0.95, True),
    (4 * PER_LINK, 0.5, True),
    (4 * PER_LINK, 0.05, True),
)
MANY = 5_000  # links over which the check takes fewer samples of each


def fewest_vertices(
    spline: Spline,
    chord_error: float,
    on_curve: bool = False,
    max_step: float | None = None,
    max_turn: float | None = None,
) -> Polyline:
    """Return a polyline with few vertices within a chord error of a spline, both ways.

    Corners of the spline (and the ends of an open one) are vertices. Planar splines are laid by greedy links through
    gates, which is within a few per cent of the least possible number; splines in space always have their vertices on
    the curve.

    Args:
        spline: degree 1 to 3, d = 2 or 3.
        chord_error: largest distance allowed between spline and polyline, drawing units.
        on_curve: whether every vertex must lie on the spline; otherwise vertices may lie anywhere in the band, which
            takes 0.71 times as many.
        max_step: longest segment allowed, drawing units.
        max_turn: largest turn allowed at a vertex that is no corner, radians.

    Returns:
        The polyline, closed when the spline is. Its distance to the spline is checked on dense samples; where the
        sparse layout fails that, a denser one is returned, at worst the spline's own flattening.

    Raises:
        GeometryError: the spline has no length, or a limit is not positive.
    """
    for name, value in (("chord error", chord_error), ("longest step", max_step), ("largest turn", max_turn)):
        if value is not None and not (value > 0.0 and np.isfinite(value)):
            raise GeometryError(f"{name} {value:g} is not a positive number")
    limits = Limits(chord_error, on_curve, max_step, max_turn)
    if spline.dimension == 3:
        return fewest_space_vertices(spline, limits)
    track = track_of(spline)
    for attempt, (per_link, share, on_curve_now) in enumerate(_TRIES):
        if attempt == 1:  # a vertex in the middle of every bend that turns on the spot
            track = cut_at(track, sharp_nodes(track, 2.0 * chord_error))
        tried = replace(limits, chord_error=share * chord_error, on_curve=on_curve or on_curve_now)
        gates = place_gates(track, tried, per_link)
        vertices = _within_turn(gates, track, tried)
        enough = not track.chained or len(vertices.point) > 2  # a loop must not fold to nothing
        if enough and _worst(gates, track, vertices, chord_error) <= chord_error:
            return _polyline(gates, track, vertices, None if max_step or max_turn else tried)
    return spline.flatten(chord_error)


def _lay(gates: Gates, track: Track, limits: Limits, allowance: FloatArray | None) -> Vertices:
    if limits.on_curve:
        return lay_on_curve_links(gates, track, limits, allowance)
    return lay_free_links(gates, limits, allowance)


def _within_turn(gates: Gates, track: Track, limits: Limits) -> Vertices:
    """Lay links; with a largest turn, repeat with more weight on the turn where a vertex passes it."""
    if limits.max_turn is None:
        return _lay(gates, track, limits, None)
    weight = np.ones(len(gates.s))
    bend = np.abs(gates.bend)
    vertices = None
    for _ in range(TURN_ROUNDS):
        steps = np.diff(gates.s) * 0.5 * (bend[1:] * weight[1:] + bend[:-1] * weight[:-1])
        vertices = _lay(gates, track, limits, np.concatenate([[0.0], np.cumsum(steps)]))
        path = _path(gates, track, vertices)
        edges = np.diff(path)
        before = np.roll(edges, 1)
        turn = np.abs(np.angle(edges * np.conj(before)))
        corner = np.zeros(len(turn), dtype=np.bool_)
        corner[_corner_vertices(gates, track, vertices)] = True
        over = (turn > limits.max_turn * (1.0 + 1e-9)) & ~corner
        if not over.any():
            break
        stops = np.append(vertices.gate, len(gates.s) - 1)
        for index in np.flatnonzero(over).tolist():
            low, high = stops[index - 1] if index else stops[-2], stops[index + 1]
            factor = 1.03 * min(turn[index] / limits.max_turn, 2.0)
            if index:
                weight[low : high + 1] *= factor
            else:  # the seam of a closed smooth track
                weight[low:] *= factor
                weight[: high + 1] *= factor
    assert vertices is not None
    return vertices


def _corner_vertices(gates: Gates, track: Track, vertices: Vertices) -> list[int]:
    """Return the indices of the vertices at corners and at the ends of the track."""
    if track.closed:
        return []
    starts = np.isin(gates.s[vertices.gate], track.s[track.first])
    return np.flatnonzero(starts).tolist()


def _path(gates: Gates, track: Track, vertices: Vertices) -> ComplexArray:
    return np.append(vertices.point, vertices.point[0] if track.chained else gates.end[-1])


def _worst(gates: Gates, track: Track, vertices: Vertices, limit: float) -> float:
    """Return the largest sampled distance between track and polyline."""
    block_end = np.append(vertices.block[1:] != vertices.block[:-1], True)
    here = gates.s[vertices.gate]
    there = np.where(block_end, gates.s[gates.last[vertices.block]], np.roll(here, -1))
    samples = 16 if len(here) < MANY else 4
    path = _path(gates, track, vertices)
    s = np.stack([here, there], axis=1)
    group = np.zeros(len(here), dtype=np.intp)
    return float(two_sided(track, path[:-1], path[1:], np.zeros(len(here)), s, group, limit, samples).max())


def _polyline(gates: Gates, track: Track, vertices: Vertices, limits: Limits | None) -> Polyline:
    """Return the polyline; with limits, pieces for which even shares take fewer vertices have those."""
    path = _path(gates, track, vertices)
    if limits is not None:
        piece = np.searchsorted(track.s[track.first], gates.s[vertices.gate], side="right") - 1
        even = even_vertices(track, limits, np.bincount(piece, minlength=len(track.first)))
        if even:
            parts = [even[k] if k in even else path[:-1][piece == k] for k in range(len(track.first))]
            path = np.concatenate([*parts, path[-1:]])
    return Polyline(track.to_xy(path[:-1] if track.chained else path), track.chained)
