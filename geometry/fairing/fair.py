"""Fair one polyline: corners kept sharp, everything between as fair as the tolerance band allows."""

from dataclasses import dataclass

import numpy as np

from geometry.arrays import FloatArray, IntArray
from geometry.bspline import Spline, join
from geometry.circle import circle_spline, whole_circle
from geometry.corners import Corners
from geometry.fairing.arcs import Drawn, recognised, with_chains
from geometry.fairing.band import CORNER_SEARCH, LIMIT, BandCheck, Nodes, repair
from geometry.fairing.ends import corner_points
from geometry.fairing.layout import Layout
from geometry.fairing.lobes import remove_lobes
from geometry.fairing.samples import by_own_length, reparametrised
from geometry.fairing.stiffness import Fit, relax, start_stiffness
from geometry.fairing.straight import straight_pieces, straightness_of
from geometry.fairing.system import System
from geometry.fairing.trace import Trace
from geometry.polyline import Polyline

__all__ = ["Faired", "fair_outline"]

_CIRCLE = 1e-3  # how near the spline of a circle lies to it
_CORNER_REACH = 0.97  # a corner may lie this far from the trace
_SETTLE, _SETTLINGS = 0.5, 3  # a corner may move this far when its sides pull, and how often at most
_AT_REST = 1e-3  # a pull that would move a corner by less leaves it where it is: a clean polygon keeps its vertices
_ONE_SIDED = 6.0  # stiffness of the first fits
_INSERTIONS = 8
_APART = 8.0  # stretches outside the band nearer than this get one corner between them
_CLEAR = (0.0, 1.05, -1.05, 2.1, -2.1, 3.2, -3.2, 4.3, -4.3)


@dataclass(frozen=True, slots=True)
class Faired:
    """A faired profile.

    Attributes:
        spline: the curve, with a knot of full multiplicity at every corner.
        corners: places of the corners, shape (n, d), in order of travel.
        inserted: corners added because no fair curve kept the band without them.
        as_given: whether even that failed, so that the curve is the polyline itself, vertex for vertex.
    """

    spline: Spline
    corners: FloatArray
    inserted: int
    as_given: bool
    circle: tuple[FloatArray, float] | None = None


def fair_outline(polyline: Polyline, corners: Corners, tolerance: float, degree: int = 3) -> Faired:
    """Fair a polyline between its corners; the trace of a whole circle becomes that circle.

    Sampled distances keep the result within 0.985 of the tolerance, both ways; the proof is left to the caller
    (`geometry.deviation`). Open ends stay exactly where they are drawn.

    Args:
        polyline: cleaned, 2-D or 3-D, drawing units.
        corners: where the tangent may jump.
        tolerance: largest distance allowed between the polyline and the curve, both ways, drawing units.
        degree: 3, or 2.
    """
    circle = whole_circle(polyline, tolerance) if not len(corners) else None
    if circle is not None:
        clockwise = polyline.area() < 0.0
        spline = circle_spline(*circle, _CIRCLE * tolerance, degree, clockwise)
        return Faired(spline, np.zeros((0, 2)), 0, False, circle)
    origin = 0.5 * (polyline.points.min(axis=0) + polyline.points.max(axis=0))
    path = (polyline.path() - origin) / tolerance
    trace = Trace(path, polyline.closed)
    kept = _separated(trace, corners.along / tolerance, np.abs(corners.turns))
    own, found = corners.along[kept] / tolerance, (corners.points[kept] - origin) / tolerance
    best: tuple[Fit, Nodes, BandCheck] | None = None
    inserted = 0
    for turn in range(_INSERTIONS + 1):
        try:
            attempt = _attempt(trace, own, found, degree)
        except np.linalg.LinAlgError:
            break
        if best is None or attempt[2].worst < best[2].worst:
            best = attempt
        if attempt[2].worst <= LIMIT or turn == _INSERTIONS:
            break
        before = len(own)
        own, found = _with_corners(trace, own, found, attempt[2], attempt[0])
        if len(own) == before:
            break
        inserted += len(own) - before
    if best is None or best[2].worst > LIMIT:
        return Faired(_as_given(polyline, degree), polyline.points, inserted, True)
    fit, nodes, _ = best
    spline = _spline(fit, nodes)
    control = spline.control * tolerance + origin
    if polyline.closed:
        control[-1] = control[0]
    else:
        control[0], control[-1] = polyline.points[0], polyline.points[-1]  # exactly: others may join there
    spline = Spline(spline.knots * tolerance, control, degree, polyline.closed, spline.smooth_seam)
    return Faired(spline, nodes.points[~nodes.fixed] * tolerance + origin, inserted, False)


def _separated(trace: Trace, own: FloatArray, weight: FloatArray) -> IntArray:
    """Return which corners to keep, at least one tolerance apart and from open ends, the sharper of two kept."""
    taken = np.zeros(0) if trace.closed else np.array([0.0, trace.length])
    kept: list[int] = []
    order = np.argsort(own, kind="stable")
    gaps = np.diff(np.concatenate([own[order], own[order][:1] + trace.length])) if own.size else own
    if own.size and gaps.min() >= 1.0 and (trace.closed or (own.min() >= 1.0 and own.max() <= trace.length - 1.0)):
        return order
    for k in np.argsort(-weight, kind="stable"):
        away = np.abs(taken - own[k])
        away = np.minimum(away, trace.length - away) if trace.closed else away
        if not away.size or away.min() >= 1.0:
            kept.append(int(k))
            taken = np.append(taken, own[k])
    chosen = np.array(kept, dtype=np.intp)
    return chosen[np.argsort(own[chosen], kind="stable")]


def _attempt(trace: Trace, own: FloatArray, found: FloatArray, degree: int) -> tuple[Fit, Nodes, BandCheck]:
    """Fit the pieces between given corners and hold them in the band."""
    closed = trace.closed
    periodic = closed and not own.size
    if periodic:
        bounds = np.array([0.0, trace.length])
    elif closed:
        bounds = np.append(own, own[0] + trace.length)
    else:
        bounds = np.concatenate([[0.0], own, [trace.length]])
    sampled = by_own_length(trace, bounds, periodic, degree)
    first = np.full(len(sampled.layout), _ONE_SIDED)
    coefficients = System(sampled.layout, sampled.points, sampled.live, None).solve(first)
    nodes = _nodes(trace, own, found, sampled.layout, coefficients)
    sampled = reparametrised(trace, sampled, coefficients, nodes.pins)
    straight = straight_pieces(sampled)
    fit = relax(sampled, start_stiffness(sampled.layout), nodes.pins, straightness_of(sampled, straight))
    for _ in range(_SETTLINGS):
        # a corner that was off may have cost a piece its straightness: it is asked for again where corners have settled
        stiffness = np.where(straight[sampled.layout.piece], start_stiffness(sampled.layout), fit.stiffness)
        nodes = _settled(trace, Fit(sampled, fit.coefficients, stiffness, straightness_of(sampled, straight)), nodes)
        again = reparametrised(trace, sampled, fit.coefficients, nodes.pins)
        stiffness = _carried(stiffness, sampled.layout, again.layout)
        fit, sampled = relax(again, stiffness, nodes.pins, straightness_of(again, straight)), again
        if not (straight[sampled.layout.piece] & (fit.straightness == 0.0)).any():
            break
    return _repaired(trace, remove_lobes(fit, nodes.pins), recognised(trace, fit, nodes.pins), nodes)


def _repaired(trace: Trace, fit: Fit, drawn: list[Drawn], nodes: Nodes) -> tuple[Fit, Nodes, BandCheck]:
    """Hold a fit in the band, with the pieces that are lines and arcs drawn as such where that does not break it.

    A chain runs between the corners that it was found with: one whose corner moves, or that leaves the band, is given
    up, and the rest is held in the band again.
    """
    while True:
        done = repair(trace, with_chains(fit, drawn, nodes.pins), nodes)
        lost = _given_up(fit, drawn, nodes, done)
        if not lost:
            return done
        drawn = [one for one in drawn if one.piece not in lost]


def _given_up(fit: Fit, drawn: list[Drawn], nodes: Nodes, done: tuple[Fit, Nodes, BandCheck]) -> set[int]:
    layout, check = fit.sampled.layout, done[2]
    curve, trace = np.flatnonzero((check.curve > LIMIT).any(axis=1)), check.trace_interval[check.trace > LIMIT]
    lost = set(layout.piece[np.concatenate([curve, trace])].tolist())
    if nodes.pins is not None and done[1].pins is not None:
        lost |= set(np.flatnonzero((nodes.pins != done[1].pins).any(axis=(1, 2))).tolist())
    return lost & {one.piece for one in drawn}


def _nodes(trace: Trace, own: FloatArray, found: FloatArray, layout: Layout, coefficients: FloatArray) -> Nodes:
    """Return the corners, where they were found if the band allows it, otherwise where the first fits meet."""
    count, closed = len(own), trace.closed
    points = found.copy()
    known = np.asarray(np.isfinite(found).all(axis=1))
    if known.any():
        known[known] = trace.distance(found[known], own[known], CORNER_SEARCH) <= _CORNER_REACH
    rest = np.flatnonzero(~known)
    if rest.size:
        before, after = ((rest - 1) % count, rest) if closed else (rest, rest + 1)
        points[rest] = corner_points(trace, layout, coefficients, before, after, own[rest], _CORNER_REACH)
    if closed:
        return Nodes(points, own, np.zeros(count, dtype=bool), True)
    fixed = np.ones(count + 2, dtype=bool)
    fixed[1:-1] = False
    ends = np.concatenate([[0.0], own, [trace.length]])
    return Nodes(np.concatenate([trace.path[:1], points, trace.path[-1:]]), ends, fixed, False)


def _settled(trace: Trace, fit: Fit, nodes: Nodes) -> Nodes:
    """Return the corners moved to where the two sides pull equally hard, as far as the band allows."""
    pins = nodes.pins
    if pins is None or nodes.fixed.all():
        return nodes
    sampled = fit.sampled
    force, second = System(sampled.layout, sampled.points, sampled.live, pins).end_forces(
        fit.stiffness, fit.straightness
    )
    if nodes.closed:
        pull, hold = force[:, 0] + np.roll(force[:, 1], 1, axis=0), second[:, 0] + np.roll(second[:, 1], 1)
    else:
        pull, hold = np.zeros_like(nodes.points), np.ones(len(nodes.points))
        pull[1:-1], hold[1:-1] = force[1:, 0] + force[:-1, 1], second[1:, 0] + second[:-1, 1]
    move = -pull / np.maximum(hold, 1e-9)[:, None]
    size = np.sqrt((move * move).sum(axis=1))
    move *= np.where(size < _AT_REST, 0.0, np.minimum(1.0, _SETTLE / np.maximum(size, 1e-12)))[:, None]
    points = nodes.points.copy()
    waiting = ~nodes.fixed
    for share in (1.0, 0.75, 0.5, 0.25):  # as far as the band allows
        trial = nodes.points + share * move
        reached = waiting & (trace.distance(trial, nodes.own, CORNER_SEARCH) <= _CORNER_REACH)
        points[reached] = trial[reached]
        waiting &= ~reached
    return nodes.moved(points)


def _carried(stiffness: FloatArray, old: Layout, layout: Layout) -> FloatArray:
    """Return the stiffness of a layout at the same relative places of another layout of the same pieces."""
    at = np.interp(
        layout.piece + (layout.local + 0.5) / layout.counts[layout.piece],
        old.piece + (old.local + 0.5) / old.counts[old.piece],
        stiffness,
    )
    return np.asarray(at)


def _with_corners(
    trace: Trace, own: FloatArray, found: FloatArray, check: BandCheck, fit: Fit
) -> tuple[FloatArray, FloatArray]:
    """Return the corners with one more in every stretch outside the band, where trace and curve lie farthest apart.

    The places of the new ones are not known yet. At most as many are added as there are, and eight besides.
    """
    out_trace, out_curve = check.trace > LIMIT, check.curve > LIMIT
    at = np.concatenate([check.trace_own[out_trace], fit.sampled.own[out_curve]])
    size = np.concatenate([check.trace[out_trace], check.curve[out_curve]])
    taken = own if trace.closed else np.concatenate([[0.0], own, [trace.length]])
    places: list[float] = []
    for place in at[np.argsort(-size, kind="stable")].tolist():
        others = np.append(taken, places)
        if places and _least_gap(trace, np.array(places), place) < _APART:
            continue
        for shift in _CLEAR:  # the nearest place that is a tolerance clear of the others
            moved = (place + shift) % trace.length if trace.closed else place + shift
            if 0.0 <= moved < trace.length and _least_gap(trace, others, moved) >= 1.0:
                places.append(moved)
                break
        if len(places) == len(own) + _INSERTIONS:
            break
    row = np.searchsorted(own, places)
    order = np.argsort(places, kind="stable")
    row, new = row[order], np.array(places)[order]
    return np.insert(own, row, new), np.insert(found, row, np.nan, axis=0)


def _least_gap(trace: Trace, places: FloatArray, place: float) -> float:
    """Return how near a place along the trace lies to the nearest of others."""
    if not places.size:
        return float(np.inf)
    gaps = np.abs(places - place)
    return float((np.minimum(gaps, trace.length - gaps) if trace.closed else gaps).min())


def _spline(fit: Fit, nodes: Nodes) -> Spline:
    """Return the uniform pieces as one clamped spline."""
    layout, degree = fit.sampled.layout, fit.sampled.layout.degree
    pieces = []
    for k, (start, count) in enumerate(zip(layout.starts, layout.counts, strict=True)):
        first = layout.first[start]
        c = fit.coefficients[first : first + count + degree]
        if degree == 3:
            head = [(c[0] + 4.0 * c[1] + c[2]) / 6.0, (2.0 * c[1] + c[2]) / 3.0]
            tail = [(c[-3] + 2.0 * c[-2]) / 3.0, (c[-3] + 4.0 * c[-2] + c[-1]) / 6.0]
            control = np.vstack([head, c[2:-2], tail])
        else:
            control = np.vstack([[(c[0] + c[1]) / 2.0], c[1:-1], [(c[-2] + c[-1]) / 2.0]])
        pins = nodes.pins
        if pins is not None:
            control[0], control[-1] = pins[k]
        inner = layout.lengths[k] * np.arange(count + 1) / count
        knots = np.concatenate([np.zeros(degree), inner, np.full(degree, inner[-1])])
        pieces.append(Spline(knots, control, degree))
    if pins is None:
        only = pieces[0]
        return Spline(only.knots, only.control, degree, True, True)
    return join(pieces, nodes.closed)


def _as_given(polyline: Polyline, degree: int) -> Spline:
    """Return the polyline as a spline with a corner at every vertex."""
    path = polyline.path()
    fraction = np.arange(degree) / degree
    control = (path[:-1, None] + fraction[:, None] * np.diff(path, axis=0)[:, None]).reshape(-1, path.shape[1])
    along = Polyline(path).alongs()
    knots = np.concatenate([[0.0], np.repeat(along, degree), along[-1:]])
    return Spline(knots, np.vstack([control, path[-1:]]), degree, polyline.closed)
