import numpy as np
import pytest

from converter.jobs.corners import corner_turns, outline_corners
from converter.jobs.forms import Search
from converter.jobs.writing import Writing
from geometry.deviation import hausdorff
from geometry.polyline import Polyline
from geometry.simple import is_simple
from tests.tracing import dense, noisy, staircase, turned

BRACKET = [(0, 0), (90, 0), (90, 25), (35, 25), (20, 70), (0, 70)]
NO_MARKS = np.zeros((0, 2))


@pytest.mark.parametrize("form", ["spline", "arcs", "lines"])
@pytest.mark.parametrize("degree", [2, 3])
def test_every_form_keeps_the_tolerance_with_few_entities(form, degree):
    outline = Polyline(staircase(turned(dense(BRACKET), 17)), True)
    corners, _ = outline_corners(outline, 1.0, None, NO_MARKS)
    result = Search(outline, corners, 1.0, degree, 0.0).best(0.1, Writing(form))
    assert result.within
    assert hausdorff(outline, result.curve, 0.01).certified <= 1.0
    count = len(result.curve.control if form == "spline" else result.curve.points)
    assert count < 60 < len(outline.points)


def test_walls_nearer_than_the_tolerance_do_not_cross():
    """A thin web: two walls 0.9 apart, noise 0.12, tolerance 0.6."""
    web = [(0, 0), (60, 0), (60, 30), (40, 30), (40, 0.9), (20, 0.9), (20, 30), (0, 30)]
    for seed in range(3):
        outline = Polyline(noisy(dense(web), 1.6, 0.12, seed), True)
        if not is_simple(outline):
            continue
        corners, _ = outline_corners(outline, 0.6, None, NO_MARKS)
        result = Search(outline, corners, 0.6, 3, 0.0).best(0.06, Writing("spline"))
        assert result.within
        assert not result.crosses
        assert is_simple(result.curve.flatten(1e-4))


def test_corner_turns_are_those_of_the_outline():
    outline = Polyline(staircase(turned(dense(BRACKET), 17)), True)
    corners, _ = outline_corners(outline, 1.0, None, NO_MARKS)
    result = Search(outline, corners, 1.0, 3, 0.0).best(0.1, Writing("spline"))
    places, turns = corner_turns(result.faired.spline)
    assert len(places) == len(BRACKET)
    assert np.degrees(turns.sum()) == pytest.approx(360.0, abs=2.0)  # all the turning of a polygon is at its corners
    np.testing.assert_allclose(np.degrees(np.sort(turns)), [-71.57, 71.57, 90, 90, 90, 90], atol=3.0)  # atan(3)


def test_corners_of_an_outline_in_space_are_found_in_its_plane():
    rng = np.random.default_rng(3)
    flat = noisy(dense(BRACKET), 2.0, 0.1, 2)
    tilt = np.array([[1.0, 0.0, 0.0], [0.0, np.cos(0.7), np.sin(0.7)]])
    outline = Polyline(flat @ tilt + rng.normal(0.0, 0.02, (len(flat), 3)), True)
    corners, _ = outline_corners(outline, 0.5, None, np.zeros((0, 3)))
    true = np.array(BRACKET, dtype=float) @ tilt
    assert len(corners) == len(BRACKET)
    assert np.linalg.norm(corners.points[:, None] - true[None], axis=2).min(axis=0).max() < 1.0


def test_steps_of_a_raster_are_no_corners_however_small_the_tolerance():
    angle = 2.0 * np.pi * np.arange(2000) / 2000
    oval = np.stack([40.0 * np.cos(angle), 25.0 * np.sin(angle)], axis=1)
    outline = Polyline(staircase(turned(oval, 20)), True)
    assert len(outline_corners(outline, 0.75, None, NO_MARKS, pitch=1.0)[0]) == 0
    bracket = Polyline(staircase(turned(dense(BRACKET), 17)), True)
    assert len(outline_corners(bracket, 0.75, None, NO_MARKS, pitch=1.0)[0]) == len(BRACKET)
    finer, coarser = (outline_corners(bracket, tolerance, None, NO_MARKS, pitch=1.0)[0] for tolerance in (0.6, 1.0))
    assert np.array_equal(finer.along, coarser.along)
