"""Cutting curves at places along them."""

import itertools

import numpy as np
import pytest

from geometry.arcs import ArcChain, full_circle
from geometry.cutting import cut_at, piece_lengths
from geometry.polyline import Polyline


def test_a_polyline_is_cut_where_it_is_asked():
    square = Polyline(np.array([[0.0, 0.0], [4.0, 0.0], [4.0, 4.0], [0.0, 4.0]]), True)
    parts = cut_at(square, np.array([1.0, 6.0]))
    assert [part.points.tolist() for part in parts] == [
        [[0, 0], [1, 0]],
        [[1, 0], [4, 0], [4, 2]],
        [[4, 2], [4, 4], [0, 4], [0, 0]],
    ]
    assert not any(part.closed for part in parts)


def test_a_cut_at_a_vertex_adds_no_vertex_and_double_cuts_no_part():
    line = Polyline(np.array([[0.0, 0.0, 0.0], [3.0, 4.0, 0.0], [3.0, 4.0, 5.0]]))
    parts = cut_at(line, np.array([0.0, 5.0, 5.0, 5.0 + 1e-12, 10.0]))
    assert [len(part.points) for part in parts] == [2, 2]
    assert parts[1].points.tolist() == [[3, 4, 0], [3, 4, 5]]


@pytest.mark.parametrize("seed", range(20))
def test_parts_of_arcs_lie_on_the_same_circles_and_add_up(seed):
    random = np.random.default_rng(seed)
    closed = bool(seed % 2)
    chain = ArcChain(random.normal(size=(6, 2)), random.uniform(-1.5, 1.5, 6 if closed else 5), closed)
    assert piece_lengths(chain).sum() == pytest.approx(chain.length(), rel=1e-12)
    cuts = np.sort(random.uniform(0.0, chain.length(), 9))
    parts = cut_at(chain, cuts)
    assert len(parts) == 10
    np.testing.assert_allclose(
        np.cumsum([part.length() for part in parts]), [*cuts, chain.length()], rtol=0.0, atol=1e-12 * chain.length()
    )
    for before, after in itertools.pairwise(parts):
        np.testing.assert_array_equal(before.points[-1], after.points[0])
    known = np.sort(np.abs(chain.curvatures()))
    for part in parts:
        for curvature in np.abs(part.curvatures()):
            assert np.abs(known - curvature).min() < 1e-6 * (1.0 + curvature)


def test_a_quarter_of_a_circle():
    circle = full_circle(np.zeros(2), 2.0)
    quarter = cut_at(circle, np.array([0.5 * np.pi * 2.0]))[0]
    np.testing.assert_allclose(quarter.points, [[2, 0], [0, 2]], atol=1e-15)
    assert quarter.bulges[0] == pytest.approx(np.tan(np.pi / 8))
