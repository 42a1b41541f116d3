"""Greedy links through gates: the farthest-reaching straight segments, laid in all blocks at once.

From a point S the gates ahead leave an interval of directions [lo, hi]; it shrinks from gate to gate until a gate lies
outside it. The last line that passes the gates before is the extreme direction; it touches one wall and leaves the
band through the other. The next vertex is that exit (free vertices), or the farthest curve point that a chord within
the interval reaches (vertices on the curve).
"""

from dataclasses import dataclass

import numpy as np

from geometry.arrays import BoolArray, FloatArray, IntArray
from geometry.economy.gates import PER_LINK, Gates, Limits
from geometry.economy.track import ComplexArray, Track

__all__ = ["Vertices", "lay_free_links", "lay_on_curve_links"]

LOOK = int(1.35 * PER_LINK) + 4  # gates looked at first
TRIES = 8  # other places for a vertex, where the bend changes side


@dataclass(frozen=True, eq=False)
class Vertices:
    """Vertices of all blocks in order, the first of every block included, the last not.

    Attributes:
        point: complex, shape (v,).
        gate: the gate at or before the vertex, shape (v,).
        block: block of the vertex, shape (v,).
    """

    point: ComplexArray
    gate: IntArray
    block: IntArray


@dataclass(eq=False)
class _Cast:
    """What every row sees from its point: shapes (r,)."""

    ended: BoolArray  # the end point of the block is in sight
    blocked: IntArray  # first gate that the line leaving last does not pass
    touched: IntArray  # gate whose wall that line touches
    heading: ComplexArray  # direction of that line
    leave: ComplexArray  # where it leaves the band, between the gates `blocked` - 1 and `blocked`
    reach: FloatArray  # gate number of that place, with fraction


class _Fan:
    """Directions in which gates are seen from points; one row a point."""

    def __init__(self, gates: Gates, point: ComplexArray, ahead: IntArray, last: IntArray, look: int) -> None:
        self.index = np.minimum(ahead[:, None] + np.arange(look), last[:, None])
        self.turned = np.conj(gates.heading[ahead])[:, None]
        self.point = point
        left = _seen((gates.left[self.index] - point[:, None]) * self.turned, np.pi, gates.width)
        right = _seen((gates.right[self.index] - point[:, None]) * self.turned, -np.pi, gates.width)
        self.left, self.right = left, right
        self.hi, self.lo = np.minimum.accumulate(left, axis=1), np.maximum.accumulate(right, axis=1)


def _seen(v: ComplexArray, nothing: float, width: float) -> FloatArray:
    """Return directions; a wall end at the point itself bounds nothing."""
    angle = np.arctan2(v.imag, v.real)
    near = v[:, 0]
    angle[:, 0] = np.where(np.abs(near.real) + np.abs(near.imag) < 1e-9 * width, nothing, angle[:, 0])
    return angle


def lay_free_links(gates: Gates, limits: Limits, allowance: FloatArray | None = None) -> Vertices:
    """Lay links whose vertices may lie anywhere in the band.

    Args:
        gates: the band.
        limits: caps on step and turn.
        allowance: running integral of turn along the gates, radians, with `limits.max_turn`; shape (g,).
    """
    rows = np.arange(len(gates.first))
    taken: list[tuple[ComplexArray, IntArray, IntArray]] = [(gates.start, gates.first, rows)]
    view = _cast(gates, gates.start, gates.first + 1, gates.last[rows], limits, allowance)
    while True:
        going = ~view.ended
        if not going.any():
            return _collected(taken)
        rows, view = rows[going], _subset(view, going)
        last = gates.last[rows]
        point, ahead = view.leave, view.blocked
        ahead = np.minimum(ahead, last)
        following = _cast(gates, point, ahead, last, limits, allowance)
        doubtful = _may_gain(gates, view, last)
        if doubtful.any():
            point, ahead, following = _better_places(
                gates, view, doubtful, last, (point, ahead, following), limits, allowance
            )
        taken.append((point, ahead - 1, rows))
        view = following


def _cast(
    gates: Gates,
    point: ComplexArray,
    ahead: IntArray,
    last: IntArray,
    limits: Limits,
    allowance: FloatArray | None,
    look: int = LOOK,
) -> _Cast:
    fan = _Fan(gates, point, ahead, last, look)
    shut = fan.lo > fan.hi
    shut[:, 0] = False  # one gate alone never shuts; this also makes every link pass a gate
    first = np.where(shut.any(axis=1), np.argmax(shut, axis=1), look)
    capped = _cap(gates, fan, point, ahead, first, limits, allowance)
    stop = np.where(capped >= 0, capped + 1, first)  # first gate not passed, as column
    row = np.arange(len(point))
    open_ahead = stop >= look
    ended = open_ahead & (fan.index[:, -1] >= last)
    ended |= ~open_ahead & (fan.index[row, np.maximum(stop - 1, 0)] >= last)
    column = np.minimum(stop, look - 1)
    before = np.maximum(column - 1, 0)
    hi, lo = fan.hi[row, before], fan.lo[row, before]
    to_left = fan.right[row, column] > hi  # the blocking gate lies to the left of every line that passes
    aim = np.where(to_left, hi, lo)
    limited = (capped >= 0) & ~ended
    if limited.any():
        toward = (gates.centre[fan.index[row, before]] - point) * fan.turned[:, 0]
        aim = np.where(limited, np.clip(np.arctan2(toward.imag, toward.real), lo, hi), aim)
    heading = np.exp(1j * aim) * np.conj(fan.turned[:, 0])
    columns = np.arange(look)
    walls = np.where(to_left[:, None], fan.left, -fan.right)
    touched = np.argmin(np.where(columns < column[:, None], walls, np.inf), axis=1)
    gate, wall = fan.index[row, column], np.where(to_left, 1.0, 0.0)
    lower = np.where(wall > 0.0, gates.right[gate - 1], gates.left[gate - 1])
    upper = np.where(wall > 0.0, gates.right[gate], gates.left[gate])
    share = _crossing(point, heading, lower, upper)
    leave = lower + share * (upper - lower)
    if limited.any():
        held = fan.index[row, before]
        across = _crossing(point, heading, gates.right[held], gates.left[held])
        leave = np.where(limited, gates.right[held] + across * (gates.left[held] - gates.right[held]), leave)
        share = np.where(limited, 0.0, share)
        gate = np.where(limited, held + 1, gate)
    view = _Cast(ended, gate, fan.index[row, touched], heading, leave, gate - 1.0 + share)
    wider = open_ahead & ~ended
    if wider.any():
        more = _cast(gates, point[wider], ahead[wider], last[wider], limits, allowance, 2 * look)
        for name in _Cast.__dataclass_fields__:
            getattr(view, name)[wider] = getattr(more, name)
    return view


def _cap(
    gates: Gates,
    fan: _Fan,
    point: ComplexArray,
    ahead: IntArray,
    first: IntArray,
    limits: Limits,
    allowance: FloatArray | None,
) -> IntArray:
    """Return the column of the last gate within the caps, where they bind before the band does, else -1."""
    capped = np.full(len(point), -1)
    columns = fan.left.shape[1]
    over: BoolArray = np.zeros(fan.left.shape, dtype=np.bool_)
    if limits.max_step is not None:
        reach = limits.max_step - (0.0 if limits.on_curve else gates.width)  # a vertex lies that near its gate's centre
        over |= np.abs(gates.centre[fan.index] - point[:, None]) > max(reach, 0.25 * limits.max_step)
    if allowance is not None and limits.max_turn is not None:
        over |= allowance[fan.index] - allowance[np.maximum(ahead - 1, 0)][:, None] > limits.max_turn
    if over.any():
        at = np.maximum(np.where(over.any(axis=1), np.argmax(over, axis=1), columns), 1)
        capped = np.where((at <= first) & over.any(axis=1), at - 1, -1)
    return capped


def _crossing(point: ComplexArray, heading: ComplexArray, lower: ComplexArray, upper: ComplexArray) -> FloatArray:
    """Return where, from 0 at `lower` to 1 at `upper`, a line from a point crosses a segment (held to it)."""
    wall = (upper - lower) * np.conj(heading)
    gap = (point - lower) * np.conj(heading)
    with np.errstate(divide="ignore", invalid="ignore"):
        share = gap.imag / wall.imag
    return np.clip(np.where(np.isfinite(share), share, 0.0), 0.0, 1.0)


def _may_gain(gates: Gates, view: _Cast, last: IntArray) -> BoolArray:
    """Return the rows whose vertex may better stand earlier: near the end, or where the bend changes side."""
    far = np.minimum(view.blocked + LOOK, last)
    columns = view.touched[:, None] + np.linspace(0.0, 1.0, 2 * TRIES) * (far - view.touched)[:, None]
    sides = gates.bend[columns.astype(np.intp)]
    return np.asarray((view.blocked + LOOK >= last) | ((sides.min(axis=1) < 0.0) & (sides.max(axis=1) > 0.0)))


def _better_places(
    gates: Gates,
    view: _Cast,
    doubtful: BoolArray,
    last: IntArray,
    present: tuple[ComplexArray, IntArray, _Cast],
    limits: Limits,
    allowance: FloatArray | None,
) -> tuple[ComplexArray, IntArray, _Cast]:
    """Try other vertices along the same line; keep, row by row, that from which the next link reaches farthest."""
    point, ahead, following = present
    rows = np.flatnonzero(doubtful)
    some = _subset(view, doubtful)
    low, high = some.touched, np.maximum(some.blocked - 1, some.touched)
    shares = np.linspace(0.0, 1.0, TRIES)
    gate = np.rint(low[:, None] + shares * (high - low)[:, None]).astype(np.intp)
    # a line through a vertex and its exit: any two of its points serve
    anchor = np.repeat(some.leave, TRIES)
    heading = np.repeat(some.heading, TRIES)
    flat = gate.ravel()
    share = _crossing(anchor, heading, gates.right[flat], gates.left[flat])
    tried = gates.right[flat] + share * (gates.left[flat] - gates.right[flat])
    next_gate = np.minimum(flat + 1, np.repeat(last[rows], TRIES))
    seen = _cast(gates, tried, next_gate, np.repeat(last[rows], TRIES), limits, allowance)
    worth = np.where(seen.ended, np.inf, seen.reach).reshape(-1, TRIES)
    best = np.argmax(worth, axis=1)
    pick = np.arange(len(rows)) * TRIES + best
    own = np.where(following.ended[rows], np.inf, following.reach[rows])
    gain = worth[np.arange(len(rows)), best] > own
    target, source = rows[gain], pick[gain]
    point, ahead = point.copy(), ahead.copy()
    point[target], ahead[target] = tried[source], next_gate[source]
    for name in _Cast.__dataclass_fields__:
        getattr(following, name)[target] = getattr(seen, name)[source]
    return point, ahead, following


def _subset(view: _Cast, rows: BoolArray) -> _Cast:
    return _Cast(*(getattr(view, name)[rows] for name in _Cast.__dataclass_fields__))


def lay_on_curve_links(gates: Gates, track: Track, limits: Limits, allowance: FloatArray | None = None) -> Vertices:
    """Lay links whose vertices lie on the curve; arguments as for `lay_free_links`."""
    rows = np.arange(len(gates.first))
    point, gate, s = gates.start.copy(), gates.first.copy(), gates.s[gates.first]
    taken: list[tuple[ComplexArray, IntArray, IntArray]] = []
    while len(rows):
        taken.append((point, gate, rows))
        gate, s = _farthest_chord(gates, point, s, gate + 1, gates.last[rows], limits, allowance)
        going = gate < gates.last[rows]
        rows, gate, s = rows[going], gate[going], s[going]
        point = track.points(s)
    return _collected(taken)


def _farthest_chord(
    gates: Gates,
    point: ComplexArray,
    s: FloatArray,
    ahead: IntArray,
    last: IntArray,
    limits: Limits,
    allowance: FloatArray | None,
    look: int = LOOK,
) -> tuple[IntArray, FloatArray]:
    """Return the gate at or before the far end of the longest chord from every point, and its arc length."""
    fan = _Fan(gates, point, ahead, last, look)
    aim = (gates.centre[fan.index] - point[:, None]) * fan.turned
    angle = np.arctan2(aim.imag, aim.real)
    allowed = np.ones(angle.shape, dtype=np.bool_)
    allowed[:, 1:] = (angle[:, 1:] >= fan.lo[:, :-1]) & (angle[:, 1:] <= fan.hi[:, :-1])
    shut = fan.lo > fan.hi
    shut[:, 0] = False
    first = np.where(shut.any(axis=1), np.argmax(shut, axis=1), look)
    capped = _cap(gates, fan, point, ahead, first, limits, allowance)
    allowed &= np.where(capped[:, None] >= 0, np.arange(look) <= capped[:, None], True)
    allowed[:, 0] = True
    farthest = look - 1 - np.argmax(allowed[:, ::-1], axis=1)
    row = np.arange(len(point))
    gate = fan.index[row, farthest]
    column = np.minimum(farthest, look - 2)
    near, far = _chord_gap(gates, fan, aim, column), _chord_gap(gates, fan, aim, column + 1)
    here, there = gates.s[fan.index[row, column]], gates.s[fan.index[row, column + 1]]
    share = np.clip(0.98 * (gates.width - near) / np.maximum(far - near, 1e-12 * gates.width), 0.0, 0.999)
    share = np.where((capped >= 0) | (farthest > column) | (far <= near), 0.0, share)
    target = np.where(gate < last, here + share * (there - here), gates.s[last])
    wider = (gate < last) & (first >= look) & (capped < 0)
    if wider.any():
        gate[wider], target[wider] = _farthest_chord(
            gates, point[wider], s[wider], ahead[wider], last[wider], limits, allowance, 2 * look
        )
    return gate, target


def _chord_gap(gates: Gates, fan: _Fan, aim: ComplexArray, column: IntArray) -> FloatArray:
    """Return the largest distance of the gates before a column from the chord to it."""
    row = np.arange(len(column))
    chord = aim[row, column]
    chord = chord / np.maximum(np.abs(chord), 1e-300)
    off = np.abs((aim * np.conj(chord)[:, None]).imag)
    return np.asarray(np.where(np.arange(aim.shape[1]) < column[:, None], off, 0.0).max(axis=1))


def _collected(taken: list[tuple[ComplexArray, IntArray, IntArray]]) -> Vertices:
    """Return the vertices gathered step by step in order of blocks."""
    point = np.concatenate([step[0] for step in taken])
    gate, block = np.concatenate([step[1] for step in taken]), np.concatenate([step[2] for step in taken])
    order = np.argsort(block, kind="stable")
    return Vertices(point[order], gate[order], block[order])
