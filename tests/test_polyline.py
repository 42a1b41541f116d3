import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from geometry.errors import NotFiniteError, TooFewPointsError
from geometry.polyline import Polyline, clean, merge_collinear, polygon_area

L_SHAPE = np.array([[0.0, 0.0], [4.0, 0.0], [4.0, 1.0], [1.0, 1.0], [1.0, 3.0], [0.0, 3.0]])


def random_points(seed, n=12, d=2):
    return np.random.default_rng(seed).normal(size=(n, d)) * 10.0


def test_measures_of_an_l():
    shape = Polyline(L_SHAPE, True)
    assert shape.area() == 6.0
    assert shape.length() == 14.0
    np.testing.assert_array_equal(shape.alongs(), [0, 4, 5, 8, 10, 11, 14])
    np.testing.assert_array_equal(shape.bounds(), [[0.0, 0.0], [4.0, 3.0]])
    assert shape.reversed().area() == -6.0
    np.testing.assert_array_equal(shape.reversed().points[0], L_SHAPE[0])
    assert Polyline(L_SHAPE).length() == 11.0
    assert Polyline(L_SHAPE).area() == 0.0
    assert shape.flatten(0.1) is shape


def test_points_by_arc_length_wrap_or_stay_at_the_ends():
    where = np.array([-1.0, 0.0, 4.5, 14.0, 15.0])
    expected = [[0.0, 1.0], [0.0, 0.0], [4.0, 0.5], [0.0, 0.0], [1.0, 0.0]]
    np.testing.assert_allclose(Polyline(L_SHAPE, True).at(where), expected, atol=1e-15)
    held = Polyline(L_SHAPE).at(np.array([-1.0, 100.0]))
    np.testing.assert_array_equal(held, L_SHAPE[[0, -1]])


def test_in_space():
    path = Polyline(np.array([[0.0, 0.0, 0.0], [1.0, 2.0, 2.0], [1.0, 2.0, 5.0]]))
    assert (path.dimension, path.length()) == (3, 6.0)
    np.testing.assert_allclose(path.at(np.array([1.5])), [[0.5, 1.0, 1.0]])
    assert Polyline(path.points, True).area() == 0.0


@given(seed=st.integers(0, 10_000), angle=st.floats(0.0, 6.3), factor=st.floats(1e-3, 1e3))
def test_area_and_length_under_placing(seed, angle, factor):
    points = random_points(seed)
    c, s = np.cos(angle), np.sin(angle)
    placed = factor * points @ np.array([[c, s], [-s, c]]) + 1000.0 * factor
    before, after = Polyline(points, True), Polyline(placed, True)
    scale = before.length()
    assert after.area() == pytest.approx(factor**2 * before.area(), abs=1e-9 * (factor * scale) ** 2)
    assert after.length() == pytest.approx(factor * scale, rel=1e-9)
    mirrored = polygon_area(points * np.array([1.0, -1.0]))
    assert mirrored == pytest.approx(-before.area(), abs=1e-9 * scale**2)
    np.testing.assert_array_equal(before.reversed().reversed().points, points)


def test_area_far_from_the_origin():
    assert polygon_area(L_SHAPE + np.array([5e5, 5e6])) == 6.0


def test_clean_drops_repeats_only():
    points = L_SHAPE[[0, 0, 1, 2, 2, 2, 3, 4, 5, 0]]
    cleaned, kept = clean(Polyline(points, True))
    np.testing.assert_array_equal(cleaned.points, L_SHAPE)
    np.testing.assert_array_equal(kept, [0, 2, 3, 6, 7, 8])
    cleaned, kept = clean(Polyline(points))  # open: the return to the beginning is kept
    np.testing.assert_array_equal(cleaned.points, L_SHAPE[[0, 1, 2, 3, 4, 5, 0]])


def test_clean_adds_up_short_steps():
    line = Polyline(np.stack([np.arange(11) * 0.1, np.zeros(11)], axis=1))
    cleaned, kept = clean(line, least=0.25)
    np.testing.assert_array_equal(kept, [0, 3, 6, 9])
    assert np.linalg.norm(np.diff(cleaned.points, axis=0), axis=1).min() > 0.25


def test_clean_looks_back_from_the_end_of_a_closed_one_more_than_once():
    points = np.array([[0.0, 0.0], [9.0, 0.0], [9.0, 9.0], [0.0, 0.9], [0.0, -0.9]])
    cleaned, kept = clean(Polyline(points, True), least=1.0)  # the last two lie 1.8 apart, both 0.9 from the first
    np.testing.assert_array_equal(kept, [0, 1, 2])
    assert cleaned.edge_lengths().min() > 1.0


@given(seed=st.integers(0, 10_000), least=st.floats(0.0, 0.3), closed=st.booleans())
def test_cleaned_steps_are_longer_and_nothing_kept_moves(seed, least, closed):
    points = np.cumsum(np.random.default_rng(seed).normal(size=(60, 2)) * 0.2, axis=0)
    points = np.vstack([points, [[100.0, 0.0], [100.0, 100.0], [0.0, 100.0]]])
    cleaned, kept = clean(Polyline(points, closed), least)
    assert cleaned.edge_lengths().min() > least
    np.testing.assert_array_equal(cleaned.points, points[kept])
    dropped = np.setdiff1d(np.arange(len(points)), kept)
    near = [np.linalg.norm(points[i] - points[kept[kept < i][-1]]) <= least for i in dropped]
    assert all(near)


def test_clean_refuses_what_cannot_be_used():
    with pytest.raises(NotFiniteError, match="point 1"):
        clean(Polyline(np.array([[0.0, 0.0], [np.nan, 1.0], [2.0, 2.0]])))
    with pytest.raises(TooFewPointsError, match="1 distinct points where at least 2"):
        clean(Polyline(np.ones((4, 2))))
    with pytest.raises(TooFewPointsError, match="2 distinct points where at least 3"):
        clean(Polyline(np.array([[0.0, 0.0], [1.0, 1.0], [0.0, 0.0]]), True))
    with pytest.raises(TooFewPointsError, match="0 distinct"):
        clean(Polyline(np.zeros((0, 2))))


def test_merging_straight_runs_keeps_the_shape():
    along = np.arange(14.0)
    fine = Polyline(Polyline(L_SHAPE, True).at(along), True)
    merged, kept = merge_collinear(fine)
    np.testing.assert_allclose(merged.points, L_SHAPE, atol=1e-15)
    np.testing.assert_array_equal(kept, [0, 4, 5, 8, 10, 11])
    merged, _ = merge_collinear(Polyline(fine.points[1:]))  # open: both ends stay
    np.testing.assert_allclose(merged.points, [[1, 0], *L_SHAPE[1:], [0, 1]], atol=1e-15)


def test_merging_keeps_a_way_back_and_small_turns_over_the_limit():
    there_and_back = Polyline(np.array([[0.0, 0.0], [2.0, 0.0], [1.0, 0.0]]))
    assert len(merge_collinear(there_and_back)[0].points) == 3
    bent = Polyline(np.array([[0.0, 0.0], [1.0, 0.0], [2.0, 1e-6]]))
    assert len(merge_collinear(bent, 0.9e-6)[0].points) == 3
    assert len(merge_collinear(bent, 1.1e-6)[0].points) == 2
