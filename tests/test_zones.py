"""Zones out of limits: known edits are given back with their place, side and height."""

import numpy as np
import pytest

from geometry.arcs import ArcChain, full_circle
from geometry.bspline import Spline
from geometry.deviation import directed_hausdorff
from geometry.errors import GeometryError
from geometry.polyline import Polyline
from geometry.signed import signed_distances
from geometry.zones import missed_zones, zones

PLATE = Polyline(np.array([[0.0, 0.0], [100.0, 0.0], [100.0, 60.0], [0.0, 60.0]]), True)


def with_bump(height=-0.5, at=40.0, half=3.0):
    """The plate with a bump on its lower side; outside is downwards."""
    bump = [[at - half, 0.0], [at, height], [at + half, 0.0]]
    return Polyline(np.vstack([PLATE.points[:1], bump, PLATE.points[1:]]), True)


@pytest.mark.parametrize("height", [-0.5, 0.5])
@pytest.mark.parametrize("reverse", [False, True])
def test_a_bump_of_known_height_is_given_back(height, reverse):
    new = with_bump(height).reversed() if reverse else with_bump(height)
    (zone,) = zones(new, PLATE, 0.1, 0.1)
    slope = np.hypot(3.0, 0.5)
    assert zone.peak == pytest.approx(-height, abs=1e-12)
    assert zone.point == pytest.approx((40.0, height), abs=1e-9)
    assert zone.to_along - zone.from_along == pytest.approx(2.0 * slope * 0.8, abs=1e-6)
    along = new.length() - (37.0 + slope) if reverse else 37.0 + slope
    assert zone.along == pytest.approx(along, abs=1e-9)


def test_limits_may_differ_by_side():
    assert not zones(with_bump(-0.5), PLATE, 0.6, 0.1)
    assert len(zones(with_bump(0.5), PLATE, 0.6, 0.1)) == 1
    both = Polyline(
        np.vstack([with_bump(-0.5).points[:4], [[70.0, 0.0], [73.0, 0.3], [76.0, 0.0]], PLATE.points[1:]]), True
    )
    first, second = zones(both, PLATE, 0.1, 0.1)
    assert (first.peak, second.peak) == (pytest.approx(0.5), pytest.approx(-0.3))


def test_a_needle_between_samples_is_found():
    new = with_bump(-2.0, at=40.001, half=1e-5)
    (zone,) = zones(new, PLATE, 0.1, 0.1)
    assert zone.peak == pytest.approx(2.0, abs=1e-9)


def test_a_zone_through_the_start_of_a_closed_curve_is_one():
    bump = with_bump(-0.5)
    new = Polyline(np.roll(bump.points, -2, axis=0), True)  # begins at the tip
    (zone,) = zones(new, PLATE, 0.1, 0.1)
    assert zone.to_along > new.length() > zone.from_along
    assert zone.to_along - zone.from_along == pytest.approx(2.0 * np.hypot(3.0, 0.5) * 0.8, abs=1e-6)
    assert zone.from_along <= zone.along <= zone.to_along
    assert zone.peak == pytest.approx(0.5, abs=1e-12)


def test_a_mirrored_corner_is_out_on_one_side_and_in_on_the_other():
    """A chamfer of 12 by 5 drawn as 5 by 12: its end is 7 along the old one's leg, so 7 * 5 / 13 outside."""
    others = [[100.0, 60.0], [0.0, 60.0], [0.0, 0.0]]
    old = Polyline(np.array([[88.0, 0.0], [100.0, 5.0], *others]), True)
    new = Polyline(np.array([[95.0, 0.0], [100.0, 12.0], *others]), True)
    first, second = zones(new, old, 0.1, 0.1)
    assert first.peak == pytest.approx(35.0 / 13.0, abs=1e-9)
    assert first.point == pytest.approx((95.0, 0.0), abs=1e-9)
    assert second.peak < -2.0
    assert first.to_along - new.length() <= second.from_along


def test_an_open_curve_has_left_and_right_by_the_travel_of_the_reference():
    line = Polyline(np.array([[0.0, 0.0], [100.0, 0.0]]))
    new = Polyline(np.array([[0.0, 0.0], [37.0, 0.0], [40.0, 0.5], [43.0, 0.0], [100.0, 0.0]]))
    assert zones(new, line, 0.1, 0.1)[0].peak == pytest.approx(0.5)
    assert zones(new.reversed(), line, 0.1, 0.1)[0].peak == pytest.approx(0.5)
    assert zones(new, line.reversed(), 0.1, 0.1)[0].peak == pytest.approx(-0.5)


def test_a_shifted_hole_is_out_on_two_opposite_sides():
    """The deviation of a circle moved by d from its place is d cos(angle), to second order in d / R."""
    old, new = full_circle(np.array([50.0, 30.0]), 8.0), full_circle(np.array([50.2, 30.0]), 8.0)
    found = zones(new, old, 0.1, 0.1)
    assert sorted(zone.peak for zone in found) == pytest.approx([-0.2, 0.2], abs=1e-6)
    for zone in found:
        assert zone.point == pytest.approx((50.2 + np.sign(zone.peak) * 8.0, 30.0), abs=0.02)
        assert zone.to_along - zone.from_along == pytest.approx(8.0 * 2.0 * np.arccos(0.5), rel=0.02)


def test_peaks_of_splines_are_refined_to_the_curve():
    """One cubic span, y = 3 t (1 - t) h: its top is 3 h / 4 at t = 1/2."""
    knots = np.array([0.0, 0, 0, 0, 1, 1, 1, 1])
    hump = Spline(knots, np.array([[0.0, 0.0], [100.0 / 3, 2.0], [200.0 / 3, 2.0], [100.0, 0.0]]), 3)
    line = Polyline(np.array([[-10.0, 0.0], [110.0, 0.0]]))
    (zone,) = zones(hump, line, 1.0, 1.0)
    assert zone.peak == pytest.approx(1.5, abs=1e-9)
    assert zone.point == pytest.approx((50.0, 1.5), abs=1e-3)
    t = 0.5 - np.sqrt(0.25 - 1.0 / 6.0)  # 6 t (1 - t) = 1
    ends = (zone.from_along, zone.to_along)
    assert ends == pytest.approx((100.0 * t, 100.0 * (1.0 - t)), abs=0.1)
    inner = hump.flatten(1e-7).at(np.array(ends))
    assert inner[:, 1] == pytest.approx([1.0, 1.0], abs=1e-5)


def test_in_space_there_are_no_sides():
    line = Polyline(np.array([[0.0, 0.0, 0.0], [100.0, 0.0, 0.0]]))
    new = Polyline(np.array([[0.0, 0.0, 0.0], [50.0, 0.0, -0.5], [100.0, 0.0, 0.0]]))
    (zone,) = zones(new, line, 0.1, 0.1)
    assert zone.peak == pytest.approx(0.5)
    assert zone.point == pytest.approx((50.0, 0.0, -0.5))


def test_what_only_the_old_one_has_is_missed():
    """A slit 0.02 wide that NEW leaves out: every place of NEW is near OLD, the end of the slit is not near NEW."""
    slit = np.array([[49.99, 0.0], [49.99, 10.0], [50.01, 10.0], [50.01, 0.0]])
    old = Polyline(np.vstack([PLATE.points[:1], slit, PLATE.points[1:]]), True)
    assert not zones(PLATE, old, 0.1, 0.1)
    (missed,) = missed_zones(PLATE, old, 0.1, [])
    assert missed.peak == pytest.approx(10.0, abs=1e-9)
    assert missed.point[1] == pytest.approx(10.0)
    assert missed.to_along - missed.from_along == pytest.approx(2.0 * 9.9 + 0.02, abs=1e-3)


def test_what_new_left_is_not_missed_besides():
    new = with_bump(-5.0)
    known = zones(new, PLATE, 0.1, 0.1)
    assert not missed_zones(new, PLATE, 0.1, known)


@pytest.mark.parametrize("seed", range(12))
def test_the_highest_peak_is_the_directed_distance(seed):
    rng = np.random.default_rng(seed)
    angle = np.linspace(0.0, 2.0 * np.pi, 60, endpoint=False)
    points = (50.0 + 5.0 * np.cos(3 * angle))[:, None] * np.stack([np.cos(angle), np.sin(angle)], axis=1)
    old = ArcChain(points, rng.uniform(-0.1, 0.1, 60), True)
    new = Polyline(points + rng.normal(0.0, 0.3, points.shape), True)
    found = zones(new, old, 0.2, 0.2)
    exact = directed_hausdorff(new, old, 1e-9)
    assert abs(found[0].peak) <= exact.certified + 1e-5
    assert abs(found[0].peak) >= 0.98 * exact.measured
    assert all(abs(zone.peak) > 0.2 for zone in found)


def test_every_one_of_many_narrow_zones_on_a_long_edge_is_found():
    """Ten notches of OLD, 0.3 wide and 0.15 deep, under one straight edge of NEW."""
    notches = [[[x, 0.0], [x, -0.15], [x + 0.3, -0.15], [x + 0.3, 0.0]] for x in 500.0 + 1000.0 * np.arange(9)]
    old = Polyline(np.vstack([[[0.0, 0.0]], *notches, [[10000.0, 0.0]]]))
    new = Polyline(np.array([[0.0, 0.0], [10000.0, 0.0]]))
    found = zones(new, old, 0.1, 0.3)
    assert len(found) == 9
    for zone in found:
        assert zone.peak == pytest.approx(0.15, abs=1e-6)
        assert zone.from_along <= zone.along <= zone.to_along


def test_a_peak_lies_in_its_zone_and_on_its_side():
    """NEW runs along the middle between two strands of OLD and leans from one to the other."""
    old = Polyline(np.array([[0.0, 0.0], [0.0, 10.0], [-3.0, 10.0], [-3.0, -3.0], [1.0, -3.0], [1.0, 10.0]]))
    for x in (0.49, 0.49756, 0.499, 0.5):
        new = Polyline(np.array([[x, 1.0], [x + 0.02226, 9.0]]))
        for zone in zones(new, old, 0.1, 0.2):
            assert zone.from_along - 1e-9 <= zone.along <= zone.to_along + 1e-9
            signed = signed_distances(np.array([zone.point]), old, 1e-9)[0]
            assert signed == pytest.approx(zone.peak, abs=1e-6) or abs(zone.point[0] - 0.5) < 1e-6


def test_curves_within_their_limits_have_no_zones():
    assert zones(PLATE, PLATE, 1e-6, 1e-6) == []
    with pytest.raises(GeometryError, match="must be numbers above 0"):
        zones(PLATE, PLATE, 0.0, 1.0)
