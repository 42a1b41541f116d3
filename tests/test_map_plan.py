"""What a map shows: stretches by band, whiskers, numbered zones."""

import numpy as np
import pytest

from converter.maps.bands import NEAR
from converter.maps.plan import plan_of, round_factor
from geometry.arcs import ArcChain
from geometry.cutting import piece_lengths
from geometry.polyline import Polyline
from geometry.signed import signed_distances
from tests.comparisons import LIMITS, bumped, circle, comparison_of, plate, revised


def test_stretches_cover_the_new_profile_and_lie_in_their_bands():
    comparison = revised()
    plan = plan_of(comparison)
    assert {part.band for part in plan.stretches[0]} == {1, 2, 3, 4, 5, 6}
    for pair, parts in zip(comparison.pairs, plan.stretches, strict=True):
        lengths = [piece_lengths(part.curve).sum() for part in parts]
        assert sum(lengths) == pytest.approx(pair.new.length(), rel=1e-9)
        for part in parts:
            inside = np.concatenate(
                [curve.points[:0] if len(curve.points) < 3 else curve.points[1:-1] for curve in [part.curve]]
            )
            bands = plan.bands.index(signed_distances(inside, pair.old, 1e-6))
            assert np.all(bands == part.band)
    assert plan.coarse == []


def test_a_stretch_begins_where_the_limit_is_passed():
    # a straight line tilted against another: the deviation is x / 100
    old = Polyline(np.array([[0.0, 0.0], [100.0, 0.0]]))
    new = Polyline(np.array([[0.0, 0.0], [100.0, 1.0]]))
    parts = plan_of(comparison_of([(old, new)], LIMITS)).stretches[0]
    assert [part.band for part in parts] == [3, 4, 5, 6]
    np.testing.assert_allclose([part.curve.points[0][0] for part in parts], [0.0, 10.0, 20.0, 40.0], atol=1e-9)


def test_arcs_stay_arcs():
    plan = plan_of(comparison_of([(circle(0, 0, 10.0), circle(0.3, 0.0, 10.0))], LIMITS))
    for part in plan.stretches[0]:
        assert isinstance(part.curve, ArcChain)
        middle = part.curve.points - [0.3, 0.0]
        np.testing.assert_allclose(np.linalg.norm(middle, axis=1), 10.0, rtol=1e-12)


def test_a_restless_deviation_is_told_in_cells_by_its_worst():
    x = np.linspace(0.0, 1000.0, 20_001)
    y = np.where(np.arange(len(x)) % 2 == 0, 0.3, -0.05)
    old = Polyline(np.array([[0.0, 0.0], [1000.0, 0.0]]))
    plan = plan_of(comparison_of([(old, Polyline(np.stack([x, y], axis=1)))], LIMITS))
    assert plan.coarse == ["B0"]
    assert {part.band for part in plan.stretches[0]} == {5}
    assert sum(piece_lengths(part.curve).sum() for part in plan.stretches[0]) == pytest.approx(
        Polyline(np.stack([x, y], axis=1)).length(), rel=1e-9
    )


def test_whiskers_run_from_old_through_new():
    comparison = revised()
    plan = plan_of(comparison, 20.0)
    whiskers = plan.whiskers[0]
    assert 20 < len(whiskers.base) < 250
    reach = np.linalg.norm(whiskers.tip - whiskers.base, axis=1) / 20.0
    assert reach.max() == pytest.approx(0.5, rel=0.01)
    np.testing.assert_allclose(signed_distances(whiskers.base, comparison.pairs[0].old, 1e-6), 0.0, atol=1e-3)
    np.testing.assert_allclose(
        signed_distances(whiskers.base + (whiskers.tip - whiskers.base) / 20.0, comparison.pairs[0].new, 1e-6),
        0.0,
        atol=1e-3,
    )


def test_marks_are_numbered_by_peak_over_all_pairs():
    plan = plan_of(revised())
    peaks = [abs(mark.zone.peak) for mark in plan.marks]
    assert [mark.number for mark in plan.marks] == list(range(1, len(peaks) + 1))
    assert peaks == sorted(peaks, reverse=True)
    assert plan.marks[0].zone.peak == pytest.approx(0.5, abs=1e-3)
    assert plan.marks[1].zone.peak == pytest.approx(-0.3, abs=1e-3)
    base, tip = np.array(plan.marks[0].base), np.array(plan.marks[0].tip)
    np.testing.assert_allclose(tip - base, [0.0, -0.5 * plan.factor], atol=0.01 * plan.factor)


def test_what_new_misses_is_marked_from_old():
    x = np.array([0.0, 49.9, 50.0, 50.1, 100.0])
    old = Polyline(np.stack([x, [0.0, 0.0, 6.0, 0.0, 0.0]], axis=1))
    plan = plan_of(comparison_of([(old, Polyline(np.array([[0.0, 0.0], [100.0, 0.0]])))], LIMITS), 1.0)
    (missing,) = [mark for mark in plan.marks if mark.zone.along_profile == "old"]
    np.testing.assert_allclose(missing.base, [50.0, 6.0], atol=1e-6)
    np.testing.assert_allclose(missing.tip, [50.0, 0.0], atol=1e-6)


def test_the_factor_is_round_and_makes_the_largest_a_twentieth():
    plan = plan_of(revised())
    assert plan.factor in {1.0, 2.0, 5.0, 10.0, 20.0, 50.0}
    assert 0.03 * plan.size < 0.5 * plan.factor < 0.08 * plan.size


@pytest.mark.parametrize(
    ("wanted", "factor"), [(0.01, 1), (1.0, 1), (1.3, 1), (1.5, 2), (13, 10), (75, 100), (1e20, 1e12)]
)
def test_round_factors(wanted, factor):
    assert round_factor(wanted) == factor


def test_identical_revisions_have_one_quiet_stretch():
    plan = plan_of(comparison_of([(plate(), plate())]))
    assert [part.band for part in plan.stretches[0]] == [NEAR]
    assert plan.stretches[0][0].curve.closed
    assert not len(plan.whiskers[0].base)
    assert plan.factor == 1.0


def test_space_curves_have_whiskers_in_space():
    t = np.linspace(0.0, 6.0, 200)
    old = Polyline(np.stack([10 * np.cos(t), 10 * np.sin(t), t], axis=1))
    new = Polyline(old.points + np.array([0.0, 0.0, 0.5]))
    plan = plan_of(comparison_of([(old, new)], LIMITS), 2.0)
    assert {part.band for part in plan.stretches[0]} <= {5, 6}
    assert plan.whiskers[0].base.shape[1] == 3
    assert len(plan.marks[0].tip) == 3


def test_nothing_to_draw():
    plan = plan_of(comparison_of([]))
    assert plan.size == 1.0
    assert plan.stretches == []


def test_far_from_the_origin():
    shift = np.array([5e6, 4e6])
    near, far = (
        plan_of(comparison_of([(plate().moved(s), bumped(plate(), 60.0, 0.5, 12.0).moved(s))], LIMITS))
        for s in (0 * shift, shift)
    )
    assert [part.band for part in near.stretches[0]] == [part.band for part in far.stretches[0]]
    np.testing.assert_allclose(far.whiskers[0].tip - shift, near.whiskers[0].tip, atol=1e-5)


def test_whiskers_of_many_small_profiles_stay_with_them():
    old = [circle(30.0 * k, 0.0, 10.0) for k in range(12)]
    plan = plan_of(comparison_of([(c, c.moved(np.array([0.1, 0.0]))) for c in old]))
    longest = max(np.linalg.norm(w.tip - w.base, axis=1).max() for w in plan.whiskers)
    assert 3.0 < longest < 15.0
