"""SPLINE and ELLIPSE data as the shared spline type: exactly where that is possible, else within a proven bound."""

import math
from itertools import pairwise

import numpy as np

from geometry.arrays import FloatArray
from geometry.bspline import Spline
from geometry.polyline import Polyline

__all__ = ["clamped", "ellipse_spline", "flatten_rational", "is_smooth_seam", "unit_arc_error"]

_MOST_PIECES = 1_000_000


def clamped(knots: FloatArray, control: FloatArray, degree: int) -> tuple[FloatArray, FloatArray]:
    """Return knots and control points of the same curve over its domain, with end knots of full multiplicity.

    The control points of a B-spline are values of its blossom at consecutive knots, so those that the new end knots
    change are read off the first and the last polynomial piece; the curve stays the same up to rounding.

    Args:
        knots: non-decreasing, shape (n + degree + 1,); knots[degree] < knots[n].
        control: shape (n, d).
        degree: at least 1.
    Source: L. Ramshaw, "Blossoms are polar forms", Computer Aided Geometric Design 6 (1989).
    """
    n = len(control)
    low, high = knots[degree], knots[n]
    new = np.concatenate([np.full(degree + 1, low), knots[degree + 1 : n], np.full(degree + 1, high)])
    out = np.array(control, dtype=np.float64)
    first = int(np.searchsorted(knots, low, side="right")) - 1
    last = int(np.searchsorted(knots, high, side="left")) - 1
    for i in range(n):
        window = new[i + 1 : i + degree + 1]
        if np.array_equal(window, knots[i + 1 : i + degree + 1]):
            continue
        # a blossom of piece [knots[j], knots[j + 1]] gives control point i when i <= j <= i + degree in the new knots
        span = first if window[0] == low else last
        out[i] = _blossom(knots, control, degree, span, window)
    return new, out


def _blossom(knots: FloatArray, control: FloatArray, degree: int, span: int, at: FloatArray) -> FloatArray:
    points = [control[span - degree + j] for j in range(degree + 1)]
    for r in range(1, degree + 1):
        for j in range(degree, r - 1, -1):
            left, right = knots[span - degree + j], knots[span + 1 + j - r]
            w = (at[r - 1] - left) / (right - left)
            points[j] = (1.0 - w) * points[j - 1] + w * points[j]
    return np.asarray(points[degree])


def unit_arc_error(sweep: float) -> float:
    """Bound the distance between an arc of radius 1 and the cubic with handles 4/3 tan(sweep / 4), both ways.

    With q = tan(sweep / 4) and p = t (1 - t), writing out the control points gives
    |C|^2 - 1 = 16 q^6 / (1 + q^2)^2 p^2 (1 - 4 p), which is 0 at both ends and in the middle and never negative. Its
    largest value lies at p = 1/6, where p^2 (1 - 4 p) = 1/108, and |C| - 1 <= (|C|^2 - 1) / 2. The cubic runs through
    every direction of the arc, so the same bound holds from the arc to the cubic.
    """
    q = math.tan(0.25 * abs(sweep))
    return 2.0 / 27.0 * q**6 / (1.0 + q * q) ** 2


def ellipse_spline(
    centre: FloatArray, major: FloatArray, minor: FloatArray, start: float, end: float, closed: bool
) -> tuple[Spline, float]:
    """Return an elliptic arc as a cubic spline and the bound on the distance between them.

    Every piece covers at most 1/64 of a turn, whose error is below 1e-10 of the semi-major axis: the ellipse is a
    linear image of the unit circle, and the map stretches no distance by more than the semi-major axis.

    Args:
        centre, major, minor: centre and semi-axes as vectors, shape (3,), drawing units.
        start, end: parameters (eccentric anomalies), radians, start < end.
        closed: whether it is the whole ellipse.
    """
    count = max(1, math.ceil((end - start) / (math.pi / 32.0) - 1e-9))
    angles = np.linspace(start, end, count + 1)
    sweep = (end - start) / count
    handle = 4.0 / 3.0 * math.tan(0.25 * sweep)
    c, s = np.cos(angles), np.sin(angles)
    if closed:
        c[-1], s[-1] = c[0], s[0]
    unit = np.stack([c, s], axis=1)
    left = np.stack([-s, c], axis=1) * handle
    local = np.empty((3 * count + 1, 2))
    local[::3] = unit
    local[1::3] = unit[:-1] + left[:-1]
    local[2::3] = unit[1:] - left[1:]
    # neighbouring pieces share tangent and parameter speed: drop to double knots, where corners would be triple ones
    keep = np.ones(len(local), dtype=bool)
    keep[3:-1:3] = False
    inner = np.repeat(angles[1:-1], 2)
    knots = np.concatenate([np.full(4, start), inner, np.full(4, end)])
    control = centre + local[keep] @ np.stack([major, minor])
    size = max(float(np.linalg.norm(major)), float(np.linalg.norm(minor)))
    return Spline(knots, control, 3, closed, closed), size * unit_arc_error(sweep)


def is_smooth_seam(spline: Spline) -> bool:
    """Return whether tangent direction and curvature run on through the seam of a closed spline."""
    ends = np.array([spline.knots[0], spline.knots[-1]])
    first = spline.evaluate(ends, 1)
    speed = np.linalg.norm(first, axis=1)
    if speed.min() == 0.0:
        return False
    tangent = first / speed[:, None]
    if np.linalg.norm(tangent[1] - tangent[0]) > 1e-6:
        return False
    if spline.degree < 3:
        return True
    second = spline.evaluate(ends, 2)
    across = second - np.sum(second * tangent, axis=1)[:, None] * tangent
    curvature = across / speed[:, None] ** 2
    largest = float(np.linalg.norm(curvature, axis=1).max())
    return float(np.linalg.norm(curvature[1] - curvature[0])) <= 1e-6 * largest


def flatten_rational(
    knots: FloatArray, control: FloatArray, weights: FloatArray, degree: int, closed: bool, delta: float
) -> Polyline:
    """Return a polyline within `delta` of a rational B-spline of any degree, both ways, its vertices on the curve.

    With positive weights a piece lies in the convex hull of its control points (de Casteljau's steps are then convex
    combinations), and distance to a chord, as a segment, is convex: a piece whose control points all lie within
    `delta` of its chord does too; being connected from end to end, it also leaves no point of the chord farther than
    `delta`, since its projection on the chord covers it. Other pieces are halved.

    Args:
        knots: shape (n + degree + 1,), with end knots of full multiplicity.
        control: shape (n, d). weights: shape (n,), above 0. delta: drawing units, above 0.

    Raises:
        ValueError: the bound cannot be reached with a million pieces.
    """
    homogeneous = np.column_stack([control * weights[:, None], weights])
    spans = np.flatnonzero(np.diff(knots) > 0.0)
    pieces = np.stack(
        [
            np.stack(
                [
                    _blossom(knots, homogeneous, degree, int(j), np.repeat(knots[[j + 1, j]], [k, degree - k]))
                    for k in range(degree + 1)
                ]
            )
            for j in spans
        ]
    )
    done: list[tuple[FloatArray, FloatArray]] = []  # (start parameters in units of spans, start points)
    at, width = np.arange(len(spans), dtype=np.float64), 1.0
    while len(pieces):
        points = pieces[..., :-1] / pieces[..., -1:]
        fits = _farthest_from_chord(points) <= delta
        done.append((at[fits], points[fits, 0]))
        pieces, at, width = pieces[~fits], at[~fits], 0.5 * width
        if len(pieces) > _MOST_PIECES or width < 1e-12:
            raise ValueError("a rational spline cannot be flattened to the bound")
        left, right = _halve(pieces)
        pieces, at = np.concatenate([left, right]), np.concatenate([at, at + width])
    order = np.argsort(np.concatenate([a for a, _ in done]))
    path = np.concatenate([p for _, p in done])[order]
    return Polyline(path if closed else np.vstack([path, control[-1:]]), closed)


def _farthest_from_chord(points: FloatArray) -> FloatArray:
    start, chord = points[:, :1], points[:, -1:] - points[:, :1]
    square = np.sum(chord * chord, axis=-1, keepdims=True)
    along = np.sum((points - start) * chord, axis=-1, keepdims=True)
    share = np.clip(np.divide(along, square, out=np.zeros_like(along), where=square > 0.0), 0.0, 1.0)
    return np.asarray(np.linalg.norm(points - start - share * chord, axis=-1).max(axis=1))


def _halve(pieces: FloatArray) -> tuple[FloatArray, FloatArray]:
    left, right = np.empty_like(pieces), np.empty_like(pieces)
    rows = [pieces[:, j] for j in range(pieces.shape[1])]
    for j in range(pieces.shape[1]):
        left[:, j], right[:, -1 - j] = rows[0], rows[-1]
        rows = [0.5 * (a + b) for a, b in pairwise(rows)]
    return left, right
