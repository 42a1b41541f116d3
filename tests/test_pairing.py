"""Which profile stands for which: by handle where it agrees, otherwise by layer and place."""

import numpy as np
import pytest

from converter.jobs.figures import Figure, in_space, scaled
from converter.jobs.pairing import pair_up
from geometry.arcs import ArcChain, full_circle
from geometry.bspline import Spline
from geometry.polyline import Polyline


def figure(name, curve, layer="PLATE"):
    return Figure(name, layer, curve.closed, ("LWPOLYLINE",), curve, 0.0, 0.0)


def hole(name, x, y, radius=3.0, layer="PLATE"):
    return figure(name, full_circle(np.array([x, y]), radius), layer)


def rim(name, width=100.0):
    return figure(name, Polyline(np.array([[0.0, 0.0], [width, 0.0], [width, 60.0], [0.0, 60.0]]), True))


PLATE = [rim("A"), hole("B", 10, 10), hole("C", 90, 10), hole("D", 90, 50), hole("E", 10, 50)]


def test_the_same_drawing_pairs_by_handle():
    found = pair_up(PLATE, PLATE)
    assert found.pairs == [(k, k, "handle") for k in range(5)]
    assert not found.only_old
    assert not found.only_new


def test_new_handles_pair_by_place():
    new = [hole("1", 10.2, 50), hole("2", 90.1, 50), rim("3", 101.0), hole("4", 90, 10.3), hole("5", 10, 10)]
    assert pair_up(PLATE, new).pairs == [(k, j, "place") for k, j in enumerate((2, 4, 3, 1, 0))]


def test_handles_that_agree_by_chance_only_do_not_pair():
    new = [rim("E"), hole("A", 10, 10), hole("B", 90, 10), hole("C", 90, 50), hole("D", 10, 50)]
    assert pair_up(PLATE, new).pairs == [(k, k, "place") for k in range(5)]


def test_a_hole_that_was_moved_far_pairs_by_its_handle_and_not_without():
    moved = [*PLATE[:4], hole("E", 40, 30)]
    assert pair_up(PLATE, moved).pairs[4] == (4, 4, "handle")
    moved[4] = hole("F", 40, 30)
    found = pair_up(PLATE, moved)
    assert found.only_old == [4]
    assert found.only_new == [4]


def test_what_only_one_revision_has_is_listed():
    found = pair_up(PLATE, PLATE[:3])
    assert [pair[:2] for pair in found.pairs] == [(0, 0), (1, 1), (2, 2)]
    assert found.only_old == [3, 4]
    assert pair_up(PLATE[:3], PLATE).only_new == [3, 4]
    assert pair_up(PLATE, []).only_old == [0, 1, 2, 3, 4]


def test_the_own_layer_comes_first_and_another_one_is_told():
    old = [rim("A"), hole("B", 50, 30)]
    new = [rim("1"), hole("2", 50.5, 30, layer="HOLES"), hole("3", 51.0, 30)]
    assert pair_up(old, new).pairs[1] == (1, 2, "place")
    assert pair_up(old, new[:2]).pairs[1] == (1, 1, "place on another layer")


def test_as_many_pairs_as_can_be_had_with_the_least_distance_in_all():
    """The nearest partner of the first is the only one of the second."""
    old = [hole("A", 0.0, 0.0), hole("B", 3.0, 0.0)]
    new = [hole("1", 1.6, 0.0), hole("2", -2.5, 0.0)]
    assert pair_up(old, new).pairs == [(0, 1, "place"), (1, 0, "place")]


def test_open_and_closed_profiles_never_pair():
    points = np.array([[0.0, 0.0], [10.0, 0.0], [10.0, 10.0], [0.0, 10.0], [0.0, 0.0]])
    found = pair_up([figure("A", Polyline(points[:-1], True))], [figure("A", Polyline(points))])
    assert not found.pairs


def test_the_only_outlines_of_two_drawings_pair_wherever_they_lie():
    moved = Polyline(rim("A").curve.points * 25.4 + 5000.0, True)
    assert pair_up([rim("A")], [figure("X", moved)]).pairs == [(0, 0, "nothing else")]


def test_thousands_of_holes_pair_one_to_one():
    rng = np.random.default_rng(1)
    places = 10.0 * np.stack(np.meshgrid(np.arange(50), np.arange(40)), axis=-1).reshape(-1, 2)
    order = rng.permutation(len(places))
    old = [hole(f"{k:X}", *place) for k, place in enumerate(places)]
    new = [hole(f"{90000 + k:X}", *(places[k] + rng.uniform(-0.5, 0.5, 2))) for k in order]
    found = pair_up(old, new)
    assert [(i, order[j]) for i, j, _ in found.pairs] == [(k, k) for k in range(len(places))]


# Figures --------------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "curve",
    [
        Polyline(np.array([[0.0, 0.0], [4.0, 0.0], [4.0, 3.0]]), True),
        ArcChain(np.array([[0.0, 0.0], [4.0, 0.0], [4.0, 2.0]]), np.array([0.2, 1.0])),
        Spline(np.array([0.0, 0, 0, 0, 1, 1, 1, 1]), np.array([[0.0, 0], [1, 2], [3, 2], [4, 0]]), 3),
    ],
)
def test_a_figure_is_scaled_and_lifted_as_a_whole(curve):
    one = Figure("A", "L", curve.closed, ("LINE",), curve, 2.0, 0.001)
    twice = scaled(one, 25.4)
    assert twice.curve.length() == pytest.approx(25.4 * curve.length(), rel=1e-12)
    assert (twice.elevation, twice.slack) == (50.8, pytest.approx(0.0254))
    lifted = in_space(one, 1e-6)
    assert lifted.curve.dimension == 3
    assert lifted.curve.length() == pytest.approx(curve.length(), rel=1e-5)
    assert np.allclose(lifted.curve.flatten(1e-3).points[:, 2], 2.0)
    assert lifted.slack <= 0.001 + 1e-6
