"""Parametric B-splines of degree 1 to 3, one set of control points per coordinate, always clamped.

Corners are interior knots of full multiplicity (as many as the degree): there the curve is only continuous.
Source: L. Ramshaw, "Blossoms are polar forms", Computer Aided Geometric Design 6 (1989), for the conversions.
"""

from dataclasses import dataclass
from functools import cached_property
from itertools import pairwise

import numpy as np

from geometry.arrays import FloatArray, IntArray
from geometry.errors import GeometryError
from geometry.polyline import Polyline

__all__ = ["Spline", "bezier_chord_error", "join"]

# Gauss-Legendre nodes and weights on [0, 1]
_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(12)
_NODES, _WEIGHTS = 0.5 * (_NODES + 1.0), 0.5 * _WEIGHTS


@dataclass(frozen=True, eq=False)
class Spline:
    """Clamped B-spline curve.

    Attributes:
        knots: non-decreasing, shape (n + degree + 1,); the first and last value stand degree + 1 times.
        control: control points, shape (n, d), d = 2 or 3, drawing units.
        degree: 1, 2 or 3.
        closed: whether the end is meant to meet the start (the first and last control points are then equal).
        smooth_seam: closed only: whether tangent and curvature (degree 3) run on through the seam, so that
            the seam is no corner.
    """

    knots: FloatArray
    control: FloatArray
    degree: int
    closed: bool = False
    smooth_seam: bool = False

    def __post_init__(self) -> None:
        if len(self.knots) != len(self.control) + self.degree + 1:
            raise GeometryError(
                f"{len(self.knots)} knots do not fit {len(self.control)} control points of degree {self.degree}; "
                "their number must be control points + degree + 1"
            )

    @property
    def dimension(self) -> int:
        """Number of coordinates of a point."""
        return int(self.control.shape[1])

    @cached_property
    def spans(self) -> IntArray:
        """Index i of every non-empty knot span [knots[i], knots[i + 1]], shape (m,)."""
        return np.flatnonzero(np.diff(self.knots) > 0.0)

    @cached_property
    def breaks(self) -> FloatArray:
        """Distinct knot values, shape (m + 1,)."""
        return np.append(self.knots[self.spans], self.knots[-1])

    @cached_property
    def beziers(self) -> FloatArray:
        """Bezier control points of every non-empty span, shape (m, degree + 1, d), by blossoming."""
        p, span = self.degree, self.spans
        local = self.control[span[:, None] + np.arange(-p, 1)]
        low, high = self.knots[span], self.knots[span + 1]
        out = np.empty_like(local)
        for j in range(p + 1):
            out[:, j] = self._blossom(local, [high] * j + [low] * (p - j))
        return out

    def _blossom(self, local: FloatArray, arguments: list[FloatArray]) -> FloatArray:
        p, span = self.degree, self.spans
        points = [local[:, j] for j in range(p + 1)]
        for r, u in enumerate(arguments, start=1):
            for j in range(p, r - 1, -1):
                left, right = self.knots[span - p + j], self.knots[span + 1 + j - r]
                w = ((u - left) / (right - left))[:, None]
                points[j] = (1.0 - w) * points[j - 1] + w * points[j]
        return points[p]

    @cached_property
    def corner_breaks(self) -> IntArray:
        """Indices into `breaks` of the interior knots of full multiplicity."""
        _, counts = np.unique(self.knots, return_counts=True)
        return 1 + np.flatnonzero(counts[1:-1] >= self.degree) if self.degree > 1 else np.arange(1, len(counts) - 1)

    def locate(self, u: FloatArray) -> tuple[IntArray, FloatArray]:
        """Return the Bezier piece that holds every parameter and the local parameter in it, each the shape of u."""
        piece = np.clip(np.searchsorted(self.breaks, u, side="right") - 1, 0, len(self.spans) - 1)
        return piece, (u - self.breaks[piece]) / np.diff(self.breaks)[piece]

    def evaluate(self, u: FloatArray, derivative: int = 0) -> FloatArray:
        """Return points or derivatives with respect to the parameter.

        Args:
            u: parameters within the knots, any shape.
            derivative: order, 0 to 3; at a knot the one-sided value of the span on its right.

        Returns:
            Shape of u with d appended.
        """
        u = np.asarray(u, dtype=np.float64)
        piece, t = self.locate(u)
        value = bezier_evaluate(self.beziers[piece], t, derivative)
        return value / (np.diff(self.breaks)[piece] ** derivative)[..., None] if derivative else value

    def length(self) -> float:
        """Return the arc length: 12-point Gauss-Legendre quadrature, spans halved until that changes next to nothing.

        An estimate, not a bound: a part is accepted when its two halves add up to it within 1e-11 of the whole length,
        or after 40 halvings (a cusp).
        """
        b = self.beziers
        low, width = np.zeros(len(b)), np.ones(len(b))
        coarse, total = _arc_lengths(b, low, width), 0.0
        limit = 1e-11 * float(coarse.sum())
        for _ in range(40):
            b, width = np.repeat(b, 2, axis=0), np.repeat(0.5 * width, 2)
            low = np.repeat(low, 2)
            low[1::2] += width[1::2]
            fine = _arc_lengths(b, low, width)
            both = fine.reshape(-1, 2).sum(axis=1)
            rough = np.abs(both - coarse) > limit
            total += float(both[~rough].sum())
            again = np.repeat(rough, 2)
            b, low, width, coarse = b[again], low[again], width[again], fine[again]
            if not len(b):
                break
        return total + float(coarse.sum())

    def area(self) -> float:
        """Return the signed area of a closed planar spline: half the integral of x dy - y dx, exact by quadrature."""
        if not self.closed or self.dimension != 2:
            return 0.0
        shifted = self.beziers - self.control[0]
        point = bezier_evaluate(shifted[:, None], _NODES[None, :], 0)
        slope = bezier_evaluate(shifted[:, None], _NODES[None, :], 1)
        integrand = point[..., 0] * slope[..., 1] - point[..., 1] * slope[..., 0]
        return 0.5 * float((integrand @ _WEIGHTS).sum())

    def bounds(self) -> tuple[FloatArray, FloatArray]:
        """Return the least and greatest coordinates: of the span ends and where a coordinate's slope is 0."""
        b = self.beziers
        points = [b[:, 0], b[-1:, -1]]
        if self.degree > 1:
            d = np.diff(b, axis=1)
            if self.degree == 2:
                roots = [_safe_ratio(d[:, 0], d[:, 0] - d[:, 1])]
            else:
                a2, a1, a0 = d[:, 0] - 2 * d[:, 1] + d[:, 2], 2 * (d[:, 1] - d[:, 0]), d[:, 0]
                q = -0.5 * (a1 + np.copysign(np.sqrt(np.maximum(a1 * a1 - 4 * a2 * a0, 0.0)), a1))
                roots = [_safe_ratio(q, a2), _safe_ratio(a0, q)]
            for t in roots:  # one root per coordinate; the point's other coordinates lie on the curve as well
                for axis in range(self.dimension):
                    points.append(bezier_evaluate(b, np.clip(t[:, axis], 0.0, 1.0), 0))
        every = np.concatenate(points)
        return every.min(axis=0), every.max(axis=0)

    def reversed(self) -> "Spline":
        """Return the same curve travelled the other way."""
        ends = self.knots[0] + self.knots[-1]
        return Spline(ends - self.knots[::-1], self.control[::-1], self.degree, self.closed, self.smooth_seam)

    def moved(self, by: FloatArray) -> "Spline":
        """Return the curve shifted by a vector of shape (d,)."""
        return Spline(self.knots, self.control + by, self.degree, self.closed, self.smooth_seam)

    def flatten(self, delta: float) -> Polyline:
        """Return a polyline whose vertices lie on the curve, no chord farther than `delta` from its piece of curve."""
        b = self.beziers
        parts = np.maximum(1, np.ceil(np.sqrt(bezier_chord_error(b) / delta))).astype(np.intp)
        piece = np.repeat(np.arange(len(parts)), parts)
        step = np.arange(parts.sum()) - np.repeat(np.cumsum(parts) - parts, parts)
        points = bezier_evaluate(b[piece], step / parts[piece], 0)
        points[step == 0] = b[:, 0]
        return Polyline(points if self.closed else np.vstack([points, b[-1:, -1]]), self.closed)


def _arc_lengths(b: FloatArray, low: FloatArray, width: FloatArray) -> FloatArray:
    """Arc lengths of the parts [low, low + width] of Bezier pieces by Gauss-Legendre quadrature, shape (m,)."""
    t = low[:, None] + width[:, None] * _NODES
    speed = np.sqrt((bezier_evaluate(b[:, None], t, 1) ** 2).sum(axis=-1))
    return np.asarray((speed @ _WEIGHTS) * width, dtype=np.float64)


def _safe_ratio(top: FloatArray, bottom: FloatArray) -> FloatArray:
    return np.divide(top, bottom, out=np.zeros_like(top), where=np.abs(bottom) > 1e-300)


def bezier_evaluate(b: FloatArray, t: FloatArray, derivative: int) -> FloatArray:
    """Evaluate Bezier pieces or their derivatives with respect to the local parameter, by de Casteljau's steps.

    Args:
        b: control points, shape (..., degree + 1, d).
        t: local parameters, shape that broadcasts with b.shape[:-2].
    """
    degree = b.shape[-2] - 1
    if derivative > degree:
        return np.zeros((*np.broadcast_shapes(b.shape[:-2], t.shape), b.shape[-1]))
    factor = 1.0
    for k in range(derivative):
        b = np.diff(b, axis=-2)
        factor *= degree - k
    w = t[..., None]
    points = [b[..., j, :] for j in range(b.shape[-2])]
    while len(points) > 1:
        points = [p + w * (q - p) for p, q in pairwise(points)]
    return factor * np.broadcast_to(points[0], (*np.broadcast_shapes(b.shape[:-2], t.shape), b.shape[-1]))


def bezier_chord_error(b: FloatArray) -> FloatArray:
    """Bound the distance between Bezier pieces and their chords at equal parameters, shape (m,).

    |C(t) - chord(t)| <= t (1 - t) / 2 max|C''| <= max|C''| / 8, and |C''| <= p (p - 1) max|second difference|
    of the control points (convex hull of the second derivative). n equal parts have 1 / n^2 of it.
    """
    degree = b.shape[1] - 1
    if degree < 2:
        return np.zeros(len(b))
    second = np.linalg.norm(np.diff(b, n=2, axis=1), axis=-1).max(axis=1)
    return degree * (degree - 1) / 8.0 * second


def join(pieces: list[Spline], closed: bool) -> Spline:
    """Join splines end to end into one, with a corner (a knot of full multiplicity) at every joint.

    Args:
        pieces: same degree; each begins where the one before ends (the later start point is dropped).
        closed: whether the last end meets the first start; that seam is then a corner too.
    """
    degree = pieces[0].degree
    knots, control = [pieces[0].knots[:-1]], [pieces[0].control]
    end = pieces[0].knots[-1]
    for piece in pieces[1:]:
        shift = end - piece.knots[0]
        knots.append(piece.knots[degree + 1 : -1] + shift)
        control.append(piece.control[1:])
        end = piece.knots[-1] + shift
    return Spline(np.concatenate([*knots, [end]]), np.concatenate(control), degree, closed)
