"""Whether a traced outline is a whole circle, and which: a fit to the outline and a look at what is left over."""

import numpy as np

from geometry.arrays import FloatArray
from geometry.bspline import Spline
from geometry.interpolate import spline_through
from geometry.polyline import Polyline

__all__ = ["circle_spline", "whole_circle"]

_FEW = 200  # vertices for a first look
_SAMPLES = 4  # a vertex or a tolerance of arc length, whichever gives more
_STEPS, _SETTLED = 20, 1e-12
_WITHIN = 0.85  # of the tolerance: no vertex may lie farther from the circle
_LEAST_RADIUS = 3.0  # tolerances: a smaller blob could as well be a small polygon
_ORDERS = np.arange(2, 25)  # waves round the circle that are looked for; 0 and 1 are its radius and centre
_RASTER = 8.0**0.5  # a raster repeats itself in all eight parts of a circle whose centre lies on or midway its lines
_CHANCE, _MOST = 3.0, 0.25  # how far chance goes, and the share of the tolerance that a wave may have at all


def whole_circle(outline: Polyline, tolerance: float) -> tuple[FloatArray, float] | None:
    """Return centre and radius of the circle that an outline was traced from, or None where it was not a circle.

    The circle is the least-squares one over the angle, so that neither long steps nor close vertices count more than
    their share. It is taken only when nothing in the outline speaks against it: no vertex lies farther from it than
    0.85 of the tolerance, and what is left over has no regular wave. A wave of order k (2 for an oval, 4 for a square,
    n for a polygon of n sides) is regular when its height is a quarter of the tolerance, or three times what a scatter
    of that size over that length gives by chance; chance goes farther for orders that a raster has itself.

    These limits are empirical. On rasters of one tolerance they took 95 % or more of 60 circles at random places for
    each of eleven radii from 3.5 to 300 pixels, and no oval whose half axes differ by one pixel; a polygon of so few
    pixels that a circle explains it as well (a hexagon of radius 5, an octagon of radius 8) may be taken too. Nothing
    is proven here: hold the circle against the outline by `geometry.deviation`.

    Args:
        outline: cleaned, closed and 2-D for an answer other than None.
        tolerance: to fair within, drawing units.

    Returns:
        Centre, shape (2,), and radius, drawing units.
    """
    if not outline.closed or outline.dimension != 2:
        return None
    if _clearly_not(outline.points, tolerance):
        return None
    length = outline.length()
    count = int(min(_SAMPLES * max(len(outline.points), length / tolerance), 1e7)) + 1
    along = (np.arange(count) + 0.5) / count * length
    origin = outline.points.mean(axis=0)
    samples = outline.at(along) - origin
    fitted = _fit(samples)
    if fitted is None:
        return None
    centre, radius, turns, rest = fitted
    off = np.abs(np.linalg.norm(outline.points - origin - centre, axis=1) - radius)
    if radius < _LEAST_RADIUS * tolerance or off.max() > _WITHIN * tolerance:
        return None
    angle = np.arctan2(samples[:, 1] - centre[1], samples[:, 0] - centre[0])
    waves = np.array([2.0 * abs(np.sum(turns * rest * np.exp(-1j * k * angle))) for k in _ORDERS.tolist()])
    waves /= 2.0 * np.pi
    scatter = float(np.sqrt(max(np.sum(turns * rest * rest), 0.0) / (2.0 * np.pi)))
    independent = min(len(outline.points), 2.0 * np.pi * radius / tolerance)
    usual = np.where(_ORDERS % 4 == 0, 2.0 * _RASTER, 2.0) * scatter / np.sqrt(independent)
    return (centre + origin, radius) if (waves <= np.minimum(_CHANCE * usual, _MOST * tolerance)).all() else None


def _clearly_not(points: FloatArray, tolerance: float) -> bool:
    """Tell by a few vertices that an outline is no circle: one lies two tolerances off their algebraic circle.

    The vertices of a circle's trace lie within a tolerance of it, and their least-squares circle within another.
    """
    few = points[:: max(1, len(points) // _FEW)]
    few = few - few.mean(axis=0)
    rows = np.column_stack([2.0 * few, np.ones(len(few))])
    x, y, rest = np.linalg.lstsq(rows, (few * few).sum(axis=1), rcond=None)[0]
    radius = np.sqrt(max(rest + x * x + y * y, 0.0))
    return bool(np.abs(np.hypot(few[:, 0] - x, few[:, 1] - y) - radius).max() > 2.0 * tolerance)


def _fit(samples: FloatArray) -> tuple[FloatArray, float, FloatArray, FloatArray] | None:
    """Return centre, radius, the turn of each sample about the centre and its distance from the circle.

    Gauss-Newton on the distances, each weighted by the angle that the sample stands for. None where the samples do not
    go round their middle once, or where the search does not settle.
    """
    centre = np.zeros(2)
    radius = float(np.linalg.norm(samples, axis=1).mean())
    for _ in range(_STEPS):
        arms = samples - centre
        sizes = np.linalg.norm(arms, axis=1)
        if not sizes.min() > 0.0:
            return None
        after, before = np.roll(arms, -1, axis=0), np.roll(arms, 1, axis=0)
        turns = np.arctan2(before[:, 0] * after[:, 1] - before[:, 1] * after[:, 0], (before * after).sum(axis=1))
        whole = 0.5 * float(turns.sum())
        if abs(abs(whole) - 2.0 * np.pi) > 1e-6:
            return None
        turns = 0.5 * turns * np.sign(whole)
        rest = sizes - radius
        slopes = np.column_stack([arms / sizes[:, None], np.ones(len(arms))])
        step = np.linalg.solve(slopes.T @ (slopes * turns[:, None]), slopes.T @ (turns * rest))
        centre, radius = centre + step[:2], radius + float(step[2])
        if np.abs(step).max() <= _SETTLED * radius:
            return centre, radius, turns, rest
    return None


def circle_spline(centre: FloatArray, radius: float, error: float, degree: int, clockwise: bool = False) -> Spline:
    """Return a closed spline through even points of a circle, without a seam.

    Args:
        centre: shape (2,), drawing units.
        radius: drawing units.
        error: about how far the spline may lie inside the circle, drawing units. A periodic spline through n points
            lies inside by h^4 / 384 of the radius (degree 3) or h^4 / 128 (degree 2), h = 2 pi / n, to leading order.
        degree: 2 or 3.
        clockwise: direction of travel.
    """
    step = (error / radius * (384.0 if degree == 3 else 128.0)) ** 0.25
    count = max(12, int(np.ceil(2.0 * np.pi / step)))
    angle = 2.0 * np.pi * np.arange(count) / count * (-1.0 if clockwise else 1.0)
    return spline_through(centre + radius * np.stack([np.cos(angle), np.sin(angle)], axis=1), degree, "periodic")
