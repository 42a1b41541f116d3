import numpy as np
import pytest

from geometry.corners import Corners, find_corners, pin_corners
from geometry.polyline import Polyline
from tests.tracing import circle, dense, staircase

NONE = Corners(np.zeros(0), np.zeros((0, 2)), np.zeros(0))


def test_a_mark_beside_the_outline_becomes_a_corner_where_it_is():
    outline = Polyline(circle(50.0, count=200), True)
    marks = np.array([[50.3, 0.0], [0.0, -49.8], [0.0, 0.0]])
    corners, used = pin_corners(NONE, outline, marks, 1.0)
    assert used.tolist() == [True, True, False]
    np.testing.assert_allclose(corners.points, marks[:2])
    # quarters of the perimeter 2 n r sin(pi / n) of a regular polygon
    perimeter = 2 * 200 * 50.0 * np.sin(np.pi / 200)
    assert corners.along[1] == pytest.approx(0.75 * perimeter, rel=1e-4)
    assert min(corners.along[0], perimeter - corners.along[0]) < 1.0


def test_a_mark_takes_the_place_of_the_corner_found_there():
    outline = Polyline(staircase(dense([(0.2, 0.1), (60.3, 0.1), (60.3, 40.4), (0.2, 40.4)])), True)
    found = find_corners(outline, 1.0)
    corners, _ = pin_corners(found, outline, np.array([[60.3, 40.4]]), 1.0)
    assert len(found) == len(corners) == 4
    assert np.linalg.norm(corners.points - [60.3, 40.4], axis=1).min() == 0.0
    assert np.all(np.diff(corners.along) > 0.0)


def test_no_mark_changes_nothing():
    outline = Polyline(circle(50.0, count=200), True)
    corners, used = pin_corners(NONE, outline, np.zeros((0, 2)), 1.0)
    assert len(corners) == 0
    assert not used.size
