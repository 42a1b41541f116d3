"""Arc chains: lines and circular arcs joined end to end, stored as vertices and bulges.

A bulge is tan(sweep / 4), positive for a left-turning (anticlockwise) arc and 0 for a line
(DXF Reference, LWPOLYLINE, group code 42).
"""

from dataclasses import dataclass

import numpy as np

from geometry.arrays import FloatArray, IntArray
from geometry.polyline import Polyline, polygon_area

__all__ = ["ArcChain", "arc_part_counts", "bulge_points", "full_circle"]


@dataclass(frozen=True, slots=True, eq=False)
class ArcChain:
    """Lines and arcs through vertices.

    Attributes:
        points: vertices, shape (n, 2), drawing units; a closed chain does not repeat its first vertex.
        bulges: bulge of the piece that leaves each vertex, shape (n,) closed or (n - 1,) open.
        closed: whether a piece joins the last vertex to the first.
    """

    points: FloatArray
    bulges: FloatArray
    closed: bool = False

    @property
    def dimension(self) -> int:
        """Number of coordinates of a point: arc chains are planar."""
        return 2

    def path(self) -> FloatArray:
        """Return the vertices in order of travel, the first one repeated at the end when closed."""
        return np.vstack([self.points, self.points[:1]]) if self.closed else self.points

    def chord_lengths(self) -> FloatArray:
        """Return the chord of every piece, shape of `bulges`."""
        return np.linalg.norm(np.diff(self.path(), axis=0), axis=1)

    def sweeps(self) -> FloatArray:
        """Return the turn of every piece, radians, left positive."""
        return 4.0 * np.arctan(self.bulges)

    def curvatures(self) -> FloatArray:
        """Return the curvature of every piece, 1 / drawing units, left turn positive: 4 b / (c (1 + b^2))."""
        return 4.0 * self.bulges / (self.chord_lengths() * (1.0 + self.bulges**2))

    def headings(self) -> tuple[FloatArray, FloatArray]:
        """Return the direction of travel at the start and at the end of every piece, radians."""
        chord = np.diff(self.path(), axis=0)
        middle, half = np.arctan2(chord[:, 1], chord[:, 0]), 0.5 * self.sweeps()
        return middle - half, middle + half

    def length(self) -> float:
        """Return the arc length: c sweep / (2 sin(sweep / 2)) a piece, with sin(sweep / 2) = 2 b / (1 + b^2)."""
        b = np.abs(self.bulges)
        with np.errstate(invalid="ignore", divide="ignore"):
            factor = np.where(b > 1e-8, np.arctan(b) * (1.0 + b * b) / b, 1.0)
        return float(np.dot(self.chord_lengths(), factor))

    def area(self) -> float:
        """Return the signed area: the polygon's and that of every segment between chord and arc; 0 when open."""
        if not self.closed:
            return 0.0
        sweep, curvature = self.sweeps(), self.curvatures()
        radius_squared = 1.0 / np.where(np.abs(curvature) > 0.0, curvature, np.inf) ** 2
        # circular segment r^2 (sweep - sin sweep) / 2; its own sign is that of the sweep and of the bulge
        small = np.abs(sweep) < 1e-3  # the difference cancels there: c^2 sweep / 12 is its series to 1e-7
        flat = self.chord_lengths() ** 2 * sweep / 12.0
        segment = np.where(small, flat, 0.5 * radius_squared * (sweep - np.sin(sweep)))
        return polygon_area(self.points) + float(segment.sum())

    def bounds(self) -> tuple[FloatArray, FloatArray]:
        """Return the least and greatest coordinates, arc quadrants included."""
        low, high = self.points.min(axis=0), self.points.max(axis=0)
        bent = np.flatnonzero(self.bulges != 0.0)
        if bent.size:
            centre, radius = self.circles()
            start, _ = self.headings()
            sweep = self.sweeps()
            for quadrant in range(4):
                angle = 0.5 * np.pi * quadrant
                # the radius vector at the start points a quarter turn right of travel on a left-turning arc
                first = start[bent] - np.copysign(0.5 * np.pi, sweep[bent])
                ahead = np.mod((angle - first) * np.sign(sweep[bent]), 2.0 * np.pi)
                hit = bent[ahead <= np.abs(sweep[bent])]
                reach = centre[hit] + radius[hit, None] * [np.cos(angle), np.sin(angle)]
                if hit.size:
                    low, high = np.minimum(low, reach.min(axis=0)), np.maximum(high, reach.max(axis=0))
        return low, high

    def circles(self) -> tuple[FloatArray, FloatArray]:
        """Return centre and radius of every piece, shapes (m, 2) and (m,); lines have radius inf and centre NaN."""
        path = self.path()
        chord, b = np.diff(path, axis=0), self.bulges
        with np.errstate(invalid="ignore", divide="ignore"):
            offset = np.where(b != 0.0, (1.0 - b * b) / (4.0 * b), np.nan)
            radius = np.where(b != 0.0, self.chord_lengths() * (1.0 + b * b) / (4.0 * np.abs(b)), np.inf)
        centre = 0.5 * (path[:-1] + path[1:]) + offset[:, None] * np.stack([-chord[:, 1], chord[:, 0]], axis=1)
        return centre, radius

    def reversed(self) -> "ArcChain":
        """Return the same chain travelled the other way."""
        if self.closed:
            return ArcChain(np.roll(self.points[::-1], 1, axis=0), -self.bulges[::-1], True)
        return ArcChain(self.points[::-1], -self.bulges[::-1], False)

    def moved(self, by: FloatArray) -> "ArcChain":
        """Return the chain shifted by a vector of shape (2,)."""
        return ArcChain(self.points + by, self.bulges, self.closed)

    def flatten(self, delta: float) -> Polyline:
        """Return a polyline whose vertices lie on the chain, no arc farther than `delta` from its chord."""
        path = self.path()
        chord = np.diff(path, axis=0)
        parts = arc_part_counts(self.chord_lengths(), self.bulges, delta)
        piece = np.repeat(np.arange(len(parts)), parts)
        step = np.arange(parts.sum()) - np.repeat(np.cumsum(parts) - parts, parts)
        points = bulge_points(path[piece], chord[piece], self.bulges[piece], step / parts[piece])
        points[step == 0] = path[:-1]
        return Polyline(points if self.closed else np.vstack([points, path[-1:]]), self.closed)


def arc_part_counts(chord: FloatArray, bulge: FloatArray, delta: float) -> IntArray:
    """Return into how many equal parts each arc must be cut so that no sagitta passes `delta`, shape of `chord`."""
    sweep = 4.0 * np.arctan(np.abs(bulge))
    with np.errstate(invalid="ignore", divide="ignore"):
        radius = np.where(bulge != 0.0, chord * (1.0 + bulge * bulge) / (4.0 * np.abs(bulge)), np.inf)
        # sagitta 2 r sin^2(part / 4) <= delta
        largest = 4.0 * np.arcsin(np.sqrt(np.minimum(delta / (2.0 * radius), 1.0)))
        parts = np.where((bulge != 0.0) & (sweep > 0.0), np.ceil(sweep / np.minimum(largest, 0.5 * np.pi)), 1.0)
    return np.maximum(parts, 1.0).astype(np.intp)


def bulge_points(start: FloatArray, chord: FloatArray, bulge: FloatArray, fraction: FloatArray) -> FloatArray:
    """Return points at fractions of the sweep of arcs given by start, chord vector and bulge.

    With a = sweep / 2 and f the fraction, the point lies at distance c sin(f a) / sin(a) from the start, turned
    a (1 - f) to the right of the chord; the form holds for lines (a = 0) as its limit.

    Args:
        start, chord: shape (n, 2). bulge, fraction: shape (n,).
    """
    half = 2.0 * np.arctan(bulge)
    small = np.abs(half) < 1e-12
    ratio = np.where(small, fraction, np.sin(fraction * half) / np.where(small, 1.0, np.sin(half)))
    angle = -half * (1.0 - fraction)
    c, s = ratio * np.cos(angle), ratio * np.sin(angle)
    x, y = chord[:, 0], chord[:, 1]
    return start + np.stack([c * x - s * y, s * x + c * y], axis=1)


def full_circle(centre: FloatArray, radius: float) -> ArcChain:
    """Return a circle as a closed chain of two semicircles, anticlockwise."""
    east = np.array([radius, 0.0])
    return ArcChain(np.stack([centre + east, centre - east]), np.ones(2), True)
