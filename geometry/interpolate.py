"""Splines through nodes: cubic, quadratic and linear, one coordinate at a time over a common parameter.

Every system is tridiagonal (or cyclic tridiagonal) and is solved as a band, so the work is in proportion to the nodes.
Control points follow from values and derivatives at the knots by blossoming: the control point that belongs to three
knots a, b, c of a cubic piece p is p(b) + (a + c - 2 b) p'(b) / 3 + (a - b) (c - b) p''(b) / 6.
Sources: C. de Boor, A Practical Guide to Splines, Springer 2001, chapters IV (cubic) and VI (quadratic with knots
between the nodes); L. Ramshaw, "Blossoms are polar forms", Computer Aided Geometric Design 6 (1989).
"""

from typing import Literal

import numpy as np
from scipy.linalg import solve_banded

from geometry.arrays import FloatArray, IntArray
from geometry.bspline import Spline
from geometry.errors import GeometryError, NotFiniteError, TooFewPointsError
from geometry.parameter import ParameterKind, node_parameters

__all__ = [
    "EndCondition",
    "cubic_spline",
    "linear_spline",
    "periodic_cubic_spline",
    "periodic_quadratic_spline",
    "quadratic_spline",
    "quadratic_spline_on_nodes",
    "spline_through",
]

EndCondition = Literal["natural", "clamped", "not-a-knot", "periodic"]


def spline_through(
    nodes: FloatArray,
    degree: int = 3,
    ends: EndCondition = "not-a-knot",
    parameter: ParameterKind = "chord",
    start: FloatArray | None = None,
    end: FloatArray | None = None,
) -> Spline:
    """Return a spline through nodes, the parameters taken from the nodes themselves.

    Args:
        nodes: shape (n, d), d = 2 or 3, drawing units; with periodic ends the first one is not repeated.
        degree: 3; 2 (knots between the nodes; with a start slope: knots at the nodes); or 1.
        ends: periodic closes the curve, for any degree. The others differ for degree 3 only.
        parameter: chord length, centripetal or uniform.
        start: derivative with respect to the parameter at the first node, shape (d,); over chord length a unit vector
            is the natural size. For clamped ends, or with degree 2.
        end: the same at the last node, for clamped ends.

    Raises:
        GeometryError: no such degree or end condition, or a slope where none can be used (or none where one is needed).
        CoincidentNodesError, NotFiniteError, TooFewPointsError: the nodes cannot be used.
    """
    if degree not in (1, 2, 3):
        raise GeometryError(f"a degree of {degree} cannot be used; it must be 1, 2 or 3")
    if ends not in ("natural", "clamped", "not-a-knot", "periodic"):
        raise GeometryError(f"there is no end condition {ends!r}; use natural, clamped, not-a-knot or periodic")
    closed = ends == "periodic"
    usable = (degree == 3 and ends == "clamped") or (degree == 2 and not closed)
    if (start is not None and not usable) or (end is not None and (not usable or degree == 2)):
        raise GeometryError(f"a slope at an end cannot be used with degree {degree} and {ends} ends; leave it out")
    u = node_parameters(nodes, parameter, closed)
    if degree == 1:
        return linear_spline(nodes, u, closed)
    if degree == 2 and closed:
        return periodic_quadratic_spline(nodes, u)
    if degree == 2:
        return quadratic_spline(nodes, u) if start is None else quadratic_spline_on_nodes(nodes, u, start)
    return periodic_cubic_spline(nodes, u) if closed else cubic_spline(nodes, u, ends, start, end)


# Cubic ---------------------------------------------------------------------------------------------------------------


def cubic_spline(
    nodes: FloatArray,
    parameters: FloatArray,
    ends: EndCondition = "not-a-knot",
    start: FloatArray | None = None,
    end: FloatArray | None = None,
) -> Spline:
    """Return the twice continuously differentiable cubic spline through nodes, open.

    Args:
        nodes: shape (n, d), drawing units; n >= 2.
        parameters: strictly increasing, shape (n,).
        ends: natural (no second derivative at the ends), clamped (first derivatives given) or not-a-knot (the first two
            pieces are one polynomial, and the last two; three nodes give a parabola, two a line).
        start, end: for clamped ends, derivatives with respect to the parameter, shape (d,).

    Raises:
        GeometryError: parameters that do not increase, an unknown end condition, or clamped without both slopes.
        NotFiniteError, TooFewPointsError: the nodes cannot be used.
    """
    origin, p, u = _prepared(nodes, parameters, 2, closed=False)
    h, rise = np.diff(u), np.diff(p, axis=0) / np.diff(u)[:, None]
    n = len(p)
    band, right = _cubic_rows(h, rise)
    if ends == "clamped":
        if start is None or end is None:
            raise GeometryError("clamped ends need a slope at both ends; give both or use natural ends")
        band[1, [0, -1]], right[0], right[-1] = 1.0, start, end
    elif ends == "natural":
        band[1, [0, -1]], band[0, 1], band[2, -2] = 2.0, 1.0, 1.0
        right[0], right[-1] = 3.0 * rise[0], 3.0 * rise[-1]
    elif ends != "not-a-knot":
        raise GeometryError(f"an open cubic spline has no end condition {ends!r}; use natural, clamped or not-a-knot")
    elif n == 2:
        band[1], right[:] = 1.0, rise[0]
    elif n == 3:  # the parabola: its slope at the middle weighs the two rises crosswise, and changes evenly
        middle = (h[1] * rise[0] + h[0] * rise[1]) / (h[0] + h[1])
        band[:], band[1] = 0.0, 1.0
        right[:] = 2.0 * rise[0] - middle, middle, 2.0 * rise[1] - middle
    else:  # equal third derivatives on both sides of the second node
        for row, off, (h0, h1), (r0, r1) in (
            (0, (0, 1), h[:2], rise[:2]),
            (n - 1, (2, n - 2), h[:-3:-1], rise[:-3:-1]),
        ):
            both = h0 + h1
            band[1, row], band[off] = h1, both
            right[row] = ((h0 + 2.0 * both) * h1 * r0 + h0 * h0 * r1) / both
    slopes = solve_banded((1, 1), band, right)
    inner = np.delete(np.arange(n), [0, 1, n - 2, n - 1] if ends == "not-a-knot" else [0, n - 1])
    return _from_slopes(origin, p, u, slopes, np.unique(inner), closed=False)


def periodic_cubic_spline(nodes: FloatArray, parameters: FloatArray) -> Spline:
    """Return the closed cubic spline through nodes, twice continuously differentiable at the seam as well.

    Args:
        nodes: shape (n, d), n >= 3, drawing units; the first one is not repeated.
        parameters: strictly increasing, shape (n + 1,): the last belongs to the return to the first node.

    Raises: as `cubic_spline`.
    """
    origin, p, u = _prepared(nodes, parameters, 3, closed=True)
    h, rise = np.diff(u), np.diff(np.vstack([p, p[:1]]), axis=0) / np.diff(u)[:, None]
    before, rise_before = np.roll(h, 1), np.roll(rise, 1, axis=0)
    right = 3.0 * (h[:, None] * rise_before + before[:, None] * rise)
    slopes = _solve_cyclic(h, 2.0 * (before + h), before, right)
    closing = np.vstack([p, p[:1]]), np.vstack([slopes, slopes[:1]])
    return _from_slopes(origin, closing[0], u, closing[1], np.arange(1, len(p)), closed=True)


def _cubic_rows(h: FloatArray, rise: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Band and right side of h_i m_(i-1) + 2 (h_(i-1) + h_i) m_i + h_(i-1) m_(i+1) = 3 (...), end rows empty."""
    n = len(h) + 1
    band, right = np.zeros((3, n)), np.zeros((n, rise.shape[1]))
    band[0, 2:], band[1, 1:-1], band[2, :-2] = h[:-1], 2.0 * (h[:-1] + h[1:]), h[1:]
    right[1:-1] = 3.0 * (h[1:, None] * rise[:-1] + h[:-1, None] * rise[1:])
    return band, right


def _from_slopes(
    origin: FloatArray, p: FloatArray, u: FloatArray, slopes: FloatArray, inner: IntArray, closed: bool
) -> Spline:
    """Clamped cubic spline with knots at the ends and at the inner nodes named, from values and slopes at all nodes."""
    h, rise = np.diff(u), np.diff(p, axis=0) / np.diff(u)[:, None]
    bend = np.empty_like(p)  # second derivative at every node: that of the piece behind it, at the end before it
    bend[:-1] = (6.0 * rise - 4.0 * slopes[:-1] - 2.0 * slopes[1:]) / h[:, None]
    bend[-1] = (2.0 * slopes[-2] + 4.0 * slopes[-1] - 6.0 * rise[-1]) / h[-1]
    last = len(u) - 1
    knot = np.concatenate([[0] * 4, inner, [last] * 4]).astype(np.intp)  # as indices of nodes
    a, b, c = knot[1:-3], knot[2:-2], knot[3:-1]
    left, right = (u[a] - u[b])[:, None], (u[c] - u[b])[:, None]
    control = p[b] + (left + right) / 3.0 * slopes[b] + left * right / 6.0 * bend[b]
    control[0], control[-1] = p[0], p[-1]
    return Spline(u[knot], control + origin, 3, closed, closed)


# Quadratic -----------------------------------------------------------------------------------------------------------


def quadratic_spline(nodes: FloatArray, parameters: FloatArray) -> Spline:
    """Return the quadratic spline with nodes at its ends and knots midway between its inner nodes, open.

    A wrong value at one node dies away from node to node (by about 0.17 each), unlike with knots at the nodes.

    Args:
        nodes: shape (n, d), n >= 3, drawing units.
        parameters: strictly increasing, shape (n,).

    Raises: as `cubic_spline`.
    """
    origin, p, u = _prepared(nodes, parameters, 3, closed=False)
    knots = np.concatenate([[u[0]] * 3, 0.5 * (u[1:-2] + u[2:-1]), [u[-1]] * 3])
    before, middle, after = _quadratic_basis(knots[1:-4], knots[2:-3], knots[3:-2], knots[4:-1], u[1:-1])
    band = np.zeros((3, len(p)))
    band[1] = 1.0
    band[2, :-2], band[1, 1:-1], band[0, 2:] = before, middle, after
    control = solve_banded((1, 1), band, p)
    control[0], control[-1] = p[0], p[-1]
    return Spline(knots, control + origin, 2)


def periodic_quadratic_spline(nodes: FloatArray, parameters: FloatArray) -> Spline:
    """Return the closed quadratic spline with knots midway between its nodes, its tangent continuous at the seam.

    The seam stands at the first node, in the middle of a piece, and needs one knot more to be clamped there.

    Args:
        nodes: shape (n, d), n >= 3, drawing units; the first one is not repeated.
        parameters: strictly increasing, shape (n + 1,): the last belongs to the return to the first node.

    Raises: as `cubic_spline`.
    """
    origin, p, u = _prepared(nodes, parameters, 3, closed=True)
    period, n = u[-1] - u[0], len(p)
    middle = 0.5 * (u[:-1] + u[1:])  # the knot behind each node
    knot = np.concatenate([middle[-2:] - period, middle, middle[:1] + period])  # of node i: two before, two behind
    basis = _quadratic_basis(knot[:n], knot[1 : n + 1], knot[2 : n + 2], knot[3 : n + 3], u[:-1])
    control = _solve_cyclic(*basis, p)  # of node i: belongs to the knots before and behind it
    # the seam: a knot at u_0 between the last middle and the first, the control points beside it by blossoming
    w = (u[0] - knot[1]) / (knot[3] - knot[1])
    second = (1.0 - w) * control[0] + w * control[1]
    w = (u[0] - knot[0]) / (knot[2] - knot[0])
    last_but_one = (1.0 - w) * control[-1] + w * control[0]
    clamped = np.vstack([p[:1], second[None], control[1:], last_but_one[None], p[:1]])
    knots = np.concatenate([[u[0]] * 3, middle, [u[-1]] * 3])
    return Spline(knots, clamped + origin, 2, True, True)


def quadratic_spline_on_nodes(nodes: FloatArray, parameters: FloatArray, start: FloatArray | None = None) -> Spline:
    """Return the quadratic spline whose knots are its nodes, open, from a slope at its start.

    Every slope follows from the one before, m_(i+1) = 2 rise_i - m_i, so that an error in one rings on undamped
    to the end: the classical form, for data that are known to suit it.

    Args:
        nodes: shape (n, d), n >= 2, drawing units.
        parameters: strictly increasing, shape (n,).
        start: derivative with respect to the parameter at the first node, shape (d,); None takes that of the
            parabola through the first three nodes (of the line through two).

    Raises: as `cubic_spline`.
    """
    origin, p, u = _prepared(nodes, parameters, 2, closed=False)
    h, rise = np.diff(u), np.diff(p, axis=0) / np.diff(u)[:, None]
    if start is None:
        start = rise[0] if len(h) == 1 else rise[0] - h[0] * (rise[1] - rise[0]) / (h[0] + h[1])
    sign = np.where(np.arange(len(p)) % 2 == 0, 1.0, -1.0)[:, None]
    slopes = sign * np.cumsum(np.vstack([np.asarray(start)[None], 2.0 * sign[1:] * rise]), axis=0)
    control = np.vstack([p[:1], p[:-1] + 0.5 * h[:, None] * slopes[:-1], p[-1:]])
    return Spline(np.concatenate([u[:1], u[:1], u, u[-1:], u[-1:]]), control + origin, 2)


def _quadratic_basis(
    far_left: FloatArray, left: FloatArray, right: FloatArray, far_right: FloatArray, u: FloatArray
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Values of the three quadratic B-splines at u in [left, right], the knots beyond being far_left and far_right."""
    before = (right - u) ** 2 / ((right - left) * (right - far_left))
    after = (u - left) ** 2 / ((right - left) * (far_right - left))
    return before, 1.0 - before - after, after


# Linear --------------------------------------------------------------------------------------------------------------


def linear_spline(nodes: FloatArray, parameters: FloatArray, closed: bool = False) -> Spline:
    """Return the spline of degree 1 through nodes: the polyline, with the given parameters.

    Args:
        nodes: shape (n, d), n >= 2 (3 when closed), drawing units.
        parameters: strictly increasing, shape (n,), or (n + 1,) when closed.
        closed: whether it returns to the first node.

    Raises: as `cubic_spline`.
    """
    origin, p, u = _prepared(nodes, parameters, 3 if closed else 2, closed)
    control = np.vstack([p, p[:1]]) if closed else p
    return Spline(np.concatenate([u[:1], u, u[-1:]]), control + origin, 1, closed)


# Common --------------------------------------------------------------------------------------------------------------


def _prepared(
    nodes: FloatArray, parameters: FloatArray, least: int, closed: bool
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Check nodes and parameters; return the first node, the nodes about it, and the parameters."""
    p, u = np.asarray(nodes, dtype=np.float64), np.asarray(parameters, dtype=np.float64)
    if p.ndim != 2:
        raise GeometryError(f"nodes of shape {p.shape} cannot be used; they must have the shape (n, 2) or (n, 3)")
    bad = np.flatnonzero(~np.isfinite(p).all(axis=1))
    if bad.size:
        raise NotFiniteError(int(bad[0]))
    if len(p) < least:
        raise TooFewPointsError(len(p), least)
    if u.shape != (len(p) + closed,):
        raise GeometryError(f"{u.size} parameters do not fit {len(p)} nodes; give {len(p) + closed}")
    if not (np.isfinite(u).all() and (np.diff(u) > 0.0).all()):
        raise GeometryError("parameters must be finite and increase from node to node")
    return p[0], p - p[0], u


def _solve_cyclic(before: FloatArray, middle: FloatArray, after: FloatArray, right: FloatArray) -> FloatArray:
    """Solve before_i x_(i-1) + middle_i x_i + after_i x_(i+1) = right_i, indices cyclic, n >= 3.

    The two corner entries are taken off by a rank-one change (Sherman and Morrison 1950): A = T + g w^T.
    """
    n = len(middle)
    gamma = -middle[0]
    band = np.zeros((3, n))
    band[0, 1:], band[1], band[2, :-1] = after[:-1], middle, before[1:]
    band[1, 0] -= gamma
    band[1, -1] -= before[0] * after[-1] / gamma
    change = np.zeros((n, 1))
    change[0], change[-1] = gamma, after[-1]
    both = solve_banded((1, 1), band, np.hstack([right, change]))
    x, z = both[:, :-1], both[:, -1:]
    ratio = before[0] / gamma
    return np.asarray(x - z * (x[0] + ratio * x[-1]) / (1.0 + z[0] + ratio * z[-1]), dtype=np.float64)
