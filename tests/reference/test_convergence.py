"""Tangents and curvatures of faired traces against the published convergence rates of estimators on digital contours.

A shape is rasterised at pixels of h, h / 2, h / 4 and h / 8; errors are averaged along the curve and over seeded
positions and headings. The slope of log error over log h must be at least the published rate:
- tangents, h^(2/3) on average: J.-O. Lachaud, F. de Vieilleville, "Convex shapes and convergence speed of discrete
  tangent estimators", arXiv:0906.3089 (read: abstract and introduction);
- curvature, h^(1/3): A. Schindele, P. Massopust, B. Forster, "Multigrid convergence for the MDCA-curvature estimator",
  arXiv:1510.00678 (read: abstract), for the estimator of T. Roussillon, J.-O. Lachaud, "Accurate curvature estimation
  along digital contours with maximal digital circular arcs", IWCIA 2011 (from memory).
The rates are for lengths in units of the shape, so curvature errors here are times the size of the shape.
"""

import functools

import numpy as np
import pytest

from geometry.corners import find_corners
from geometry.fairing import fair_outline
from geometry.polyline import Polyline
from tests.tracing import circle, dense, staircase, turned

TANGENT_RATE, CURVATURE_RATE = 2.0 / 3.0, 1.0 / 3.0
SIZES = np.array([20.0, 40.0, 80.0, 160.0])  # pixels in the unit of the shape: h = 1 / 20 and on
WIDE, NARROW = 1.2, 0.85  # half axes of the ellipse
LONG, SHORT = 2.0, 0.6  # half sides of the bar


def on_circle(size, points):
    """Heading and curvature of the true circle beside points."""
    return np.arctan2(points[:, 1], points[:, 0]) + 0.5 * np.pi, np.full(len(points), 1.0 / size), None


def on_ellipse(size, points):
    """Heading and curvature of the true ellipse at the points nearest to given ones.

    (a cos t, b sin t) is met at right angles where (b^2 - a^2) sin t cos t + a x sin t - b y cos t = 0; Newton's method
    from the direction of the point, which lies within a pixel of the curve.
    """
    a, b = WIDE * size, NARROW * size
    x, y = points.T
    t = np.arctan2(y / b, x / a)
    for _ in range(8):
        s, c = np.sin(t), np.cos(t)
        value = (b * b - a * a) * s * c + a * x * s - b * y * c
        t = t - value / ((b * b - a * a) * (c * c - s * s) + a * x * c + b * y * s)
    s, c = np.sin(t), np.cos(t)
    return np.arctan2(b * c, -a * s), a * b / np.hypot(a * s, b * c) ** 3, None


def on_edge(size, points):
    """Heading and curvature of the long sides of the bar, and which points lie well inside one."""
    inside = (np.abs(points[:, 0]) < 0.8 * LONG * size) & (np.abs(points[:, 1]) > 0.8 * SHORT * size)
    return np.where(points[:, 1] < 0.0, 0.0, np.pi), np.zeros(len(points)), inside


def outline_of(kind, size):
    if kind == "circle":
        return circle(size)
    if kind == "ellipse":
        return circle(size) * [WIDE, NARROW]
    return size * dense([(-LONG, -SHORT), (LONG, -SHORT), (LONG, SHORT), (-LONG, SHORT)], 0.01)


TRUTHS = {"circle": on_circle, "ellipse": on_ellipse, "edge": on_edge}
CORNERS = {"circle": 0, "ellipse": 0, "edge": 4}


@functools.cache
def mean_errors(kind):
    """Mean error of the tangent (radians) and of the curvature (times the size) at every pixel size, shape (4, 2)."""
    out = []
    for size in SIZES:
        rng = np.random.default_rng(9)
        errors = []
        for _ in range(8):
            shift, degrees = rng.uniform(0.0, 1.0, 2), rng.uniform(0.0, 360.0)
            outline = Polyline(staircase(turned(outline_of(kind, size), degrees) + shift), True)
            corners = find_corners(outline, 1.0)
            assert len(corners) == CORNERS[kind]
            spline = fair_outline(outline, corners, 1.0).spline
            count = int(4.0 * spline.knots[-1])
            u = spline.knots[-1] * (np.arange(count) + 0.5) / count
            points, first, second = (spline.evaluate(u, order) for order in range(3))
            speed = np.hypot(*first.T)
            bend = (first[:, 0] * second[:, 1] - first[:, 1] * second[:, 0]) / speed**3
            heading = np.arctan2(first[:, 1], first[:, 0]) - np.radians(degrees)
            true_heading, true_bend, inside = TRUTHS[kind](size, turned(points - shift, -degrees))
            weight = speed if inside is None else speed * inside
            off = np.abs(np.angle(np.exp(1j * (heading - true_heading))))
            errors.append(
                [np.average(off, weights=weight), size * np.average(np.abs(bend - true_bend), weights=weight)]
            )
        out.append(np.mean(errors, axis=0))
    return np.array(out)


def slope(errors):
    return np.polyfit(np.log(1.0 / SIZES), np.log(errors), 1)[0]


@pytest.mark.parametrize("kind", TRUTHS)
def test_tangents_converge_at_least_at_the_published_rate(kind):
    errors = mean_errors(kind)[:, 0]
    assert slope(errors) >= TANGENT_RATE
    assert errors[0] < 0.05  # the rate is not bought by a bad start
    assert errors[-1] < 0.005


@pytest.mark.parametrize("kind", ["circle", "ellipse"])
def test_curvature_converges_at_least_at_the_published_rate(kind):
    errors = mean_errors(kind)[:, 1]
    assert slope(errors) >= CURVATURE_RATE
    assert errors[0] < 0.2
    assert errors[-1] < 0.05


def test_curvature_of_a_straight_edge_stays_below_a_bound_that_falls_at_the_published_rate():
    # an edge that is recognised as straight has next to no curvature left at any size, and a slope of rounding errors
    # says nothing
    bound = 0.005 * (SIZES[0] / SIZES) ** CURVATURE_RATE
    assert (mean_errors("edge")[:, 1] <= bound).all()


def test_the_truths_agree_with_finite_differences():
    size, t = 50.0, np.linspace(0.1, 6.2, 400)
    for kind, shape in (("circle", np.ones(2)), ("ellipse", np.array([WIDE, NARROW]))):
        points = size * np.stack([np.cos(t), np.sin(t)], axis=1) * shape
        heading, bend, _ = TRUTHS[kind](size, points)
        chord = np.diff(points, axis=0)
        along = 0.5 * (np.hypot(*chord[1:].T) + np.hypot(*chord[:-1].T))
        turn = np.diff(np.unwrap(np.arctan2(chord[:, 1], chord[:, 0])))
        np.testing.assert_allclose(turn / along, bend[1:-1], rtol=2e-3)
        np.testing.assert_allclose(
            np.sin(heading[1:-1] - np.arctan2(*(points[2:] - points[:-2]).T[::-1])), 0, atol=1e-3
        )
