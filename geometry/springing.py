"""A curve sprung through stations: runs between corners, directions at the ends, open or closed."""

from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from geometry.arrays import FloatArray, IntArray
from geometry.bspline import Spline, join
from geometry.curve import Curve
from geometry.errors import GeometryError
from geometry.interpolate import (
    EndCondition,
    cubic_spline,
    linear_spline,
    periodic_cubic_spline,
    periodic_quadratic_spline,
    quadratic_spline,
    quadratic_spline_on_nodes,
)
from geometry.nearest import SegmentSearch
from geometry.parameter import ParameterKind, node_parameters
from geometry.stations.within import spring_within

__all__ = ["Sprung", "corner_rows", "distances_from", "spring"]


@dataclass(frozen=True, slots=True, eq=False)
class Sprung:
    """A curve through stations.

    Attributes:
        spline: the curve; a closed one with corners begins at the first of them.
        parameters: of the stations in order of travel, shape (n,), or (n + 1,) when closed: with the return.
        rows: station of every parameter but the return, shape (n,).
    """

    spline: Spline
    parameters: FloatArray
    rows: IntArray


def spring(
    points: FloatArray,
    closed: bool = False,
    corners: IntArray | list[int] | tuple[int, ...] = (),
    degree: int = 3,
    ends: EndCondition = "not-a-knot",
    parameter: ParameterKind = "chord",
    start: FloatArray | None = None,
    end: FloatArray | None = None,
    tolerance: float | None = None,
) -> Sprung:
    """Return the curve through stations, split at corners.

    Degree 3 takes the end condition at open ends and on both sides of every corner; where it is clamped and no
    direction is given (at corners, or at the other end), the slope there is that of the not-a-knot spline of the same
    run. Degree 2 has its knots midway between the stations, with a direction at its start in the stations.

    Args:
        points: stations in order, shape (n, d), drawing units; the first is not repeated when closed.
        closed: whether the curve returns to the first station.
        corners: rows at which it has a corner; at open ends that says nothing.
        degree: 1, 2 or 3.
        ends: "periodic" is for closed curves: their seam is smooth. A closed curve with other ends and no corners has
            a corner at the first station.
        parameter: chord length, centripetal or uniform.
        start, end: directions of travel at the ends of an open curve, shape (d,), any length but 0. Both are of degree
            3 with clamped ends, the start alone of degree 2 as well.
        tolerance: stations may be met within this distance, for the fairest curve; None or 0 meets them exactly.

    Raises:
        GeometryError: points or settings that cannot be used.
    """
    p = np.ascontiguousarray(points, dtype=np.float64)
    n = len(p)
    cuts = np.unique(np.asarray(corners, dtype=np.intp))
    if cuts.size and not (cuts[0] >= 0 and cuts[-1] < n):
        raise GeometryError(f"corners must be rows from 0 to {n - 1}")
    if ends == "periodic" and not closed:
        raise GeometryError("periodic ends are for closed curves; close it or use other ends")
    _check_directions(closed, degree, ends, start, end)
    rows = np.arange(n)
    if closed and not cuts.size and ends != "periodic":
        cuts = np.zeros(1, dtype=np.intp)
    if closed and cuts.size:
        rows = np.roll(rows, -int(cuts[0]))
        p, cuts = p[rows], cuts - cuts[0]
    u = node_parameters(p, parameter, closed)
    first, last = _slope(p, u, start, 0), _slope(p, u, end, n - 2)
    if tolerance is not None and tolerance > 0.0:
        if (first is not None or last is not None) and (degree == 2 or first is None or last is None):
            raise GeometryError(
                "with a tolerance, directions are for degree 3 and for both ends together; give both or leave them out"
            )
        used: EndCondition = "not-a-knot" if cuts.size and ends in ("periodic", "clamped") else ends
        return Sprung(spring_within(p, u, tolerance, closed, cuts, degree, used, first, last), u, rows)
    if closed and not cuts.size:
        whole = {1: lambda: linear_spline(p, u, True), 2: lambda: periodic_quadratic_spline(p, u)}
        return Sprung(whole.get(degree, lambda: periodic_cubic_spline(p, u))(), u, rows)
    path = np.vstack([p, p[:1]]) if closed else p
    stops = np.unique(np.concatenate([[0], cuts, [len(path) - 1]])).tolist()
    pieces = []
    for low, high in pairwise(stops):
        part = slice(low, high + 1)
        at_start, at_end = (first if low == 0 else None), (last if high == stops[-1] else None)
        pieces.append(_run(path[part], u[part], degree, ends, at_start, at_end))
    return Sprung(join(pieces, closed) if closed or len(pieces) > 1 else pieces[0], u, rows)


def _check_directions(
    closed: bool, degree: int, ends: EndCondition, start: FloatArray | None, end: FloatArray | None
) -> None:
    if degree not in (1, 2, 3):
        raise GeometryError(f"a degree of {degree} cannot be used; it must be 1, 2 or 3")
    if start is None and end is None:
        if ends == "clamped" and degree == 3:
            raise GeometryError("clamped ends need a direction at one end at least; give it, or use other ends")
        return
    if closed:
        raise GeometryError("a closed curve has no ends that could have directions; leave them out")
    if degree == 1 or (degree == 2 and end is not None):
        raise GeometryError(
            "a direction at the start is for degrees 2 and 3, one at the end for degree 3; leave it out"
        )
    if degree == 3 and ends != "clamped":
        raise GeometryError(f"directions are for clamped ends, not for {ends} ones; leave one of the two out")


def _slope(p: FloatArray, u: FloatArray, direction: FloatArray | None, at: int) -> FloatArray | None:
    """Return a direction as a slope as fast as the chord between two stations."""
    if direction is None:
        return None
    way = np.asarray(direction, dtype=np.float64)
    size = float(np.linalg.norm(way))
    if way.shape != p.shape[1:] or not (np.isfinite(size) and size > 0.0):
        raise GeometryError("a direction must have as many coordinates as a station, finite and not all 0")
    chord = float(np.linalg.norm(p[at + 1] - p[at]))
    return way * (chord / (size * float(u[at + 1] - u[at])))


def _run(
    p: FloatArray, u: FloatArray, degree: int, ends: EndCondition, start: FloatArray | None, end: FloatArray | None
) -> Spline:
    """Return the curve through one run of stations without corners."""
    if degree == 1:
        return linear_spline(p, u)
    if degree == 2:
        if start is not None or len(p) == 2:
            return quadratic_spline_on_nodes(p, u, start)
        return quadratic_spline(p, u)
    free: EndCondition = "natural" if ends == "natural" else "not-a-knot"
    if ends != "clamped" or (start is None and end is None):
        return cubic_spline(p, u, free)
    if start is None or end is None:
        slopes = cubic_spline(p, u, "not-a-knot").evaluate(u[[0, -1]], 1)
        start, end = (slopes[0] if start is None else start), (slopes[1] if end is None else end)
    return cubic_spline(p, u, "clamped", start, end)


def corner_rows(points: FloatArray, closed: bool, angle: float) -> list[int]:
    """Return the rows at which the path through stations turns by more than an angle.

    Args:
        points: neighbours apart, shape (n, d).
        closed: whether it returns to the first station.
        angle: radians.
    """
    path = np.vstack([points[-1:], points, points[:1]]) if closed else points
    steps = np.diff(path, axis=0)
    steps /= np.linalg.norm(steps, axis=1)[:, None]
    turn = 2.0 * np.arcsin(np.clip(0.5 * np.linalg.norm(np.diff(steps, axis=0), axis=1), 0.0, 1.0))
    return (np.flatnonzero(turn > angle) + (0 if closed else 1)).tolist()


def distances_from(curve: Curve, points: FloatArray, delta: float) -> tuple[FloatArray, FloatArray]:
    """Return bounds on the distance from points to a curve.

    The curve is flattened to within delta, so that the distance to the curve and to the flattened one differ by no
    more than that; the distance to the flattened one is bounded by `SegmentSearch.exact`.

    Args:
        curve: of the dimension of the points.
        points: shape (n, d), drawing units.
        delta: drawing units, above 0.

    Returns:
        Upper and lower bounds, shape (n,), up to rounding.
    """
    flat = curve.flatten(delta)
    path = flat.path()
    origin = path[0]
    _, high, low = SegmentSearch((path[:-1] - origin).T, (path[1:] - origin).T).exact((points - origin).T)
    slack = 0.0 if flat is curve else delta
    return high + slack, np.maximum(low - slack, 0.0)
