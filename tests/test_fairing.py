import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from geometry.corners import Corners, find_corners
from geometry.deviation import hausdorff
from geometry.fairing import fair_outline
from geometry.polyline import Polyline
from tests.tracing import circle, dense, noisy, staircase, turned

BRACKET = [(0, 0), (90, 0), (90, 25), (35, 25), (20, 70), (0, 70)]
NONE = Corners(np.zeros(0), np.zeros((0, 2)), np.zeros(0))


def blob(turn=0.0, size=40.0):
    """A smooth closed shape with hollows."""
    a = 2.0 * np.pi * np.arange(3000) / 3000
    radius = size * (1.0 + 0.22 * np.cos(3 * a) + 0.06 * np.sin(5 * a))
    return turned(np.stack([radius * np.cos(a), radius * np.sin(a)], axis=1), turn)


def faired(points, tolerance, closed=True, degree=3):
    outline = Polyline(np.asarray(points, dtype=float), closed)
    return outline, fair_outline(outline, find_corners(outline, tolerance), tolerance, degree)


@pytest.mark.parametrize("degree", [2, 3])
@pytest.mark.parametrize(
    ("points", "tolerance"),
    [
        (staircase(turned(dense(BRACKET), 17)), 1.0),
        (staircase(blob(9.0)), 1.0),
        (noisy(blob(), 2.0, 0.15, 1), 0.6),
        (noisy(dense(BRACKET), 2.0, 0.15, 2), 0.6),
        (staircase(circle(6.0, (0.3, 0.4))), 1.0),
        (staircase(dense([(0, 0), (80, 0), (3, 14)])), 1.0),
    ],
)
def test_the_whole_curve_keeps_the_band_both_ways(points, tolerance, degree):
    outline, result = faired(points, tolerance, degree=degree)
    assert not result.as_given
    assert result.spline.degree == degree
    assert result.spline.closed
    assert hausdorff(outline, result.spline, tolerance / 100).certified <= tolerance


def test_fairing_takes_most_of_the_raster_out():
    # a traced boundary lies within half a pixel of the edge, RMS 1 / sqrt(12) of a pixel at random phase (derived:
    # variance of a uniform distribution); the faired curve must halve that
    true = blob(9.0)
    _, result = faired(staircase(true), 1.0)
    points = result.spline.flatten(1e-4).points
    gap = np.linalg.norm(points[:, None] - true[None], axis=2).min(axis=1)
    assert np.sqrt(np.mean(gap**2)) < 0.5 / np.sqrt(12.0)


def test_the_size_is_unbiased():
    true = circle(40.0, (0.31, 0.77))
    _, result = faired(staircase(true), 1.0)
    mean = (result.spline.area() - np.pi * 40.0**2) / (2.0 * np.pi * 40.0)  # mean offset of the boundary
    assert abs(mean) < 0.03


def test_straight_sides_come_out_straight_and_corners_sharp():
    outline, result = faired(noisy(dense(BRACKET), 2.0, 0.15, 4), 0.6)
    assert len(result.corners) == len(BRACKET)
    gap = np.linalg.norm(result.corners[:, None] - np.array(BRACKET, dtype=float)[None], axis=2)
    assert gap.min(axis=0).max() < 0.8
    # between corners hardly any curvature is left: turning of each side is ten degrees at most
    d1 = result.spline.evaluate(np.linspace(0, result.spline.knots[-1], 4000)[:-1], 1)
    heading = np.unwrap(np.arctan2(d1[:, 1], d1[:, 0]))
    turn = np.abs(np.diff(heading))
    assert turn[turn < 0.3].sum() < np.radians(60.0)
    assert len(outline.points) > 100


def test_a_smooth_closed_curve_has_no_seam():
    _, result = faired(staircase(blob()), 1.0)
    spline = result.spline
    assert spline.smooth_seam
    start, end = spline.knots[0], spline.knots[-1]
    for order in (0, 1, 2):
        before = spline.evaluate(np.array([end]), order)
        np.testing.assert_allclose(before, spline.evaluate(np.array([start]), order), atol=1e-6)
    assert np.array_equal(spline.control[0], spline.control[-1])


def test_open_ends_stay_where_they_are_drawn():
    x = np.linspace(0.0, 120.0, 80)
    rng = np.random.default_rng(7)
    points = np.stack([x, 15.0 * np.sin(x / 25.0)], axis=1) + rng.normal(0.0, 0.15, (80, 2))
    outline, result = faired(points, 0.7, closed=False)
    assert np.array_equal(result.spline.control[0], points[0])
    assert np.array_equal(result.spline.control[-1], points[-1])
    assert not result.spline.closed
    assert hausdorff(outline, result.spline, 0.01).certified <= 0.7


def test_three_coordinates_are_faired_alike():
    t = np.linspace(0.0, 4.0 * np.pi, 300)
    rng = np.random.default_rng(8)
    helix = np.stack([30 * np.cos(t), 30 * np.sin(t), 6 * t], axis=1)
    outline = Polyline(helix + rng.normal(0.0, 0.1, helix.shape))
    none = Corners(np.zeros(0), np.zeros((0, 3)), np.zeros(0))
    result = fair_outline(outline, none, 0.5)
    assert hausdorff(outline, result.spline, 0.005).certified <= 0.5
    points = result.spline.flatten(1e-3).points
    assert np.abs(np.hypot(points[:, 0], points[:, 1]) - 30.0).max() < 0.35


def test_an_outline_that_no_curve_fits_comes_back_as_it_is():
    """A comb of spikes far closer than the tolerance: corners are inserted, and where that does not help it is kept."""
    spikes = np.array([(x, 20.0 * (k % 2)) for k, x in enumerate(np.arange(0.0, 6.0, 0.3))])
    outline = Polyline(np.vstack([spikes, [(6.0, 40.0), (0.0, 40.0)]]), True)
    result = fair_outline(outline, NONE, 0.2)
    deviation = hausdorff(outline, result.spline, 1e-3).certified
    assert deviation <= (1e-9 if result.as_given else 0.2)


EASY = settings(max_examples=12, deadline=None, suppress_health_check=[HealthCheck.too_slow])


@EASY
@given(
    degrees=st.floats(-180, 180),
    shift=st.tuples(st.floats(-1e5, 1e5), st.floats(-1e5, 1e5)),
    size=st.floats(0.01, 100.0),
)
def test_moving_turning_and_scaling_the_input_does_the_same_to_the_output(degrees, shift, size):
    given_points = noisy(blob(), 2.5, 0.15, 11)
    base = fair_outline(Polyline(given_points, True), NONE, 0.6).spline
    moved = turned(given_points, degrees) * size + np.array(shift)
    other = fair_outline(Polyline(moved, True), NONE, 0.6 * size).spline
    expected = turned(base.control, degrees) * size + np.array(shift)
    np.testing.assert_allclose(other.control, expected, atol=1e-5 * size)


@EASY
@given(seed=st.integers(0, 1000))
def test_mirroring_the_input_mirrors_the_output(seed):
    given_points = noisy(dense(BRACKET), 2.0, 0.15, seed)
    base = faired(given_points, 0.6)[1].spline
    mirrored = faired(given_points * [-1.0, 1.0], 0.6)[1].spline
    # rounding differs, and may flip a decision at its threshold: equal to a twentieth of the tolerance
    np.testing.assert_allclose(mirrored.control * [-1.0, 1.0], base.control, atol=0.03)


@pytest.mark.parametrize("degrees", [3, 17, 28, 40])
def test_reversing_the_input_gives_the_same_curve(degrees):
    given_points = staircase(turned(dense(BRACKET), degrees))
    base = faired(given_points, 1.0)[1].spline
    back = faired(given_points[::-1], 1.0)[1].spline
    assert hausdorff(base, back, 1e-3).certified < 0.2  # samples fall elsewhere, so equal only to a fifth of the band
