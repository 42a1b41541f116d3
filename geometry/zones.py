"""Zones: the stretches along a curve where its deviation from a reference leaves its limits.

A stretch is told at samples: in the middle of short stretches, at every vertex and knot, and at the farthest place of
every piece that is not proven to stay within the smaller limit, pieces being as short as that limit (on curves of
more than 20,000 limits 1/20,000 of the length). So no zone is missed, however narrow, but beside another one in the
same short piece. Between samples ends and peaks are refined: an end to where the deviation passes the limit, a peak
to a local maximum; another, higher one in the same zone may be missed by as much as the curve can run away between
two samples.
"""

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np

from geometry.arrays import BoolArray, FloatArray, IntArray
from geometry.chords import Chords, anchors, whole_chords
from geometry.curve import Curve
from geometry.deviation import exceeding
from geometry.errors import GeometryError
from geometry.intervals import bound_chords
from geometry.nearest import SegmentSearch
from geometry.signed import SignedTo

__all__ = ["Zone", "missed_zones", "zones"]

_CHORD_ERROR = 1e-6  # of the smaller limit: chords of both curves
_MOST_CHORDS = 400_000  # of a curve; the chord error is raised where it would take more
_STEP = 0.5  # of the smaller limit: distance of samples, raised where that would be many
_SAMPLES = 2000  # that a curve has at least, and at most four to every chord of the coarse curves besides
_SEARCH_ERROR = 1e-2  # of the smaller limit: chords in the search for places out of it
_PIECES = 20_000  # that a curve is cut into at most in that search
_ROUNDS = 32  # of golden sections and of halvings
_TURNS = 10.0  # limits: what is missed at turns no farther apart is one zone
_GOLDEN = 0.5 * (np.sqrt(5.0) - 1.0)


@dataclass(frozen=True, slots=True)
class Zone:
    """A stretch of a curve out of its limits.

    Attributes:
        from_along, to_along: arc length from the start of the curve to its ends, drawing units; through the start of a
            closed curve `to_along` is over the length.
        peak: largest deviation in it, drawing units; signed, + outside a closed reference or left of an open one, but
            unsigned in 3-D.
        along, point: where that is.
    """

    from_along: float
    to_along: float
    peak: float
    along: float
    point: tuple[float, ...]


def zones(curve: Curve, reference: Curve, plus: float, minus: float, crossing: bool = False) -> list[Zone]:
    """Return the stretches of a curve that deviate by more than `plus` or less than `-minus`, the highest peak first.

    Args:
        curve, reference: polyline, arc chain or spline, of one dimension, finite, drawing units.
        plus: limit outside a closed, left of an open reference, drawing units, > 0; in 3-D the only one.
        minus: limit inside or right of it, > 0.
        crossing: the closed reference crosses or touches itself; see `geometry.signed.signed_distances`.

    Raises:
        NotFiniteError, TooFewPointsError: a curve cannot be used.
        GeometryError: the dimensions differ, a curve has no length or a limit is not a number above 0.
    """
    return _found(curve, reference, plus, minus, crossing, lambda points: np.ones(len(points), dtype=np.bool_))


def _found(
    curve: Curve,
    reference: Curve,
    plus: float,
    minus: float,
    crossing: bool,
    wanted: Callable[[FloatArray], BoolArray],
) -> list[Zone]:
    """Return the zones whose highest samples, points of shape (n, d), are wanted; otherwise as `zones`."""
    if not (0.0 < plus < np.inf and 0.0 < minus < np.inf):
        raise GeometryError(f"limits of {plus:g} and {minus:g} cannot be used; both must be numbers above 0")
    narrow = min(plus, minus) if curve.dimension == 2 else plus
    track = _Track(curve, narrow)
    far = _far_places(curve, reference, narrow, track)
    if not far.size:
        return []
    distance = SignedTo(reference, _chord_error(reference, narrow), crossing)

    def over(place: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Return the deviation at places along the track and by how much it is over its limit."""
        value = distance(track.at(place))
        return value, np.where(value > 0.0, value - plus, -value - minus) if curve.dimension == 2 else value - plus

    place = np.unique(np.concatenate([track.samples(narrow), far]))
    value, excess = over(place)
    side = np.where(excess > 0.0, np.where(value > 0.0, 1, -1), 0)
    first = np.flatnonzero((side != 0) & (np.diff(side, prepend=0) != 0))
    last = np.flatnonzero((side != 0) & (np.diff(side, append=0) != 0))
    if not first.size:
        return []  # places too close to the limit to be proven within it, and none of them out
    peaks = np.array([a + int(np.argmax(np.abs(value[a : b + 1]))) for a, b in zip(first, last, strict=True)])
    kept = np.flatnonzero(wanted(track.at(place[peaks])))
    if not kept.size:
        return []
    first, last, peaks = first[kept], last[kept], peaks[kept]
    starts = _edges(over, place, first, -1, side)
    ends = _edges(over, place, last, 1, side)
    low = np.maximum(place[np.maximum(peaks - 1, 0)], starts)
    high = np.minimum(place[np.minimum(peaks + 1, len(place) - 1)], ends)
    signs = side[first]
    best, height = _highest(lambda x: signs * over(x)[0], low, high, place[peaks], signs * value[peaks])
    points = track.at(best)
    ends_and_tops = np.stack([track.along(starts), track.along(ends), track.along(best)], axis=1).tolist()
    found = [
        Zone(start, end, peak, top, tuple(point))
        for (start, end, top), peak, point in zip(
            ends_and_tops, (signs * height).tolist(), points.tolist(), strict=True
        )
    ]
    if curve.closed and len(found) > 1 and first[0] == 0 and last[-1] == len(side) - 1 and side[0] == side[-1]:
        found = _through_the_start(found, track.length)
    return sorted(found, key=lambda zone: -abs(zone.peak))


def _far_places(curve: Curve, reference: Curve, limit: float, track: "_Track") -> FloatArray:
    """Return a place in every short piece of a curve that is not proven to stay within a limit of a reference."""
    off = exceeding(curve, reference, limit)
    if not len(off.element):
        return np.zeros(0)
    points = np.vstack([anchors(curve), anchors(reference)])
    middle = 0.5 * points.min(axis=0) + 0.5 * points.max(axis=0)
    error = _SEARCH_ERROR * limit
    chords = whole_chords(curve, -middle).split(max(error, _chord_error(curve, limit)))
    chords = chords.take(np.flatnonzero(np.isin(chords.element, off.element)))
    target = whole_chords(reference, -middle).split(max(error, _chord_error(reference, limit)))
    search = SegmentSearch(target.start.T.copy(), target.end.T.copy())
    gap = float(target.error.max())
    longest = max(limit, track.length / _PIECES)
    found = [track.places(off.element, off.t)]
    while len(chords):
        bounds = bound_chords(chords, search, gap, 0.1 * limit, limit, every=True)
        kept = np.flatnonzero(bounds.upper > limit)
        chords, far = chords.take(kept), bounds.farthest[kept]
        step = chords.end - chords.start
        square = np.maximum((step * step).sum(axis=1), 1e-300)
        share = np.clip(((far - chords.start) * step).sum(axis=1) / square, 0.0, 1.0)
        found.append(track.places(chords.element, chords.low + share * (chords.high - chords.low)))
        chords, _ = chords.take(np.flatnonzero(square > longest * longest)).halved()
    return np.concatenate(found)


def missed_zones(curve: Curve, reference: Curve, limit: float, known: list[Zone]) -> list[Zone]:
    """Return the stretches of a reference that no place of a curve lies within a limit of, the farthest first.

    Left out are those whose nearest place on the curve lies in a zone that is known already: where the curve has left
    the reference, the reference has left the curve as well. What is missed in short turns, less than ten limits apart
    along the reference (the steps of a trace, for example), is one zone.

    Args:
        curve, reference: as for `zones`.
        limit: drawing units, > 0.
        known: zones of the curve against the reference.

    Returns:
        Zones with places along the reference and unsigned peaks.

    Raises:
        As `zones`.
    """
    spans = np.array([(zone.from_along, zone.to_along) for zone in known]).reshape(-1, 2)

    def unknown(points: FloatArray) -> BoolArray:
        """Tell whose nearest places on the curve lie in none of the zones that are known."""
        if not len(spans):
            return np.ones(len(points), dtype=np.bool_)
        track = _Track(curve, limit)
        near = track.along(track.nearest(points))
        spare = 1e-9 * track.length + limit
        at = np.stack([near, near + track.length], axis=1)[:, :, None]
        inside = (spans[:, 0] - spare <= at) & (at <= spans[:, 1] + spare)
        return np.asarray(~inside.any(axis=(1, 2)))

    missed: list[Zone] = []
    found = _found(reference, curve, limit, limit, False, unknown)
    for zone in sorted(found, key=lambda zone: zone.from_along):
        one = replace(zone, peak=abs(zone.peak))
        if missed and one.from_along - missed[-1].to_along < _TURNS * limit:
            before = missed.pop()
            top = one if one.peak > before.peak else before
            one = replace(top, from_along=before.from_along, to_along=max(before.to_along, one.to_along))
        missed.append(one)
    return sorted(missed, key=lambda zone: -zone.peak)


def _chord_error(curve: Curve, limit: float) -> float:
    """Return the chord error to take a curve to: a small share of the limit, unless that takes too many chords."""
    whole = whole_chords(curve)
    error = _CHORD_ERROR * limit
    most = float(np.sqrt(np.maximum(whole.error, 0.0)).sum()) / _MOST_CHORDS
    return max(error, most * most)


class _Track:
    """A curve as places 0 to m along its m chords: whole numbers at their ends."""

    def __init__(self, curve: Curve, limit: float) -> None:
        self._chords: Chords = whole_chords(curve).split(_chord_error(curve, limit))
        steps = np.linalg.norm(self._chords.end - self._chords.start, axis=1)
        self._alongs = np.concatenate([[0.0], np.cumsum(steps)])
        self._whole = len(whole_chords(curve))
        self.length = float(self._alongs[-1])

    def at(self, place: FloatArray) -> FloatArray:
        """Return the points of the curve at places, shape (n, d)."""
        chord = self._chord(place)
        low, high = self._chords.low[chord], self._chords.high[chord]
        return self._chords.elements.at(self._chords.element[chord], low + (place - chord) * (high - low))

    def along(self, place: FloatArray) -> FloatArray:
        """Return the arc length at places, shape (n,)."""
        chord = self._chord(place)
        return self._alongs[chord] + (place - chord) * (self._alongs[chord + 1] - self._alongs[chord])

    def _chord(self, place: FloatArray) -> IntArray:
        return np.clip(place.astype(np.intp), 0, len(self._chords) - 1)

    def samples(self, limit: float) -> FloatArray:
        """Return places that follow each other closely, every knot and vertex among them."""
        steps = np.diff(self._alongs)
        least = max(_STEP * limit, self.length / (_SAMPLES + 4.0 * self._whole))
        # short chords are skipped and long ones divided, so that samples are about so far apart
        marks = np.floor(self._alongs / least)
        kept = np.concatenate([[True], np.diff(marks) > 0.0, [True]])[: len(marks)]
        kept[:-1] |= self._chords.low == 0.0
        kept[-1] = True
        parts = np.maximum(np.ceil(steps / least), 1.0).astype(np.intp)
        many = np.flatnonzero(parts > 1)
        chord = np.repeat(many, parts[many] - 1)
        first = np.repeat(np.cumsum(parts[many] - 1) - (parts[many] - 1), parts[many] - 1)
        inner = chord + (np.arange(len(chord)) - first + 1) / np.repeat(parts[many], parts[many] - 1)
        return np.concatenate([np.flatnonzero(kept).astype(np.float64), inner])

    def places(self, element: IntArray, t: FloatArray) -> FloatArray:
        """Return the places of local parameters of elements, shape (n,)."""
        key = self._chords.element + self._chords.low
        chord = np.clip(np.searchsorted(key, element + np.minimum(t, 1.0 - 1e-15), side="right") - 1, 0, len(key) - 1)
        low, high = self._chords.low[chord], self._chords.high[chord]
        return chord.astype(np.float64) + np.clip((t - low) / (high - low), 0.0, 1.0)

    def nearest(self, points: FloatArray) -> FloatArray:
        """Return the places nearest to points, shape (n,)."""
        search = SegmentSearch(self._chords.start.T.copy(), self._chords.end.T.copy())
        index, _, _ = search.exact(points.T.copy())
        place: FloatArray = search.foot(points.T, index) + index
        return place


def _highest(
    height: Callable[[FloatArray], FloatArray], low: FloatArray, high: FloatArray, at: FloatArray, best: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Return local maxima between bounds by golden sections on either side of the highest sample."""
    for a, b in ((low.copy(), at.copy()), (at.copy(), high.copy())):
        c, d = b - _GOLDEN * (b - a), a + _GOLDEN * (b - a)
        at_c, at_d = height(c), height(d)
        for _ in range(_ROUNDS):
            left = at_c > at_d
            a, b = np.where(left, a, c), np.where(left, d, b)
            fresh = np.where(left, b - _GOLDEN * (b - a), a + _GOLDEN * (b - a))
            known, value = np.where(left, c, d), np.where(left, at_c, at_d)
            new = height(fresh)
            c, at_c = np.where(left, fresh, known), np.where(left, new, value)
            d, at_d = np.where(left, known, fresh), np.where(left, value, new)
        middle = 0.5 * (a + b)
        found = height(middle)
        higher = found > best
        at, best = np.where(higher, middle, at), np.where(higher, found, best)
    return at, best


def _edges(
    over: Callable[[FloatArray], tuple[FloatArray, FloatArray]],
    place: FloatArray,
    index: IntArray,
    step: int,
    side: IntArray,
) -> FloatArray:
    """Return where the deviation passes its limit between the last sample of a zone and the next one outside it."""
    inside = place[index].copy()
    beyond = np.clip(index + step, 0, len(place) - 1)
    outside = place[beyond].copy()
    signs = side[index]
    for _ in range(_ROUNDS if (beyond != index).any() else 0):
        middle = 0.5 * (inside + outside)
        value, excess = over(middle)
        still: BoolArray = (excess > 0.0) & (np.where(value > 0.0, 1, -1) == signs)
        inside, outside = np.where(still, middle, inside), np.where(still, outside, middle)
    return np.where(beyond == index, place[index], inside)


def _through_the_start(found: list[Zone], length: float) -> list[Zone]:
    """Join the zones at both ends of a closed curve."""
    first, last = found[0], found[-1]
    top = first if abs(first.peak) >= abs(last.peak) else last
    along = top.along + (length if top is first else 0.0)
    joined = Zone(last.from_along, length + first.to_along, top.peak, along, top.point)
    return [*found[1:-1], joined]
