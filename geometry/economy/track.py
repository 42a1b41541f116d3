"""A planar spline as a track: its smooth pieces in arc length, points as complex numbers x + i y.

Lines and arcs are both laid along arc length. The track cuts the spline at its corners, gives every piece its own
stretch of one common arc-length axis (with an empty gap between pieces, so that a corner has two values: the end of
one piece and the start of the next) and evaluates points, tangent angles and curvature there.
"""

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from geometry.arrays import BoolArray, FloatArray, IntArray
from geometry.bspline import Spline
from geometry.errors import GeometryError

__all__ = ["ComplexArray", "Track", "smooth_runs", "track_of"]

ComplexArray = NDArray[np.complex128]

CELLS = 8  # least table cells a knot span
CELL_TURN = 0.1  # radians a table cell may turn before its span is cut finer
CELL_QUICKENING = 0.5  # change of the logarithm of speed in a cell before its span is cut finer
PORTION = 1 << 14  # values worked on at once, so that they stay in the cache
MOST_CELLS = 4096  # most table cells a knot span
SMOOTH_TURN = 1e-4  # radians: a knot of full multiplicity that turns less is no corner


@dataclass(frozen=True, eq=False)
class Track:
    """Smooth pieces of a planar spline on one arc-length axis.

    Node j of the table begins a cell that ends at node j + 1, except the last node of every piece, which begins the
    gap to the next piece. Arc length is linear in the span's parameter inside a cell, so `s` is arc length at the
    nodes (by Simpson's rule) and close to it between them; every other value is evaluated from the spline itself.

    Attributes:
        origin: point that the complex numbers are measured from, shape (2,), drawing units.
        power: coefficients of every span's polynomial, constant term first, shape (m, 4).
        first, last: first and last node of every piece, shapes (p,).
        closed: whether the track is one smooth closed piece without a corner.
        chained: whether the end of the last piece meets the start of the first (a closed profile).
        s, angle, curvature: arc length, unwrapped tangent angle and curvature at every node, shapes (n,).
        span, t, step: span, local parameter and local parameter step of the cell behind every node, shapes (n,).
    """

    origin: FloatArray
    power: ComplexArray
    first: IntArray
    last: IntArray
    closed: bool
    chained: bool
    s: FloatArray
    angle: FloatArray
    curvature: FloatArray
    span: IntArray
    t: FloatArray
    step: FloatArray

    @property
    def lengths(self) -> FloatArray:
        """Arc length of every piece, shape (p,)."""
        return self.s[self.last] - self.s[self.first]

    @property
    def period(self) -> float:
        """Arc length of a closed track, 0 otherwise."""
        return float(self.s[-1]) if self.closed else 0.0

    @property
    def turn(self) -> float:
        """Whole turn of the tangent round a closed track, radians, 0 otherwise."""
        return float(self.angle[-1] - self.angle[0]) if self.closed else 0.0

    @cached_property
    def node_points(self) -> ComplexArray:
        """Points at the nodes, complex, shape (n,)."""
        return self.points(self.s)

    @property
    def extent(self) -> float:
        """Longer side of the box round the nodes."""
        points = self.node_points
        return float(max(np.ptp(points.real), np.ptp(points.imag)))

    @property
    def cells(self) -> BoolArray:
        """Whether a cell (not a gap) lies behind every node but the last, shape (n - 1,)."""
        inside = np.ones(len(self.s) - 1, dtype=np.bool_)
        inside[self.last[:-1]] = False
        return inside

    @cached_property
    def _gaps(self) -> FloatArray:
        return np.diff(self.s)

    def locate(self, s: FloatArray) -> tuple[IntArray, FloatArray, FloatArray | float]:
        """Return node, local parameter of its span and winding (whole turns round a closed track) at arc lengths."""
        winding: FloatArray | float = 0.0
        if self.closed:
            winding = np.floor(s / self.period)
            s = s - winding * self.period
        node = np.searchsorted(self.s[1:-1], s, side="right")
        share = (s - self.s[node]) / self._gaps[node]
        return node, self.t[node] + np.minimum(np.maximum(share, 0.0), 1.0) * self.step[node], winding

    def points(self, s: FloatArray) -> ComplexArray:
        """Return the points at arc lengths, any shape."""
        node, t, _ = self.locate(s)
        c = self.power[self.span[node]]
        return c[..., 0] + t * (c[..., 1] + t * (c[..., 2] + t * c[..., 3]))

    def frames(self, s: FloatArray) -> tuple[ComplexArray, FloatArray, FloatArray]:
        """Return points, unwrapped tangent angles and curvature at arc lengths, each the shape of s."""
        node, t, winding = self.locate(s)
        c = self.power[self.span[node]]
        point, slope, bend = _derivatives(c, t)
        near = self.angle[node]
        angle = near + _argument(slope * np.exp(-1j * near)) + winding * self.turn
        return point, angle, _curvature(slope, bend)

    def headings(self, s: FloatArray) -> tuple[ComplexArray, ComplexArray, FloatArray]:
        """Return points, unit tangents and curvature at arc lengths, each of shape (n,); in portions, for many."""
        point, heading = np.empty(len(s), dtype=np.complex128), np.empty(len(s), dtype=np.complex128)
        bend = np.empty(len(s))
        for start in range(0, len(s), PORTION):
            part = slice(start, start + PORTION)
            node, t, _ = self.locate(s[part])
            point[part], slope, second = _derivatives(self.power[self.span[node]], t)
            speed = np.abs(slope)
            still = speed < 1e-9 * speed.max(initial=0.0)
            heading[part] = np.where(still, np.exp(1j * self.angle[node]), slope / np.where(still, 1.0, speed))
            bend[part] = _curvature(slope, second)
        return point, heading, bend

    def motion(self, s: FloatArray) -> tuple[ComplexArray, ComplexArray, ComplexArray]:
        """Return points and their first two derivatives by the arc length of the table, each the shape of s."""
        node, t, _ = self.locate(s)
        rate = self.step[node] / self._gaps[node]
        point, slope, bend = _derivatives(self.power[self.span[node]], t)
        return point, slope * rate, bend * rate**2

    def to_xy(self, z: ComplexArray) -> FloatArray:
        """Return complex points as drawing coordinates, shape (n, 2)."""
        return np.stack([z.real, z.imag], axis=-1) + self.origin

    def integral(self, density: FloatArray) -> FloatArray:
        """Return the running integral over arc length of a density given at the nodes (trapezoidal rule, no gaps)."""
        area = 0.5 * (density[1:] + density[:-1]) * np.diff(self.s) * self.cells
        return np.concatenate([[0.0], np.cumsum(area)])


def smooth_runs(spline: Spline) -> tuple[FloatArray, IntArray, bool]:
    """Cut a spline at its corners.

    Spans of no length are left out, and a closed spline with a smooth seam and corners elsewhere begins at a corner.

    Args:
        spline: any degree and dimension.

    Returns:
        The Bezier pieces in order, shape (m, degree + 1, d); the first span of every smooth run, shape (p,); and
        whether the whole is one closed run without a corner.

    Raises:
        GeometryError: the spline has no length.
    """
    beziers = spline.beziers
    corner = np.zeros(len(beziers), dtype=np.bool_)  # a corner before the span
    corner[spline.corner_breaks] = True
    legs = np.linalg.norm(np.diff(beziers, axis=1), axis=-1)
    size = float(np.abs(beziers - beziers[0, 0]).max())
    kept = legs.max(axis=1) > 1e-13 * size
    if not kept.any():
        raise GeometryError("the spline has no length; all its control points coincide")
    # a corner stays one when the span behind it goes; and where a span has shrunk to a point the tangent may jump
    for index in np.flatnonzero(~kept).tolist():
        corner[(index + 1) % len(corner)] = True
    beziers, corner = beziers[kept], corner[kept]
    seam = not (spline.closed and spline.smooth_seam)
    before, after = _end_directions(beziers)
    turn = np.linalg.norm(after - np.roll(before, 1, axis=0), axis=-1)
    corner &= turn > SMOOTH_TURN
    corner[0] = seam and (not spline.closed or turn[0] > SMOOTH_TURN)
    if not corner.any():
        return beziers, np.zeros(1, dtype=np.intp), True
    beziers, corner = np.roll(beziers, -int(np.argmax(corner)), axis=0), np.roll(corner, -int(np.argmax(corner)))
    return beziers, np.flatnonzero(corner), False


def track_of(spline: Spline) -> Track:
    """Return the track of a planar spline.

    Raises:
        GeometryError: the spline is not planar (d = 2) or has no length.
    """
    if spline.dimension != 2:
        raise GeometryError(f"the spline has {spline.dimension} coordinates where 2 are needed; give a planar one")
    beziers, starts, closed = smooth_runs(spline)
    origin = spline.control[0].astype(np.float64)
    local = beziers - origin
    power = _power_basis(local[..., 0] + 1j * local[..., 1])
    cells = np.full(len(power), CELLS)
    for _ in range(3):  # tight bends inside a span get more cells; the third pass only builds
        span, t, step, node_first = _nodes(cells, starts)
        _, slope, bend = _derivatives(power[span], t)
        angle = _unwrapped(slope, power, span, t)
        turns = np.abs(np.remainder(np.diff(angle) + np.pi, 2.0 * np.pi) - np.pi) * (step[:-1] > 0.0)
        speed = np.abs(slope)
        quickening = np.abs(np.diff(np.log(np.maximum(speed, 1e-3 * speed.max())))) * (step[:-1] > 0.0)
        worst = np.zeros(len(power))
        np.maximum.at(worst, span[:-1], np.maximum(turns / CELL_TURN, quickening / CELL_QUICKENING))
        finer = np.where(worst > 1.0, np.ceil(cells * np.minimum(worst, 16.0)), cells)
        finer = np.minimum(finer, MOST_CELLS).astype(np.intp)
        if np.array_equal(finer, cells):
            break
        cells = finer
    last = np.append(node_first[1:], len(t)) - 1
    middle = _derivatives(power[span], t + 0.5 * step)[1]
    end = _derivatives(power[span], t + step)[1]
    lengths = (np.abs(slope) + 4.0 * np.abs(middle) + np.abs(end)) / 6.0 * step
    lengths = np.maximum(lengths, 1e-15 * lengths.sum())
    lengths[last] = 0.01 * lengths.sum()  # the gap
    s = np.concatenate([[0.0], np.cumsum(lengths[:-1])])
    for start, stop in zip(node_first.tolist(), last.tolist(), strict=True):
        angle[start : stop + 1] = np.unwrap(angle[start : stop + 1])
    curvature = _curvature(slope, bend)
    return Track(origin, power, node_first, last, closed, spline.closed, s, angle, curvature, span, t, step)


def _nodes(cells: IntArray, starts: IntArray) -> tuple[IntArray, FloatArray, FloatArray, IntArray]:
    """Return span, local parameter and step of every node, and the first node of every piece."""
    span = np.repeat(np.arange(len(cells)), cells)
    t = (np.arange(len(span)) - np.repeat(np.cumsum(cells) - cells, cells)) / cells[span]
    step = 1.0 / cells[span]
    ends = np.append(starts[1:], len(cells)) - 1  # last span of every piece
    at = np.cumsum(cells)[ends]  # one node more behind the last cell of every piece
    counts = np.append(0, at[:-1]) + np.arange(len(at))
    return np.insert(span, at, ends), np.insert(t, at, 1.0), np.insert(step, at, 0.0), counts


def _power_basis(b: ComplexArray) -> ComplexArray:
    """Return power coefficients (constant first, padded to 4) of Bezier pieces, shape (m, degree + 1)."""
    out = np.zeros((len(b), 4), dtype=np.complex128)
    factor, row = 1.0, b
    for k in range(b.shape[1]):  # coefficient k is binomial(p, k) times the k-th forward difference
        out[:, k] = factor * row[:, 0]
        factor *= (b.shape[1] - 1 - k) / (k + 1)
        row = np.diff(row, axis=1)
    return out


def _derivatives(c: ComplexArray, t: FloatArray) -> tuple[ComplexArray, ComplexArray, ComplexArray]:
    c0, c1, c2, c3 = c[..., 0], c[..., 1], c[..., 2], c[..., 3]
    return c0 + t * (c1 + t * (c2 + t * c3)), c1 + t * (2.0 * c2 + t * (3.0 * c3)), 2.0 * c2 + t * (6.0 * c3)


def _curvature(slope: ComplexArray, bend: ComplexArray) -> FloatArray:
    speed = np.abs(slope)
    floor = 1e-9 * float(speed.max(initial=0.0)) + 1e-300  # a standstill has no curvature; it must not become infinite
    return np.asarray((slope.real * bend.imag - slope.imag * bend.real) / np.maximum(speed, floor) ** 3)


def _argument(z: ComplexArray) -> FloatArray:
    return np.arctan2(z.imag, z.real)


def _unwrapped(slope: ComplexArray, power: ComplexArray, span: IntArray, t: FloatArray) -> FloatArray:
    """Return tangent angles; where the curve stands still, the direction a little further inside the span."""
    speed = np.abs(slope)
    still = speed < 1e-9 * speed.max()
    if still.any():
        inward = np.where(t[still] < 0.5, t[still] + 1e-3, t[still] - 1e-3)
        moved = _derivatives(power[span[still]], inward)[1]
        slope = slope.copy()
        slope[still] = np.where(np.abs(moved) > 0.0, moved, 1.0)
    return _argument(slope)


def _end_directions(beziers: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return the unit directions at the end and at the start of every Bezier piece, shapes (m, d)."""
    legs = np.diff(beziers, axis=1)
    size = np.linalg.norm(legs, axis=-1)
    solid = size > 1e-9 * size.max(axis=1, keepdims=True)
    row = np.arange(len(legs))
    out = []
    for pick in (legs.shape[1] - 1 - np.argmax(solid[:, ::-1], axis=1), np.argmax(solid, axis=1)):
        out.append(legs[row, pick] / size[row, pick, None])
    return out[0], out[1]
