"""Outlines of known shapes rasterised at one pixel, traced, and faired back: size, ordinates, corners and headings.

Lengths are in pixels; a tolerance of one pixel holds a traced edge.
"""

import numpy as np
import pytest

from geometry.corners import find_corners
from geometry.fairing import Faired, fair_outline
from geometry.polyline import Polyline
from tests.tracing import circle, dense, staircase, turned

TOLERANCE = 1.0
HALF_DIAGONAL = np.sqrt(0.5)  # a traced edge lies no farther from the truth: the middles of its pixels decide
POSITIONS = np.random.default_rng(20).uniform(0.0, 1.0, (8, 2))


def traced_and_faired(shape) -> Faired:
    outline = Polyline(staircase(shape), True)
    return fair_outline(outline, find_corners(outline, TOLERANCE), TOLERANCE)


def sampled(spline, count):
    """Points and directions of travel at even parameters away from the knots' ends."""
    u = spline.knots[-1] * (np.arange(count) + 0.5) / count
    slope = spline.evaluate(u, 1)
    return spline.evaluate(u), np.arctan2(slope[:, 1], slope[:, 0])


# ---- circles -----------------------------------------------------------------------------------------------------


def radius_from_area(spline):
    return np.sqrt(spline.area() / np.pi)


def radius_by_least_squares(points):
    """Algebraic circle fit: x^2 + y^2 = 2 a x + 2 b y + c, radius sqrt(c + a^2 + b^2).

    I. Kasa, "A circle fitting procedure and its error analysis", IEEE Trans. Instrumentation and Measurement 25
    (1976), from memory.
    """
    points = points - points.mean(axis=0)
    rows = np.column_stack([2.0 * points, np.ones(len(points))])
    a, b, c = np.linalg.lstsq(rows, (points**2).sum(axis=1), rcond=None)[0]
    return np.sqrt(c + a * a + b * b)


@pytest.mark.parametrize("radius", [5.0, 10.0, 30.0, 100.0])
def test_a_traced_circle_keeps_its_radius(radius):
    off = []
    for centre in POSITIONS:
        result = traced_and_faired(circle(radius, centre))
        assert len(result.corners) == 0
        points = result.spline.flatten(1e-3).points
        off.append([radius_from_area(result.spline) - radius, radius_by_least_squares(points) - radius])
    assert np.abs(off).max() <= 0.15
    assert np.abs(np.median(off, axis=0)).max() <= 0.08


@pytest.mark.parametrize("radius", [4.0, 5.0, 6.5, 8.0])
def test_small_circles_have_no_corner_and_small_squares_have_four(radius):
    side = radius * np.sqrt(np.pi)  # a square of the circle's area
    square = dense(side * (np.array([(0, 0), (1, 0), (1, 1), (0, 1)]) - 0.5), 0.1)
    kept = 0
    for k, centre in enumerate(POSITIONS):
        round_one = Polyline(staircase(circle(radius, centre)), True)
        assert len(find_corners(round_one, TOLERANCE)) == 0
        square_one = Polyline(staircase(turned(square, 11.0 * k) + centre), True)
        kept += len(find_corners(square_one, TOLERANCE)) == 4
    if side > 8.0:  # below that a raster leaves too little of the sides to be sure of every corner
        assert kept == len(POSITIONS)


# ---- ellipses ----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(("a", "b"), [(60.0, 37.0), (45.0, 25.0), (90.0, 80.0)])
@pytest.mark.parametrize("degrees", [0.0, 17.0, 62.0])
def test_a_traced_ellipse_keeps_its_perimeter_and_area(a, b, degrees):
    """Perimeter 4 a E(m), m = 1 - (b / a)^2: Abramowitz and Stegun 17.3.3 for E(m); DLMF 19.30.2 for the ellipse."""
    from scipy.special import ellipe

    perimeter, area = 4.0 * a * ellipe(1.0 - (b / a) ** 2), np.pi * a * b
    t = 2.0 * np.pi * np.arange(4000) / 4000
    shape = turned(np.stack([a * np.cos(t), b * np.sin(t)], axis=1), degrees)
    lengths, offsets = [], []
    for centre in POSITIONS[:4]:
        result = traced_and_faired(shape + centre)
        assert len(result.corners) == 0
        lengths.append(result.spline.length())
        offsets.append((result.spline.area() - area) / perimeter)  # mean offset of the outline
    assert np.abs(np.array(lengths) / perimeter - 1.0).max() <= 0.003
    assert np.abs(offsets).max() <= 0.12
    assert abs(np.median(offsets)) <= 0.06


# ---- sections of the four-digit family ---------------------------------------------------------------------------


def section(camber, camber_place, thickness, count=1500):
    """Outline of a four-digit section of unit chord, from the upper trailing edge round the nose to the lower one.

    Half thickness 5 t (0.2969 sqrt(x) - 0.1260 x - 0.3516 x^2 + 0.2843 x^3 - 0.1015 x^4), laid off at right angles to
    the mean line m / p^2 (2 p x - x^2) ahead of p and m / (1 - p)^2 (1 - 2 p + 2 p x - x^2) behind it.
    E. N. Jacobs, K. E. Ward, R. M. Pinkerton, "The characteristics of 78 related airfoil sections from tests in the
    variable-density wind tunnel", NACA Report 460 (1933).
    """
    x = 0.5 * (1.0 - np.cos(np.linspace(0.0, np.pi, count)))
    half = 5.0 * thickness * (0.2969 * np.sqrt(x) - 0.1260 * x - 0.3516 * x**2 + 0.2843 * x**3 - 0.1015 * x**4)
    m, p = camber, camber_place
    ahead = x < p
    mean, slope = np.zeros(count), np.zeros(count)
    if m > 0.0:
        scale = np.where(ahead, m / p**2, m / (1.0 - p) ** 2)
        mean = scale * (np.where(ahead, 0.0, 1.0 - 2.0 * p) + 2.0 * p * x - x * x)
        slope = scale * 2.0 * (p - x)
    angle = np.arctan(slope)
    across = np.stack([-np.sin(angle), np.cos(angle)], axis=1) * half[:, None]
    line = np.stack([x, mean], axis=1)
    return np.concatenate([(line + across)[::-1], (line - across)[1:]])


SECTIONS = [(0.0, 0.4, 0.12), (0.02, 0.4, 0.12), (0.04, 0.4, 0.15), (0.02, 0.4, 0.18)]
CHORD = 600.0


def test_the_section_formula_gives_the_published_figures():
    # thickest at 0.3 of the chord, and leading-edge radius 1.1019 t^2: NACA Report 460
    outline = section(0.0, 0.4, 0.12, 4001)
    upper = outline[:4001]
    assert upper[:, 1].max() == pytest.approx(0.06, abs=2e-5)
    assert upper[upper[:, 1].argmax(), 0] == pytest.approx(0.3, abs=2e-3)
    near = upper[-3]  # y^2 = 2 r x at the nose
    assert near[1] ** 2 / (2.0 * near[0]) == pytest.approx(1.1019 * 0.12**2, rel=5e-3)


@pytest.mark.parametrize("figures", SECTIONS)
@pytest.mark.parametrize("degrees", [0.0, 8.0, 24.0])
def test_a_traced_section_comes_back(figures, degrees):
    import shapely

    true = CHORD * section(*figures)
    outline = turned(true, degrees) + POSITIONS[2]
    result = traced_and_faired(outline)
    points = turned(result.spline.flatten(1e-3).points - POSITIONS[2], -degrees)
    ring = shapely.LinearRing(true)
    shapely.prepare(ring)
    off = shapely.distance(shapely.points(points), ring)
    ahead = points[:, 0] < CHORD - 3.0  # the last pixels of a thin edge are cut off by the raster
    assert off[ahead].max() <= HALF_DIAGONAL
    assert off[points[:, 0] < CHORD - 12.0].max() <= 0.6
    assert np.sqrt(np.mean(off[ahead] ** 2)) <= 0.12
    # the trailing edge stays sharp, and nothing else becomes a corner: its two edges, at most 2 pixels apart, are one
    corners = turned(result.corners - POSITIONS[2], -degrees)
    assert 1 <= len(corners) <= 2
    assert np.linalg.norm(corners - 0.5 * (true[0] + true[-1]), axis=1).max() <= 8.0


@pytest.mark.parametrize("figures", SECTIONS)
def test_the_nose_of_a_traced_section_keeps_its_radius(figures):
    """The radius at the nose is 1.1019 t^2 of the chord (NACA Report 460): median of eight positions and headings."""
    radii = []
    for k, shift in enumerate(POSITIONS):
        result = traced_and_faired(turned(CHORD * section(*figures), 11.0 * k) + shift)
        u = np.linspace(0.0, result.spline.knots[-1], 6001)[:-1]
        points = turned(result.spline.evaluate(u) - shift, -11.0 * k)
        first, second = result.spline.evaluate(u, 1), result.spline.evaluate(u, 2)
        bend = (first[:, 0] * second[:, 1] - first[:, 1] * second[:, 0]) / np.hypot(*first.T) ** 3
        radii.append(1.0 / bend[np.hypot(*points.T).argmin()])
    expected = 1.1019 * figures[2] ** 2 * CHORD
    assert np.median(radii) == pytest.approx(expected, rel=0.15)
    np.testing.assert_allclose(radii, expected, rtol=0.3)


# ---- straight edges ----------------------------------------------------------------------------------------------


@pytest.mark.parametrize("length", [60.0, 240.0])
def test_straight_edges_keep_their_heading(length):
    """Two lines in a band of one pixel over a length L differ by at most 1 / L in heading: a fit must do far better."""
    bar = dense(np.array([(-0.5, -0.2), (0.5, -0.2), (0.5, 0.2), (-0.5, 0.2)]) * length, 0.25)
    rng = np.random.default_rng(31)
    errors, largest = [], []
    for _ in range(24):
        degrees, shift = rng.uniform(0.0, 90.0), rng.uniform(0.0, 1.0, 2)
        result = traced_and_faired(turned(bar, degrees) + shift)
        points, heading = sampled(result.spline, int(4 * length))
        points, heading = turned(points - shift, -degrees), heading - np.radians(degrees)
        for side, travel in ((-1.0, 0.0), (1.0, np.pi)):
            on = (np.abs(points[:, 0]) < 0.4 * length) & (np.abs(points[:, 1] - side * 0.2 * length) < 2.0)
            off = np.angle(np.exp(1j * (heading[on] - travel)))
            errors.append(off.mean())
            largest.append(np.abs(off).max())
    assert np.sqrt(np.mean(np.square(errors))) <= 0.3 / length
    assert np.abs(errors).max() <= 0.8 / length
    assert np.median(largest) <= 0.6 / length
