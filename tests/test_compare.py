"""The job `compare`: known edits of a drawing are given back, whatever its units, place and handles."""

import ezdxf
import numpy as np
import pytest

from converter.errors import LengthError, NoProfileError, SettingsError
from converter.jobs.compare import CompareSettings, compare_drawings
from converter.units import parse_length
from tests.test_samples import SAMPLES
from tests.traced_drawings import new_drawing

RIM = [(0.0, 0.0), (120.0, 0.0), (120.0, 70.0), (60.0, 90.0), (0.0, 70.0)]
HOLES = [((15.0, 15.0), 5.0), ((105.0, 15.0), 5.0), ((60.0, 55.0), 12.0)]


def save(path, rim=RIM, holes=HOLES, units=4, move=None, factor=1.0):
    """A plate with holes, moved and made larger if asked for."""
    doc = new_drawing(units=units)
    space = doc.modelspace()
    points = np.array(rim)[:, :2]
    centres = np.array([centre for centre, _ in holes]).reshape(-1, 2)
    if move is not None:
        dx, dy, degrees = move
        c, s = np.cos(np.radians(degrees)), np.sin(np.radians(degrees))
        turn = np.array([[c, s], [-s, c]])
        points, centres = points @ turn + [dx, dy], centres @ turn + [dx, dy]
    bulges = [row[2] if len(row) > 2 else 0.0 for row in rim]
    rows = [(*(factor * point), bulge) for point, bulge in zip(points, bulges, strict=True)]
    space.add_lwpolyline(rows, format="xyb", close=True, dxfattribs={"layer": "PLATE"})
    for centre, (_, radius) in zip(centres, holes, strict=True):
        space.add_circle(factor * centre, factor * radius, dxfattribs={"layer": "HOLES"})
    doc.saveas(path)
    return path


@pytest.fixture
def old(tmp_path):
    return save(tmp_path / "old.dxf")


def compared(old, new, tolerance=None, **settings):
    lengths = {key: parse_length(settings.pop(key)) for key in ("profile_zone", "zone_shift") if key in settings}
    length = None if tolerance is None else parse_length(tolerance)
    return compare_drawings(old, new, CompareSettings(tolerance=length, **lengths, **settings))


# Known edits ----------------------------------------------------------------------------------------------------------


def test_the_same_drawing_is_within_any_tolerance(old, tmp_path):
    record = compared(old, save(tmp_path / "new.dxf"), "1e-6").record
    assert record.within_tolerance
    assert len(record.pairs) == 4
    assert not record.only_in_old
    for pair in record.pairs:
        assert pair.paired_by == "handle"
        assert pair.deviation.certified < 1e-9
        assert not pair.zones


def test_a_bump_of_known_height_comes_back_with_its_place(old, tmp_path):
    rim = [RIM[0], (40.0, 0.0), (45.0, -0.8), (50.0, 0.0), *RIM[1:]]
    record = compared(old, save(tmp_path / "new.dxf", rim), "0.1").record
    assert not record.within_tolerance
    (pair,) = [pair for pair in record.pairs if not pair.within_tolerance]
    (zone,) = pair.zones
    assert zone.side == "outside"
    assert zone.peak == pytest.approx(0.8, abs=1e-6)
    assert (zone.x, zone.y) == pytest.approx((45.0, -0.8), abs=1e-6)
    assert zone.along == pytest.approx(40.0 + np.hypot(5.0, 0.8), abs=1e-3 * pair.length_new)
    assert pair.deviation.measured <= 0.8 <= pair.deviation.certified <= 0.8 + 0.1 / 200
    assert pair.deviation.max_plus == pytest.approx(0.8, abs=1e-9)
    assert pair.deviation.max_minus == 0.0


def test_a_shifted_hole_is_out_on_both_sides(old, tmp_path):
    holes = [HOLES[0], HOLES[1], ((60.3, 55.0), 12.0)]
    record = compared(old, save(tmp_path / "new.dxf", holes=holes), "0.1").record
    (pair,) = [pair for pair in record.pairs if not pair.within_tolerance]
    assert sorted((zone.side, round(zone.peak, 6)) for zone in pair.zones) == [("inside", -0.3), ("outside", 0.3)]
    assert abs(pair.deviation.mean_signed) < 0.01


def test_a_mirrored_corner_is_found_where_it_is(old, tmp_path):
    """One corner cut off in OLD, the one across the middle in NEW."""
    left = [(0.0, 4.0), (4.0, 0.0), *RIM[1:]]
    right = [(0.0, 0.0), (116.0, 0.0), (120.0, 4.0), *RIM[2:]]
    save(old, left)
    record = compared(old, save(tmp_path / "new.dxf", right), "0.1").record
    pair = next(pair for pair in record.pairs if pair.layer == "PLATE")
    sides = {zone.side: zone for zone in pair.zones}
    assert sides["outside"].peak == pytest.approx(np.hypot(2.0, 2.0), abs=1e-6)
    assert (sides["outside"].x, sides["outside"].y) == pytest.approx((0.0, 0.0), abs=1e-6)
    # NEW goes straight across the corner of OLD: the middle of the cut is farthest from both its sides
    assert sides["inside"].peak == pytest.approx(-2.0, abs=1e-6)
    assert (sides["inside"].x, sides["inside"].y) == pytest.approx((118.0, 2.0), abs=1e-5)


def test_a_moved_and_turned_copy_is_laid_on_and_the_move_told(old, tmp_path):
    """A fifth of the rim has changed besides."""
    rim = [RIM[0], (30.0, 0.0), (50.0, 3.0), (80.0, 0.0), *RIM[1:]]
    new = save(tmp_path / "new.dxf", rim, move=(300.0, -40.0, 25.0))
    assert compared(old, new, "0.1").record.align == "none"
    found = compared(old, new, "0.1", align=True)
    record = found.record
    assert record.transform.degrees == pytest.approx(-25.0, abs=1e-6)
    assert [pair.within_tolerance for pair in record.pairs].count(False) == 1
    (zone,) = next(pair for pair in record.pairs if not pair.within_tolerance).zones
    assert zone.peak == pytest.approx(-3.0, abs=1e-4)
    assert (zone.x, zone.y) == pytest.approx((50.0, 3.0), abs=1e-4)
    hole = next(pair for pair in found.pairs if pair.record.layer == "HOLES")
    assert hole.record.deviation.certified < 1e-4
    assert record.scale == 1.0


@pytest.mark.parametrize("factor", [1.001, 0.99])
def test_another_size_is_pointed_out(old, tmp_path, factor):
    record = compared(old, save(tmp_path / "new.dxf", factor=factor), "0.01", align=True).record
    assert record.scale == pytest.approx(1.0 / factor, abs=1e-6)
    assert any("would fit better" in line for line in record.warnings)
    assert not record.within_tolerance


def test_a_unit_mix_up_is_pointed_out_and_can_be_put_right(old, tmp_path):
    new = save(tmp_path / "new.dxf", factor=1.0 / 25.4)  # inches, labelled millimetres
    record = compared(old, new, "0.1").record
    assert any("25.4 times smaller than OLD" in line for line in record.warnings)
    assert not record.within_tolerance
    record = compared(old, new, "0.1", units="mm", new_units="in").record
    assert record.within_tolerance
    assert any("times 25.4" in line for line in record.warnings)


def test_drawings_in_different_units_are_compared_in_those_of_the_old_one(old, tmp_path):
    new = save(tmp_path / "new.dxf", factor=0.1, units=5)
    record = compared(old, new, "0.001in").record
    assert record.within_tolerance
    assert record.units == "mm"
    assert record.tolerance == pytest.approx(0.0254)
    assert record.warnings == ["NEW is in cm, OLD in mm: lengths of NEW are taken times 10"]
    record = compared(old, save(tmp_path / "none.dxf", units=0), "0.001in").record
    assert "NEW states no units: taken to be in mm like the other drawing" in record.warnings


def test_profiles_without_a_partner_are_named_and_out_of_tolerance(old, tmp_path):
    record = compared(old, save(tmp_path / "new.dxf", holes=[*HOLES[:2], ((30.0, 60.0), 3.0)]), "0.1").record
    assert record.within_tolerance is False
    assert [item["x"] for item in record.only_in_old] == [60.0]
    assert [(item["type"], item["layer"], item["x"], item["y"]) for item in record.only_in_new] == [
        ("CIRCLE", "HOLES", 30.0, 60.0)
    ]
    assert all(pair.within_tolerance for pair in record.pairs)
    assert compared(old, tmp_path / "new.dxf").record.within_tolerance is None


# Tolerance as drawings state it ---------------------------------------------------------------------------------------


def grown(tmp_path, by):
    return save(tmp_path / "new.dxf", holes=[(centre, radius + by) for centre, radius in HOLES])


@pytest.mark.parametrize(
    ("zone", "by", "inside"), [("0.4", 0.19, True), ("0.4", 0.21, False), ("0.4", -0.19, True), ("0.4", -0.21, False)]
)
def test_a_profile_zone_has_half_its_width_to_either_side(old, tmp_path, zone, by, inside):
    found = compared(old, grown(tmp_path, by), profile_zone=zone)
    assert found.record.within_tolerance is inside
    assert found.record.tolerance is None
    assert found.record.profile_zone == {"width": 0.4, "shift": 0.0}


@pytest.mark.parametrize(
    ("by", "inwards", "inside"),
    [(0.29, False, True), (0.31, False, False), (-0.09, False, True), (-0.11, False, False), (-0.29, True, True)],
)
def test_a_shifted_zone_has_a_limit_for_each_side(old, tmp_path, by, inwards, inside):
    found = compared(old, grown(tmp_path, by), profile_zone="0.4", zone_shift="0.1", zone_inwards=inwards)
    assert found.record.within_tolerance is inside
    assert (found.limits.plus, found.limits.minus) == pytest.approx((0.1, 0.3) if inwards else (0.3, 0.1))
    zones = [zone for pair in found.record.pairs for zone in pair.zones]
    assert bool(zones) is not inside


def test_a_piece_of_old_that_new_leaves_out_is_missing(old, tmp_path):
    """A slit of 0.02: no place of NEW is far from OLD, yet NEW is not the same part."""
    slit = [RIM[0], (59.99, 0.0), (59.99, 20.0), (60.01, 20.0), (60.01, 0.0), *RIM[1:]]
    new = save(tmp_path / "new.dxf")
    save(old, slit)
    for limits in ({"tolerance": "0.1"}, {"profile_zone": "0.2"}):
        record = compared(old, new, **limits).record
        assert not record.within_tolerance
        pair = next(pair for pair in record.pairs if pair.layer == "PLATE")
        assert pair.deviation.new_to_old == pytest.approx(0.01)  # across the mouth of the slit
        assert pair.deviation.old_to_new == pytest.approx(20.0)
        (zone,) = pair.zones
        assert (zone.side, zone.along_profile) == ("missing", "old")
        assert zone.y == pytest.approx(20.0)


def test_a_curve_that_leaves_out_a_thin_spike_is_near_but_out_of_order(old, tmp_path):
    """The slit again, filled with another spike beside it: distances are small, the order of travel is not kept."""
    one = [RIM[0], (59.9, 0.0), (60.0, 20.0), (60.1, 0.0), *RIM[1:]]
    two = [RIM[0], (59.9, 0.0), (60.0, 20.0), (60.05, 0.0), (60.05, 19.0), (60.1, 0.0), *RIM[1:]]
    save(old, one)
    record = compared(old, save(tmp_path / "new.dxf", two), "0.2").record
    pair = next(pair for pair in record.pairs if pair.layer == "PLATE")
    assert pair.within_tolerance
    assert pair.deviation.certified < 0.2 < pair.deviation.in_order
    assert any("in the same order" in line for line in pair.warnings)


@pytest.mark.parametrize("by", [0.05, 0.2])
def test_the_fast_verdict_agrees_with_the_full_one(old, tmp_path, by):
    new = grown(tmp_path, by)
    for limits in ({"tolerance": "0.1"}, {"profile_zone": "0.3", "zone_shift": "0.04"}):
        full = compared(old, new, **limits).record
        fast = compared(old, new, verdict_only=True, **limits).record
        assert fast.within_tolerance is full.within_tolerance is (by == 0.05)
        for slow, quick in zip(full.pairs, fast.pairs, strict=True):
            assert quick.deviation.measured <= slow.deviation.certified
            assert quick.deviation.certified >= slow.deviation.measured


# Kinds of profiles ----------------------------------------------------------------------------------------------------


def test_open_profiles_have_left_and_right_whichever_way_new_runs(tmp_path):
    for name, points in (
        ("old", [(0, 0), (100, 0)]),
        ("new", [(0, 0), (40, 0), (45, 0.5), (50, 0), (100, 0)]),
        ("back", [(100, 0), (50, 0), (45, 0.5), (40, 0), (0, 0)]),
    ):
        doc = new_drawing()
        doc.modelspace().add_lwpolyline(points)
        doc.saveas(tmp_path / f"{name}.dxf")
    for name in ("new", "back"):
        (pair,) = compared(tmp_path / "old.dxf", tmp_path / f"{name}.dxf", "0.1").record.pairs
        (zone,) = pair.zones
        assert (zone.side, zone.peak) == ("left", pytest.approx(0.5))


def test_in_space_deviations_have_no_side(tmp_path):
    for name, height in (("old", 0.0), ("new", 0.5)):
        doc = new_drawing()
        doc.modelspace().add_polyline3d([(0, 0, 0), (50, 0, 5.0 + height), (100, 10, 0)])
        doc.saveas(tmp_path / f"{name}.dxf")
    (pair,) = compared(tmp_path / "old.dxf", tmp_path / "new.dxf", "0.1").record.pairs
    assert pair.deviation.mean_signed is None
    assert {zone.side for zone in pair.zones} == {"off"}


def test_heights_of_level_profiles_are_told_and_compared_in_plan(tmp_path):
    for name, height in (("old", 0.0), ("new", 3.0)):
        doc = new_drawing()
        doc.modelspace().add_lwpolyline(RIM, close=True, dxfattribs={"elevation": height})
        doc.saveas(tmp_path / f"{name}.dxf")
    (pair,) = compared(tmp_path / "old.dxf", tmp_path / "new.dxf", "0.1").record.pairs
    assert pair.within_tolerance
    assert pair.warnings == ["heights differ by +3: compared in plan"]


def test_the_sample_revision_gives_its_three_edits_back():
    """The foot 2 mm longer, the nose hole 0.5 mm larger, the outer bolt hole 1 mm further out; one is a trace."""
    found = compared(SAMPLES / "bracket.dxf", SAMPLES / "bracket-rev-b.dxf", "0.3")
    out = {pair.old_id: pair for pair in found.record.pairs if not pair.within_tolerance}
    assert set(out) == {"8E", "8F", "92"}
    assert out["92"].deviation.certified == pytest.approx(1.0, abs=2e-3)
    assert out["8F"].deviation.mean_signed == pytest.approx(0.5, abs=0.06)
    assert out["8E"].zones[0].peak == pytest.approx(2.0, abs=0.2)


# Settings -------------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("settings", "error", "words"),
    [
        ({"tolerance": "1", "profile_zone": "1"}, SettingsError, "state one of them"),
        ({"zone_shift": "1"}, SettingsError, "--profile-zone"),
        ({"profile_zone": "1", "zone_shift": "0.5"}, SettingsError, "smaller than half"),
        ({"tolerance": "0"}, LengthError, "above 0"),
        ({"profile_zone": "0"}, LengthError, "above 0"),
        ({"verdict_only": True}, SettingsError, "no verdict"),
    ],
)
def test_settings_that_contradict_one_another_are_refused(old, settings, error, words):
    with pytest.raises(error, match=words):
        compared(old, old, **settings)


def test_a_drawing_without_profiles_has_everything_in_the_other(old, tmp_path):
    ezdxf.new().saveas(tmp_path / "empty.dxf")
    record = compared(old, tmp_path / "empty.dxf", "0.1").record
    assert len(record.only_in_old) == 4
    assert record.within_tolerance is False
    with pytest.raises(NoProfileError):
        compared(tmp_path / "empty.dxf", tmp_path / "empty.dxf")
