"""Fewest knots: a spline written again with as few control points as a chord error allows.

Every smooth piece between corners is fitted anew, its knots placed by the need of the curve and thinned one by
one; corners stay where they are. The result is held against the source at samples (4 a span of the source and more,
foot points on the result), both ways at once: the pairing runs through both curves in order, from end to end. That is
a check by sampling, no proof; a certified bound is the caller's to ask for.
"""

import numpy as np

from geometry.arrays import BoolArray
from geometry.bspline import Spline, join
from geometry.economy.spline_check import Checked, Checker
from geometry.economy.spline_knots import State, number_of_spans, pieces_at
from geometry.economy.spline_pieces import at_home, clamped, line, piece_of
from geometry.economy.spline_source import Source, cut, straight, turned_to_corner
from geometry.economy.spline_ways import by_bends, by_need, evenly, settled

__all__ = ["fewest_knots"]

_LINE = 0.05  # share of the chord error within which a piece counts as drawn straight
_WAYS = (
    ("even", 1.0),
    ("line", 0.97),
    ("even", 2.0),
    ("need", 1.0),
    ("even", 3.0),
    ("even", 4.0),
    ("even", 6.0),
    ("even", 8.0),
    ("even", 11.0),
    ("bends", 1.0),
    ("need", 3.0),
    ("bends", 0.5),
    ("finest", 0.5),
    ("finest", 0.2),
)  # tried in turn until a piece is near enough and fair: equal spans; a straight line; knots as the chord error, or a
# part of it, asks for them, thinned; knots on the bends of the curvature, thinned; the same where nothing is found yet
_LONG = 40  # spans from which on a piece that is less fair than the source is mended where it is
_SWOLLEN = 1.2  # times the spans before mending, over which other ways are tried all the same
_TIMES, _MORE = 2.0, 20  # control points that a fair piece may have: times those of a poorer one, or so many more


def fewest_knots(spline: Spline, chord_error: float) -> Spline:
    """Return a spline of the same degree with fewer control points within `chord_error` of the given one.

    Pieces between corners are C2 (degree 3) or C1 (degree 2) with simple interior knots; corners are knots of full
    multiplicity at the same points. Straight pieces become one span with control points exactly on a line. A
    closed spline whose seam is smooth and that has no corner stays closed with a seam as smooth as any
    knot, at a knot of the result; one that has corners begins at its first corner.

    No piece gets more curvature extrema or more inflections than it had, as `geometry.economy.spline_shape` counts
    them (degree 2: inflections only, for its curvature jumps; 3-D: extrema only). Where that takes more than twice the
    control points, and over 20 more, bends to the other side are let pass that turn less than 1 degree and stand off
    by less than a fifth of the chord error, and extrema that rise or fall by less than a tenth of the piece's range of
    curvature. A piece for which nothing shorter is found comes back as it was.

    Args:
        spline: degree 1 to 3, 2-D or 3-D; degree 1 comes back unchanged.
        chord_error: largest distance allowed, either way, drawing units, positive. Held at samples.

    Returns:
        The spline with fewer control points; the parameter is arc length, nearly. The same object if no piece
        could be improved.
    """
    if spline.degree == 1 or not chord_error > 0.0 or len(spline.control) <= spline.degree + 1:
        return spline
    origin = 0.5 * (spline.control.min(axis=0) + spline.control.max(axis=0))
    rotated = turned_to_corner(spline.moved(-origin))
    checker = Checker(rotated, chord_error)
    source = checker.source
    if not (np.all(np.isfinite(source.along)) and np.all(source.lengths > 0.0)):
        return spline
    old = cut(rotated)
    straights = straight(source, _LINE * chord_error)
    found = _Found(source, old, ~straights)
    for way, amount in _WAYS:
        waiting = found.waiting.copy()
        if way == "finest":
            waiting[found.poorer_ones] = False
        if way == "line":
            more = waiting & straight(source, amount * chord_error)
            straights |= more
            found.waiting &= ~more
        elif waiting.any():
            _try(found, checker, way, amount, waiting)
    new = found.best()
    if source.periodic:
        return spline if new[0] is old[0] else new[0].moved(origin)
    for i in np.flatnonzero(straights).tolist():
        new[i] = line(old[i], source.lengths[i])
    if all(a is b for a, b in zip(new, old, strict=True)):
        return spline
    there = cut(turned_to_corner(spline))
    return join([at_home(piece, home) for piece, home in zip(new, there, strict=True)], spline.closed)


class _Found:
    """What was found for every piece.

    Attributes:
        waiting: pieces for which nothing near enough and fair was found yet, shape (pieces,).
    """

    def __init__(self, source: Source, old: list[Spline], waiting: BoolArray) -> None:
        self.source, self.waiting = source, waiting
        self._old = old
        self._fair: dict[int, Spline] = {}
        self._poorer: dict[bool, dict[int, Spline]] = {False: {}, True: {}}  # by whether curvature has more extrema

    @property
    def poorer_ones(self) -> list[int]:
        """Pieces that have a result which is near enough and a little less fair than the source."""
        return list(self._poorer[False] | self._poorer[True])

    def take(self, tried: BoolArray, state: State, checked: Checked) -> None:
        """Keep the results that are near enough, unless they are less fair by more than a little.

        Args:
            tried: pieces that the fit is of, in their order.
        """
        verdict, periodic = checked.verdict, self.source.periodic
        for i, at in enumerate(np.flatnonzero(tried).tolist()):
            if not checked.near[i] or verdict.unfair[i]:
                continue
            result = clamped(state.fit, self.source.high[0]) if periodic else piece_of(state.fit, i)
            if verdict.worse[i]:
                kept = self._poorer[bool(verdict.badly[i])]
            else:
                kept, self.waiting[at] = self._fair, False
            if at not in kept or len(result.control) < len(kept[at].control):
                kept[at] = result

    def best(self) -> list[Spline]:
        """Return the spline to write for every piece."""
        out = []
        for at, given in enumerate(self._old):
            best = given
            if at in self._fair and len(self._fair[at].control) < len(given.control):
                best = self._fair[at]
            for kept in self._poorer.values():
                if at in kept:
                    few = len(kept[at].control)
                    best = kept[at] if len(best.control) > max(_TIMES * few, few + _MORE) else best
            out.append(best)
        return out


def _try(found: _Found, checker: Checker, way: str, amount: float, waiting: BoolArray) -> None:
    """Fit the waiting pieces in one of the ways, look at the result, and mend what needs little."""
    source, chord_error = found.source, checker.chord_error
    tried = waiting
    if way == "even":
        tried, used, state = evenly(source, waiting, chord_error, int(amount))
    elif way == "need":
        used, state = by_need(source.only(waiting), chord_error, amount)
    else:
        used, state = by_bends(source.only(waiting), chord_error, amount, graded=way == "finest")
    if state is None:
        return
    part = source.only(tried)
    checked = checker.check(tried, used, state)
    found.take(tried, state, checked)
    before = number_of_spans(part, state)
    again = checked.hopeful & (before < part.spans) & (~checked.near | (checked.verdict.worse & (before >= _LONG)))
    if way == "even" or not again.any():
        return
    here = again[part.piece]
    weight = np.interp(part.along, used.along, state.weight / used.step) * part.step
    inner = state.inner[again[pieces_at(part, state.inner)]]
    rest = part.only(again)
    mended = settled(rest, inner, checked.u[here], weight[here], chord_error)
    if mended is not None:
        chosen = tried.copy()
        chosen[np.flatnonzero(tried)[~again]] = False
        found.take(chosen, mended, checker.check(chosen, rest, mended))
        swollen = number_of_spans(rest, mended) > _SWOLLEN * before[again]
        found.waiting[np.flatnonzero(chosen)[swollen]] = True
