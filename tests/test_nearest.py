"""Nearest segments against comparing every point with every segment."""

import numpy as np
import pytest

from geometry.arrays import FloatArray
from geometry.nearest import SegmentSearch


def every_distance(points: FloatArray, start: FloatArray, end: FloatArray) -> FloatArray:
    """Distances from each point to each segment, coordinates first, shape (n, m)."""
    along = end - start
    square = np.maximum((along * along).sum(axis=0), 1e-300)
    offset = points[:, :, None] - start[:, None]
    t = np.clip((offset * along[:, None]).sum(axis=0) / square, 0.0, 1.0)
    return np.asarray(np.sqrt(((offset - t * along[:, None]) ** 2).sum(axis=0)))


@pytest.mark.parametrize("dimension", [2, 3])
@pytest.mark.parametrize("segments", [1, 3, 40, 800])
@pytest.mark.parametrize("longest", [1.0, 60.0])
def test_exact_is_exact_and_near_is_never_below(dimension: int, segments: int, longest: float) -> None:
    rng = np.random.default_rng(segments)
    steps = rng.normal(0.0, 1.0, (dimension, segments)) * np.where(rng.random(segments) < 0.05, longest, 1.0)
    path = np.cumsum(np.concatenate([np.zeros((dimension, 1)), steps], axis=1), axis=1)
    search = SegmentSearch(path[:, :-1], path[:, 1:])
    points = rng.uniform(path.min(), path.max(), (dimension, 600))
    table = every_distance(points, path[:, :-1], path[:, 1:])
    index, high, low = search.exact(points)
    np.testing.assert_allclose(high, table.min(axis=1), rtol=1e-12, atol=1e-12)
    assert (low == high).all()
    np.testing.assert_allclose(table[np.arange(600), index], high, rtol=1e-12, atol=1e-12)
    index, distance = search.near(points)
    np.testing.assert_allclose(table[np.arange(600), index], distance, rtol=1e-12, atol=1e-12)
    assert (distance >= high - 1e-12).all()
    assert (distance <= high + 1e-9).mean() > 0.8


def test_points_far_from_everything_are_settled() -> None:
    angle = np.linspace(0.0, 2.0 * np.pi, 4_000)
    path = np.stack([np.cos(angle), np.sin(angle)])
    search = SegmentSearch(path[:, :-1], path[:, 1:])
    points = np.concatenate([np.full((2, 30), 500.0), np.zeros((2, 3))], axis=1)
    _, high, low = search.exact(points)
    np.testing.assert_array_equal(low, high)
    np.testing.assert_allclose(high, every_distance(points, path[:, :-1], path[:, 1:]).min(axis=1), rtol=1e-12)


def test_segments_without_length_are_points() -> None:
    start = np.array([[0.0, 1.0, 1.0], [0.0, 0.0, 0.0]])
    search = SegmentSearch(start, np.array([[0.0, 1.0, 5.0], [0.0, 0.0, 0.0]]))
    index, distance = search.near(np.array([[-3.0, 9.0], [4.0, 3.0]]))
    assert index.tolist() == [0, 2]
    assert distance.tolist() == [5.0, 5.0]
    assert search.foot(np.array([[-3.0, 3.0], [4.0, 3.0]]), np.array([0, 2])).tolist() == [0.0, 0.5]


def test_where_a_foot_reaches_the_ends_of_its_segment() -> None:
    search = SegmentSearch(np.array([[2.0], [0.0]]), np.array([[6.0], [0.0]]))
    move = np.array([[10.0, -10.0, 0.0], [1.0, 0.0, 5.0]])
    t = search.reach(np.array([[0.0, 8.0, 3.0], [1.0, 1.0, 1.0]]), move, np.zeros(3, dtype=np.intp))
    np.testing.assert_allclose(t, [[0.2, 0.6, 0.0], [0.6, 0.2, 0.0]])
