"""Fewest knots: a spline written again with as few control points as a chord error allows.

Every smooth piece between corners is fitted anew, its knots placed by the need of the curve and thinned one by
one; corners stay where they are. The result is held against the source at samples (16 a span of the source, foot
points on the result), both ways at once: the pairing runs through both curves in order, from end to end. That is
a check by sampling, no proof; a certified bound is the caller's to ask for.
"""

import numpy as np

from geometry.arrays import BoolArray, FloatArray
from geometry.bspline import Spline, join
from geometry.economy.spline_fit import Basis, Fit, measure
from geometry.economy.spline_knots import (
    State,
    add_where_over,
    bent,
    level,
    place,
    refit,
    remove,
    respaced,
    smoothed,
    spacing,
    uniform,
)
from geometry.economy.spline_shape import Guard
from geometry.economy.spline_source import Source, cut, sample, straight, turned_to_corner

__all__ = ["fewest_knots"]

_PER_SPAN = 4  # samples a span of the source while fitting
_CHECK = 16  # samples a span of the source for the last check
_AIM = 0.985  # share of the chord error that the fit may use; the rest covers what lies between samples
_LINE = 0.05  # share of the chord error within which a piece counts as drawn straight
_WAYS = (
    ("even", 1.0),
    ("line", 0.0),
    ("even", 2.0),
    ("thin", 1.0),
    ("even", 3.0),
    ("even", 4.0),
    ("even", 5.0),
    ("even", 6.0),
    ("even", 8.0),
    ("even", 11.0),
    ("thin", 4.0),
    ("thin", 16.0),
    ("own", 0.0),
)  # tried in turn until a piece is near enough and fair: equal spans, or knots for a finer chord error thinned
_HOPEFUL = 4.0  # ratio up to which levelling may still bring a fit within the chord error
_BENT = (0.01, 0.03)  # pull of the source's curvature where a thinned fit is not fair
_PASS = 0.995  # share of the chord error within which a piece is accepted
RESP = 2
_DENSER = 2  # times that knots are laid a third more densely in pieces that start out unfair
_EXTRA = 1.25  # knots to begin with, over what the spacing field asks for


def fewest_knots(spline: Spline, chord_error: float) -> Spline:
    """Return a spline of the same degree with fewer control points within `chord_error` of the given one.

    Pieces between corners are C2 (degree 3) or C1 (degree 2) with simple interior knots; corners are knots of full
    multiplicity at the same points. Straight pieces become one span with control points exactly on a line. A
    closed spline whose seam is smooth and that has no corner stays closed with a seam as smooth as any
    knot, at a knot of the result; one that has corners begins at its first corner. A piece for which
    nothing cheaper is found that is as fair (no more inflections, no more curvature extrema; degree 2:
    inflections only, for its curvature jumps) comes back as it was.

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
    source = sample(rotated, _PER_SPAN)
    if not (np.all(np.isfinite(source.along)) and np.all(source.lengths > 0.0)):
        return spline
    dense = sample(rotated, _CHECK)
    old = cut(rotated)
    new: list[Spline] = list(old)
    line = straight(source, _LINE * chord_error)
    waiting = ~line
    for way, amount in _WAYS:
        if not waiting.any():
            break
        if way == "line":
            line |= waiting & straight(source, 0.97 * chord_error)
            waiting &= ~line
            continue
        tried, state = _attempt(source, waiting, chord_error, way, amount)
        if state is None:
            continue
        part = source.only(tried)
        good = _accept(part, dense.only(tried), state, chord_error)
        if source.periodic:
            if good[0]:
                better = _clamped(state.fit, source.high[0])
                return better.moved(origin) if len(better.control) < len(spline.control) else spline
            continue
        for i, at in enumerate(np.flatnonzero(tried).tolist()):
            if good[i]:
                better = _piece(state.fit, i, part)
                new[at] = better if len(better.control) < len(old[at].control) else old[at]
        waiting[np.flatnonzero(tried)[good]] = False
    for i in np.flatnonzero(line).tolist():
        new[i] = _line(old[i], source.lengths[i])
    if all(a is b for a, b in zip(new, old, strict=True)):
        return spline
    there = cut(turned_to_corner(spline))
    return join([_at_home(piece, home) for piece, home in zip(new, there, strict=True)], spline.closed)


def _at_home(piece: Spline, home: Spline) -> Spline:
    """Return a piece moved to where its source stands, with exactly the same ends."""
    control = piece.control + (home.control[0] - piece.control[0])
    control[0], control[-1] = home.control[0], home.control[-1]
    return Spline(piece.knots, control, piece.degree)


def _attempt(
    source: Source, pieces: BoolArray, chord_error: float, way: str, amount: float
) -> tuple[BoolArray, State | None]:
    """Fit some of the pieces in one of the ways; return which were fitted, shape (pieces,), and their state."""
    if way == "even":
        return _evenly(source, pieces, chord_error, int(amount))
    return pieces, _thinned(source.only(pieces), chord_error, amount)


def _evenly(source: Source, pieces: BoolArray, chord_error: float, number: int) -> tuple[BoolArray, State | None]:
    """Fit with a number of equal spans a piece those pieces for which that looks hopeful at the first fit."""
    pieces = pieces & (source.spans > number)
    if not pieces.any() or (source.periodic and number < source.degree + 2):
        return pieces, None
    part = source.only(pieces)
    allowed = np.full(len(part.along), _AIM * chord_error)
    state = refit(part, Basis(part, uniform(part, np.full(len(part.low), number))), part.along, part.step, allowed)
    if state is None:
        return pieces, None
    hopeful = np.maximum.reduceat(state.ratio, part.first[:-1]) <= _HOPEFUL
    if not hopeful.any():
        return pieces, None
    if not hopeful.all():
        kept = hopeful[part.piece]
        chosen = pieces.copy()
        chosen[np.flatnonzero(pieces)[~hopeful]] = False
        pieces, part, allowed, u = chosen, source.only(chosen), allowed[kept], state.u[kept]
        basis = Basis(part, uniform(part, np.full(len(part.low), number)))
        state = refit(part, basis, u, part.step, allowed)
    for _ in range(3):
        if state is not None and state.ratio.max() > 1.0:
            state = level(part, state, allowed)
    return pieces, state


def _thinned(source: Source, chord_error: float, finer: float) -> State | None:
    """Lay knots, finer than the chord error asks for by a factor (0: as close as the source's own), then thin them."""
    allowed = np.full(len(source.along), _AIM * chord_error)
    closest = 0.5 * source.lengths / source.spans
    guard = Guard(source, chord_error)
    if finer:
        state = _laid(source, guard, allowed, closest, finer)
    else:
        state = refit(source, Basis(source, uniform(source, source.spans)), source.along, source.step, allowed)
    if state is None:
        return None
    state = remove(source, state, allowed, guard)
    state = _mend(source, state, allowed, closest)
    for _ in range(RESP):
        again = respaced(source, state, allowed, guard)
        if again is None or again.ratio.max() > 1.0:
            break
        state = again
    for share in _BENT:
        worse = guard.check(state.fit, state.u).worse
        if not worse.any():
            break
        trial = bent(source, state, allowed, worse, share)
        if trial is None or trial.ratio.max() > 1.0:
            break
        state = trial
    return state


def _laid(
    source: Source, guard: Guard, allowed: FloatArray, closest: FloatArray, finer: float
) -> State | None:
    """Lay knots by the spacing field, some more than it asks for, and more again in pieces that come out unfair."""
    need = smoothed(source, spacing(source, allowed / finer), 0.75)
    state: State | None = None
    for turn in range(_DENSER + 1):
        state = refit(source, Basis(source, place(source, need, _EXTRA)), source.along, source.step, allowed)
        if state is None:
            break
        state = _mend(source, state, allowed, closest)
        if turn == _DENSER:
            break
        worse = guard.check(state.fit, state.u).worse
        if not worse.any():
            break
        need = np.where(worse[source.piece], 0.75 * need, need)
    return state


def _mend(source: Source, state: State, allowed: FloatArray, closest: FloatArray) -> State:
    """Level, then halve spans that are over, a few times."""
    for _ in range(6):
        for _ in range(2):
            if state.ratio.max() <= 1.0:
                return state
            state = level(source, state, allowed) or state
        if state.ratio.max() <= 1.0:
            break
        more = add_where_over(source, state, closest)
        if more is None:
            break
        state = refit(source, Basis(source, more), state.u, state.weight, allowed) or state
    return state


def _accept(source: Source, dense: Source, state: State, chord_error: float) -> BoolArray:
    """Tell which pieces are close enough at dense samples, and as fair as they were, shape (pieces,).

    A point of the fit between two samples is at most half their distance along the fit away from one of them; so
    where that is a good deal more than along the source, half of the surplus is added to the distances.
    """
    u = _carried(source, dense, state.u)
    distance = np.zeros(len(u))
    for _ in range(3):
        u, distance = measure(dense, state.fit, u)
    inside = dense.piece[1:] == dense.piece[:-1]
    ahead = np.where(inside, np.diff(u), 0.0)
    speed = [_speed(state.fit, v) for v in (u[:-1], u[:-1] + 0.5 * ahead, u[:-1] + (1.0 - 1e-9) * ahead)]
    run = ahead * (speed[0] + 4.0 * speed[1] + speed[2]) / 6.0
    surplus = 0.5 * np.maximum(run - 1.25 * np.where(inside, np.diff(dense.along), 0.0), 0.0)
    between = np.append(np.maximum(distance[1:], distance[:-1]) + surplus, 0.0)
    worst = np.maximum.reduceat(np.where(np.append(inside, False), between, distance), dense.first[:-1])
    return (worst <= _PASS * chord_error) & ~Guard(dense, chord_error, 1.2).check(state.fit, u).worse


def _speed(fit: Fit, u: FloatArray) -> FloatArray:
    slope = fit.at(*fit.basis.locate(u), 1)[1]
    return np.sqrt((slope * slope).sum(axis=0))


def _carried(source: Source, dense: Source, u: FloatArray) -> FloatArray:
    """Return start parameters for denser samples of the same curve."""
    share = (dense.along - dense.low[dense.piece]) * (source.lengths / dense.lengths)[dense.piece]
    at = source.low[dense.piece] + share
    if source.periodic:
        period = source.high[0]
        return np.interp(at, np.append(source.along, period), np.append(u, u[0] + period))
    return np.interp(at, source.along, u)


def _line(piece: Spline, length: float) -> Spline:
    """Return the straight line between the ends as one span."""
    p = piece.degree
    share = np.linspace(0.0, 1.0, p + 1)[:, None]
    control = piece.control[0] + share * (piece.control[-1] - piece.control[0])
    control[-1] = piece.control[-1]
    return Spline(np.repeat([0.0, length], p + 1), control, p)


def _piece(fit: Fit, index: int, source: Source) -> Spline:
    """Return one piece of a fit as a clamped spline."""
    basis, p = fit.basis, source.degree
    low, high = source.low[index], source.high[index]
    inner = basis.inner[(basis.inner > low) & (basis.inner < high)] - low
    knots = np.concatenate([np.zeros(p + 1), inner, np.full(p + 1, high - low)])
    first, last = basis.fixed[2 * index : 2 * index + 2]
    return Spline(knots, fit.control[first : last + 1], p)


def _clamped(fit: Fit, period: float) -> Spline:
    """Return a periodic fit as a clamped closed spline over one period, by knot insertion at its first break.

    Control point j of the fit is the blossom at breaks j - p + 1 .. j, so those from p - 1 to n stay.
    """
    breaks, p = fit.basis.inner, fit.basis.ids.shape[1] - 1
    n = len(breaks)
    start, end = breaks[0], breaks[0] + period
    full = np.concatenate([[start] * (p + 1), breaks[1:], [end] * (p + 1)])
    control = np.empty((n + p, fit.control.shape[1]))
    control[p - 1 : n + 1] = fit.control[np.arange(p - 1, n + 1) % n]
    for j in range(p - 1):
        control[j] = _periodic_blossom(fit, period, 0, full[j + 1 : j + p + 1])
        control[n + 1 + j] = _periodic_blossom(fit, period, n - 1, full[n + 2 + j : n + 2 + j + p])
    control[-1] = control[0]
    return Spline(full - start, control, p, closed=True, smooth_seam=True)


def _periodic_blossom(fit: Fit, period: float, span: int, arguments: FloatArray) -> FloatArray:
    """Return the blossom of the polynomial on one span of a periodic fit, shape (d,)."""
    breaks, p = fit.basis.inner, len(arguments)
    n = len(breaks)
    window = np.arange(span - p, span + p + 1)
    knots = breaks[window % n] + period * (window // n)  # knots[p] is the start of the span
    points = [fit.control[(span + j) % n] for j in range(p + 1)]
    for r, u in enumerate(arguments.tolist(), start=1):
        for j in range(p, r - 1, -1):
            left, right = knots[j], knots[p + 1 + j - r]
            w = (u - left) / (right - left)
            points[j] = (1.0 - w) * points[j - 1] + w * points[j]
    return points[p]
