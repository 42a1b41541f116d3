"""Whether a curve stays within limits that differ by side: proven, for tolerance zones that are not centred.

Let s be the signed distance to the reference, + outside a closed one and left of an open one, beyond whose ends the
last chord, prolonged, parts left from right. |s| changes by no more than the distance travelled. So along a straight
chord of length L whose ends have |s| = a and |s| = b, |s| is at least (a + b - L) / 2; where that is above 0 the chord
does not meet the reference. To a closed reference s then keeps its sign, for it changes on the reference alone. To an
open one it also jumps on a prolongation, and where two strands passed on opposite sides are equally near. The chord
stays clear of a prolongation if both its ends lie behind the end of the reference, or both on one side of its line. The
nearest places of its points lie within a + L of them, so within a + 2 L of its start. Let a run of the reference have
all that comes so near, and turn by less than half a turn in all. If p is left of its place q1 and right of q2, both
nearest, and it heads by h more at q2 than at q1, then q1 to q2 leads a quarter turn + h / 2 away from the heading at
q1; a run heads that way somewhere, and turns there and back by half a turn at least. So there is no such p. Where the
chord keeps its sign, it keeps its
limit if `geometry.intervals` bounds |s| along it by the limit of that side; where it need not, if the bound is the
smaller limit. A chord that is not settled so is halved.

Both curves are taken as chords within e. |s| is then known to e, its sign where |s| > e, and a point of the curve is
within e of its chord: a margin of 4 e covers both. The bounds allow for chord errors themselves. Rounding adds less
than 2000 u M, u = 2^-53 and M the largest coordinate, as counted in `geometry.deviation`.
"""

from dataclasses import dataclass, replace

import numpy as np

from geometry.arrays import BoolArray, FloatArray, IntArray
from geometry.chords import Chords, anchors, whole_chords
from geometry.curve import Curve
from geometry.errors import GeometryError
from geometry.intervals import bound_chords
from geometry.nearest import SegmentSearch
from geometry.signed import SignedTo
from geometry.simple import is_simple

__all__ = ["SideDecision", "within_sides"]

_U = 2.0**-53
_SHARES = (1e-2, 1e-4)  # of the smaller limit: chord errors, the next one where one leaves it open
_ROUNDS = 30
_MOST = 100_000  # chords more than either curve has: beyond, the decision is left open


@dataclass(frozen=True, slots=True)
class SideDecision:
    """Whether a curve stays within its limits on both sides of a reference.

    Attributes:
        inside: True: proven; False: a place was found that is proven to pass a limit; None: too close to tell.
        point: that place, or one that cannot be told; None where inside.
        deviation: signed distance there, drawing units.
    """

    inside: bool | None
    point: tuple[float, ...] | None = None
    deviation: float = 0.0


def within_sides(curve: Curve, reference: Curve, plus: float, minus: float) -> SideDecision:
    """Decide whether every point of a planar curve deviates from a reference by at most `plus` and at least `-minus`.

    Args:
        curve, reference: polyline, arc chain or spline in the plane, finite, drawing units.
        plus: limit outside a closed, left of an open reference, drawing units, > 0.
        minus: limit inside or right of it, > 0.

    Raises:
        NotFiniteError, TooFewPointsError: a curve cannot be used.
        GeometryError: a curve is not planar or has no length, or a limit is not a number above 0.
    """
    if not (0.0 < plus < np.inf and 0.0 < minus < np.inf):
        raise GeometryError(f"limits of {plus:g} and {minus:g} cannot be used; both must be numbers above 0")
    if curve.dimension != 2 or reference.dimension != 2:
        raise GeometryError("there are no sides in 3 dimensions; measure without sign, or give planar curves")
    points = np.vstack([anchors(curve), anchors(reference)])
    middle = 0.5 * points.min(axis=0) + 0.5 * points.max(axis=0)
    found = SideDecision(None)
    for share in _SHARES:
        found = _Sides(curve, reference, middle, plus, minus, share * min(plus, minus)).decide()
        if found.inside is not None:
            break
    if found.point is None:
        return found
    return replace(found, point=tuple((np.array(found.point) + middle).tolist()))


class _Sides:
    """Both curves about their common middle, as chords of one error."""

    def __init__(
        self, curve: Curve, reference: Curve, middle: FloatArray, plus: float, minus: float, error: float
    ) -> None:
        self._plus, self._minus, self._narrow = plus, minus, min(plus, minus)
        self._chords = whole_chords(curve, -middle).split(error)
        chords = whole_chords(reference, -middle).split(error)
        self._error, self._middle = error, middle
        self._target = SegmentSearch(chords.start.T.copy(), chords.end.T.copy())
        path = np.vstack([chords.start, chords.end[-1:]])
        self._ends = [] if reference.closed else [_end(path), _end(path[::-1])]
        self._strands = None if reference.closed else _Strands(path, max(self._narrow, 1e-4 * _length(path)))
        crossing = reference.closed and not is_simple(reference.flatten(error))
        self._distance = SignedTo(reference, error, crossing)
        reach = max(self._chords.elements.reach, chords.elements.reach)
        self._rounding = 2000.0 * _U * reach
        self._most = _MOST + 2 * (len(self._chords) + len(chords))

    def _signed(self, points: FloatArray) -> FloatArray:
        return self._distance(points + self._middle)

    def decide(self) -> SideDecision:
        chords = self._chords
        at_start = self._signed(np.vstack([chords.start, chords.end[-1:]]))
        at_start, at_end = at_start[:-1], at_start[1:]
        for _ in range(_ROUNDS):
            for points, value in ((chords.start, at_start), (chords.end, at_end)):
                over = np.where(value > 0.0, value - self._plus, -value - self._minus)
                k = int(np.argmax(over))
                if over[k] > 4.0 * self._error + self._rounding:
                    return SideDecision(False, tuple(points[k].tolist()), float(value[k]))
            rest = self._unsettled(chords, at_start, at_end)
            if not rest.size:
                return SideDecision(True)
            k = int(rest[np.argmax(np.abs(at_start[rest]))])
            open_ = SideDecision(None, tuple(chords.start[k].tolist()), float(at_start[k]))
            length = np.linalg.norm(chords.end[rest] - chords.start[rest], axis=1)
            if rest.size > self._most or length.max() < self._error:
                return open_
            chords, inner = chords.take(rest).halved()
            value = self._signed(inner)
            at_start = np.stack([at_start[rest], value], axis=1).ravel()
            at_end = np.stack([value, at_end[rest]], axis=1).ravel()
        return open_

    def _unsettled(self, chords: Chords, at_start: FloatArray, at_end: FloatArray) -> IntArray:
        """Return the chords not proven to keep their limits."""
        slack = 0.25 * self._error
        bounds = bound_chords(chords, self._target, self._error, slack, self._narrow, every=True)
        upper = bounds.upper + self._rounding
        rest = np.flatnonzero(upper > self._narrow)
        a, b = at_start[rest], at_end[rest]
        start, end = chords.start[rest], chords.end[rest]
        margin = 4.0 * self._error + self._rounding
        least = 0.5 * (np.abs(a) + np.abs(b) - np.linalg.norm(end - start, axis=1))
        sided: BoolArray = (least > margin) & ((a > 0.0) == (b > 0.0))
        sided &= upper[rest] <= np.where(a > 0.0, self._plus, self._minus)
        for tip, before in self._ends:
            sided &= _clear(start, end, tip, before, margin)
        if self._strands is not None and sided.any():
            tried = np.flatnonzero(sided)
            step = np.linalg.norm(end[tried] - start[tried], axis=1)
            sided[tried] = self._strands.single(start[tried], np.abs(a[tried]) + 2.0 * step + margin)
        return rest[~sided]


class _Strands:
    """An open path cut into short segments, to tell whether what comes near a point is a single strand."""

    def __init__(self, path: FloatArray, longest: float) -> None:
        from scipy.spatial import cKDTree

        step = np.diff(path, axis=0)
        length = np.linalg.norm(step, axis=1)
        heading = np.arctan2(step[:, 1], step[:, 0])
        real = np.flatnonzero(length > 0.0)
        turn = np.abs(np.angle(np.exp(1j * np.diff(heading[real]))))
        turned = np.zeros(len(step))
        turned[real[1:]] = turn
        parts = np.maximum(np.ceil(length / longest), 1.0).astype(np.intp)
        owner = np.repeat(np.arange(len(step)), parts)
        share = (np.arange(len(owner)) - np.repeat(np.cumsum(parts) - parts, parts) + 0.5) / parts[owner]
        self._tree = cKDTree(path[owner] + share[:, None] * step[owner])
        self._half = 0.5 * float((length / parts).max())
        self._turned = np.cumsum(turned)[owner]  # turning up to and into each segment

    def single(self, points: FloatArray, radius: FloatArray) -> BoolArray:
        """Tell where all that lies within a radius is one run of the path that turns by less than half a turn."""
        found = self._tree.query_ball_point(points, radius + self._half, return_sorted=True)
        out = np.zeros(len(points), dtype=np.bool_)
        for k, near in enumerate(found):
            if near:
                whole = near[-1] - near[0] + 1 == len(near)
                out[k] = whole and self._turned[near[-1]] - self._turned[near[0]] < np.pi
        return out


def _length(path: FloatArray) -> float:
    return float(np.linalg.norm(np.diff(path, axis=0), axis=1).sum())


def _end(points: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return the first point and the next one that differs from it."""
    return points[0], points[int(np.argmax((points != points[0]).any(axis=1)))]


def _clear(a: FloatArray, b: FloatArray, end: FloatArray, before: FloatArray, slack: float) -> BoolArray:
    """Tell which chords stay clear of the prolongation of a reference beyond its end."""
    ahead = (end - before) / np.linalg.norm(end - before)
    to_a, to_b = a - end, b - end
    behind = np.maximum(to_a @ ahead, to_b @ ahead) < -slack
    left_a, left_b = (ahead[0] * to[:, 1] - ahead[1] * to[:, 0] for to in (to_a, to_b))
    return np.asarray(behind | (np.minimum(left_a, left_b) > slack) | (np.maximum(left_a, left_b) < -slack))
