"""Least possible numbers of arcs and vertices for a chord error by the asymptotic formulas; a yardstick for splines."""

import numpy as np

from geometry.arrays import FloatArray, IntArray
from geometry.bspline import Spline, bezier_evaluate
from geometry.economy.track import smooth_runs, track_of

__all__ = ["least_arcs", "least_control_points", "least_vertices"]

# Gauss-Legendre nodes and weights on [0, 1]
_NODES, _WEIGHTS = np.polynomial.legendre.leggauss(8)
_NODES, _WEIGHTS = 0.5 * (_NODES + 1.0), 0.5 * _WEIGHTS


def least_vertices(spline: Spline, chord_error: float, on_curve: bool = False) -> float:
    """Return the theoretical least number of vertices of a polyline within a chord error of a spline.

    A link spans h = sqrt(16 e / k) where its ends may leave the curve and sqrt(8 e / k) where they lie on it (the
    sagitta k h^2 / 8, shared by both sides in the first case), so a smooth piece takes the integral of 1 / h links
    as e goes to 0. This counts that integral, at least 1, for every smooth piece, and 1 more for an open profile,
    which has one vertex more than links. For a finite e the true least number may lie a little on either side.

    Args:
        spline: d = 2 or 3.
        chord_error: drawing units.
        on_curve: whether the vertices must lie on the curve.
    """
    beziers, starts, closed = smooth_runs(spline)
    slope = bezier_evaluate(beziers[:, None], _NODES, 1)
    bend = bezier_evaluate(beziers[:, None], _NODES, 2)
    speed = np.maximum(np.linalg.norm(slope, axis=-1), 1e-300)
    across = bend - slope * ((bend * slope).sum(axis=-1) / speed**2)[..., None]
    # sqrt(k) ds = sqrt(|C'' across C'|) dt
    density = np.sqrt(np.linalg.norm(across, axis=-1) / ((8.0 if on_curve else 16.0) * chord_error))
    return _counted(density @ _WEIGHTS, starts) + (0.0 if closed or spline.closed else 1.0)


def least_arcs(spline: Spline, chord_error: float) -> float:
    """Return the theoretical least number of lines and arcs of a G1 chain within a chord error of a planar spline.

    The error of the best G1 chain with free joints is h^3 |k'| / 124.6 on arcs of length h, so that a smooth piece
    takes 0.2002 e^(-1/3) times the integral of |dk/ds|^(1/3) arcs as e goes to 0. This counts that integral, at least
    1, for every smooth piece. A curve whose curvature wiggles inside the band may take far fewer.

    Args:
        spline: planar.
        chord_error: drawing units.
    """
    beziers, starts, _ = smooth_runs(spline)
    first, second, third = (bezier_evaluate(beziers[:, None], _NODES, order) for order in (1, 2, 3))
    speed = np.maximum(np.linalg.norm(first, axis=-1), 1e-300)
    cross_12 = first[..., 0] * second[..., 1] - first[..., 1] * second[..., 0]
    cross_13 = first[..., 0] * third[..., 1] - first[..., 1] * third[..., 0]
    along = (first * second).sum(axis=-1)
    slope = np.abs(cross_13 - 3.0 * cross_12 * along / speed**2) / speed**4  # |dk/ds|
    density = 0.2002 * np.cbrt(slope / chord_error) * speed
    return _counted(density @ _WEIGHTS, starts)


def least_control_points(spline: Spline, chord_error: float, degree: int = 3) -> float:
    """Return a yardstick for the number of control points of a spline within a chord error of a planar spline.

    No bound: it is what the best knots take when the parameter is arc length, and splines with another parameter,
    that slides along the curve, may take fewer. On spans of length h the best spline errs by h^4 |F| / 768 (cubic)
    or h^3 |G| / 124.7 (quadratic), the largest values of the Bernoulli polynomials B4 / 4! and B3 / 3! about their
    middle, where F = k'' - k^3 and G = k' are the fourth and the third derivative across the curve. A smooth piece
    takes the integral of 1 / h spans, at least 1, and `degree` control points more than spans; pieces share those at
    corners.

    The derivatives of k are differences over up to half a span on either side, so that wiggles far shorter than a span
    ask for nothing. The knots of the given spline do not count as such.

    Args:
        spline: planar.
        chord_error: drawing units.
        degree: of the spline to be written, 2 or 3.
    """
    track = track_of(spline)
    order = degree + 1.0
    factor = (1.0 / (768.0 if degree == 3 else 72.0 * np.sqrt(3.0)) / chord_error) ** (1.0 / order)
    spans = 0.0
    for a, b in zip(track.first.tolist(), track.last.tolist(), strict=True):
        s, bend = track.s[a : b + 1], track.curvature[a : b + 1]
        density = _span_density(s, bend, factor, degree, track.closed)
        spans += max(float(np.trapezoid(density, s)), 1.0)
    return spans + degree * len(track.first) - (len(track.first) - 1)


def _span_density(s: FloatArray, bend: FloatArray, factor: float, degree: int, closed: bool) -> FloatArray:
    """Return spans per length at every node of a piece, from differences over growing reaches."""
    length = float(s[-1] - s[0])
    halvings = int(np.ceil(np.log2(max(0.5 * len(s), 2.0))))
    density, ended, quiet = np.zeros(len(s)), np.zeros(len(s), dtype=np.bool_), np.zeros(len(s), dtype=np.bool_)
    for halving in range(halvings, 0, -1):
        reach = 0.5**halving * length
        tried = factor * np.abs(_differences(s, bend, reach, degree, closed)) ** (1.0 / (degree + 1.0))
        now = 2.0 * reach * tried <= 1.0
        ended |= quiet & ~now  # what a reach of a whole wave does not see must not pass for quiet
        density = np.where((now | (halving == halvings)) & ~ended, tried, density)
        quiet |= now
        if ended.all():
            break
    return density


def _differences(s: FloatArray, bend: FloatArray, reach: float, degree: int, closed: bool) -> FloatArray:
    """Return k'' - k^3 (cubic) or k' (quadratic) from curvatures `reach` to either side, moved inwards at open ends."""
    if closed:
        period = s[-1] - s[0]
        low, high = np.interp(s[0] + np.mod(np.stack([s - reach, s + reach]) - s[0], period), s, bend)
        at = bend
    else:
        middle = np.clip(s, s[0] + reach, s[-1] - reach)
        low, at, high = (np.interp(middle + by, s, bend) for by in (-reach, 0.0, reach))
    if degree == 2:
        return np.asarray((high - low) / (2.0 * reach))
    return np.asarray((high - 2.0 * at + low) / reach**2 - at**3)


def _counted(per_span: FloatArray, starts: IntArray) -> float:
    return float(np.maximum(np.add.reduceat(per_span, starts), 1.0).sum())
