"""The curve to be written again: a spline cut at its corners and sampled densely by arc length."""

from dataclasses import dataclass
from functools import cached_property
from itertools import pairwise

import numpy as np

from geometry.arrays import BoolArray, FloatArray, IntArray
from geometry.bspline import Spline, bezier_chord_error, bezier_evaluate

__all__ = ["Source", "bending", "cross", "cut", "runs_of", "sample", "straight", "turned_to_corner", "turning"]

_MOST = 32  # samples a span


@dataclass(frozen=True, eq=False)
class Source:
    """Samples of all smooth pieces of a profile, one piece behind another; points stand in columns.

    Attributes:
        along: arc length of every sample, shape (n,), drawing units; piece i covers [low[i], high[i]] and the
            next piece starts `gap` farther on, so that one search finds piece and span.
        point, tangent: positions and unit tangents, shape (d, n).
        bend: curvature vectors, square to the tangent, shape (d, n), 1 / drawing units.
        curvature: shape (n,), left turn positive in 2-D, its size in 3-D; 1 / drawing units.
        piece: index of the piece of every sample, shape (n,).
        first: index of the first sample of every piece, and n, shape (pieces + 1,).
        low, high: ends of the pieces along, shape (pieces,).
        spans: number of spans that the spline has in every piece, shape (pieces,).
        periodic: whether there is one piece only and it closes smoothly; its end is then not sampled again.
    """

    along: FloatArray
    point: FloatArray
    tangent: FloatArray
    bend: FloatArray
    curvature: FloatArray
    piece: IntArray
    first: IntArray
    low: FloatArray
    high: FloatArray
    spans: IntArray
    degree: int
    periodic: bool

    def only(self, pieces: BoolArray) -> "Source":
        """Return the source of some of the pieces, which keep their place along."""
        chosen = pieces[self.piece]
        count = np.diff(self.first)[pieces]
        return Source(
            self.along[chosen], self.point[:, chosen], self.tangent[:, chosen], self.bend[:, chosen],
            self.curvature[chosen], np.repeat(np.arange(len(count)), count), np.concatenate([[0], np.cumsum(count)]),
            self.low[pieces], self.high[pieces], self.spans[pieces], self.degree, self.periodic,
        )  # fmt: skip

    def picked(self, chosen: IntArray) -> "Source":
        """Return the source with some of its samples only, ascending, the first and last of every piece among them."""
        piece = self.piece[chosen]
        first = np.concatenate([[0], np.cumsum(np.bincount(piece, minlength=len(self.low)))])
        return Source(
            self.along[chosen], self.point[:, chosen], self.tangent[:, chosen], self.bend[:, chosen],
            self.curvature[chosen], piece, first, self.low, self.high, self.spans, self.degree, self.periodic,
        )  # fmt: skip

    def few(self, number: int) -> IntArray:
        """Return about `number` samples of every piece, evenly in their order; all where there are not that many."""
        count = np.diff(self.first)
        stride = np.maximum(count // number, 1)[self.piece]
        order = np.arange(len(self.along)) - self.first[self.piece]
        chosen = order % stride == 0
        chosen[self.first[1:] - 1] = True
        return np.flatnonzero(chosen)

    @property
    def lengths(self) -> FloatArray:
        """Arc length of every piece, shape (pieces,)."""
        return self.high - self.low

    @cached_property
    def along_tangent(self) -> FloatArray:
        """Products of tangent coordinates i <= j, row by row, shape (d (d + 1) / 2, n)."""
        d = len(self.tangent)
        return np.stack([self.tangent[i] * self.tangent[j] for i in range(d) for j in range(i, d)])

    @cached_property
    def point_along(self) -> FloatArray:
        """Tangents times how far the positions lie along them, shape (d, n)."""
        return np.asarray((self.tangent * self.point).sum(axis=0) * self.tangent)

    @cached_property
    def ends(self) -> FloatArray:
        """First and last point of every piece, shape (2 * pieces, d)."""
        return self.point[:, np.stack([self.first[:-1], self.first[1:] - 1], axis=1).ravel()].T

    @cached_property
    def step(self) -> FloatArray:
        """Length of curve that every sample stands for, shape (n,)."""
        half = np.where(self.piece[1:] == self.piece[:-1], 0.5 * np.diff(self.along), 0.0)
        step = np.zeros(len(self.along))
        step[1:] += half
        step[:-1] += half
        if self.periodic:
            seam = 0.5 * (self.high[0] - self.along[-1])
            step[0] += seam
            step[-1] += seam
        return step


def runs_of(label: IntArray) -> IntArray:
    """Return where runs of equal labels begin, shape (runs,)."""
    new = np.empty(len(label), dtype=bool)
    new[0] = True
    np.not_equal(label[1:], label[:-1], out=new[1:])
    return np.flatnonzero(new)


def cross(a: FloatArray, b: FloatArray) -> FloatArray:
    """Return the cross product of columns: shape (n,), signed in 2-D, its size in 3-D."""
    if len(a) == 2:
        return a[0] * b[1] - a[1] * b[0]
    return np.linalg.norm(np.cross(a, b, axis=0), axis=0)


def bending(slope: FloatArray, second: FloatArray) -> FloatArray:
    """Return the curvature from first and second derivatives in columns, shape (n,), signed in 2-D; 0 at rest."""
    speed = np.maximum((slope * slope).sum(axis=0), 1e-200)  # squared
    return np.asarray(cross(slope, second) / (speed * np.sqrt(speed)))


def turning(direction: FloatArray, first: IntArray) -> FloatArray:
    """Return the angle turned through since the first sample of each piece, shape (n,), radians, for 2-D columns."""
    a, b = direction[:, :-1], direction[:, 1:]
    turn = np.concatenate([[0.0], np.cumsum(np.arctan2(cross(a, b), (a * b).sum(axis=0)))])
    starts = first[:-1]
    return turn - np.repeat(turn[starts], np.diff(first))


def turned_to_corner(spline: Spline) -> Spline:
    """Return a closed spline with a smooth seam started at its first corner instead; other splines as they are."""
    if not (spline.closed and spline.smooth_seam) or not spline.corner_breaks.size:
        return spline
    p = spline.degree
    corner = spline.breaks[spline.corner_breaks[0]]
    at = int(np.searchsorted(spline.knots, corner))  # the corner's first knot; control point at - 1 lies on it
    period = spline.knots[-1] - spline.knots[0]
    seam = len(spline.knots) - p - at  # where the seam's p knots begin behind the corner's p + 1
    knots = np.concatenate(
        [[corner], spline.knots[at:-1], spline.knots[p + 1 : at] + period, [corner + period] * (p + 1)]
    )
    control = np.concatenate([spline.control[at - 1 :], spline.control[1:at]])
    if p == 2:
        return Spline(np.delete(knots, seam), np.delete(control, seam - 1, axis=0), p, closed=True)
    if p == 1:
        return Spline(knots, control, p, closed=True)
    # knots a1 a0 s s s b0 b1: blossom values at (a0 s s), (s s s), (s s b0) give way to the one at (a0 s b0)
    a1, a0, s, b0, b1 = knots[[seam - 2, seam - 1, seam, seam + 3, seam + 4]]
    from_left = control[seam - 3] + (b0 - a1) / (s - a1) * (control[seam - 2] - control[seam - 3])
    from_right = control[seam + 1] + (a0 - b1) / (s - b1) * (control[seam] - control[seam + 1])
    middle = 0.5 * (from_left + from_right)
    knots = np.delete(knots, [seam, seam + 1])
    control = np.concatenate([control[: seam - 2], [middle], control[seam + 1 :]])
    return Spline(knots, control, p, closed=True)


def cut(spline: Spline) -> list[Spline]:
    """Return the smooth pieces between corners, each a clamped spline of its own, in order of travel."""
    p = spline.degree
    starts = np.searchsorted(spline.knots, spline.breaks[spline.corner_breaks])
    edges = [0, *(starts - 1).tolist(), len(spline.control) - 1]
    pieces = []
    for a, b in pairwise(edges):
        inner = spline.knots[a + p + 1 : b + 1]
        low, high = spline.knots[a + 1], spline.knots[b + p]
        knots = np.concatenate([[low] * (p + 1), inner, [high] * (p + 1)])
        pieces.append(Spline(knots, spline.control[a : b + 1], p))
    return pieces


def sample(spline: Spline, least: int, turn: float = 0.1) -> Source:
    """Sample a spline, each span from its start on, and the end of every piece.

    Places where the curve stands still take the tangent of the chord to the next sample.

    Args:
        least: samples a span.
        turn: radians from one sample to the next, about; spans that turn more get more samples, up to 32.
    """
    corners = spline.corner_breaks
    periodic = spline.closed and spline.smooth_seam and not corners.size
    spans = np.diff(np.concatenate([[0], corners, [len(spline.spans)]]))
    b, width = spline.beziers, np.diff(spline.breaks)
    legs = np.linalg.norm(np.diff(b, axis=1), axis=-1).sum(axis=1)
    turns = 8.0 * bezier_chord_error(b) / np.maximum(legs, 1e-300)  # radians, about
    number = np.clip(np.ceil(turns / turn), least, max(least, _MOST)).astype(np.intp)
    last = np.cumsum(spans)  # one past the last span of each piece
    count = np.add.reduceat(number, last - spans) + (0 if periodic else 1)
    shown = np.cumsum(number)
    t = (np.arange(shown[-1]) - np.repeat(shown - number, number)) / np.repeat(number, number)
    each, wide = np.repeat(b, number, axis=0), np.repeat(width, number)[:, None]
    columns = [bezier_evaluate(each, t, r) / wide**r for r in range(3)]
    if not periodic:
        one = np.ones(len(last))
        ends = [bezier_evaluate(b[last - 1], one, r) / (width[last - 1, None] ** r) for r in range(3)]
        columns = [np.insert(v, shown[last - 1], end, axis=0) for v, end in zip(columns, ends, strict=True)]
    point, slope, second = (np.ascontiguousarray(v.T) for v in columns)
    first = np.concatenate([[0], np.cumsum(count)])
    piece = np.repeat(np.arange(len(spans)), count)
    follow = np.diff(point, axis=1, append=point[:, :1])  # at piece ends only used where all else fails
    chord = np.linalg.norm(follow, axis=0)
    inside = np.append(piece[1:] == piece[:-1], periodic)
    along = np.concatenate([[0.0], np.cumsum(np.where(inside, chord, 0.0))])
    total = along[-1]
    gap = total / len(spans) if total > 0.0 else 1.0
    high = np.append(along[first[1:-1]], total)  # lengths carry on from piece to piece
    low = np.append(0.0, high[:-1])
    shift = gap * np.arange(len(spans))
    speed = np.linalg.norm(slope, axis=0)
    slow = speed <= 1e-9 * max(float(speed.max()), 1e-300)
    safe = np.where(slow, 1.0, speed)
    tangent = slope / safe
    if slow.any():
        usable = np.where(chord > 0.0, chord, 1.0)
        tangent[:, slow] = (follow / usable)[:, slow]
    curvature = np.where(slow, 0.0, cross(slope, second) / safe**3)
    bend = np.where(slow, 0.0, (second - (second * tangent).sum(axis=0) * tangent) / safe**2)
    return Source(
        along[:-1] + shift[piece], point, tangent, bend, curvature, piece, first, low + shift, high + shift, spans,
        spline.degree, periodic,
    )  # fmt: skip


def straight(source: Source, within: float) -> BoolArray:
    """Tell which pieces are straight, shape (pieces,).

    Straight means: no sample farther than `within` from the chord, and no step back along it.
    """
    if source.periodic:
        return np.zeros(1, dtype=bool)
    start, end = source.point[:, source.first[:-1]], source.point[:, source.first[1:] - 1]
    chord = end - start
    length = np.linalg.norm(chord, axis=0)
    unit = chord / np.where(length > 0.0, length, 1.0)
    piece = source.piece
    away = source.point - start[:, piece]
    run = (away * unit[:, piece]).sum(axis=0)
    off = np.linalg.norm(away - run * unit[:, piece], axis=0)
    back = np.append(np.where(piece[1:] == piece[:-1], np.diff(run), 0.0), 0.0)
    worst = np.maximum.reduceat(off, source.first[:-1])
    return (worst <= within) & (np.minimum.reduceat(back, source.first[:-1]) >= -1e-9 * length) & (length > 0.0)
