"""Entities as pieces of profiles: one reader per DXF type, angles and frames as in the DXF Reference.

A reader returns the curve exactly as drawn where the shared curve types can hold it, and states a bound otherwise.
"""

import math
from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from converter.drawing.model import PLAN, AnyCurve, Frame
from converter.drawing.splines import clamped, ellipse_spline, flatten_rational, is_smooth_seam
from geometry.arcs import ArcChain, full_circle
from geometry.arrays import FloatArray
from geometry.bspline import Spline
from geometry.polyline import Polyline

__all__ = ["FLATTENING_SHARE", "LARGEST_COORDINATE", "Piece", "Unusable", "is_profile_type", "piece_of"]

FLATTENING_SHARE = 1e-6
"""Bound, as a share of the entity's size, to which a curve is flattened that no shared curve type can hold."""
LARGEST_COORDINATE = 1e15
"""Coordinates beyond it are refused: neighbouring floating-point numbers are more than 0.1 units apart there."""


class Unusable(Exception):
    """An entity cannot be a profile; the text is the reason."""


@dataclass(frozen=True, slots=True, eq=False)
class Piece:
    """One entity as a curve.

    Attributes:
        handle, type, layer: of the entity.
        part: its curve: 2-D in `frame`, or 3-D in world coordinates (`frame` is then of no meaning).
        vertices: vertices as drawn.
        curved: whether it is a true curve.
        approximation: bound on the distance between `part` and what is drawn, drawing units.
    """

    handle: str
    type: str
    layer: str
    part: AnyCurve
    frame: Frame
    vertices: int
    curved: bool
    approximation: float = 0.0

    @property
    def closed(self) -> bool:
        """Whether the piece is a closed profile by itself."""
        return self.part.closed

    def ends(self) -> FloatArray:
        """Return the first and the last point in world coordinates, shape (2, 3)."""
        points = self.part.control if isinstance(self.part, Spline) else self.part.points
        return self.frame.to_world(points[[0, -1]])

    def reversed(self) -> "Piece":
        """Return the same piece travelled the other way."""
        return replace(self, part=self.part.reversed())

    def lifted(self) -> "Piece":
        """Return the piece in world coordinates; arcs, which are planar by kind, are flattened to a stated bound."""
        part, bound = self.part, self.approximation
        if part.dimension == 3:
            return self
        if isinstance(part, Spline):
            lifted: AnyCurve = Spline(
                part.knots, self.frame.to_world(part.control), part.degree, part.closed, part.smooth_seam
            )
        else:
            delta = FLATTENING_SHARE * _size(np.stack(part.bounds()))
            lifted = Polyline(self.frame.to_world(part.flatten(delta).points), part.closed)
            bound += delta if isinstance(part, ArcChain) else 0.0
        return replace(self, part=lifted, frame=PLAN, approximation=bound)


def _size(points: FloatArray) -> float:
    return float(np.linalg.norm(points.max(axis=0) - points.min(axis=0)))


def is_profile_type(entity: Any) -> bool:
    """Return whether an entity is of a kind that can be a profile (meshes stored as POLYLINE are not)."""
    kind = entity.dxftype()
    if kind == "POLYLINE":
        return bool(entity.is_2d_polyline or entity.is_3d_polyline)
    return kind in _READERS


def piece_of(entity: Any) -> Piece:
    """Return an entity as a piece.

    Raises:
        Unusable: it has coordinates that are not finite or absurdly large, no length, or no meaning.
    """
    piece: Piece = _READERS[entity.dxftype()](entity)
    points = piece.part.control if isinstance(piece.part, Spline) else piece.part.points
    _check_finite(points)
    if _size(points) == 0.0:
        raise Unusable("it has no length")
    return piece


def _check_finite(values: FloatArray) -> None:
    if not np.isfinite(values).all():
        raise Unusable("a coordinate is not a finite number")
    if values.size and np.abs(values).max() > LARGEST_COORDINATE:
        raise Unusable(
            f"a coordinate is beyond {LARGEST_COORDINATE:g}, where its place is no longer exact to 0.1 units"
        )


def _base(entity: Any, part: AnyCurve, frame: Frame, vertices: int, curved: bool, approximation: float = 0.0) -> Piece:
    handle, layer = str(entity.dxf.handle), str(entity.dxf.layer)
    return Piece(handle, entity.dxftype(), layer, part, frame, vertices, curved, approximation)


def _frame(entity: Any, elevation: float) -> tuple[Frame, bool]:
    """Return the plane of an OCS entity and whether it is seen from below, x being mirrored then."""
    normal = np.array(entity.dxf.get("extrusion", (0.0, 0.0, 1.0)), dtype=np.float64)
    _check_finite(normal)
    _check_finite(np.array(elevation))
    length = float(np.linalg.norm(normal))
    if length == 0.0:
        raise Unusable("its extrusion direction has no length")
    normal = normal / length
    # within the rounding of a normal written to 15 digits the plane is level; x, y then move by less than 1e-15 of x
    if math.hypot(normal[0], normal[1]) < 1e-12:
        return Frame(PLAN.extrusion, math.copysign(1.0, normal[2]) * elevation), bool(normal[2] < 0.0)
    return Frame((float(normal[0]), float(normal[1]), float(normal[2])), elevation), False


def _planar(entity: Any, points: FloatArray, bulges: FloatArray, closed: bool, elevation: float) -> Piece:
    """Return a polyline of an OCS, shape (n, 2), with the bulge that leaves each vertex, shape (n,)."""
    vertices = len(points)
    if vertices < 2:
        raise Unusable("it has fewer than 2 vertices")
    _check_finite(points)
    _check_finite(bulges)
    frame, mirrored = _frame(entity, elevation)
    if mirrored:
        points, bulges = points * [-1.0, 1.0], -bulges
    points, bulges, closed = _without_repeated_end(points, bulges, closed)
    curved = bool(bulges.any()) if closed else bool(bulges[:-1].any())
    if not curved:
        return _base(entity, Polyline(points, closed and len(points) > 2), frame, vertices, False)
    # an arc over a chord of no length has no radius: leave such vertices out
    moves = np.any(np.roll(points, -1, axis=0) != points, axis=1)
    if not closed:
        moves[-1] = True
    points, bulges = points[moves], bulges[moves]
    if len(points) < 2:
        raise Unusable("it has no length")
    return _base(entity, ArcChain(points, bulges if closed else bulges[:-1], closed), frame, vertices, True)


def _without_repeated_end(points: FloatArray, bulges: FloatArray, closed: bool) -> tuple[FloatArray, FloatArray, bool]:
    """Drop last vertices that repeat the first one: the polyline is then closed, whether marked so or not."""
    last = len(points)
    while last > 1 and np.array_equal(points[last - 1], points[0]):
        last -= 1
    if last == len(points):
        return points, bulges, closed
    if last < 2 or (last == 2 and not bulges.any()):  # there and back along one line is no outline: leave as drawn
        return points, bulges, False
    return points[:last], bulges[:last], True


def _lwpolyline(entity: Any) -> Piece:
    values = np.array(entity.lwpoints.values, dtype=np.float64).reshape(-1, 5)
    elevation = float(entity.dxf.get("elevation", 0.0))
    return _planar(entity, values[:, :2], values[:, 4], bool(entity.closed), elevation)


def _polyline(entity: Any) -> Piece:
    # bit 16 marks control points of a frame that is not drawn itself; the fitted vertices are those to keep
    drawn = [vertex.dxf for vertex in entity.vertices if not vertex.dxf.get("flags", 0) & 16]
    points = np.array([tuple(dxf.location) for dxf in drawn], dtype=np.float64).reshape(-1, 3)
    if entity.is_2d_polyline:
        bulges = np.array([dxf.get("bulge", 0.0) for dxf in drawn], dtype=np.float64)
        elevation = (
            entity.dxf.elevation[2] if entity.dxf.hasattr("elevation") else (points[0, 2] if len(points) else 0.0)
        )
        return _planar(entity, points[:, :2], bulges, bool(entity.is_closed), float(elevation))
    closed = bool(entity.is_closed)
    vertices = len(points)
    if vertices < 2:
        raise Unusable("it has fewer than 2 vertices")
    _check_finite(points)
    points, _, closed = _without_repeated_end(points, np.zeros(vertices), closed)
    return _level(_base(entity, Polyline(points, closed and len(points) > 2), PLAN, vertices, False))


def _level(piece: Piece) -> Piece:
    """Return a 3-D piece as a 2-D one where z is the same all along, but for rounding."""
    part = piece.part
    points = part.control if isinstance(part, Spline) else part.points
    z = points[:, 2]
    if np.ptp(z) > 1e-14 * np.abs(points).max():
        return piece
    flat = np.ascontiguousarray(points[:, :2])
    if isinstance(part, Spline):
        level: AnyCurve = Spline(part.knots, flat, part.degree, part.closed, part.smooth_seam)
    else:
        level = Polyline(flat, part.closed)
    return replace(piece, part=level, frame=Frame(PLAN.extrusion, float(z[0])))


def _line(entity: Any) -> Piece:
    start, end = entity.dxf.start, entity.dxf.end
    if start.z == end.z and math.isfinite(start.z):
        points = np.array([[start.x, start.y], [end.x, end.y]])
        return _base(entity, Polyline(points), Frame(PLAN.extrusion, float(start.z)), 2, False)
    points = np.array([tuple(start), tuple(end)], dtype=np.float64)
    _check_finite(points)
    return _level(_base(entity, Polyline(points), PLAN, 2, False))


def _centre(entity: Any) -> tuple[FloatArray, float, Frame, bool]:
    x, y, z = (float(value) for value in entity.dxf.center)
    radius = float(entity.dxf.radius)
    _check_finite(np.array([x, y, z, radius]))
    if radius <= 0.0:
        raise Unusable("its radius is not above 0")
    frame, mirrored = _frame(entity, z)
    return np.array([-x if mirrored else x, y]), radius, frame, mirrored


def _circle(entity: Any) -> Piece:
    centre, radius, frame, _ = _centre(entity)
    return _base(entity, full_circle(centre, radius), frame, 0, True)


def _arc(entity: Any) -> Piece:
    centre, radius, frame, mirrored = _centre(entity)
    angles = np.radians([float(entity.dxf.start_angle), float(entity.dxf.end_angle)])
    _check_finite(angles)
    sweep = float(np.mod(angles[1] - angles[0], 2.0 * np.pi))
    if sweep < 1e-12:  # equal angles: the whole circle
        return _base(entity, full_circle(centre, radius), frame, 0, True)
    count = 1 if sweep <= np.pi else 2  # a bulge grows beyond bounds as the sweep nears a full turn
    at = angles[0] + sweep * np.arange(count + 1) / count
    mirror = -1.0 if mirrored else 1.0
    points = centre + radius * np.stack([mirror * np.cos(at), np.sin(at)], axis=1)
    bulges = np.full(count, mirror * math.tan(0.25 * sweep / count))
    return _base(entity, ArcChain(points, bulges), frame, 2, True)


def _ellipse(entity: Any) -> Piece:
    centre = np.array(tuple(entity.dxf.center), dtype=np.float64)
    major = np.array(tuple(entity.dxf.major_axis), dtype=np.float64)
    minor = np.array(tuple(entity.minor_axis), dtype=np.float64)
    start, end = float(entity.dxf.start_param), float(entity.dxf.end_param)
    for values in (centre, major, minor, np.array([start, end])):
        _check_finite(values)
    if not np.linalg.norm(major) > 0.0 or not np.linalg.norm(minor) > 0.0:
        raise Unusable("an axis has no length")
    turn = 2.0 * math.pi
    sweep = (end - start) % turn
    closed = sweep < 1e-9 or sweep > turn - 1e-9
    spline, bound = ellipse_spline(centre, major, minor, start, start + (turn if closed else sweep), closed)
    return _level(_base(entity, spline, PLAN, 0 if closed else 2, True, bound))


def _spline(entity: Any) -> Piece:
    drawn = entity.control_point_count() or entity.fit_point_count()
    if not drawn:
        raise Unusable("it has neither control points nor fit points")
    _check_finite(np.array(entity.knots, dtype=np.float64))
    _check_finite(np.array([tuple(p) for p in (*entity.control_points, *entity.fit_points)], dtype=np.float64))
    if entity.control_point_count():
        control = np.array([tuple(point) for point in entity.control_points], dtype=np.float64)
        knots, weights = np.array(entity.knots, dtype=np.float64), np.array(entity.weights, dtype=np.float64)
        degree = int(entity.dxf.degree)
    else:
        try:
            tool = entity.construction_tool()  # the curve through the fit points that the drawing library defines
        except (ValueError, ArithmeticError, IndexError) as error:
            raise Unusable(f"no curve goes through its fit points ({error})") from error
        control = np.array([tuple(point) for point in tool.control_points], dtype=np.float64)
        knots, weights = np.array(tool.knots(), dtype=np.float64), np.array(tool.weights(), dtype=np.float64)
        degree = int(tool.degree)
    part, bound = _spline_part(knots, control, weights, degree)
    return _level(_base(entity, part, PLAN, drawn, True, bound))


def _spline_part(knots: FloatArray, control: FloatArray, weights: FloatArray, degree: int) -> tuple[AnyCurve, float]:
    n = len(control)
    _check_finite(control)
    if degree < 1 or n < degree + 1:
        raise Unusable(f"{n} control points are too few for degree {degree}")
    if len(knots) != n + degree + 1:
        raise Unusable(f"{len(knots)} knots do not fit {n} control points of degree {degree}")
    if np.any(np.diff(knots) < 0.0) or not knots[degree] < knots[n]:
        raise Unusable("its knots do not increase")
    if len(weights) and (len(weights) != n or not np.isfinite(weights).all() or weights.min() <= 0.0):
        raise Unusable("its weights are not all above 0")
    interior = knots[degree + 1 : n]
    if np.any(interior[degree:] == interior[:-degree]) or np.any((interior == knots[degree]) | (interior == knots[n])):
        raise Unusable("a knot stands more often than the degree, which tears the curve apart")
    rational = len(weights) > 0 and bool(np.ptp(weights) > 0.0)
    if rational:
        weights = weights / weights.max()
        lifted = np.column_stack([control * weights[:, None], weights])
        knots, lifted = clamped(knots, lifted, degree)
        weights = lifted[:, -1]
        control = lifted[:, :-1] / weights[:, None]
        if weights.min() <= 0.0:
            raise Unusable("its weights are not all above 0")
    else:
        knots, control = clamped(knots, control, degree)
        weights = np.ones(n)
    size = _size(control)
    # an end that meets the start within rounding closes the curve, whether it is marked so or not
    closed = size > 0.0 and _size(control[[0, -1]]) <= 1e-14 * float(np.abs(control).max())
    if closed:
        control[-1] = control[0]
    if not rational and degree <= 3:
        spline = Spline(knots, control, degree, closed)
        return (Spline(knots, control, degree, True, is_smooth_seam(spline)) if closed else spline), 0.0
    delta = FLATTENING_SHARE * size
    if delta == 0.0:
        raise Unusable("it has no length")
    try:
        return flatten_rational(knots, control, weights, degree, closed, delta), delta
    except ValueError as error:
        raise Unusable(str(error)) from error


_READERS: dict[str, Callable[[Any], Piece]] = {
    "LWPOLYLINE": _lwpolyline,
    "POLYLINE": _polyline,
    "LINE": _line,
    "ARC": _arc,
    "CIRCLE": _circle,
    "ELLIPSE": _ellipse,
    "SPLINE": _spline,
}
