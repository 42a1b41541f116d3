"""Signed deviation: sides against point-in-polygon, statistics against closed forms."""

import numpy as np
import pytest
import shapely

from geometry.arcs import ArcChain, full_circle
from geometry.bspline import Spline
from geometry.errors import GeometryError
from geometry.polyline import Polyline
from geometry.signed import course_along, deviation_statistics, signed_distances


def polyline(*points: tuple[float, ...], closed: bool = False) -> Polyline:
    return Polyline(np.array(points, dtype=np.float64), closed)


def star(seed: int, count: int, origin: float = 0.0) -> Polyline:
    rng = np.random.default_rng(seed)
    angle = np.sort(rng.uniform(0.0, 2.0 * np.pi, count))
    radius = rng.uniform(0.05, 10.0, count)
    return Polyline(origin + radius[:, None] * np.stack([np.cos(angle), np.sin(angle)], axis=1), True)


@pytest.mark.parametrize("seed", range(10))
def test_signs_agree_with_point_in_polygon(seed: int) -> None:
    origin = 5e6 if seed % 2 else 0.0
    shape = star(seed, 5 + 20 * seed, origin)
    polygon = shapely.Polygon(shape.points)
    rng = np.random.default_rng(seed)
    # everywhere, and close to the vertices, where the side of one edge alone would often be wrong
    near = shape.points[rng.integers(0, len(shape.points), 2_000)] + rng.normal(0.0, 0.1, (2_000, 2))
    points = np.concatenate([rng.uniform(origin - 12.0, origin + 12.0, (2_000, 2)), near])
    inside = shapely.contains_xy(polygon, points)
    for curve in (shape, shape.reversed()):
        found = signed_distances(points, curve, 1e-3)
        np.testing.assert_array_equal(found < 0.0, inside)
        away = shapely.distance(polygon.exterior, shapely.points(points))
        np.testing.assert_allclose(np.abs(found), away, atol=1e-8)
    np.testing.assert_allclose(signed_distances(points, shape, 1e-3, crossing=True), found, atol=1e-9)


def test_even_odd_decides_about_a_curve_that_crosses_itself() -> None:
    eight = polyline((0.0, 0.0), (4.0, 4.0), (4.0, 0.0), (0.0, 4.0), closed=True)
    points = np.array([[0.5, 2.0], [3.5, 2.0], [2.0, 0.5], [2.0, 3.5], [-1.0, 2.0], [5.0, 4.0]])
    found = signed_distances(points, eight, 1e-3, crossing=True)
    assert (found < 0.0).tolist() == [True, True, False, False, False, False]
    np.testing.assert_allclose(np.abs(found[:2]), 0.5, atol=1e-12)


def test_left_of_travel_is_plus_for_open_curves() -> None:
    bend = polyline((0.0, 0.0), (10.0, 0.0), (10.0, 10.0))
    points = np.array([[5.0, 1.0], [5.0, -1.0], [13.0, -4.0], [9.0, 1.0], [-3.0, 4.0], [-3.0, -4.0], [5.0, 0.0]])
    np.testing.assert_allclose(signed_distances(points, bend, 1e-3), [1.0, -1.0, -5.0, 1.0, 5.0, -5.0, 0.0])
    np.testing.assert_allclose(signed_distances(points, bend.reversed(), 1e-3), [-1.0, 1.0, 5.0, -1.0, -5.0, 5.0, 0.0])


def test_a_spike_that_turns_straight_back_has_the_side_of_the_edge_that_leads_there() -> None:
    spike = polyline((0.0, 0.0), (10.0, 0.0), (5.0, 0.0), (5.0, -5.0))
    found = signed_distances(np.array([[12.0, 1.0], [12.0, -1.0]]), spike, 1e-3)
    np.testing.assert_allclose(found, [np.sqrt(5.0), -np.sqrt(5.0)])
    closed = polyline((0.0, 0.0), (10.0, 0.0), (5.0, 0.0), (5.0, 5.0), (0.0, 5.0), closed=True)
    found = signed_distances(np.array([[12.0, 1.0], [12.0, -1.0], [2.0, 1.0]]), closed, 1e-3)
    np.testing.assert_allclose(found, [np.sqrt(5.0), np.sqrt(5.0), -1.0])


def test_repeated_vertices_do_not_hide_a_corner() -> None:
    corner = polyline((0.0, 0.0), (10.0, 0.0), (10.0, 0.0), (10.0, 0.0), (0.0, 0.1), closed=True)
    assert signed_distances(np.array([[11.0, 0.5], [11.0, -0.5], [5.0, 0.02]]), corner, 1e-3).tolist() == pytest.approx(
        [np.hypot(1.0, 0.5), np.hypot(1.0, 0.5), -0.02]
    )


def test_distances_to_arcs_and_splines_are_within_the_chord_error() -> None:
    circle = full_circle(np.array([3.0, 4.0]), 10.0)
    rng = np.random.default_rng(1)
    points = rng.uniform(-10.0, 17.0, (500, 2))
    truth = np.linalg.norm(points - [3.0, 4.0], axis=1) - 10.0
    for chord_error in (1e-2, 1e-5):
        assert np.abs(signed_distances(points, circle, chord_error) - truth).max() <= chord_error
    # x from 0 to 9, y = x^2 / 9 as a quadratic: left of travel is above
    parabola = Spline(np.array([0.0] * 3 + [1.0] * 3), np.array([[0.0, 0.0], [4.5, 0.0], [9.0, 9.0]]), 2)
    x, offset = rng.uniform(1.0, 8.0, 50), rng.uniform(-0.9, 0.9, 50)
    normal = np.stack([-2.0 * x / 9.0, np.ones(50)], axis=1)
    normal /= np.linalg.norm(normal, axis=1)[:, None]
    on = np.stack([x, x * x / 9.0], axis=1)
    np.testing.assert_allclose(signed_distances(on + offset[:, None] * normal, parabola, 1e-5), offset, atol=1e-5)


@pytest.mark.parametrize("reverse", [False, True])
def test_statistics_of_a_circle_in_a_smaller_one(reverse: bool) -> None:
    inner, outer = (full_circle(np.array([5e5, 5e6]), radius) for radius in (10.0, 10.25))
    found = deviation_statistics(outer, inner.reversed() if reverse else inner, 0.5)
    for value in (found.rms, found.mean_signed, found.max_plus, found.percentile_95):
        assert value == pytest.approx(0.25, abs=0.5 / 400.0)
    assert found.max_minus == 0.0
    swapped = deviation_statistics(inner, outer, 0.5)
    assert swapped.mean_signed == pytest.approx(-0.25, abs=0.5 / 400.0)
    assert swapped.max_plus == 0.0
    assert swapped.max_minus == pytest.approx(-0.25, abs=0.5 / 400.0)


def test_statistics_are_weighted_by_length_not_by_vertices() -> None:
    # deviation falls in a straight line from 1 to -1: mean 0, mean square 1/3, and 95% of the length is under 0.95
    x = np.concatenate([np.linspace(0.0, 1.0, 500), [100.0]])
    sloping = Polyline(np.stack([x, 1.0 - 0.02 * x], axis=1))
    found = deviation_statistics(sloping, polyline((-10.0, 0.0), (200.0, 0.0)), 0.1)
    assert found.mean_signed == pytest.approx(0.0, abs=1e-3)
    assert found.rms == pytest.approx(np.sqrt(1.0 / 3.0), abs=1e-3)
    assert found.percentile_95 == pytest.approx(0.95, abs=2e-3)
    assert found.max_plus == pytest.approx(1.0, abs=1e-2)
    assert found.max_minus == pytest.approx(-1.0, abs=1e-2)


def test_a_curve_about_the_middle_of_a_staircase_has_no_mean() -> None:
    steps = np.repeat(np.arange(0.0, 41.0), 2)
    stairs = Polyline(np.stack([steps[1:], steps[:-1]], axis=1))
    line = polyline((0.5, 0.0), (39.5, 39.0))
    found = deviation_statistics(line, stairs, 0.5)
    assert found.mean_signed == pytest.approx(0.0, abs=1e-2)
    assert found.rms > 0.1


@pytest.mark.parametrize("closed", [False, True])
@pytest.mark.parametrize("reverse", [False, True])
def test_a_course_shows_to_which_side_of_the_old_curve_the_new_lies(closed: bool, reverse: bool) -> None:
    old = polyline((0.0, 0.0), (20.0, 0.0), (20.0, 10.0), (0.0, 10.0), closed=closed)
    new = polyline(
        (0.0, 0.0), (9.0, 0.0), (10.0, -0.5), (11.0, 0.0), (20.0, 0.0), (20.0, 10.0), (0.0, 10.0), closed=closed
    )
    course = course_along(new.reversed() if reverse else new, old, 0.05)
    peak = int(np.argmax(np.abs(course.deviation)))
    # the bump goes outward of the closed shape; of the open one, travelled anticlockwise, that is to the right
    assert np.sign(course.deviation[peak]) == (1.0 if closed else -1.0)
    place = 9.0 + np.hypot(1.0, 0.5)
    assert course.along[peak] == pytest.approx(new.length() - place if reverse else place, abs=0.1)
    assert course.points[peak] == pytest.approx([10.0, -0.5], abs=0.05)
    assert abs(course.deviation[peak]) == pytest.approx(0.5, abs=0.05)
    assert np.abs(course.deviation[np.abs(course.points[:, 0] - 10.0) > 1.0]).max() <= 1e-9
    assert course.weights.sum() == pytest.approx(new.length())


def test_three_dimensions_have_sizes_but_no_sides() -> None:
    a, b = polyline((0.0, 0.0, 0.0), (10.0, 0.0, 0.0)), polyline((0.0, 0.0, 2.0), (10.0, 0.0, 2.0))
    found = deviation_statistics(a, b, 0.1)
    assert found.rms == pytest.approx(2.0)
    assert (found.mean_signed, found.max_plus, found.max_minus) == (None, None, None)
    with pytest.raises(GeometryError, match="no sides"):
        signed_distances(a.points, b, 0.1)


def test_unusable_input_is_refused() -> None:
    line = polyline((0.0, 0.0), (1.0, 0.0))
    with pytest.raises(GeometryError, match="no length"):
        signed_distances(line.points, polyline((1.0, 1.0), (1.0, 1.0)), 0.1)
    with pytest.raises(GeometryError, match="chord error"):
        signed_distances(line.points, line, 0.0)
    with pytest.raises(GeometryError, match="tolerance"):
        deviation_statistics(line, line, -1.0)
    with pytest.raises(GeometryError, match="dimensions"):
        deviation_statistics(line, polyline((0.0, 0.0, 0.0), (1.0, 0.0, 0.0)), 0.1)


def test_arc_chain_that_bulges_out_is_outside() -> None:
    square = polyline((0.0, 0.0), (10.0, 0.0), (10.0, 10.0), (0.0, 10.0), closed=True)
    bulged = ArcChain(square.points, np.array([0.1, 0.0, 0.0, 0.0]), True)
    found = deviation_statistics(bulged, square, 0.1)
    assert found.max_plus == pytest.approx(0.5, abs=1e-2)  # sagitta = bulge chord / 2
    assert found.max_minus is not None
    assert found.max_minus >= -1e-9
