"""Least possible numbers of arcs and of vertices for a chord error, by the asymptotic formulas."""

import numpy as np

from geometry.arrays import FloatArray, IntArray
from geometry.bspline import Spline, bezier_evaluate
from geometry.economy.track import smooth_runs

__all__ = ["least_arcs", "least_vertices"]

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


def _counted(per_span: FloatArray, starts: IntArray) -> float:
    return float(np.maximum(np.add.reduceat(per_span, starts), 1.0).sum())
