"""Whether a curve stays within limits that differ by side: proven, for tolerance zones that are not centred.

Let s be the signed distance to the reference, + outside a closed one and left of an open one, beyond whose ends the
last chord, prolonged, parts left from right. To a closed reference s changes by no more than the distance travelled:
|s| does so, and s changes sign only on the reference, where it is 0. To an open reference the same holds along a path
that does not cross one of the prolongations. So along a straight chord of length L whose ends have s = a and s = b, s
is at most (a + b + L) / 2 and at least (a + b - L) / 2, and |s| at most (|a| + |b| + L) / 2. A chord stays clear of a
prolongation if both its ends lie behind the end of the reference, or both on one side of its line. Where all that
does not decide, the chord is halved.

Both curves are taken as chords within e. |s| is then known to e, and s, whose sign may be wrong where |s| <= e, to 3
e; a point of the curve is within e of its chord: 4 e in all. Rounding adds less than 2000 u M, u = 2^-53 and M the
largest coordinate, as counted in `geometry.deviation`.
"""

from dataclasses import dataclass

import numpy as np

from geometry.arrays import BoolArray, FloatArray
from geometry.curve import Curve
from geometry.errors import GeometryError
from geometry.signed import signed_distances
from geometry.simple import is_simple

__all__ = ["SideDecision", "within_sides"]

_U = 2.0**-53
_SHARES = (1e-2, 1e-4, 1e-6)  # of the smaller limit: chord errors, the next one where one leaves it open
_ROUNDS = 60
_MOST = 4_000_000  # chords held at a time


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
        GeometryError: a curve is not planar or a limit is not a number above 0.
    """
    if not (0.0 < plus < np.inf and 0.0 < minus < np.inf):
        raise GeometryError(f"limits of {plus:g} and {minus:g} cannot be used; both must be numbers above 0")
    found = SideDecision(None)
    for share in _SHARES:
        found = _decide(curve, reference, plus, minus, share * min(plus, minus))
        if found.inside is not None:
            break
    return found


def _decide(curve: Curve, reference: Curve, plus: float, minus: float, error: float) -> SideDecision:
    path = curve.flatten(error).path()
    drawn = reference.flatten(error)
    crossing = reference.closed and not is_simple(drawn)
    ends = [] if reference.closed else [_end(drawn.points), _end(drawn.points[::-1])]
    reach = float(max(np.abs(path).max(), np.abs(drawn.points).max()))
    slack = 4.0 * error + 2000.0 * _U * reach
    narrow = min(plus, minus)
    a, b = path[:-1], path[1:]
    signed = signed_distances(path, reference, error, crossing)
    at_a, at_b = signed[:-1], signed[1:]
    for _ in range(_ROUNDS):
        for place, value in ((a, at_a), (b, at_b)):
            over = np.where(value > 0.0, value - plus, -value - minus)
            k = int(np.argmax(over))
            if over[k] > slack:
                return SideDecision(False, tuple(place[k].tolist()), float(value[k]))
        length = np.linalg.norm(b - a, axis=1)
        middle, half = 0.5 * (at_a + at_b), 0.5 * length + slack
        size = 0.5 * (np.abs(at_a) + np.abs(at_b)) + half
        sided = (middle + half <= plus) & (middle - half >= -minus)
        for end, before in ends:
            sided &= _clear(a, b, end, before, slack)
        rest = np.flatnonzero(~(sided | (size <= narrow)))
        if not rest.size:
            return SideDecision(True)
        if rest.size > _MOST or length[rest].max() < error:
            k = rest[np.argmax(size[rest])]
            return SideDecision(None, tuple(a[k].tolist()), float(at_a[k]))
        a, b, at_a, at_b = a[rest], b[rest], at_a[rest], at_b[rest]
        centre = 0.5 * (a + b)
        value = signed_distances(centre, reference, error, crossing)
        a, b = np.concatenate([a, centre]), np.concatenate([centre, b])
        at_a, at_b = np.concatenate([at_a, value]), np.concatenate([value, at_b])
    return SideDecision(None, tuple(a[0].tolist()), float(at_a[0]))


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
