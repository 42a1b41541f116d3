"""Fewest knots: a spline written again with as few control points as a chord error allows.

Every smooth piece between corners is fitted anew, its knots placed by the need of the curve and thinned one by
one; corners stay where they are. The result is held against the source at samples (16 a span of the source, foot
points on the result), both ways at once: the pairing runs through both curves in order, from end to end. That is
a check by sampling, no proof; a certified bound is the caller's to ask for.
"""

import numpy as np

from geometry.arrays import BoolArray, FloatArray
from geometry.bspline import Spline, join
from geometry.economy.spline_fit import Fit, measure
from geometry.economy.spline_knots import State
from geometry.economy.spline_shape import Guard, Verdict
from geometry.economy.spline_source import Source, cut, sample, straight, turned_to_corner
from geometry.economy.spline_ways import evenly, thinned

__all__ = ["fewest_knots"]

_PER_SPAN = 4  # samples a span of the source while fitting
_CHECK = 16  # samples a span of the source for the last check
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
    ("last", 4.0),
    ("last", 16.0),
    ("last", 0.0),
)  # tried in turn until a piece is near enough and fair: equal spans, or knots laid for a finer chord error by a
# factor (0: as close as the source's own) and thinned; the last only where nothing else was even nearly as fair
_PASS = 0.995  # share of the chord error within which a piece is accepted


def fewest_knots(spline: Spline, chord_error: float) -> Spline:
    """Return a spline of the same degree with fewer control points within `chord_error` of the given one.

    Pieces between corners are C2 (degree 3) or C1 (degree 2) with simple interior knots; corners are knots of full
    multiplicity at the same points. Straight pieces become one span with control points exactly on a line. A
    closed spline whose seam is smooth and that has no corner stays closed with a seam as smooth as any
    knot, at a knot of the result; one that has corners begins at its first corner.

    No piece gets more curvature extrema or more inflections than it had, as `geometry.economy.spline_shape` counts
    them (degree 2: inflections only, for its curvature jumps; 3-D: extrema only). Where that cannot be had
    cheaply, bends to the other side are let pass that turn less than 1 degree and stand off by less than a fifth of
    the chord error; and where that finds nothing either, extrema that rise or fall by less than a tenth of the piece's
    range of curvature. A piece for which nothing shorter is found comes back as it was.

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
    second: dict[int, Spline] = {}  # near enough, but with more bends of the small sort than the source
    third: dict[int, Spline] = {}  # the same, with more small extrema of curvature
    line = straight(source, _LINE * chord_error)
    waiting = ~line
    for way, amount in _WAYS:
        if way == "last":
            waiting[list(second)] = False
        if not waiting.any():
            break
        if way == "line":
            line |= waiting & straight(source, 0.97 * chord_error)
            waiting &= ~line
            continue
        if way == "even":
            tried, state = evenly(source, waiting, chord_error, int(amount))
        else:
            tried, state = waiting.copy(), thinned(source.only(waiting), chord_error, amount, strict=way == "last")
        if state is None:
            continue
        part = source.only(tried)
        near, verdict = _checked(part, dense.only(tried), state, chord_error)
        for i, at in enumerate(np.flatnonzero(tried).tolist()):
            if not near[i] or verdict.unfair[i]:
                continue
            better = _clamped(state.fit, source.high[0]) if source.periodic else _piece(state.fit, i, part)
            if not verdict.worse[i]:
                waiting[at] = False
                new[at] = _shorter(better, new[at])
            elif verdict.badly[i]:
                third[at] = _shorter(better, third.get(at, better))
            else:
                second[at] = _shorter(better, second.get(at, better))
    for poorer in (second, third):
        for at, better in poorer.items():
            if new[at] is old[at]:
                new[at] = _shorter(better, old[at])
    if source.periodic:
        return spline if new[0] is old[0] else new[0].moved(origin)
    for i in np.flatnonzero(line).tolist():
        new[i] = _line(old[i], source.lengths[i])
    if all(a is b for a, b in zip(new, old, strict=True)):
        return spline
    there = cut(turned_to_corner(spline))
    return join([_at_home(piece, home) for piece, home in zip(new, there, strict=True)], spline.closed)


def _shorter(a: Spline, b: Spline) -> Spline:
    """Return the first of two splines if it has fewer control points, else the second."""
    return a if len(a.control) < len(b.control) else b


def _at_home(piece: Spline, home: Spline) -> Spline:
    """Return a piece moved to where its source stands, with exactly the same ends."""
    control = piece.control + (home.control[0] - piece.control[0])
    control[0], control[-1] = home.control[0], home.control[-1]
    return Spline(piece.knots, control, piece.degree)


def _checked(source: Source, dense: Source, state: State, chord_error: float) -> tuple[BoolArray, Verdict]:
    """Tell at dense samples which pieces are near enough, shape (pieces,), and how fair they are.

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
    return worst <= _PASS * chord_error, Guard(dense, chord_error, 1.1).check(state.fit, u)


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
