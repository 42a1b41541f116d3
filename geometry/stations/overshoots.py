"""Overshoot, loops and needless turns between stations, and the setting that cures them.

A curve that turns one way only and passes two stations, the one before and the one after, stays between the chord of
the two and the lines of the neighbouring chords: it lies in the triangle of these three lines. Where the stations turn
one way at one end and the other way at the other, it may lie on either side, each within the wedge of its own end. What
leaves that band by more than a share of the chord overshoots. The band follows from convexity; the share, the largest
turn and the order of the cures are empirical. In space only the width of the band counts, not its side.
"""

from collections.abc import Callable, Iterable
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np

from geometry.arrays import FloatArray
from geometry.bspline import Spline
from geometry.interpolate import EndCondition
from geometry.parameter import ParameterKind
from geometry.stations.sprung import Intervals, intervals_of

__all__ = ["Cure", "Overshoot", "overshoots"]

Cure = Literal["chord", "centripetal", "uniform", "natural", "not-a-knot", "degree 2"]
Respring = Callable[[ParameterKind | None, EndCondition | None, int | None], tuple[Spline, FloatArray]]

_LEAST_SHARE = 0.03  # of the chord, by which the band may be left
_EXTRA_TURN = 0.6  # radians that a piece may turn more than the stations at its ends
_STEEP = 1.5  # radians from which a wedge bounds nothing
_CURES: tuple[tuple[Cure, tuple[ParameterKind | None, EndCondition | None, int | None]], ...] = (
    ("chord", ("chord", None, None)),
    ("centripetal", ("centripetal", None, None)),
    ("not-a-knot", (None, "not-a-knot", None)),
    ("natural", (None, "natural", None)),
    ("degree 2", (None, None, 2)),
)


@dataclass(frozen=True, slots=True)
class Overshoot:
    """A piece between stations that does what the stations do not.

    Attributes:
        kind: "overshoot" (it leaves the band of the stations), "loop" (it crosses itself) or "turn" (it turns more).
        from_row, to_row: the stations at its ends.
        size: by how much it leaves the band, the extent of the loop (drawing units), or the extra turn (radians).
        where: point of the curve at which that is seen, shape (d,).
        cure: the first setting tried with which the piece is sound and no other gets worse; None if there is none.
    """

    kind: Literal["overshoot", "loop", "turn"]
    from_row: int
    to_row: int
    size: float
    where: FloatArray
    cure: Cure | None = None


def overshoots(spline: Spline, parameters: FloatArray, respring: Respring | None = None) -> list[Overshoot]:
    """Return the pieces between stations that overshoot, loop or turn needlessly, in order of rows.

    Args:
        spline: sprung through the stations; closed ones begin at a station.
        parameters: of the stations, strictly increasing, shape (n,); for a closed spline with the end of the knots
            as the return to the first station, shape (n + 1,).
        respring: returns the spline and the parameters of the same stations for another parameterisation, end condition
            or degree (None keeps the present one), or raises ValueError where that cannot be had. It is called at
            most five times, and only when there is something to cure.
    """
    rows = len(parameters) - (1 if spline.closed else 0)
    found = _faults(spline, parameters, rows)
    if not found or respring is None:
        return found
    left = {fault.from_row for fault in found}
    cures: dict[int, Cure] = {}
    for name, setting in _CURES:
        if not left:
            break
        try:
            other, u = respring(*setting)
        except ValueError:
            continue
        still = {fault.from_row: fault for fault in _faults(other, u, rows)}
        if still.keys() <= {fault.from_row for fault in found}:  # nothing new
            cured = left - still.keys()
            cures |= dict.fromkeys(cured, name)
            left -= cured
    return [replace(fault, cure=cures.get(fault.from_row)) for fault in found]


def _faults(spline: Spline, parameters: FloatArray, rows: int) -> list[Overshoot]:
    if spline.degree == 1:
        return []
    parts = intervals_of(spline, parameters)
    beyond, at = _beyond_band(parts)
    sharp = np.nan_to_num(np.abs(parts.before), nan=np.inf) + np.nan_to_num(np.abs(parts.after), nan=np.inf)
    one_sided = np.minimum(*(np.nan_to_num(np.abs(x), nan=np.inf) for x in (parts.before, parts.after)))
    expected = np.where(np.isfinite(sharp), sharp, 3.0 * one_sided)
    extra = parts.turns - np.where(np.isfinite(expected), expected, np.inf)
    looping = set(_looping(parts))
    out = []
    for row in range(len(parts.chords)):
        to_row = (row + 1) % rows
        if row in looping:
            piece = parts.points[row]
            size = float(np.linalg.norm(np.ptp(piece, axis=0)))
            middle = int(np.argmax(np.linalg.norm(piece - 0.5 * (piece[0] + piece[-1]), axis=1)))
            out.append(Overshoot("loop", row, to_row, size, piece[middle]))
        elif beyond[row] > _LEAST_SHARE * parts.chords[row]:
            out.append(Overshoot("overshoot", row, to_row, float(beyond[row]), parts.points[row, at[row]]))
        elif extra[row] > _EXTRA_TURN:
            tight = int(np.argmax(parts.turning[row])) + 1
            out.append(Overshoot("turn", row, to_row, float(extra[row]), parts.points[row, tight]))
    return out


def _beyond_band(parts: Intervals) -> tuple[FloatArray, FloatArray]:
    """Return by how much every piece leaves its band, and the sample that does so most, shapes (m,)."""
    chords = np.maximum(parts.chords, 1e-300)
    unit = (parts.end - parts.start) / chords[:, None]
    away = parts.points - parts.start[:, None]
    along = (away * unit[:, None]).sum(axis=-1)
    past = np.maximum(np.maximum(-along, along - chords[:, None]), 0.0)
    ahead = np.clip(along, 0.0, chords[:, None])
    to_end = chords[:, None] - ahead
    if away.shape[-1] == 2:
        off = unit[:, :1] * away[..., 1] - unit[:, 1:] * away[..., 0]  # left positive
    else:
        off = np.linalg.norm(away - along[..., None] * unit[:, None], axis=-1)
    before, after = _filled(parts.before, parts.after), _filled(parts.after, parts.before)
    unknown = np.isnan(parts.before) & np.isnan(parts.after)
    # a path that turns left at a station bows to the right of the chords beside it
    low, high = _wedge(np.abs(before), ahead), _wedge(np.abs(after), to_end)
    free_start, free_end = np.isnan(parts.before)[:, None], np.isnan(parts.after)[:, None]
    if away.shape[-1] == 2:
        one_way = (before >= 0.0) == (after >= 0.0)
        triangle = np.where(free_start, high, np.where(free_end, low, np.minimum(low, high)))
        left_room = np.where((one_way & (before < 0.0))[:, None], triangle, 0.0)
        right_room = np.where((one_way & (before >= 0.0))[:, None], triangle, 0.0)
        bows_left_first = ~one_way & (before < 0.0)
        bows_right_first = ~one_way & (before >= 0.0)
        left_room = np.where(bows_left_first[:, None], low, np.where(bows_right_first[:, None], high, left_room))
        right_room = np.where(bows_left_first[:, None], high, np.where(bows_right_first[:, None], low, right_room))
        either = (free_start | free_end) & np.ones_like(off, dtype=np.bool_)
        left_room = np.where(either, np.maximum(left_room, 0.25 * triangle), left_room)
        right_room = np.where(either, np.maximum(right_room, 0.25 * triangle), right_room)
        beyond = np.where(off > 0.0, off - left_room, -off - right_room)
    else:
        beyond = off - np.maximum(low, high)
    beyond = np.hypot(np.maximum(beyond, 0.0), past)
    beyond[unknown] = past[unknown]
    at = np.argmax(beyond, axis=1)
    return beyond[np.arange(len(at)), at], at


def _filled(angle: FloatArray, other: FloatArray) -> FloatArray:
    """Return angles, with the other end's where there is none."""
    return np.nan_to_num(np.where(np.isnan(angle), other, angle), nan=0.0)


def _wedge(angle: FloatArray, distance: FloatArray) -> FloatArray:
    """Return how far a wedge of an angle opens at distances from its tip, infinite where it is steep."""
    steep = angle > _STEEP
    room = np.tan(np.where(steep, 0.0, angle))[:, None] * distance
    return np.where(steep[:, None], np.inf, room)


def _looping(parts: Intervals) -> Iterable[int]:
    """Return the pieces that turn far enough to cross themselves, and do, in the plane."""
    if parts.points.shape[-1] != 2:
        return
    for row in np.flatnonzero(parts.turns > np.pi).tolist():
        p = parts.points[row]
        a, b = p[:-1, None], p[1:, None]
        c, d = p[None, :-1], p[None, 1:]
        crossing = (_side(a, b, c) * _side(a, b, d) < 0.0) & (_side(c, d, a) * _side(c, d, b) < 0.0)
        if crossing.any():
            yield row


def _side(a: FloatArray, b: FloatArray, c: FloatArray) -> FloatArray:
    u, v = b - a, c - a
    return np.asarray(u[..., 0] * v[..., 1] - u[..., 1] * v[..., 0])
