import numpy as np
import pytest

from geometry.corners import corners_by_angle, find_corners, jaggedness_scale
from geometry.polyline import Polyline, merge_collinear
from tests.tracing import circle, dense, noisy, staircase, turned

BRACKET = [(0, 0), (90, 0), (90, 25), (35, 25), (20, 70), (0, 70)]
PHASES = [(0.13, 0.71), (0.5, 0.5), (0.87, 0.29)]


def matched(found, true, reach=1.5):
    """Distance from each true corner to the found one nearest to it, and how many found ones serve none."""
    gap = np.linalg.norm(found.points[:, None] - np.asarray(true)[None], axis=2)
    return gap.min(axis=0), int((gap.min(axis=1) > reach).sum())


@pytest.mark.parametrize("phase", PHASES)
@pytest.mark.parametrize("degrees", [0, 5, 17, 33, 45])
def test_corners_of_a_traced_bracket_are_found_in_place(degrees, phase):
    true = turned(np.array(BRACKET, dtype=float), degrees) + phase
    found = find_corners(Polyline(staircase(dense(true)), True), 1.0)
    gaps, spurious = matched(found, true)
    assert gaps.max() < 1.2
    assert np.median(gaps) < 0.75  # a side along the grid lies anywhere within half a pixel of its raster
    assert spurious == 0
    assert len(found) == len(true)


def test_turns_have_the_size_and_sign_of_the_true_ones():
    found = find_corners(Polyline(noisy(dense(BRACKET), 2.0, 0.15, 3), True), 0.6)
    true = np.array(BRACKET, dtype=float)
    order = np.linalg.norm(found.points[:, None] - true[None], axis=2).argmin(axis=1)
    edges = np.roll(true, -1, axis=0) - true
    before = np.roll(edges, 1, axis=0)
    turns = np.arctan2(before[:, 0] * edges[:, 1] - before[:, 1] * edges[:, 0], (before * edges).sum(axis=1))
    np.testing.assert_allclose(found.turns, turns[order], atol=np.radians(6))


@pytest.mark.parametrize("phase", PHASES)
@pytest.mark.parametrize("radius", [10, 30, 100])
def test_a_traced_circle_has_no_corner(radius, phase):
    assert len(find_corners(Polyline(staircase(circle(radius, phase)), True), 1.0)) == 0


def test_merging_collinear_steps_changes_no_corner():
    given = Polyline(staircase(turned(dense(BRACKET), 20)), True)
    merged, _ = merge_collinear(given)
    assert len(merged.points) < len(given.points)
    first, second = find_corners(given, 1.0), find_corners(merged, 1.0)
    gaps, spurious = matched(first, second.points)
    assert len(first) == len(second) == len(BRACKET)
    assert gaps.max() < 0.5
    assert spurious == 0


def test_open_ends_are_no_corners():
    angle = np.array([[0.0, 0.0], [60.0, 0.0], [60.0, 60.0]])
    steps = dense(np.vstack([angle, angle[1:2]]), 2.0)[:61]  # there and not back
    rng = np.random.default_rng(5)
    found = find_corners(Polyline(steps + rng.normal(0, 0.12, steps.shape), False), 0.6)
    assert len(found) == 1
    np.testing.assert_allclose(found.points[0], (60, 0), atol=0.5)


def test_corners_move_with_the_outline_far_from_the_origin():
    given = staircase(turned(dense(BRACKET), 17))
    shift = np.array([500_000.0, 5_000_000.0])
    near, far = find_corners(Polyline(given, True), 1.0), find_corners(Polyline(given + shift, True), 1.0)
    np.testing.assert_allclose(far.points - shift, near.points, atol=1e-6)


def test_places_stay_within_the_tolerance_of_the_polyline():
    given = staircase(dense([(0, 0), (80, 0), (20, 35)]))  # acute tips, which the raster cuts off
    found = find_corners(Polyline(given, True), 1.0)
    assert len(found) == 3
    gap = np.linalg.norm(found.points[:, None] - dense(given, 0.05)[None], axis=2).min(axis=1)
    assert gap.max() <= 0.96


def test_corner_angle_takes_vertices_by_their_turn():
    # turns of a regular polygon: 360 / n degrees (angle sum of a polygon)
    hexagon = Polyline(circle(10.0, count=6), True)
    assert len(corners_by_angle(hexagon, np.radians(59.9))) == 6
    assert len(corners_by_angle(hexagon, np.radians(60.1))) == 0
    np.testing.assert_allclose(corners_by_angle(hexagon, 0.0).turns, np.radians(60.0))
    assert len(corners_by_angle(Polyline(hexagon.points, False), 0.0)) == 4
    straight = Polyline(np.array([[0.0, 0.0], [1.0, 0.0], [3.0, 0.0]]))
    assert len(corners_by_angle(straight, 0.0)) == 0


def test_scale_is_held_between_one_and_two_tolerances():
    square = Polyline(np.array([[0.0, 0.0], [10.0, 0.0], [10.0, 10.0], [0.0, 10.0]]), True)
    assert jaggedness_scale(square, 1.0) == 2.0
    assert jaggedness_scale(square, 4.0) == 5.0
    assert jaggedness_scale(square, 7.0) == 7.0
