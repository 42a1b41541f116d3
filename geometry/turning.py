"""How a curve turns along its way: samples with tangent, curvature and the turn from each to the next.

One form for splines, arc chains and polylines, so that whatever is said about curvature is said once. Splines are
sampled at seven or more points a span and at the exact zeros of their curvature, arcs at their ends and middle,
polylines at vertices and middles of segments.
"""

from dataclasses import dataclass

import numpy as np

from geometry.arcs import ArcChain, bulge_points
from geometry.arrays import BoolArray, FloatArray, IntArray
from geometry.bspline import Spline, bezier_evaluate
from geometry.polyline import Polyline

__all__ = ["CORNER_ANGLE", "Trace", "trace_of"]

CORNER_ANGLE = np.radians(1.0)
"""A jump of the tangent over this, radians, is a corner of a spline or an arc chain."""

_VERTEX_CORNER = np.radians(20.0)  # polylines: least turn of a vertex between long segments that makes it a corner,
_LONG = 5.0  # and how many scales long both segments must be
_THIN = 0.1  # polylines: vertices nearer than this share of the scale to the last one kept are passed over

# Gauss-Lobatto points and weights on [0, 1], seven points (Abramowitz and Stegun, formula 25.4.32 and table 25.6)
_INNER = np.sqrt((5.0 + 2.0 * np.sqrt(5.0 / 3.0) * np.array([1.0, -1.0])) / 11.0)
_T = 0.5 + 0.5 * np.array([-1.0, -_INNER[0], -_INNER[1], 0.0, _INNER[1], _INNER[0], 1.0])
_LEGENDRE_6 = np.polynomial.legendre.legval(2.0 * _T - 1.0, [0.0] * 6 + [1.0])
_W = 1.0 / (42.0 * _LEGENDRE_6**2)  # half of 2 / (n (n - 1) P(x)^2), n = 7
_PARTS, _ENOUGH = 8, 160  # a spline of few spans has each sampled in equal parts: at most 8, 160 in all where it can


@dataclass(frozen=True, slots=True, eq=False)
class Trace:
    """Samples along a curve, in order of travel, cut at corners.

    Attributes:
        points: shape (m, d), drawing units, about a local origin for splines.
        tangents: unit tangents, shape (m, d).
        curvature: shape (m,), 1 / drawing units, left turn positive in the plane, never negative in space; NaN where
            it has no value (corners and open ends of polylines).
        turns: turn from each sample to the next, radians, signed in the plane, shape (m - 1,).
        corner: which of these steps pass a corner, shape (m - 1,).
        cyclic: closed without any corner; the last sample then repeats the first.
        corners: number of corners, one at the seam included.
        energy: integral of curvature squared over arc length, corners left out, 1 / drawing units.
        tightest: largest absolute curvature, corners left out, 1 / drawing units.
        origin: what to add to `points`, shape (d,).
    """

    points: FloatArray
    tangents: FloatArray
    curvature: FloatArray
    turns: FloatArray
    corner: BoolArray
    cyclic: bool
    corners: int
    energy: float
    tightest: float
    origin: FloatArray


def trace_of(curve: Spline | ArcChain | Polyline, scale: float, corners: FloatArray | None = None) -> Trace:
    """Sample the turning of a curve.

    Args:
        curve: open or closed, of some length.
        scale: drawing units; a polyline's detail under a tenth of it is passed over (0 keeps every vertex).
        corners: for polylines, arc lengths of the corners; None finds them: a vertex that turns by more than 20 degrees
            between two segments that are both longer than five scales. Not used for other curves, where a corner
            is a jump of the tangent over `CORNER_ANGLE`.
    """
    if isinstance(curve, Spline):
        return _spline_trace(curve)
    if isinstance(curve, ArcChain):
        return _chain_trace(curve)
    return _polyline_trace(curve, scale, corners)


def _turn(before: FloatArray, after: FloatArray) -> FloatArray:
    """Turn between vectors, signed in the plane, shape (n,)."""
    dot = (before * after).sum(axis=-1)
    if before.shape[-1] == 2:
        cross: FloatArray = before[..., 0] * after[..., 1] - before[..., 1] * after[..., 0]
    else:
        cross = np.linalg.norm(np.cross(before, after), axis=-1)
    return np.asarray(np.arctan2(cross, dot), dtype=np.float64)


def _assemble(
    parts: tuple[FloatArray, FloatArray, FloatArray, FloatArray],
    corner: BoolArray,
    closed: bool,
    measures: tuple[float, float],
    origin: FloatArray,
) -> Trace:
    """Close the loop of samples: `turns` and `corner` hold, when closed, one step more, from the last to the first."""
    points, tangents, curvature, turns = parts
    number = int(corner.sum())
    if closed and number:  # begin behind a corner, so that what is left is an open run
        shift = -(int(np.flatnonzero(corner)[0]) + 1)
        points, tangents = np.roll(points, shift, axis=0), np.roll(tangents, shift, axis=0)
        curvature, turns, corner = np.roll(curvature, shift), np.roll(turns, shift)[:-1], np.roll(corner, shift)[:-1]
    elif closed:
        points, tangents = np.vstack([points, points[:1]]), np.vstack([tangents, tangents[:1]])
        curvature = np.append(curvature, curvature[0])
    energy, tightest = measures
    return Trace(points, tangents, curvature, turns, corner, closed and not number, number, energy, tightest, origin)


# Splines -----------------------------------------------------------------------------------------------------------


def _spline_trace(spline: Spline) -> Trace:
    origin = spline.control[0]
    b = spline.moved(-origin).beziers
    rule, weights = _rule(len(b))
    t = np.broadcast_to(rule, (len(b), len(rule)))
    point = bezier_evaluate(b[:, None], rule, 0)
    slope, curvature, speed = _curvature(b[:, None], rule)
    energy, tightest = float(((curvature**2 * speed) @ weights).sum()), _tightest(b, rule, curvature)
    if spline.degree == 3 and spline.dimension == 2:
        t, point, slope, curvature, speed = _with_inflections(b, t, point, slope, curvature, speed)
    span = np.repeat(np.arange(len(b)), t.shape[1])
    moving = speed.ravel() > 0.0  # a span may start or end at rest: its tangent is that of the next sample
    d = spline.dimension
    point, slope = point.reshape(-1, d), slope.reshape(-1, d)
    speed, curvature = speed.ravel(), curvature.ravel()
    if not moving.all():
        point, slope, speed, curvature = (row[moving] for row in (point, slope, speed, curvature))
        span = span[moving]
    tangent = slope / speed[:, None]
    if spline.closed:
        turns, joint = _turn(tangent, np.roll(tangent, -1, axis=0)), np.append(span[1:] != span[:-1], True)
    else:
        turns, joint = _turn(tangent[:-1], tangent[1:]), span[1:] != span[:-1]
    corner = joint & (np.abs(turns) > CORNER_ANGLE)
    return _assemble((point, tangent, curvature, turns), corner, spline.closed, (energy, tightest), origin)


def _rule(spans: int) -> tuple[FloatArray, FloatArray]:
    """Points on [0, 1] at which to sample each span, and their weights as a quadrature rule."""
    parts = min(_PARTS, max(1, _ENOUGH // spans))
    share = (np.arange(parts)[:, None] + _T) / parts
    weight = np.tile(_W / parts, (parts, 1))
    weight[1:, 0] += weight[:-1, -1]  # an inner joint is one point
    return np.append(share[:, :-1], 1.0), np.append(weight[:, :-1], weight[-1, -1])


def _with_inflections(
    b: FloatArray, t: FloatArray, point: FloatArray, slope: FloatArray, curvature: FloatArray, speed: FloatArray
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray, FloatArray]:
    """Put the exact zeros of the curvature in among the samples of every span, two each: none stands at t = 0."""
    roots = _inflection_parameters(b)
    found = np.flatnonzero((roots > 0.0).any(axis=1))
    pad = np.zeros((len(b), 2))
    extra_slope, extra_curvature = np.repeat(slope[:, :1], 2, axis=1), np.repeat(curvature[:, :1], 2, axis=1)
    extra_point, extra_speed = np.repeat(point[:, :1], 2, axis=1), np.repeat(speed[:, :1], 2, axis=1)
    if found.size:
        pieces = b[found][:, None]
        extra_point[found] = bezier_evaluate(pieces, roots[found], 0)
        extra_slope[found], extra_curvature[found], extra_speed[found] = _curvature(pieces, roots[found])
        extra_curvature[roots > 0.0] = 0.0
        pad[found] = roots[found]
    t = np.concatenate([pad, t], axis=1)
    order = np.argsort(t, axis=1, kind="stable")
    row = np.arange(len(b))[:, None]
    joined = (
        np.concatenate(pair, axis=1)
        for pair in ((extra_point, point), (extra_slope, slope), (extra_curvature, curvature), (extra_speed, speed))
    )
    a, c, d, e = (values[row, order] for values in joined)
    return t[row, order], a, c, d, e


def _curvature(b: FloatArray, t: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """First derivative, curvature and speed of Bezier pieces; where the speed is nothing to its piece both are 0."""
    first, second = bezier_evaluate(b, t, 1), bezier_evaluate(b, t, 2)
    speed = np.sqrt((first * first).sum(axis=-1))
    size = np.abs(b - b[..., :1, :]).max(axis=(-1, -2))
    speed = np.where(speed > 1e-9 * size, speed, 0.0)
    if b.shape[-1] == 2:
        cross = first[..., 0] * second[..., 1] - first[..., 1] * second[..., 0]
    else:
        cross = np.linalg.norm(np.cross(first, second), axis=-1)
    return first, np.divide(cross, speed**3, out=np.zeros_like(cross), where=speed > 0.0), speed


def _inflection_parameters(b: FloatArray) -> FloatArray:
    """Zeros of the curvature of planar cubic Bezier pieces, shape (m, 2), 0 for each that is not within (0, 1).

    With the control point differences D0, D1, D2 the cross product of C' and C'' is in proportion to
    D0 x D1 (1 - t)^2 + D0 x D2 t (1 - t) + D1 x D2 t^2.
    """
    d = np.diff(b, axis=1)
    x, y = d[..., 0], d[..., 1]
    first, last = x[:, 0] * y[:, 1] - y[:, 0] * x[:, 1], x[:, 1] * y[:, 2] - y[:, 1] * x[:, 2]
    middle = x[:, 0] * y[:, 2] - y[:, 0] * x[:, 2]
    a2, a1, a0 = first - middle + last, middle - 2.0 * first, first
    q = -0.5 * (a1 + np.copysign(np.sqrt(np.maximum(a1 * a1 - 4.0 * a2 * a0, 0.0)), a1))
    real = a1 * a1 >= 4.0 * a2 * a0
    roots = np.stack(
        [
            np.divide(top, bottom, out=np.zeros_like(top), where=real & (np.abs(bottom) > np.abs(top)))
            for top, bottom in ((q, a2), (a0, q))
        ],
        axis=1,
    )
    return np.where((roots > 0.0) & (roots < 1.0), roots, 0.0)


def _tightest(b: FloatArray, rule: FloatArray, curvature: FloatArray) -> float:
    """Largest absolute curvature: the tightest spans are searched again between the neighbours of their top sample."""
    top = np.abs(curvature).max(axis=1)
    piece = np.argsort(top)[-16:]
    at = np.abs(curvature[piece]).argmax(axis=1)
    row = np.arange(len(piece))
    low, high = rule[np.maximum(at - 1, 0)], rule[np.minimum(at + 1, len(rule) - 1)]
    share, best = np.linspace(0.0, 1.0, 9), float(top.max())
    for _ in range(4):
        where = low[:, None] + (high - low)[:, None] * share
        value = np.abs(_curvature(b[piece][:, None], where)[1])
        best = max(best, float(value.max()))
        at = value.argmax(axis=1)
        low, high = where[row, np.maximum(at - 1, 0)], where[row, np.minimum(at + 1, 8)]
    return best


# Arc chains --------------------------------------------------------------------------------------------------------


def _chain_trace(chain: ArcChain) -> Trace:
    keep = np.flatnonzero(chain.chord_lengths() > 0.0)
    path = chain.path()
    start, chord, bulge = path[keep], (path[keep + 1] - path[keep]), chain.bulges[keep]
    length = np.linalg.norm(chord, axis=1)
    curvature, sweep = 4.0 * bulge / (length * (1.0 + bulge**2)), 4.0 * np.arctan(bulge)
    heading = np.arctan2(chord[:, 1], chord[:, 0])
    middle = bulge_points(start, chord, bulge, np.full(len(bulge), 0.5))
    points = np.stack([start, middle, start + chord], axis=1).reshape(-1, 2)
    angle = (heading[:, None] + sweep[:, None] * np.array([-0.5, 0.0, 0.5])).ravel()
    tangents = np.stack([np.cos(angle), np.sin(angle)], axis=1)
    following = np.roll(tangents[0::3], -1, axis=0)
    joint = _turn(tangents[2::3], following)
    turns = np.stack([0.5 * sweep, 0.5 * sweep, joint], axis=1).ravel()
    corner = np.zeros(len(turns), dtype=np.bool_)
    corner[2::3] = np.abs(joint) > CORNER_ANGLE
    if not chain.closed:
        turns, corner = turns[:-1], corner[:-1]
    energy = float(np.abs(curvature * sweep).sum())  # k^2 times length
    parts = (points, tangents, np.repeat(curvature, 3), turns)
    return _assemble(parts, corner, chain.closed, (energy, float(np.abs(curvature).max())), np.zeros(2))


# Polylines ---------------------------------------------------------------------------------------------------------


def _polyline_trace(polyline: Polyline, scale: float, corners: FloatArray | None) -> Trace:
    points, forced = _thinned(polyline, _THIN * scale, corners)
    closed = polyline.closed and len(points) > 2
    n, d = points.shape
    edge = np.roll(points, -1, axis=0) - points  # the last one closes the loop
    size = np.linalg.norm(edge, axis=1)
    if not closed:
        size[-1] = 0.0
    unit = np.divide(edge, size[:, None], out=np.zeros_like(edge), where=size[:, None] > 0.0)
    previous = np.roll(unit, 1, axis=0)
    turn, reach = _turn(previous, unit), 0.5 * (size + np.roll(size, 1))
    if not closed:
        turn[[0, -1]] = 0.0
    if corners is None:
        long = np.minimum(size, np.roll(size, 1)) > _LONG * scale
        is_corner = long & (np.abs(turn) > _VERTEX_CORNER)
    else:
        is_corner = forced
    if not closed:
        is_corner[[0, -1]] = False
    curvature = np.divide(turn, reach, out=np.zeros_like(turn), where=reach > 0.0)
    smooth = ~is_corner
    energy, tightest = float((curvature * turn)[smooth].sum()), float(np.abs(curvature[smooth]).max(initial=0.0))
    # samples in order: arriving at the vertex, (leaving it, where it is a corner,) middle of the segment behind it
    curvature = np.where(is_corner, np.nan, curvature)
    if not closed:
        curvature[[0, -1]] = np.nan
    after = np.roll(curvature, -1)
    middle_k = np.where(np.isnan(curvature), after, np.where(np.isnan(after), curvature, 0.5 * (curvature + after)))
    middle_k[np.isnan(middle_k)] = 0.0  # a segment between two corners
    half = np.where(is_corner, 0.0, 0.5 * turn)
    bisector = previous + unit
    norm = np.linalg.norm(bisector, axis=1, keepdims=True)
    bisector = np.divide(bisector, norm, out=unit.copy(), where=norm > 1e-9)
    rows = (
        np.stack([points, points, points + 0.5 * edge], axis=1).reshape(-1, d),
        np.stack([np.where(is_corner[:, None], previous, bisector), unit, unit], axis=1).reshape(-1, d),
        np.stack([curvature, curvature, middle_k], axis=1).ravel(),
        np.stack([np.where(is_corner, turn, 0.0), half, np.roll(half, -1)], axis=1).ravel(),
    )
    flag = np.stack([is_corner, np.zeros(n, dtype=np.bool_), np.zeros(n, dtype=np.bool_)], axis=1).ravel()
    keep = np.stack([np.ones(n, dtype=np.bool_), ~smooth, np.ones(n, dtype=np.bool_)], axis=1).ravel()
    samples = tuple(row[keep] for row in rows[:3])
    # the step of a dropped sample (a smooth vertex's second) is the one that leaves the vertex: it takes its place
    step = np.stack([np.where(is_corner, turn, half), half, np.roll(half, -1)], axis=1).ravel()[keep]
    flag = flag[keep]
    if not closed:  # the last vertex has no segment behind it
        samples, step, flag = tuple(row[:-1] for row in samples), step[:-2], flag[:-2]
    parts = (samples[0], samples[1], samples[2], step)
    return _assemble(parts, flag, closed, (energy, tightest), np.zeros(d))


def _thinned(polyline: Polyline, least: float, corners: FloatArray | None) -> tuple[FloatArray, BoolArray]:
    """Vertices no nearer than `least` along to the one kept before, and which of them are named corners."""
    alongs = polyline.alongs()
    n = len(polyline.points)
    named = np.zeros(n, dtype=np.bool_)
    if corners is not None and len(corners):
        named[_nearest(alongs, np.asarray(corners, dtype=np.float64)) % n] = True
    steps = np.diff(alongs)
    if len(steps) and steps.min() >= least > 0.0:
        return polyline.points, named
    kept, last = [0], 0.0
    forced = named.tolist()
    for index, along in enumerate(alongs[1:n].tolist(), start=1):
        if along - last > 0.0 and (along - last >= least or forced[index]):
            kept.append(index)
            last = along
    whole = alongs[-1]
    if polyline.closed:
        while len(kept) > 3 and whole - alongs[kept[-1]] < least and not forced[kept[-1]]:
            kept.pop()
    elif kept[-1] != n - 1 and whole > alongs[kept[-1]]:
        if len(kept) > 1 and not forced[kept[-1]]:
            kept.pop()  # the end itself must stay
        kept.append(n - 1)
    chosen = np.array(kept, dtype=np.intp)
    return polyline.points[chosen], named[chosen]


def _nearest(alongs: FloatArray, wanted: FloatArray) -> IntArray:
    right = np.clip(np.searchsorted(alongs, wanted), 1, len(alongs) - 1)
    return (right - (wanted - alongs[right - 1] < alongs[right] - wanted)).astype(np.intp)
