"""The fairest spline that passes every station within a tolerance.

Unknown are the control points y of the cubic spline through the stations, so that M y are its points at the stations
and |D y|^2 is its unfairness, D taken with the tangents of the pass before. Minimising |D y|^2 with every row of M y in
a ball about its station is convex. It is solved by the alternating direction method of multipliers: a banded system,
factored once a weight, and a projection onto the balls.
Source: S. Boyd and others, "Distributed optimization and statistical learning via the alternating direction method of
multipliers", Foundations and Trends in Machine Learning 3 (2011), pp. 1-122, sections 3.4.1 and 5.
"""

from collections.abc import Callable
from typing import TYPE_CHECKING, cast

import numpy as np

from geometry.arrays import FloatArray, IntArray
from geometry.bspline import Spline, join
from geometry.errors import GeometryError
from geometry.interpolate import (
    EndCondition,
    cubic_spline,
    linear_spline,
    periodic_cubic_spline,
    periodic_quadratic_spline,
    quadratic_spline,
)

if TYPE_CHECKING:
    from scipy.sparse import csr_array

__all__ = ["spring_within"]

_ROUNDS = 4000
_SHARE = 0.999  # of the tolerance that the search may use
_SETTLED = 1e-5  # of the tolerance, change by which it has settled
_RELAXED, _REVIEW = 1.6, 20
_PASSES = 2  # with tangents of the result before
_LEAST = 1e-9  # of the extent: a smaller tolerance asks for interpolation


def spring_within(
    points: FloatArray,
    parameters: FloatArray,
    tolerance: float,
    closed: bool = False,
    corners: IntArray | list[int] | tuple[int, ...] = (),
    degree: int = 3,
    ends: EndCondition = "not-a-knot",
    start: FloatArray | None = None,
    end: FloatArray | None = None,
) -> Spline:
    """Return the fairest spline that passes every station within a tolerance.

    Fairest is the least sum of two integrals of squares: the third derivative across the curve, which is the change of
    curvature along it where the parameter is chord length, and the change of the third derivative along the curve from
    piece to piece. Lines and circles cost nothing, so that sizes are kept; of curves that cost the same the one nearest
    to the stations is taken: the mean square distance counts as much as a wave as long as the whole curve. For degrees
    2 and 1 the stations move to where the fairest cubic passes them.

    Every station is met within the tolerance at its own parameter, which is proven: the result is the interpolating
    spline plus a share of the difference from it, and that share is taken so that the largest distance, found at the
    stations, is no more than the tolerance (rounding of the coordinates apart). Corners, and every station where the
    tolerance is nothing beside the extent, are met exactly. That no fairer spline exists is measured, not proven.

    Args:
        points: stations in order, shape (n, d), drawing units.
        parameters: strictly increasing, shape (n,), or (n + 1,) when closed.
        tolerance: largest distance allowed at a station, drawing units.
        closed: whether the last station is followed by the first.
        corners: rows at which the curve has a corner. With corners a closed curve begins at the first of them, its
            parameters still those given, less that of the first corner.
        degree: 1 to 3.
        ends: natural, clamped or not-a-knot, of degree 3 at open ends and at corners; "periodic" is a closed one's own.
        start, end: for clamped ends, derivatives with respect to the parameter, shape (d,). Not with corners.

    Raises:
        GeometryError: an argument that cannot be used, as in `geometry.interpolate`.
    """
    p, u = np.asarray(points, dtype=np.float64), np.asarray(parameters, dtype=np.float64)
    if not (np.isfinite(tolerance) and tolerance >= 0.0):
        raise GeometryError(f"a tolerance of {tolerance:g} at the stations cannot be used; it must not be negative")
    rows = np.unique(np.asarray(corners, dtype=np.intp))
    if rows.size and not (rows[0] >= 0 and rows[-1] < len(p)):
        raise GeometryError(f"corners must be rows from 0 to {len(p) - 1}")
    if rows.size and (start is not None or end is not None):
        raise GeometryError("directions at the ends cannot be used together with corners; leave them out")
    if not closed:
        rows = rows[(rows > 0) & (rows < len(p) - 1)]
    if not rows.size:
        return _Run(p, u, tolerance, closed, degree, ends, start, end, np.zeros(len(p), dtype=np.bool_)).fairest()
    if closed:
        at = int(rows[0])
        p = np.vstack([p[at:], p[: at + 1]])
        u = np.concatenate([u[at:], u[-1] - u[0] + u[1 : at + 1]]) if at else u
        u, rows = u - u[0], np.append(rows, at + len(points)) - at
    else:
        rows = np.concatenate([[0], rows, [len(p) - 1]])
    pieces = []
    for first, last in zip(rows[:-1].tolist(), rows[1:].tolist(), strict=True):
        fixed = np.zeros(last - first + 1, dtype=np.bool_)
        fixed[[0, -1]] = [closed or first > 0, closed or last < len(p) - 1]
        part = slice(first, last + 1)
        pieces.append(_Run(p[part], u[part], tolerance, False, degree, ends, None, None, fixed).fairest())
    return join(pieces, closed)


class _Run:
    """One run of stations without corners."""

    def __init__(
        self,
        p: FloatArray,
        u: FloatArray,
        tolerance: float,
        closed: bool,
        degree: int,
        ends: EndCondition,
        start: FloatArray | None,
        end: FloatArray | None,
        fixed: FloatArray,
    ) -> None:
        self.p, self.u, self.closed, self.degree, self.ends = p, u, closed, degree, ends
        self.start, self.end, self.fixed = start, end, fixed
        self.exact = self._through(p)
        self.tolerance = tolerance if tolerance > _LEAST * float(np.ptp(p, axis=0).max()) else 0.0

    def _through(self, p: FloatArray) -> Spline:
        """Return the spline of this kind through points."""
        if self.degree == 1 or len(p) == 2:
            line = linear_spline(p, self.u, self.closed)
            return line if self.degree == 1 else _raised(line, self.degree)
        if self.degree == 2:
            return periodic_quadratic_spline(p, self.u) if self.closed else quadratic_spline(p, self.u)
        if self.degree != 3:
            raise GeometryError(f"a degree of {self.degree} cannot be used; it must be 1, 2 or 3")
        if self.closed:
            return periodic_cubic_spline(p, self.u)
        return cubic_spline(p, self.u, self.ends, self.start, self.end)

    def fairest(self) -> Spline:
        """Return the fairest spline: the exact one moved towards the solution as far as the tolerance lets it."""
        if self.tolerance == 0.0 or len(self.p) < 5:
            return self.exact
        moved = self._solved() - self.p
        moved[self.fixed] = 0.0
        share = min(1.0, self.tolerance / max(float(np.linalg.norm(moved, axis=1).max()), 1e-300))
        return self._through(self.p + (1.0 - 1e-12) * share * moved)

    def _cubic(self, p: FloatArray) -> Spline:
        """Return the cubic spline through points, for any degree."""
        if self.closed:
            return periodic_cubic_spline(p, self.u)
        ends = self.ends if self.degree == 3 else "not-a-knot"
        return cubic_spline(p, self.u, ends, self.start, self.end)

    def _solved(self) -> FloatArray:
        """Return the points at the stations of the fairest spline found, shape (n, d)."""
        import scipy.sparse as sparse

        n, d = self.p.shape
        spline = self._cubic(self.p)
        breaks = spline.breaks
        orders = _derivatives(spline)
        if self.closed:
            rows = [order[:1] - order[-1:] for order in orders[:3]]
        elif self.degree == 3 and self.ends in ("natural", "clamped"):
            order = orders[2 if self.ends == "natural" else 1]
            rows = [order[:1], order[-1:]]
        else:
            rows = [sparse.csr_array((0, len(spline.control)))]
        basis = _basis(spline, self.u[:n])
        every = sparse.eye_array(d)  # unknown are all coordinates together, x of all control points first
        stations = sparse.kron(every, basis).tocsr()
        fixed = sparse.kron(every, sparse.vstack([*rows, basis[np.flatnonzero(self.fixed)]])).tocsr()
        third = sparse.kron(every, sparse.diags_array(np.sqrt(np.diff(breaks))) @ orders[3]).tocsr()
        anchor = np.diff(breaks).mean() * (2.0 * np.pi / (breaks[-1] - breaks[0])) ** 6
        m = len(breaks) - 1
        middle, moved = 0.5 * (breaks[1:] + breaks[:-1]), np.zeros((n, d))
        for _ in range(_PASSES):
            tangent = self._cubic(self.p + moved).evaluate(middle, 1)
            tangent /= np.maximum(np.linalg.norm(tangent, axis=1), 1e-300)[:, None]
            across = [
                [sparse.diags_array(float(a == b) - tangent[:, a] * tangent[:, b]) for b in range(d)] for a in range(d)
            ]
            ahead = sparse.hstack([sparse.diags_array(tangent[:, a]) for a in range(d)]).tocsr()
            change = ahead[1:] - ahead[:-1] if not self.closed else ahead - ahead[np.roll(np.arange(m), 1)]
            unfair = sparse.vstack([sparse.block_array(across), change]) @ third
            moved = self._search(unfair.T @ unfair + anchor * (stations.T @ stations), stations, fixed, spline, anchor)
        return self.p + moved

    def _search(
        self, weight: "csr_array", stations: "csr_array", fixed: "csr_array", spline: Spline, anchor: float
    ) -> FloatArray:
        """Return how the stations move for the least quadratic form of the control points, shape (n, d)."""
        import scipy.sparse as sparse
        from scipy.sparse.linalg import splu

        n, d = self.p.shape
        control = (spline.control - spline.control[0]).T.ravel()
        pull = anchor * (stations.T @ (stations @ control)) - weight @ control
        scale = abs(weight).max()  # only ratios count
        weight, pull = weight / scale, pull / scale
        square, blank = stations.T @ stations, sparse.csr_array((fixed.shape[0], fixed.shape[0]))
        radius = np.where(self.fixed, 0.0, _SHARE * self.tolerance)

        def factored(rho: float) -> Callable[[FloatArray], FloatArray]:
            whole = sparse.block_array([[weight + rho * square, fixed.T], [fixed, blank]]).tocsc()
            return cast(Callable[[FloatArray], FloatArray], splu(whole).solve)

        rho = 1e-3
        solve = factored(rho)
        z, w, off = np.zeros((n, d)), np.zeros((n, d)), np.zeros((n, d))
        zeros = np.zeros(fixed.shape[0])
        for round_ in range(_ROUNDS):
            right = np.concatenate([pull + rho * (stations.T @ (z - w).T.ravel()), zeros])
            off = (stations @ solve(right)[: len(control)]).reshape(d, n).T
            eased = _RELAXED * off + (1.0 - _RELAXED) * z
            before, z = z, _into_ball(eased + w, radius)
            w += eased - z
            apart, change = _size(off - z), _size(z - before)
            if max(apart, change) <= _SETTLED * self.tolerance:
                break
            if round_ % _REVIEW == _REVIEW - 1 and not 0.2 < apart / max(change, 1e-300) < 5.0:
                factor = float(np.clip(np.sqrt(apart / max(change, 1e-300)), 0.1, 10.0))
                rho, w = rho * factor, w / factor
                solve = factored(rho)
        return off


def _basis(spline: Spline, u: FloatArray) -> "csr_array":
    """Return the matrix of basis functions at parameters, shape (n, number of control points).

    Source: M. G. Cox, "The numerical evaluation of B-splines", IMA Journal of Applied Mathematics 10 (1972).
    """
    import scipy.sparse as sparse

    knots, p = spline.knots, spline.degree
    span = spline.spans[spline.locate(u)[0]]
    values = [np.ones(len(u))]
    for r in range(1, p + 1):
        raised = [np.zeros(len(u)) for _ in range(r + 1)]
        for j, value in enumerate(values):  # of the function that begins r - 1 - j knots before the span
            low, high = knots[span - r + 1 + j], knots[span + 1 + j]
            share = (u - low) / (high - low)
            raised[j] += (1.0 - share) * value
            raised[j + 1] += share * value
        values = raised
    rows = np.repeat(np.arange(len(u)), p + 1)
    columns = (span[:, None] + np.arange(-p, 1)).ravel()
    shape = (len(u), len(spline.control))
    return sparse.csr_array((np.stack(values, axis=1).ravel(), (rows, columns)), shape=shape)


def _derivatives(spline: Spline) -> list["csr_array"]:
    """Return the matrices from control points to those of the derivatives of order 0 to the degree."""
    import scipy.sparse as sparse

    n, p, knots = len(spline.control), spline.degree, spline.knots
    out = [sparse.eye_array(n, format="csr")]
    for k in range(1, p + 1):
        gap = knots[p + 1 : n + p + 1 - k] - knots[k:n]
        step = sparse.diags_array([-(p - k + 1) / gap, (p - k + 1) / gap], offsets=[0, 1], shape=(n - k, n - k + 1))
        out.append((step @ out[-1]).tocsr())
    return out


def _into_ball(points: FloatArray, radius: FloatArray) -> FloatArray:
    """Return the nearest points of balls about 0."""
    length = np.linalg.norm(points, axis=1)
    return points * np.minimum(radius / np.maximum(length, 1e-300), 1.0)[:, None]


def _size(moves: FloatArray) -> float:
    return float(np.linalg.norm(moves, axis=1).max())


def _raised(line: Spline, degree: int) -> Spline:
    """Return a line of two points as a spline of a higher degree."""
    low, high = line.control[0], line.control[-1]
    knots = np.repeat(line.knots[[0, -1]], degree + 1)
    return Spline(knots, low + np.linspace(0.0, 1.0, degree + 1)[:, None] * (high - low), degree)
