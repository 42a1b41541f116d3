"""Gates across a track: the band of a chord error as a row of short walls that a polyline must pass through.

A line that passes through every gate between its ends stays within the chord error of the curve, both ways, when the
gates stand close enough together for the curve to keep near its own chords between them.
"""

from dataclasses import dataclass

import numpy as np

from geometry.arrays import FloatArray, IntArray
from geometry.economy.track import ComplexArray, Track

__all__ = ["Gates", "Limits", "link_density", "place_gates"]

PER_LINK = 24  # gates a link passes where the curve bends evenly
PER_PIECE = 200  # gates on a piece at least
SLOPE = 0.15  # largest change of gate spacing per arc length
LINKS_PER_BLOCK = 125  # blocks cost half a link each and let many links be laid at once
FEWEST_LINKS_TO_CUT = 500


@dataclass(frozen=True)
class Limits:
    """What a link must keep to besides the chord error.

    Attributes:
        chord_error: largest distance between curve and polyline, drawing units.
        on_curve: whether every vertex lies on the curve.
        max_step: longest segment, drawing units, or None.
        max_turn: largest turn at a vertex that is no corner, radians, or None.
    """

    chord_error: float
    on_curve: bool = False
    max_step: float | None = None
    max_turn: float | None = None


@dataclass(frozen=True, eq=False)
class Gates:
    """Rows of gates, one row a block; blocks are laid with links independently of each other.

    Attributes:
        s: arc length of every gate on the track, shape (g,).
        centre: the curve points, complex, shape (g,).
        left, right: the ends of the walls, complex, shape (g,).
        heading: unit tangents, complex, shape (g,).
        bend: curvature, shape (g,).
        demand: running integral of the link density, shape (g,).
        first, last: first and last gate of every block, shapes (b,).
        start, end: where the links of every block begin and end, complex, shapes (b,).
        width: half the width of a gate.
    """

    s: FloatArray
    centre: ComplexArray
    left: ComplexArray
    right: ComplexArray
    heading: ComplexArray
    bend: FloatArray
    demand: FloatArray
    first: IntArray
    last: IntArray
    start: ComplexArray
    end: ComplexArray
    width: float


def link_density(curvature: FloatArray, limits: Limits) -> FloatArray:
    """Return the least number of links per arc length, at the given curvature.

    A chord of length h has a sagitta k h^2 / 8, shared by both sides when its ends may leave the curve; this gives
    sqrt(k / (8 e)) and sqrt(k / (16 e)). Source: L. Fejes Toth, Lagerungen in der Ebene, 1953 (from memory).
    """
    bend = np.abs(curvature)
    density = np.sqrt(bend / ((8.0 if limits.on_curve else 16.0) * limits.chord_error))
    if limits.max_step is not None:
        density = np.maximum(density, 1.0 / limits.max_step)
    if limits.max_turn is not None:
        density = np.maximum(density, bend / limits.max_turn)
    return density


def place_gates(track: Track, limits: Limits, per_link: int = PER_LINK) -> Gates:
    """Stand gates along a track, closer where more links are needed.

    Args:
        track: the curve.
        limits: chord error and caps.
        per_link: gates a link passes; the more, the fewer links are wasted.
    """
    demand = link_density(track.curvature, limits)
    piece = np.searchsorted(track.first, np.arange(len(track.s)), side="right") - 1
    spacing = 1.0 / (per_link * demand + PER_PIECE / track.lengths[piece])
    spacing = _limited_slope(track.s, spacing, SLOPE)
    running = track.integral(1.0 / spacing)
    links = track.integral(demand)
    total, s_parts, first, last, open_end = 0, [], [], [], []
    for a, b in zip(track.first.tolist(), track.last.tolist(), strict=True):
        wanted = links[b] - links[a]
        blocks = max(1, int(wanted // LINKS_PER_BLOCK)) if wanted > FEWEST_LINKS_TO_CUT else 1
        count = max(int(np.ceil(running[b] - running[a])), 8 * blocks)
        s = np.interp(np.linspace(running[a], running[b], count + 1), running[a : b + 1], track.s[a : b + 1])
        s[0], s[-1] = track.s[a], track.s[b]
        cut = total + np.rint(np.linspace(0, count, blocks + 1)).astype(np.intp)
        s_parts.append(s)
        first.append(cut[:-1])
        last.append(cut[1:])
        open_end.append(np.array([not track.closed] + [False] * (blocks - 1)))
        total += count + 1
    s = np.concatenate(s_parts)
    start, end = np.concatenate(first), np.concatenate(last)
    inner = ~np.concatenate(open_end)  # blocks that begin inside a smooth piece
    centre, heading, bend = track.headings(s)
    width = limits.chord_error * (1.0 - 2.5 / per_link**2)
    left, right = centre + 1j * width * heading, centre - 1j * width * heading
    begin, finish = centre[start].copy(), centre[end].copy()
    if not limits.on_curve:  # joints inside a piece start on the outer wall, where free vertices lie
        capped = np.maximum(link_density(bend[start], limits), 1e-12 / (limits.chord_error + 1e-300))
        shift = np.minimum(width, np.abs(bend[start]) / (16.0 * capped**2)) * np.sign(bend[start])
        begin[inner] -= (1j * shift * heading[start])[inner]
        following = np.append(np.arange(1, len(start)), 0)
        finish[inner[following]] = begin[following][inner[following]]
    left[end], right[end] = finish, finish
    return Gates(s, centre, left, right, heading, bend, np.interp(s, track.s, links), start, end, begin, finish, width)


def _limited_slope(s: FloatArray, spacing: FloatArray, slope: float) -> FloatArray:
    """Return the largest spacing under the given one whose change per arc length stays within the slope."""
    forward = np.minimum.accumulate(spacing - slope * s) + slope * s
    backward = np.minimum.accumulate((spacing + slope * s)[::-1])[::-1] - slope * s
    return np.minimum(forward, backward)
