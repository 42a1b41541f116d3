"""Known curves as splines with a knot a unit apart, and a dense distance oracle, for tests and benchmarks."""

from collections.abc import Callable

import numpy as np
import shapely
from scipy.interpolate import CubicSpline, make_interp_spline
from scipy.spatial import cKDTree
from scipy.special import fresnel

from geometry.arrays import FloatArray
from geometry.bspline import Spline, bezier_evaluate


def ellipse(t: FloatArray) -> FloatArray:
    a = 2.0 * np.pi * t
    return np.stack([100.0 * np.cos(a), 60.0 * np.sin(a)], axis=1)


def superellipse(t: FloatArray) -> FloatArray:
    c, s = np.cos(2.0 * np.pi * t), np.sin(2.0 * np.pi * t)
    r = (np.abs(c / 100.0) ** 3 + np.abs(s / 60.0) ** 3) ** (-1.0 / 3.0)
    return np.stack([r * c, r * s], axis=1)


def clothoid(t: FloatArray) -> FloatArray:
    s, c = fresnel(2.4 * t - 1.2)
    return np.stack([100.0 * c, 100.0 * s], axis=1)


def sine(t: FloatArray) -> FloatArray:
    return np.stack([250.0 * t, 10.0 * np.sin(10.0 * np.pi * t)], axis=1)


def aerofoil(t: FloatArray) -> FloatArray:
    """Section 4412 (4 % camber at 40 %, 12 % thick), chord 200, from the trailing edge round the nose and back.

    Thickness and mean line from NACA Report 460 (from memory).
    """
    a = np.pi * (2.0 * t - 1.0)
    side, x = np.sign(a), 0.5 * (1.0 - np.cos(a))
    root = np.abs(np.sin(0.5 * a))
    half = 0.6 * (0.2969 * root - 0.126 * x - 0.3516 * x**2 + 0.2843 * x**3 - 0.1036 * x**4)
    fore = x < 0.4
    mean = np.where(fore, 0.04 / 0.16 * (0.8 * x - x**2), 0.04 / 0.36 * (0.2 + 0.8 * x - x**2))
    tilt = np.arctan(np.where(fore, 0.08 / 0.16 * (0.4 - x), 0.08 / 0.36 * (0.4 - x)))
    return 200.0 * np.stack([x - side * half * np.sin(tilt), mean + side * half * np.cos(tilt)], axis=1)


def lissajous(t: FloatArray) -> FloatArray:
    a = 2.0 * np.pi * t
    return np.stack([80.0 * np.sin(3.0 * a + 0.5), 80.0 * np.sin(2.0 * a)], axis=1)


def random_walk(t: FloatArray) -> FloatArray:
    """Natural cubic through 12 seeded points."""
    points = np.cumsum(np.random.default_rng(12).normal(0.0, 30.0, (12, 2)), axis=0)
    u = np.concatenate([[0.0], np.cumsum(np.sqrt(np.linalg.norm(np.diff(points, axis=0), axis=1)))])
    return np.asarray(CubicSpline(u, points, bc_type="natural")(t * u[-1]))


def slot(t: FloatArray) -> FloatArray:
    """Two lines 100 long and two half circles of radius 20."""
    turn = 20.0 * np.pi
    s = (t * (200.0 + 2.0 * turn)) % (200.0 + 2.0 * turn)
    right, left = (s - 100.0) / 20.0 - 0.5 * np.pi, (s - 200.0 - turn) / 20.0 + 0.5 * np.pi
    parts = [s < 100.0, s < 100.0 + turn, s < 200.0 + turn]
    x = np.select(parts, [s, 100.0 + 20.0 * np.cos(right), 200.0 + turn - s], 20.0 * np.cos(left))
    y = np.select(parts, [np.full_like(s, -20.0), 20.0 * np.sin(right), np.full_like(s, 20.0)], 20.0 * np.sin(left))
    return np.stack([x, y], axis=1)


def helix(t: FloatArray) -> FloatArray:
    a = 3.0 * np.pi * t
    return np.stack([50.0 * np.cos(a), 50.0 * np.sin(a), 40.0 * t], axis=1)


SHAPES: dict[str, tuple[Callable[[FloatArray], FloatArray], bool]] = {
    "ellipse": (ellipse, True),
    "superellipse": (superellipse, True),
    "clothoid": (clothoid, False),
    "sine": (sine, False),
    "aerofoil": (aerofoil, False),
    "lissajous": (lissajous, True),
    "random": (random_walk, False),
    "slot": (slot, True),
}


def by_length(curve: Callable[[FloatArray], FloatArray], step: float = 1.0) -> tuple[FloatArray, FloatArray]:
    """Return about one point a step along a curve given on [0, 1], and the arc lengths of the points."""
    t = np.linspace(0.0, 1.0, 100_001)
    points = curve(t)
    s = np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(points, axis=0), axis=1))])
    along = np.linspace(0.0, s[-1], max(8, round(s[-1] / step)) + 1)
    return curve(np.interp(along, s, t)), along


def spline_through(points: FloatArray, along: FloatArray, closed: bool, degree: int = 3) -> Spline:
    """Return a spline with knots at (degree 3) or midway between (degree 2) points at even arc lengths."""
    if closed and degree == 3:
        points = np.concatenate([points[:-1], points[:1]])
        slope = make_interp_spline(along, points, k=3, bc_type="periodic")(along[0], 1)
        fit = make_interp_spline(along, points, k=3, bc_type=([(1, slope)], [(1, slope)]))
        control = np.concatenate([fit.c[:-1], fit.c[:1]])
        return Spline(fit.t, control, 3, closed=True, smooth_seam=True)
    if closed:
        n, h = len(along) - 1, along[1] - along[0]
        factor = 0.75 + 0.25 * np.cos(2.0 * np.pi * np.fft.fftfreq(n))  # value at the middle of a quadratic span
        inner = np.real(np.fft.ifft(np.fft.fft(points[:-1], axis=0) / factor[:, None], axis=0))
        seam = 0.5 * (inner[-1:] + inner[:1])
        knots = np.concatenate([[0.0, 0.0], np.arange(n + 1) * h, [n * h, n * h]])
        return Spline(knots, np.concatenate([seam, inner, seam]), 2, closed=True, smooth_seam=True)
    fit = make_interp_spline(along, points, k=degree)
    return Spline(fit.t, fit.c, degree)


def made(name: str, degree: int = 3) -> Spline:
    """Return one of the shapes as a spline."""
    curve, closed = SHAPES[name]
    return spline_through(*by_length(curve), closed, degree)


def dense(spline: Spline, per_span: int) -> FloatArray:
    """Return points of every span and the end point, shape (n, d)."""
    t = np.arange(per_span) / per_span
    b = spline.beziers
    return np.concatenate([bezier_evaluate(b[:, None], t[None, :], 0).reshape(-1, spline.dimension), b[-1:, -1]])


def one_way(a: FloatArray, b: FloatArray) -> float:
    """Return the largest distance from the points a to the polyline b: exact in 2-D, by near segments in 3-D."""
    start, edge = b[:-1], np.diff(b, axis=0)
    if a.shape[1] == 2:
        tree = shapely.STRtree(shapely.linestrings(np.stack([start, b[1:]], axis=1)))
        return float(tree.query_nearest(shapely.points(a), return_distance=True, all_matches=False)[1].max())
    _, near = cKDTree(start + 0.5 * edge).query(a, k=8)
    away, along = a[:, None] - start[near], edge[near]
    share = (away * along).sum(axis=2) / np.maximum((along**2).sum(axis=2), 1e-300)
    foot = away - np.clip(share, 0.0, 1.0)[..., None] * along
    return float(np.linalg.norm(foot, axis=2).min(axis=1).max())


def apart(a: Spline, b: Spline, step: float = 0.02) -> float:
    """Return the two-sided distance between two splines, sampled `step` apart."""
    points = [dense(s, max(4, int(np.ceil(s.length() / len(s.spans) / step)))) for s in (a, b)]
    return max(one_way(points[0], points[1]), one_way(points[1], points[0]))
