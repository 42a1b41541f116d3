import numpy as np
import pytest

from geometry.circle import whole_circle
from geometry.polyline import Polyline
from tests.tracing import circle, dense, noisy, staircase, turned

PLACES = [(0.3, 0.4), (0.1, 0.7), (0.55, 0.2)]  # no raster line of symmetry, where whole rows of pixels lie on the rim


def polygon(sides, radius, degrees):
    angle = 2.0 * np.pi * np.arange(sides) / sides + np.radians(degrees)
    return dense(radius * np.stack([np.cos(angle), np.sin(angle)], axis=1), 0.1)


@pytest.mark.parametrize("place", PLACES)
@pytest.mark.parametrize("radius", [5.0, 10.0, 30.0, 100.0])
def test_a_traced_circle_is_recognised_and_its_size_kept(radius, place):
    centre, found = whole_circle(Polyline(staircase(circle(radius, place)), True), 1.0)
    assert found == pytest.approx(radius, abs=0.15)
    np.testing.assert_allclose(centre, place, atol=0.25)


@pytest.mark.parametrize("radius", [5.0, 10.0, 30.0, 100.0])
def test_the_radius_is_unbiased_over_many_places(radius):
    rng = np.random.default_rng(7)
    outlines = [Polyline(staircase(circle(radius, rng.uniform(0.0, 1.0, 2))), True) for _ in range(16)]
    found = [whole_circle(outline, 1.0) for outline in outlines]
    radii = [circle_found[1] for circle_found in found if circle_found is not None]
    assert len(radii) >= 14
    assert abs(np.median(radii) - radius) <= 0.08


def test_hand_digitised_points_of_a_circle_are_recognised():
    centre, radius = whole_circle(Polyline(noisy(circle(100.0, (7.0, -3.0)), 4.0, 0.2, 3), True), 0.8)
    assert radius == pytest.approx(100.0, abs=0.1)
    np.testing.assert_allclose(centre, (7.0, -3.0), atol=0.15)


@pytest.mark.parametrize(
    "shape",
    [
        circle(1.0) * [10.0, 11.0],
        circle(1.0) * [30.0, 31.0],
        circle(1.0) * [100.0, 101.0],
        polygon(4, 5.0, 10.0),
        polygon(6, 8.0, 10.0),
        polygon(8, 20.0, 10.0),
        polygon(12, 30.0, 10.0),
        np.concatenate([circle(20.0)[:2000], circle(20.0, (0.0, -2.0))[2000:]]),
    ],
    ids=["oval 10", "oval 30", "oval 100", "square", "hexagon", "octagon", "dodecagon", "stadium"],
)
def test_what_is_nearly_a_circle_is_none(shape):
    assert whole_circle(Polyline(staircase(shape), True), 1.0) is None


def test_open_short_and_spatial_outlines_are_none():
    points = staircase(circle(30.0))
    assert whole_circle(Polyline(points, False), 1.0) is None
    assert whole_circle(Polyline(np.column_stack([points, points[:, 0]]), True), 1.0) is None
    assert whole_circle(Polyline(staircase(circle(2.0)), True), 1.0) is None
    assert whole_circle(Polyline(np.array([(0.0, 0.0), (1.0, 0.0), (0.0, 1.0)]), True), 1.0) is None


def test_an_outline_that_goes_round_twice_is_none():
    points = circle(30.0, count=300)
    twice = np.concatenate([points, points * 1.001])
    assert whole_circle(Polyline(twice, True), 1.0) is None


def test_moving_turning_scaling_and_reversing_do_the_same_to_the_circle():
    points = staircase(circle(30.0, (0.3, 0.4)))
    centre, radius = whole_circle(Polyline(points, True), 1.0)
    moved, same = whole_circle(Polyline(4.0 * points[::-1] + [500_000.0, 5_000_000.0], True), 4.0)
    np.testing.assert_allclose(moved - [500_000.0, 5_000_000.0], 4.0 * centre, atol=1e-4)
    assert same == pytest.approx(4.0 * radius, rel=1e-5)
    spun, same = whole_circle(Polyline(turned(points, 33.0), True), 1.0)
    np.testing.assert_allclose(spun, turned(centre[None], 33.0)[0], atol=1e-4)  # samples fall elsewhere
    assert same == pytest.approx(radius, rel=1e-5)
