"""Pieces that two curves have in common, and the decision that leaves them out."""

import numpy as np
import pytest

from geometry.arcs import ArcChain
from geometry.bspline import Spline
from geometry.deviation import hausdorff, within
from geometry.polyline import Polyline
from geometry.shared import shared_pieces

RNG = np.random.default_rng(3)
POINTS = RNG.uniform(-50.0, 50.0, (300, 2))


def edited(points, at=120):
    out = points.copy()
    out[at] += [0.5, 0.3]
    return out


@pytest.mark.parametrize("closed", [False, True])
@pytest.mark.parametrize("shift", [0, 77])
@pytest.mark.parametrize("back", [False, True])
def test_all_edges_but_two_are_shared(closed, shift, back):
    a = Polyline(POINTS, closed)
    points = np.roll(edited(POINTS), shift, axis=0) if closed else edited(POINTS)
    b = Polyline(points, closed)
    mine, theirs = shared_pieces(a, b.reversed() if back else b)
    assert np.flatnonzero(~mine).tolist() == [119, 120]
    assert (~theirs).sum() == 2


def test_arcs_and_spans_are_compared_with_all_their_numbers():
    bulges = RNG.uniform(-0.5, 0.5, 299)
    other = bulges.copy()
    other[7] += 1e-12
    mine, _ = shared_pieces(ArcChain(POINTS, bulges), ArcChain(POINTS, other))
    assert np.flatnonzero(~mine).tolist() == [7]
    mine, _ = shared_pieces(ArcChain(POINTS, bulges), ArcChain(POINTS, bulges).reversed())
    assert mine.all()
    knots = np.concatenate([[0.0] * 3, np.arange(298.0), [297.0] * 3])
    mine, _ = shared_pieces(Spline(knots, POINTS, 3), Spline(knots, edited(POINTS), 3))
    assert np.flatnonzero(~mine).tolist() == [117, 118, 119, 120]


def test_curves_of_different_kinds_or_dimensions_share_nothing():
    flat = Polyline(POINTS)
    for other in (ArcChain(POINTS, np.zeros(299)), Polyline(np.column_stack([POINTS, POINTS[:, 0]]))):
        mine, theirs = shared_pieces(flat, other)
        assert not mine.any()
        assert not theirs.any()


def test_zeros_of_both_signs_are_equal():
    a = np.array([[0.0, 0.0], [1.0, 0.0], [2.0, 0.0]])
    mine, _ = shared_pieces(Polyline(a), Polyline(a * [1.0, -1.0]))
    assert mine.all()


@pytest.mark.parametrize("seed", range(30))
def test_decisions_agree_with_the_interval(seed):
    """Outlines that share most, half or none of their edges; tolerances beside the distance and far from it."""
    rng = np.random.default_rng(seed)
    points = np.cumsum(rng.normal(0.0, 1.0, (600, 2)), axis=0)
    changed = rng.random(600) < rng.choice([0.002, 0.1, 0.5, 1.0])
    a = Polyline(points, bool(seed % 2))
    b = Polyline(points + changed[:, None] * rng.normal(0.0, 0.3, (600, 2)), bool(seed % 2))
    exact = hausdorff(a, b, 1e-9)
    if exact.certified < 1e-9:
        assert within(a, b, 1e-9).inside
        return
    for factor in (0.3, 0.99999, 1.00001, 3.0):
        found = within(a, b, factor * exact.certified)
        assert found.inside is (factor > 1.0)
        assert found.forward.measured <= exact.forward.certified
        assert found.forward.certified >= exact.forward.measured
        if found.backward is not None:
            assert found.backward.measured <= exact.backward.certified
            assert found.backward.certified >= exact.backward.measured


def test_the_same_curve_is_within_any_tolerance():
    a = Polyline(POINTS, True)
    found = within(a, Polyline(POINTS.copy(), True).reversed(), 1e-300)
    assert found.inside
    assert found.forward.certified == 0.0


def test_the_same_spline_is_proven_to_the_rounding_of_its_spans():
    knots = np.concatenate([[0.0] * 3, np.arange(298.0), [297.0] * 3])
    found = within(Spline(knots, POINTS, 3), Spline(knots, POINTS, 3).reversed(), 1e-9)
    assert found.inside
    assert 0.0 < found.forward.certified < 1e-10
