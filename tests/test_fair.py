"""The job `fair`, called from Python: what changes, what does not, and that every number reported holds."""

import dataclasses
import json
import math
import re

import ezdxf
import numpy as np
import pyogrio
import pytest
import shapely

from converter.errors import LengthError, NoProfileError, OutputError, ReadError, VersionError
from converter.jobs.fair import FairSettings, fair_drawing
from converter.jobs.forms import Search
from geometry.polyline import Polyline
from tests.dxf_text import handle, records
from tests.traced_drawings import (
    DISC,
    HOOK,
    STADIUM,
    dense_points,
    entity,
    faired,
    new_drawing,
    rounded,
    sampled_deviation,
    save_outline,
)
from tests.tracing import circle, staircase

SHAPES = {"hook": HOOK, "stadium": STADIUM, "disc": DISC, "rounded": rounded()}
FORMS = {"spline": {}, "quadratic": {"degree": 2}, "arcs": {"form": "arcs"}, "lines": {"form": "lines"}}
STAMP = re.compile(r"\d{4}-\d\d-\d\dT\d\d:\d\d:\d\d")  # the drawing library notes when it last wrote the file


def audited(path):
    audit = ezdxf.readfile(path).audit()
    assert not audit.errors
    assert not audit.fixes


# What changes and what does not ---------------------------------------------------------------------------------------


def mixed(path):
    """A traced outline among two circles, a rectangle, a text, a dimension, a block and a paper space."""
    doc = new_drawing(setup=True)
    m = doc.modelspace()
    m.add_text("Rücken 4 mm", height=5, dxfattribs={"layer": "NOTES"})
    m.add_circle((20, 12), 3.3, dxfattribs={"layer": "CUT"})
    outline = m.add_lwpolyline(HOOK.tolist(), close=True, dxfattribs={"layer": "CUT"})
    m.add_circle((40, 12), 3.3, dxfattribs={"layer": "CUT"})
    m.add_lwpolyline([(70, 0), (90, 0), (90, 15), (70, 15)], close=True, dxfattribs={"layer": "CUT"})
    m.add_linear_dim(base=(0, -5), p1=(0, 0), p2=(61, 0)).render()
    doc.blocks.new("STAMP").add_lwpolyline(HOOK.tolist(), close=True)
    m.add_blockref("STAMP", (200, 0))
    doc.layout("Layout1").add_lwpolyline(HOOK.tolist(), close=True)
    doc.saveas(path)
    return outline.dxf.handle


def content(path):
    """Sections of a file but the header, which holds the time of saving; other such stamps left out."""
    sections = records(path)
    del sections["HEADER"]
    return {
        name: [[tag for tag in tags if not STAMP.search(tag[1])] for tags in every] for name, every in sections.items()
    }


@pytest.mark.parametrize("tolerance", [None, "1"])
def test_only_the_traced_outline_changes(tmp_path, tolerance):
    source = tmp_path / "in.dxf"
    traced = mixed(source)
    record, output = faired(source, tolerance)
    before, after = content(source), content(output)
    assert list(before) == list(after)
    for section, old in before.items():
        new = after[section]
        if section == "ENTITIES":
            assert [handle(tags) for tags in old] == [handle(tags) for tags in new]
            changed = [tags[0][1] for tags, other in zip(new, old, strict=True) if tags != other]
            assert changed == ["SPLINE"]
            old, new = ([tags for tags in all_tags if handle(tags) != traced] for all_tags in (old, new))
        assert old == new, section
    audited(output)
    kept = [profile.left_as_drawn for profile in record.profiles]
    assert [profile.id for profile in record.profiles if profile.left_as_drawn is None] == [traced]
    assert sum("true curve" in (reason or "") for reason in kept) == 2
    assert sum("clean polygon" in (reason or "") for reason in kept) == 1
    assert record.passed_through == {"TEXT": 1, "DIMENSION": 1, "INSERT": 1, "LWPOLYLINE": 1}


def test_profiles_left_as_drawn_report_a_deviation_of_nothing(tmp_path):
    mixed(tmp_path / "in.dxf")
    record, _ = faired(tmp_path / "in.dxf")
    hole = next(profile for profile in record.profiles if profile.source == "CIRCLE")
    assert (hole.entity, hole.deviation.certified, hole.within_tolerance) == ("CIRCLE", 0.0, True)
    assert hole.area_in == hole.area_out == pytest.approx(math.pi * 3.3**2)
    assert hole.length_in == hole.length_out == pytest.approx(2.0 * math.pi * 3.3)


def test_a_chain_of_lines_and_arcs_is_left_and_its_area_reported(tmp_path):
    doc = new_drawing()
    doc.modelspace().add_line((0, 0), (20, 0))
    doc.modelspace().add_arc((20, 5), 5, -90, 90)
    doc.modelspace().add_line((0, 10), (20, 10))
    doc.modelspace().add_arc((0, 5), 5, 90, 270)
    doc.saveas(tmp_path / "in.dxf")
    record, output = faired(tmp_path / "in.dxf")
    (profile,) = record.profiles
    assert "true curve" in profile.left_as_drawn
    assert abs(profile.area_in) == abs(profile.area_out) == pytest.approx(200.0 + 25.0 * math.pi, rel=1e-5)
    assert [e.dxftype() for e in ezdxf.readfile(output).modelspace()] == ["LINE", "ARC", "LINE", "ARC"]


def test_redraw_takes_true_curves_too(tmp_path):
    doc = new_drawing()
    doc.modelspace().add_circle((20, 12), 30.0)
    doc.saveas(tmp_path / "in.dxf")
    record, output = faired(tmp_path / "in.dxf", "0.1", redraw=True)
    (profile,) = record.profiles
    assert profile.entity == "SPLINE"
    away = np.abs(np.linalg.norm(dense_points(entity(output, profile.id)) - [20.0, 12.0], axis=1) - 30.0)
    assert away.max() <= profile.deviation.certified <= 0.1


def test_layers_not_chosen_pass_through(tmp_path):
    doc = new_drawing()
    first = doc.modelspace().add_lwpolyline(HOOK.tolist(), close=True, dxfattribs={"layer": "A"})
    doc.modelspace().add_lwpolyline(HOOK.tolist(), close=True, dxfattribs={"layer": "B"})
    doc.saveas(tmp_path / "in.dxf")
    record, output = faired(tmp_path / "in.dxf", layers=("a",))
    assert [profile.id for profile in record.profiles] == [first.dxf.handle]
    assert [e.dxftype() for e in ezdxf.readfile(output).modelspace()] == ["SPLINE", "LWPOLYLINE"]
    assert record.passed_through == {"LWPOLYLINE": 1}


@pytest.mark.parametrize(("form", "kind"), [("spline", "SPLINE"), ("arcs", "LWPOLYLINE"), ("lines", "LWPOLYLINE")])
def test_a_written_entity_keeps_properties_handle_and_place(tmp_path, form, kind):
    doc = new_drawing(setup=True)
    m = doc.modelspace()
    m.add_point((0, 0))
    attributes = {"layer": "CUT", "color": 3, "linetype": "DASHED", "lineweight": 35, "ltscale": 2.5}
    traced = m.add_lwpolyline(HOOK.tolist(), close=True, dxfattribs={**attributes, "true_color": 0x123456})
    m.add_point((1, 1))
    doc.saveas(tmp_path / "in.dxf")
    _, output = faired(tmp_path / "in.dxf", "1", form=form)
    entities = list(ezdxf.readfile(output).modelspace())
    assert [e.dxftype() for e in entities] == ["POINT", kind, "POINT"]
    assert entities[1].dxf.handle == traced.dxf.handle
    assert {name: entities[1].dxf.get(name) for name in attributes} == attributes
    assert entities[1].dxf.true_color == 0x123456


def test_thickness_and_elevation_stay_where_the_form_has_room_and_a_loss_is_told(tmp_path):
    doc = new_drawing()
    doc.modelspace().add_lwpolyline(HOOK.tolist(), close=True, dxfattribs={"thickness": 4.0, "elevation": 7.0})
    doc.saveas(tmp_path / "in.dxf")
    record, output = faired(tmp_path / "in.dxf", "1", form="lines")
    written = entity(output, record.profiles[0].id)
    assert (written.dxf.thickness, written.dxf.elevation, record.profiles[0].warnings) == (4.0, 7.0, [])
    record, output = faired(tmp_path / "in.dxf", "1")
    assert {round(p[2], 9) for p in entity(output, record.profiles[0].id).control_points} == {7.0}
    assert any("thickness" in warning for warning in record.profiles[0].warnings)


# What is reported holds -----------------------------------------------------------------------------------------------


@pytest.mark.parametrize("form", FORMS)
@pytest.mark.parametrize("shape", SHAPES)
def test_the_reported_deviation_bounds_the_true_one_in_the_written_file(tmp_path, shape, form):
    given_points = SHAPES[shape]
    record, output = faired(save_outline(tmp_path / "in.dxf", given_points), "1", **FORMS[form])
    audited(output)
    (profile,) = record.profiles
    written = entity(output, profile.id)
    points = dense_points(written)
    found = sampled_deviation(given_points, points)
    assert found <= profile.deviation.certified + 1e-4 <= 1.0 + 1e-4  # 1e-4: sagitta of the sampled run
    assert profile.deviation.measured <= found + 0.02  # found on samples 0.05 apart
    assert profile.deviation.certified <= 1.03 * found  # and not merely pessimistic
    assert profile.deviation.measured <= profile.deviation.in_order <= 1.5  # passed in the same order
    assert not any("same order" in line for line in profile.warnings)
    assert profile.within_tolerance
    assert abs(profile.deviation.mean_signed) <= 0.1
    assert profile.area_out == pytest.approx(shapely.Polygon(points).area, rel=1e-4)
    assert profile.length_out == pytest.approx(shapely.LineString([*points, points[0]]).length, rel=1e-3)
    assert (profile.area_in, profile.length_in) == (shapely.Polygon(given_points).area, len(given_points))
    assert written.dxftype() == profile.entity
    if form in ("spline", "quadratic"):
        assert (written.dxf.degree, written.closed) == (FORMS[form].get("degree", 3), True)
        assert len(written.control_points) == profile.control_points
        order, knots = written.dxf.degree + 1, list(written.knots)
        assert knots[:order] == [knots[0]] * order  # clamped at both ends
        assert knots[-order:] == [knots[-1]] * order
    elif written.dxftype() == "LWPOLYLINE":
        assert (len(written), written.closed) == (profile.vertices_out, True)
        assert sum(bulge != 0.0 for *_, bulge in written.get_points("xyb")) == profile.arcs


@pytest.mark.parametrize("form", FORMS)
def test_an_independent_reader_sees_the_same_curve(tmp_path, form):
    doc = new_drawing()
    for x, points in ((0.0, HOOK), (200.0, STADIUM)):
        doc.modelspace().add_lwpolyline(
            (points + np.array([x, 0.0])).tolist(), close=True, dxfattribs={"layer": f"L{x:g}"}
        )
    doc.saveas(tmp_path / "in.dxf")
    record, output = faired(tmp_path / "in.dxf", "1", **FORMS[form])
    pyogrio.set_gdal_config_options({"OGR_ARC_STEPSIZE": "0.1", "DXF_CLOSED_LINE_AS_POLYGON": "FALSE"})
    _, _, shapes, fields = pyogrio.raw.read(output, columns=["Layer", "EntityHandle"])
    assert fields[0].tolist() == ["L0", "L200"]
    assert fields[1].tolist() == [profile.id for profile in record.profiles]
    given_points = (HOOK, STADIUM + np.array([200.0, 0.0]))
    for shape, points, profile in zip(shapely.from_wkb(shapes), given_points, record.profiles, strict=True):
        seen = shapely.get_coordinates(shape)
        away = shapely.distance(shapely.points(seen), shapely.LinearRing(points))
        assert away.max() <= profile.deviation.certified + 1e-6  # every vertex it reads lies on our curve
        assert shapely.Polygon(seen).area == pytest.approx(profile.area_out, rel=2e-3)
        np.testing.assert_allclose(seen[0], seen[-1], atol=1e-9)


def test_true_corners_are_found_kept_sharp_and_reported(tmp_path):
    record, output = faired(save_outline(tmp_path / "in.dxf"))
    corners = record.profiles[0].corners
    true = np.array([(0.0, 0.0), (61.0, 7.0), (57.0, 43.0), (33.0, 24.0), (9.0, 47.0)])
    found = np.array([(corner["x"], corner["y"]) for corner in corners])
    assert len(found) == 5
    nearest = np.linalg.norm(found[:, None] - true, axis=2).argmin(axis=1)
    assert sorted(nearest) == [0, 1, 2, 3, 4]
    assert np.linalg.norm(found - true[nearest], axis=1).max() <= 1.0  # a pixel
    assert [i for i, corner in zip(nearest, corners, strict=True) if corner["turn_deg"] < 0.0] == [3]
    assert sum(corner["turn_deg"] for corner in corners) == pytest.approx(360.0, abs=20.0)  # the sides are straight
    points = dense_points(entity(output, record.profiles[0].id))
    assert all(np.linalg.norm(points - place, axis=1).min() < 0.02 for place in found)


def test_a_corner_angle_overrides_what_is_found(tmp_path):
    save_outline(tmp_path / "in.dxf", np.array([(0, 0), (30, 0), (60, 1), (60, 30), (0, 30)]))
    none, _ = faired(tmp_path / "in.dxf", "2", corner_angle=180.0)
    every, _ = faired(tmp_path / "in.dxf", "2", corner_angle=60.0)
    assert len(none.profiles[0].corners) == 0
    assert len(every.profiles[0].corners) in (0, 4)  # 0 only where it was left as drawn
    assert (len(every.profiles[0].corners) == 4) == (every.profiles[0].left_as_drawn is None)


def test_the_result_is_fairer_than_what_was_given(tmp_path):
    record, _ = faired(save_outline(tmp_path / "in.dxf", rounded(3)))
    before, after = (record.profiles[0].fairness[key] for key in ("before", "after"))
    assert before["inflections"] > 100
    assert after["inflections"] <= 6  # the shape has six hollows' worth of them at most
    assert after["strain_energy"] < 0.05 * before["strain_energy"]
    assert after["least_radius"] > 5.0 * before["least_radius"]


@pytest.mark.parametrize("radius", [5, 10, 30, 100])
@pytest.mark.parametrize("form", ["spline", "arcs"])
def test_a_circle_traced_at_one_pixel_keeps_its_radius(tmp_path, radius, form):
    save_outline(tmp_path / "in.dxf", staircase(circle(float(radius), (0.3, 0.4))))
    record, output = faired(tmp_path / "in.dxf", form=form)
    written = entity(output, record.profiles[0].id)
    if form == "arcs":
        assert written.dxftype() == "CIRCLE"
        assert written.dxf.radius == pytest.approx(radius, abs=0.15)
        np.testing.assert_allclose(tuple(written.dxf.center)[:2], (0.3, 0.4), atol=0.25)
    away = np.linalg.norm(dense_points(written) - [0.3, 0.4], axis=1)
    assert away.mean() == pytest.approx(radius, abs=0.15)
    assert math.sqrt(record.profiles[0].area_out / math.pi) == pytest.approx(radius, abs=0.15)


# The record and the exit ----------------------------------------------------------------------------------------------


def test_the_record_has_the_agreed_keys(tmp_path):
    record, _ = faired(save_outline(tmp_path / "in.dxf"), "1")
    whole = json.loads(json.dumps(record.as_json()))
    assert set(whole) >= {
        *("command", "version", "input", "output", "units", "tolerance", "chord_error", "profiles"),
        *("passed_through", "skipped", "warnings", "seconds"),
    }
    assert (whole["command"], whole["units"], whole["tolerance"], whole["skipped"]) == ("fair", "mm", 1.0, [])
    (profile,) = whole["profiles"]
    assert set(profile) >= {
        *("id", "layer", "closed", "vertices_in", "entity", "pieces", "control_points", "arcs", "lines"),
        *("vertices_out", "corners", "deviation", "fairness", "length_in", "length_out", "area_in", "area_out"),
        *("within_tolerance", "warnings"),
    }
    assert set(profile["corners"][0]) == {"x", "y", "turn_deg"}
    assert set(profile["deviation"]) == {"certified", "measured", "rms", "mean_signed", "in_order"}
    assert set(profile["fairness"]) == {"before", "after"}
    for when in ("before", "after"):
        assert set(profile["fairness"][when]) >= {"inflections", "curvature_extrema", "least_radius", "strain_energy"}
    assert (profile["layer"], profile["closed"], profile["vertices_in"]) == ("TRACE", True, len(HOOK))


def test_a_profile_out_of_its_tolerance_is_named_and_never_called_within(tmp_path, monkeypatch):
    """No input is known that makes the search end out of tolerance, so its last word is replaced by a worse curve."""

    search = Search.best

    def swollen(self, *arguments):
        result = search(self, *arguments)
        points = self.outline.points
        centre = points.mean(axis=0)
        return dataclasses.replace(result, curve=Polyline(centre + 1.1 * (points - centre), True))

    monkeypatch.setattr(Search, "best", swollen)
    record, output = faired(save_outline(tmp_path / "in.dxf"), "1")
    (profile,) = record.profiles
    assert not profile.within_tolerance
    assert not record.within_tolerance
    assert record.as_json()["within_tolerance"] is False
    assert profile.deviation.certified >= sampled_deviation(HOOK, dense_points(entity(output, profile.id))) - 1e-4 > 1.0
    assert any("out of tolerance" in warning for warning in profile.warnings)


def test_where_no_curve_fits_the_profile_is_left_and_named(tmp_path, monkeypatch):
    monkeypatch.setattr(Search, "best", lambda *_: None)
    source = save_outline(tmp_path / "in.dxf")
    record, output = faired(source, "1")
    assert record.profiles[0].left_as_drawn == "no fair curve keeps the tolerance"
    assert record.profiles[0].warnings
    assert not record.within_tolerance  # so the exit code is 1: what was asked for has not been done
    assert records(source)["ENTITIES"] == records(output)["ENTITIES"]


def test_progress_is_told_for_every_profile(tmp_path):
    mixed(tmp_path / "in.dxf")
    told = []
    fair_drawing(
        tmp_path / "in.dxf", tmp_path / "out.dxf", FairSettings(), lambda done, count: told.append((done, count))
    )
    assert told == [(1, 4), (2, 4), (3, 4), (4, 4)]


def test_what_cannot_be_read_or_written_raises_one_line_and_leaves_nothing(tmp_path):
    source = save_outline(tmp_path / "in.dxf")
    (tmp_path / "empty.dxf").write_bytes(b"")
    new_drawing().saveas(tmp_path / "bare.dxf")
    here = sorted(tmp_path.iterdir())
    out = tmp_path / "out.dxf"
    for error, place, output, changes in (
        (ReadError, tmp_path / "missing.dxf", out, {}),
        (ReadError, tmp_path / "empty.dxf", out, {}),
        (NoProfileError, tmp_path / "bare.dxf", out, {}),
        (NoProfileError, source, out, {"layers": ("NOWHERE",)}),
        (NoProfileError, source, out, {"layers": ("0",)}),
        (OutputError, source, source, {"force": True}),
        (OutputError, source, tmp_path / "bare.dxf", {}),
        (OutputError, source, tmp_path / "no-folder" / "out.dxf", {}),
        (VersionError, source, out, {"version": "R9"}),
        (LengthError, source, out, {"units": "cubit"}),
    ):
        with pytest.raises(error) as caught:
            fair_drawing(place, output, FairSettings(**changes))
        assert "\n" not in str(caught.value)
        assert sorted(tmp_path.iterdir()) == here
