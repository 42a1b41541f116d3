"""Certified two-sided distance between curves.

The directed Hausdorff distance from a to b is the largest distance from any point of a to the nearest point of b. It
is enclosed between a distance that was found (`measured`) and one that is proven (`certified`).

How. Both curves become chords with proven errors eA and eT (`geometry.chords`), coarse at first. Branch and bound
(`geometry.intervals`) bounds the distance of every chord's piece of curve. Then only what can still decide is made
finer: pieces of a whose bound is above the lower bound L reached, and the chords of b that can be nearest to them.

Why the selection is sound. A piece of a that is dropped is nowhere farther than L from b, and L is no more than the
true distance. Let a kept piece i have bound u, chord middle c, half chord h. A point of it is within h + eA of c and at
most u from its nearest point of b; that one is within eT of a chord of b, and so within eT + g of that chord's middle,
g its half length. Chords of b farther than u + h + eA + eT + g from every kept c are thus nearest to nothing that is
kept, and dropping them changes no distance from a kept piece.

Rounding. Let u = 2^-53 and M the greatest coordinate of the numbers either curve is computed from, after a shift of
both to the middle of their common box (so that a part far from the origin loses nothing but the rounding of the shift,
u M). Counting operations, each step below in units of u M, times sqrt(3) for three coordinates where it is one
coordinate's: shift of both curves 2; point inside a chord 5, and 5 for the point where targets meet; differences,
segment vector, foot and remainder 10; the square root and its sum 10 of a distance of at most 2 sqrt(3) M; a foot that
is misplaced along its segment by its rounded parameter 28. Together under 90; 100 u M is taken, plus what computing
points of arcs (60) and splines (80) adds. `certified` is raised and `measured` lowered by it.
"""

from dataclasses import dataclass

import numpy as np

from geometry.arrays import FloatArray, IntArray
from geometry.bspline import Spline
from geometry.chords import Chords, anchors, even_delta, whole_chords
from geometry.curve import Curve
from geometry.errors import GeometryError
from geometry.intervals import ChordBounds, bound_chords
from geometry.nearest import SegmentSearch
from geometry.runs import RUN, Runs, runs
from geometry.shared import identical, shared_pieces

__all__ = [
    "Decision",
    "Deviation",
    "Exceeding",
    "Place",
    "TwoSided",
    "directed_hausdorff",
    "exceeding",
    "hausdorff",
    "within",
]

_U = 2.0**-53
_FINER = 16.0  # by how much chord errors shrink from level to level
_FEW, _PROBES = 0.3, 200  # of the chords, not shared, that are worth a trial of their own; chords tried at first
_CHORDS = 2_000_000  # a level with more chords than this, and than four times the first, is not tried
_PAIRS = 50_000
_MANY = 2_000  # chords from which a curve is first looked at by runs of them
_RUN_ERROR, _EVERY = 0.2, 20  # of the tolerance; every so many runs tell whether runs are worth taking
_WORTH = 0.3  # of the chords: more runs than this, or more chords left by them, are not worth the look


@dataclass(frozen=True, slots=True)
class Place:
    """A place on a curve.

    Attributes:
        point: coordinates, drawing units, within the chord error reached of the curve.
        element: index of the edge, arc or non-empty knot span.
        t: local parameter in that element, 0 to 1 (for an arc the share of its sweep).
    """

    point: tuple[float, ...]
    element: int
    t: float


@dataclass(frozen=True, slots=True)
class Deviation:
    """Bounds on the directed Hausdorff distance from one curve to another, drawing units.

    Attributes:
        measured: a distance that is reached: never above the true one.
        certified: proven bound: never below the true one; tolerances are held against it.
        place: where `measured` was found on the first curve.
    """

    measured: float
    certified: float
    place: Place | None = None


@dataclass(frozen=True, slots=True)
class TwoSided:
    """The directed distances from a to b and from b to a."""

    forward: Deviation
    backward: Deviation

    @property
    def measured(self) -> float:
        """The larger distance found: never above the true Hausdorff distance."""
        return max(self.forward.measured, self.backward.measured)

    @property
    def certified(self) -> float:
        """The larger proven bound: never below the true Hausdorff distance."""
        return max(self.forward.certified, self.backward.certified)


@dataclass(frozen=True, slots=True)
class Decision:
    """Whether two curves lie within a tolerance of each other.

    Attributes:
        inside: True: proven within; False: proven to pass it somewhere; None: too close to tell.
        forward: bounds reached from a to b when it was decided (`certified` is then often far from tight).
        backward: the same from b to a; None where the first direction already decided.
    """

    inside: bool | None
    forward: Deviation
    backward: Deviation | None


@dataclass(frozen=True, slots=True, eq=False)
class Exceeding:
    """The chords of a curve that are not proven to stay within a limit of another curve.

    Attributes:
        points: the farthest point found on each chord, shape (k, d), drawing units.
        element: edge, arc or non-empty knot span each chord belongs to, shape (k,).
        t: local parameter of the point in its element, shape (k,), 0 to 1.
        distance: distance from that point to the other curve, less chord errors: no more than the largest of the
            chord's piece of curve, shape (k,).
        bound: no less than it, shape (k,); above the limit.
    """

    points: FloatArray
    element: IntArray
    t: FloatArray
    distance: FloatArray
    bound: FloatArray

    def __len__(self) -> int:
        return len(self.element)


def directed_hausdorff(a: Curve, b: Curve, width: float) -> Deviation:
    """Enclose the directed Hausdorff distance from curve a to curve b.

    Args:
        a, b: polyline, arc chain or spline, each open or closed, both 2-D or both 3-D, finite, drawing units.
        width: largest certified - measured that is asked for, drawing units, > 0.

    Returns:
        The bounds. They are wider than `width` only where `width` is under the rounding (see the module's text), where
        it would take over two million chords, or where very many points are equally far from very many segments.

    Raises:
        NotFiniteError: a coordinate is NaN or infinite. TooFewPointsError: a curve has no points.
        GeometryError: the dimensions differ, or the width is not a number above 0.
    """
    return _Pair(a, b, _positive(width, "width"), None).forward()


def hausdorff(a: Curve, b: Curve, width: float) -> TwoSided:
    """Enclose the Hausdorff distance between two curves, both directions; see `directed_hausdorff`.

    Curves that are the same number for number are at distance 0, and no place is given.
    """
    _positive(width, "width")
    if len(anchors(a)) == len(anchors(b)) and identical(a, b):
        return TwoSided(Deviation(0.0, 0.0), Deviation(0.0, 0.0))
    pair = _Pair(a, b, _positive(width, "width"), None)
    return TwoSided(pair.forward(), pair.backward())


def within(a: Curve, b: Curve, tolerance: float, resolution: float = 1e-6) -> Decision:
    """Decide whether every point of each curve lies within a tolerance of the other curve.

    Much cheaper than `hausdorff` where the answer is clear. Long curves are first held against each other by runs of
    their chords (`geometry.runs`), which settles all but what comes near to the tolerance. Where that fails, pieces
    that both curves have in common are at distance 0 and left out; what is left of one is held against what is left of
    the other first, which can only overstate.

    Args:
        a, b: as for `directed_hausdorff`.
        tolerance: drawing units, > 0.
        resolution: share of the tolerance under which chord errors are not refined: when the true distance is that
            close to the tolerance the answer may be None.

    Raises:
        As `directed_hausdorff`.
    """
    pair = _Pair(a, b, _positive(resolution, "resolution") * _positive(tolerance, "tolerance"), tolerance)
    looked = pair.looked_over()
    if looked is not None:
        return looked
    own = [np.flatnonzero(~same[chords.element]) for same, chords in zip(shared_pieces(a, b), pair.sides, strict=True)]
    forward = pair.decided(*pair.sides, *own)
    inside = _verdict(forward, tolerance)
    if inside is False:
        return Decision(False, forward, None)
    backward = pair.decided(*pair.sides[::-1], *own[::-1])
    back = _verdict(backward, tolerance)
    if back is False:
        return Decision(False, forward, backward)
    return Decision(True if inside and back else None, forward, backward)


def exceeding(a: Curve, b: Curve, limit: float, resolution: float = 1e-3) -> Exceeding:
    """Return the places of curve a that are not proven to be within a limit of curve b.

    Args:
        a, b: as for `directed_hausdorff`.
        limit: drawing units, > 0.
        resolution: share of the limit to which distances are settled: a chord is left out once it is proven to
            stay within the limit, and left undecided (and so returned) where that takes finer chords than this.

    Returns:
        One entry a chord, in order of travel; none if and only if a is proven to lie within the limit everywhere.

    Raises:
        As `directed_hausdorff`.
    """
    pair = _Pair(a, b, _positive(resolution, "resolution") * _positive(limit, "limit"), limit)
    return pair.exceeding()


def _verdict(found: Deviation, tolerance: float) -> bool | None:
    if found.measured > tolerance:
        return False
    return True if found.certified <= tolerance else None


def _positive(value: float, name: str) -> float:
    if not 0.0 < value < np.inf:
        raise GeometryError(f"a {name} of {value:g} cannot be used; it must be a number above 0")
    return value


class _Pair:
    """Two curves about their local origin, as chords of the first level; shared by both directions."""

    def __init__(self, a: Curve, b: Curve, width: float, tolerance: float | None) -> None:
        first, second = anchors(a), anchors(b)
        if first.shape[1] != second.shape[1]:
            dimensions = f"{first.shape[1]} and {second.shape[1]} dimensions"
            raise GeometryError(f"curves in {dimensions} cannot be measured to each other; give both in 2 or both in 3")
        low = np.minimum(first.min(axis=0), second.min(axis=0))
        high = np.maximum(first.max(axis=0), second.max(axis=0))
        self.middle = 0.5 * low + 0.5 * high
        whole_a, whole_b = whole_chords(a, -self.middle), whole_chords(b, -self.middle)
        reach = max(whole_a.elements.reach, whole_b.elements.reach)
        self.rounding = (100.0 + whole_a.elements.rounding + whole_b.elements.rounding) * _U * reach
        self.width, self.tolerance = width, tolerance
        # certified - measured <= slack + 4 chord errors + rounding: width / 8 + 4 / 9 width + 2 roundings
        self.finest = max(width / 9.0, self.rounding)
        least = self.finest if tolerance is None else max(self.finest, tolerance / 25.0)
        self.shared = self.rounding if isinstance(a, Spline) else 0.0  # spans agree but for rounding, edges exactly
        self.searches: dict[int, SegmentSearch] = {}
        self.a, self.b = (whole.split(max(least, even_delta(whole))) for whole in (whole_a, whole_b))

    def forward(self) -> Deviation:
        return self.measure(self.a, self.b)

    def backward(self) -> Deviation:
        return self.measure(self.b, self.a)

    @property
    def sides(self) -> tuple[Chords, Chords]:
        return self.a, self.b

    def looked_over(self) -> Decision | None:
        """Return the decision if runs of chords, and the chords of those few that they leave open, bring it about."""
        assert self.tolerance is not None
        if min(len(self.a), len(self.b)) < _MANY:
            return None
        for side in self.sides:
            sample = (np.arange(0, len(side) - RUN, _EVERY * RUN)[:, None] + np.arange(RUN)).ravel()
            if len(runs(side.take(sample), _RUN_ERROR * self.tolerance, self.rounding).chords) > _WORTH * len(sample):
                return None
        rough = [runs(side, _RUN_ERROR * self.tolerance, self.rounding) for side in self.sides]
        if sum(len(side.chords) for side in rough) > _WORTH * (len(self.a) + len(self.b)):
            return None
        found: list[Deviation] = []
        for one_way in (1, -1):
            (rough_a, rough_b), (a, b) = rough[::one_way], self.sides[::one_way]
            one = self.by_runs(rough_a, rough_b, a, b)
            if one is None:
                return None
            found.append(one)
            if one.measured > self.tolerance:
                return Decision(False, found[0], found[1] if len(found) > 1 else None)
        return Decision(True, found[0], found[1])

    def by_runs(self, a: Runs, b: Runs, fine_a: Chords, fine_b: Chords) -> Deviation | None:
        """Return bounds that decide whether a stays within the tolerance of b; None where runs do not tell."""
        assert self.tolerance is not None
        error = float(b.chords.error.max())
        bounds = bound_chords(a.chords, _search(b.chords), error, 0.125 * self.tolerance, self.tolerance)
        passed = bounds.lower - self.rounding > self.tolerance
        over = np.flatnonzero(bounds.upper > self.tolerance - self.rounding)
        if not over.size:
            return Deviation(0.0, float(bounds.upper.max()) + self.rounding)
        kept = np.array([bounds.chord]) if passed else over
        rows = a.members(kept)
        if len(rows) > _WORTH * len(fine_a):
            return None
        beside = b.members(_in_reach(a.chords.take(kept), b.chords, bounds.upper[kept]))
        found = self.measure(fine_a.take(rows), fine_b.take(beside))
        if found.measured > self.tolerance:
            return Deviation(found.measured, float(bounds.upper.max()) + self.rounding, found.place)
        if passed or found.certified > self.tolerance:
            return None
        return Deviation(0.0, self.tolerance)

    def decided(self, a: Chords, b: Chords, own_a: IntArray, own_b: IntArray) -> Deviation:
        """Return bounds that decide whether a stays within the tolerance of b; the other chords of both are shared."""
        assert self.tolerance is not None
        if not own_a.size:
            return Deviation(0.0, self.shared)
        if own_b.size and max(len(own_a), len(own_b)) <= _FEW * len(a):
            beside = np.unique(np.clip(own_b[:, None] + np.array([-1, 0, 1]), 0, len(b) - 1))
            found = self.measure(a.take(own_a), b.take(beside))
            if found.certified <= self.tolerance:
                return Deviation(0.0, found.certified)
        probe = own_a[:: max(1, len(own_a) // _PROBES)]
        if len(probe) < len(own_a):
            found = self.measure(a.take(probe), b)
            if found.measured > self.tolerance:
                return Deviation(found.measured, np.inf, found.place)
        return self.measure(a.take(own_a), b)

    def measure(self, a: Chords, b: Chords) -> Deviation:
        lower, upper, place, dropped = -np.inf, np.inf, None, -np.inf
        most = max(_CHORDS, 4 * (len(a) + len(b)))
        while True:
            error = float(b.error.max())
            slack = max(0.125 * self.width, 0.25 * error, 0.25 * self.rounding)
            bounds = bound_chords(a, self.search(b), error, slack, self.tolerance)
            if bounds.lower > lower:
                lower, place = bounds.lower, self.place(a, bounds)
            upper = min(upper, max(float(bounds.upper.max()), lower, dropped))
            found = Deviation(max(0.0, lower - self.rounding), upper + self.rounding, place)
            kept = np.flatnonzero(bounds.upper > (lower if self.tolerance is None else self.tolerance - self.rounding))
            finest = max(error, a.error.max()) <= self.finest  # not only of those kept: all of a set the slack
            if self.enough(found) or not kept.size or finest:
                return found
            dropped = max(dropped, float(np.delete(bounds.upper, kept).max(initial=-np.inf)))
            a, b = self.finer(a.take(kept), b, bounds.upper[kept])
            if len(a) + len(b) > most:
                return found

    def search(self, chords: Chords) -> SegmentSearch:
        """Return a search among chords; that among all the first ones of a curve is kept."""
        side = next((k for k, each in enumerate(self.sides) if each is chords), None)
        if side is None:
            return _search(chords)
        if side not in self.searches:
            self.searches[side] = _search(chords)
        return self.searches[side]

    def enough(self, found: Deviation) -> bool:
        if self.tolerance is None:
            return found.certified - found.measured <= self.width
        return found.measured > self.tolerance or found.certified <= self.tolerance

    def finer(self, a: Chords, b: Chords, upper: FloatArray) -> tuple[Chords, Chords]:
        """Return the kept chords of a and those of b that can be nearest to them, both with smaller errors."""
        b = b.take(_in_reach(a, b, upper))
        return self.refined(a), self.refined(b)

    def refined(self, chords: Chords) -> Chords:
        return chords.split(max(self.finest, float(chords.error.max()) / _FINER))

    def place(self, a: Chords, bounds: ChordBounds) -> Place:
        chord = bounds.chord
        t = a.low[chord] + bounds.share * (a.high[chord] - a.low[chord])
        return Place(tuple((bounds.point + self.middle).tolist()), int(a.element[chord]), float(t))

    def exceeding(self) -> Exceeding:
        assert self.tolerance is not None
        a, b, limit, out = self.a, self.b, self.tolerance, []
        most = max(_CHORDS, 4 * (len(a) + len(b)))
        while len(a):
            error, search = float(b.error.max()), _search(b)
            slack = max(0.125 * self.width, 0.25 * error, 0.25 * self.rounding)
            bounds = bound_chords(a, search, error, slack, limit, every=True)
            kept = np.flatnonzero(bounds.upper > limit - self.rounding)
            if not kept.size:
                break
            points = bounds.farthest[kept]
            _, _, low = search.exact(points.T)
            distance = low - error - a.error[kept] - self.rounding
            last = max(error, float(a.error.max())) <= self.finest
            sure = np.flatnonzero((distance > limit) | last)
            chords = a.take(kept)
            out.append(self.entries(chords.take(sure), points[sure], distance[sure], bounds.upper[kept[sure]]))
            rest = np.setdiff1d(np.arange(len(kept)), sure)
            if not rest.size:
                break
            finer_a, b = self.finer(chords.take(rest), b, bounds.upper[kept[rest]])
            if len(finer_a) + len(b) > most:
                out.append(self.entries(chords.take(rest), points[rest], distance[rest], bounds.upper[kept[rest]]))
                break
            a = finer_a
        return _in_order(out, len(self.middle))

    def entries(self, a: Chords, points: FloatArray, distance: FloatArray, upper: FloatArray) -> Exceeding:
        along = a.end - a.start
        square = (along * along).sum(axis=1)
        share = np.divide(
            ((points - a.start) * along).sum(axis=1), square, out=np.zeros(len(square)), where=square > 0.0
        )
        t = a.low + np.clip(share, 0.0, 1.0) * (a.high - a.low)
        return Exceeding(points + self.middle, a.element, t, np.maximum(distance, 0.0), upper + self.rounding)


def _in_order(parts: list[Exceeding], dimension: int) -> Exceeding:
    if not parts:
        zero = np.zeros(0)
        return Exceeding(np.zeros((0, dimension)), np.zeros(0, dtype=np.intp), zero, zero, zero)
    columns = [
        np.concatenate([getattr(part, name) for part in parts])
        for name in ("points", "element", "t", "distance", "bound")
    ]
    order = np.lexsort((columns[2], columns[1]))
    return Exceeding(*(column[order] for column in columns))


def _search(chords: Chords) -> SegmentSearch:
    return SegmentSearch(np.ascontiguousarray(chords.start.T), np.ascontiguousarray(chords.end.T))


def _in_reach(a: Chords, b: Chords, upper: FloatArray) -> IntArray:
    """Indices of the chords of b that can be nearest to a point of a's pieces, whose distances `upper` bounds."""
    half_a = 0.5 * np.linalg.norm(a.end - a.start, axis=1)
    half_b = 0.5 * np.linalg.norm(b.end - b.start, axis=1)
    middle_a, middle_b = 0.5 * (a.start + a.end), 0.5 * (b.start + b.end)
    reach_a, reach_b = upper + half_a + a.error, half_b + b.error.max()
    # far more than the rounding of these sums
    reach_a += 1e-12 * max(float(np.abs(middle_a).max()), float(np.abs(middle_b).max())) + 1e-9 * reach_a
    if len(a) * len(b) <= _PAIRS:
        apart = np.linalg.norm(middle_a[:, None] - middle_b[None], axis=2)
        return np.flatnonzero((apart <= reach_a[:, None] + reach_b[None]).any(axis=0))
    from scipy.spatial import cKDTree

    most = float(reach_a.max())
    bound = most + float(reach_b.max())
    apart, _ = cKDTree(middle_a).query(middle_b, distance_upper_bound=np.nextafter(bound, np.inf))
    return np.flatnonzero(apart <= most + reach_b)
