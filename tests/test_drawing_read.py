"""Reading drawings: every entity kind as the curve it is, and an account of the rest."""

import math

import ezdxf
import numpy as np
import pytest

from converter.drawing import Frame, read_drawing
from converter.errors import LengthError, NoProfileError, ReadError
from converter.units import Length, unit_from_name
from geometry.arcs import ArcChain
from geometry.bspline import Spline
from geometry.polyline import Polyline


@pytest.fixture
def drawn(tmp_path):
    """Return a function that saves what a callback draws and reads it back."""

    def make(draw, version="R2010", fmt="asc", units=4, **options):
        doc = ezdxf.new(version, units=units)
        draw(doc.modelspace())
        path = tmp_path / "in.dxf"
        doc.saveas(path, fmt=fmt)
        return read_drawing(path, **options)

    return make


def only(drawing):
    assert len(drawing.profiles) == 1
    assert len(drawing.profiles[0].parts) == 1
    return drawing.profiles[0], drawing.profiles[0].parts[0]


@pytest.mark.parametrize("version", ["R12", "R2000", "R2004", "R2007", "R2010", "R2013", "R2018"])
@pytest.mark.parametrize("fmt", ["asc", "bin"])
def test_every_version_ascii_and_binary(drawn, version, fmt):
    rows = [(0.1, 0.2), (10 / 3, 0.0), (10, 5)]
    drawing = drawn(lambda m: m.add_polyline2d(rows, close=True, dxfattribs={"layer": "CUT"}), version, fmt)
    profile, part = only(drawing)
    assert drawing.version == version
    assert profile.layer == "CUT"
    assert profile.closed
    assert isinstance(part, Polyline)
    np.testing.assert_array_equal(part.points, rows)  # not a bit of the coordinates is lost


def test_lwpolyline_keeps_its_vertices_and_elevation(drawn):
    def draw(m):
        m.add_lwpolyline([(0, 0), (4, 0), (4, 3)], dxfattribs={"elevation": 2.5})

    profile, part = only(drawn(draw))
    assert (profile.closed, profile.vertices_in, profile.curved, profile.elevation) == (False, 3, False, 2.5)
    assert profile.dimension == 2
    assert profile.length() == 7.0
    np.testing.assert_array_equal(profile.flatten(0.1).points, part.points)


def test_a_polyline_that_ends_at_its_start_is_closed(drawn):
    profile, part = only(drawn(lambda m: m.add_lwpolyline([(0, 0), (4, 0), (4, 3), (0, 0)])))
    assert profile.closed
    assert len(part.points) == 3
    profile, part = only(drawn(lambda m: m.add_lwpolyline([(0, 0), (4, 0), (4, 3), (0, 0)], close=True)))
    assert part.closed
    assert len(part.points) == 3


def test_there_and_back_along_a_line_is_not_closed(drawn):
    profile, _ = only(drawn(lambda m: m.add_lwpolyline([(0, 0), (4, 0), (0, 0)])))
    assert not profile.closed


def test_bulges_make_an_arc_chain(drawn):
    profile, part = only(drawn(lambda m: m.add_lwpolyline([(0, 0, 1), (2, 0, 0), (2, 2, 0)], format="xyb", close=True)))
    assert isinstance(part, ArcChain)
    assert profile.curved
    np.testing.assert_array_equal(part.bulges, [1, 0, 0])
    assert part.bounds()[0][1] == pytest.approx(-1.0, abs=1e-15)  # bulge 1 is a half circle on the right of travel


def test_a_bulge_over_a_chord_of_no_length_is_left_out(drawn):
    rows = [(0, 0, 0.5), (0, 0, 0), (4, 0, 0.2), (4, 3, 0)]
    _, part = only(drawn(lambda m: m.add_lwpolyline(rows, format="xyb", close=True)))
    assert len(part.points) == 3
    assert np.isfinite(part.curvatures()).all()


def test_drawn_from_below_is_turned_over(drawn):
    """With extrusion (0, 0, -1) the DXF Reference's arbitrary axis algorithm gives x axis (-1, 0, 0)."""

    def draw(m):
        attribs = {"extrusion": (0, 0, -1), "elevation": 2}
        m.add_lwpolyline([(1, 0, 0.5), (3, 0, 0)], format="xyb", dxfattribs=attribs)

    profile, part = only(drawn(draw))
    np.testing.assert_array_equal(part.points, [[-1, 0], [-3, 0]])
    np.testing.assert_array_equal(part.bulges, [-0.5])
    assert profile.frame == Frame((0.0, 0.0, 1.0), -2.0)


def test_arc_drawn_from_below_agrees_with_the_library(drawn):
    def draw(m):
        m.add_arc((5, 2), 3, 20, 310, dxfattribs={"extrusion": (0, 0, -1)})

    drawing = drawn(draw)
    _, part = only(drawing)
    arc = drawing.document.modelspace()[0]
    np.testing.assert_allclose(part.points[[0, -1]], [arc.start_point.vec2, arc.end_point.vec2], atol=1e-14)
    middle = part.flatten(0.01).points
    np.testing.assert_allclose(np.linalg.norm(middle - [-5, 2], axis=1), 3.0, atol=1e-14)
    assert part.length() == pytest.approx(3 * math.radians(290), rel=1e-14)


def test_tilted_planes_agree_with_the_library(drawn):
    def draw(m):
        attribs = {"extrusion": (1, 2, 3), "elevation": 4}
        m.add_lwpolyline([(0, 0), (5, 1), (2, 7)], dxfattribs=attribs)

    drawing = drawn(draw)
    profile, part = only(drawing)
    expected = [tuple(v) for v in drawing.document.modelspace()[0].vertices_in_wcs()]
    assert profile.dimension == 2
    np.testing.assert_allclose(profile.frame.to_world(part.points), expected, atol=1e-14)
    low, high = drawing.extents
    np.testing.assert_allclose([low, high], [np.min(expected, axis=0), np.max(expected, axis=0)], atol=1e-12)


@pytest.mark.parametrize(("start", "end"), [(0, 90), (350, 20), (10, 300), (0, 359.999)])
def test_arcs(drawn, start, end):
    profile, part = only(drawn(lambda m: m.add_arc((1, 2), 5, start, end)))
    sweep = math.radians((end - start) % 360)
    angles = np.radians([start, end])
    np.testing.assert_allclose(
        part.points[[0, -1]], np.array([1, 2]) + 5 * np.c_[np.cos(angles), np.sin(angles)], atol=1e-13
    )
    assert part.length() == pytest.approx(5 * sweep, rel=1e-12)
    assert (profile.closed, profile.curved, profile.vertices_in) == (False, True, 2)


def test_circle(drawn):
    profile, part = only(drawn(lambda m: m.add_circle((1, 2), 5)))
    assert profile.closed
    assert part.area() == pytest.approx(25 * math.pi, rel=1e-14)


@pytest.mark.parametrize("extrusion", [(0, 0, 1), (0, 0, -1), (1, 2, 3)])
def test_elliptic_arcs_stay_within_the_stated_bound(drawn, extrusion):
    def draw(m):
        n = np.array(extrusion) / np.linalg.norm(extrusion)
        major = 8 * np.cross(n, [0.6, 0.64, 0.48]) / np.linalg.norm(np.cross(n, [0.6, 0.64, 0.48]))
        m.add_ellipse((1, 2, 3), major.tolist(), 0.4, 0.3, 4.0, dxfattribs={"extrusion": extrusion})

    drawing = drawn(draw)
    profile, part = only(drawing)
    assert 0 < profile.approximation < 1e-9
    ellipse = drawing.document.modelspace()[0]
    exact = np.array([tuple(v) for v in ellipse.vertices(np.linspace(0.3, 4.0, 5001))])
    points = profile.frame.to_world(part.evaluate(np.linspace(0.3, 4.0, 5001)))
    # the spline's parameter differs from the eccentric anomaly by far less than a bound, but the curves agree
    np.testing.assert_allclose(points, exact, atol=1e-4)
    centre, major, minor = (
        np.array(tuple(v)) for v in (ellipse.dxf.center, ellipse.dxf.major_axis, ellipse.minor_axis)
    )
    local = np.c_[(points - centre) @ major / (major @ major), (points - centre) @ minor / (minor @ minor)]
    off = np.abs(np.linalg.norm(local, axis=1) - 1.0).max() * np.linalg.norm(major)
    assert off <= profile.approximation + 1e-13
    assert profile.dimension == (2 if extrusion[0] == 0 else 3)


def test_a_whole_ellipse_is_closed_and_smooth(drawn):
    profile, part = only(drawn(lambda m: m.add_ellipse((0, 0), (10, 0), 0.5)))
    assert profile.closed
    assert part.smooth_seam
    assert len(part.corner_breaks) == 0
    assert part.area() == pytest.approx(50 * math.pi, rel=1e-9)


def test_spline_is_taken_as_it_is(drawn):
    control = [(0, 0, 2), (1, 3, 2), (4, 3, 2), (5, 0, 2), (8, 1, 2)]
    profile, part = only(drawn(lambda m: m.add_open_spline(control)))
    assert isinstance(part, Spline)
    assert profile.elevation == 2.0
    np.testing.assert_array_equal(part.control, np.array(control)[:, :2])
    assert profile.approximation == 0.0


def test_three_dimensional_chains_stay_in_space(drawn):
    def draw(m):
        m.add_polyline3d([(0, 0, 0), (1, 0, 1), (2, 1, 1)])
        m.add_line((2, 1, 1), (3, 3, 0))

    profile, part = only(drawn(draw))
    assert profile.dimension == 3
    assert part.points.shape == (4, 3)
    level, _ = only(drawn(lambda m: m.add_polyline3d([(0, 0, 7), (1, 0, 7), (2, 1, 7)])))
    assert (level.dimension, level.elevation) == (2, 7.0)


def test_chain_of_planes_that_differ_is_lifted_into_space(drawn):
    def draw(m):
        m.add_arc((0, 0, 0), 5, 0, 90)
        m.add_line((5, 0, 0), (5, 0, 4))

    drawing = drawn(draw)
    profile, part = only(drawing)
    assert part.points.shape[1] == 3
    assert 0 < profile.approximation <= 1e-5
    curved = part.points[part.points[:, 2] == 0]
    np.testing.assert_allclose(np.linalg.norm(curved[:, :2], axis=1), 5.0, atol=1e-12)


def test_spline_fit_polyline_gives_the_fitted_vertices(drawn):
    def draw(m):
        line = m.add_polyline2d([(0, 0), (1, 2), (2, 0)])
        for vertex in line.vertices[1:2]:
            vertex.dxf.flags = 16  # control point of the frame: not drawn

    _, part = only(drawn(draw))
    np.testing.assert_array_equal(part.points, [[0, 0], [2, 0]])


def test_what_is_not_a_profile_is_counted(drawn):
    def draw(m):
        m.add_text("note")
        m.add_line((0, 0), (1, 0), dxfattribs={"layer": "DATUM"})
        m.add_lwpolyline([(0, 0), (1, 0), (1, 1)], dxfattribs={"layer": "Cut"})
        m.doc.blocks.new("B").add_line((0, 0), (1, 1))
        m.add_blockref("B", (3, 3))
        m.doc.layout("Layout1").add_circle((0, 0), 1)
        m.add_polymesh((2, 2))

    drawing = drawn(draw, layers=["CUT"])  # layer names do not depend on case
    assert len(drawing.profiles) == 1
    assert drawing.passed_through == {"TEXT": 1, "LINE": 1, "INSERT": 1, "CIRCLE": 1, "POLYLINE": 1}
    assert drawing.in_blocks == {"LINE": 1}


def test_unusable_entities_are_named(drawn):
    def draw(m):
        m.add_line((1, 1), (1, 1))
        m.add_lwpolyline([(0, 0), (math.nan, 1), (2, 2)])
        m.add_lwpolyline([(0, 0), (math.inf, 1), (2, 2)])
        m.add_lwpolyline([(0, 0), (1e40, 1), (2, 2)])
        m.add_circle((0, 0), 0)
        m.add_lwpolyline([(0, 0)])
        spline = m.add_open_spline([(0, 0), (1, 1), (2, 0), (3, 1)])
        spline.knots = [0, 0, 0, 0, 1, 1, 1]
        m.add_lwpolyline([(5, 5), (6, 6)])

    drawing = drawn(draw)
    assert len(drawing.profiles) == 1
    reasons = [item.reason for item in drawing.skipped]
    assert [item.type for item in drawing.skipped] == ["LINE", *["LWPOLYLINE"] * 3, "CIRCLE", "LWPOLYLINE", "SPLINE"]
    for reason, word in zip(
        reasons, ["no length", "finite", "finite", "beyond", "radius", "fewer than 2", "knots do not fit"], strict=True
    ):
        assert word in reason
    np.testing.assert_array_equal(drawing.extents, [[5, 5, 0], [6, 6, 0]])


def test_units_of_the_drawing(drawn):
    def line(m):
        m.add_line((0, 0), (1, 0))

    drawing = drawn(line, units=1)
    assert drawing.units is unit_from_name("in")
    assert drawing.length(Length(25.4, unit_from_name("mm"))) == pytest.approx(1.0)
    assert drawing.warnings == []
    drawing = drawn(line, units=0)
    assert drawing.units.symbol == "unitless"
    assert "no units" in drawing.warnings[0]
    with pytest.raises(LengthError, match="--units"):
        drawing.length(Length(1.0, unit_from_name("mm")))


def test_units_can_be_overridden(tmp_path):
    doc = ezdxf.new(units=1)
    doc.modelspace().add_line((0, 0), (1, 0))
    doc.saveas(tmp_path / "in.dxf")
    drawing = read_drawing(tmp_path / "in.dxf", units="mm")
    assert drawing.units is unit_from_name("mm")
    assert "overrides" in drawing.warnings[0]
    assert read_drawing(tmp_path / "in.dxf", gap="25.4mm").gap == pytest.approx(1.0)


def test_a_unit_code_out_of_the_reference_is_told(drawn):
    drawing = drawn(lambda m: m.doc.header.__setitem__("$INSUNITS", 70) or m.add_line((0, 0), (1, 0)))
    assert drawing.units.symbol == "unitless"
    assert "$INSUNITS 70" in drawing.warnings[0]


def test_default_gap_is_a_millionth_of_the_extent(drawn):
    assert drawn(lambda m: m.add_line((0, 0), (3, 4))).gap == pytest.approx(5e-6)


def test_an_unknown_layer_is_an_error_and_an_empty_one_too(drawn):
    def draw(m):
        m.doc.layers.add("EMPTY")
        m.add_line((0, 0), (1, 0))

    with pytest.raises(NoProfileError, match="no layer 'CUT'"):
        drawn(draw, layers=["CUT"])
    drawing = drawn(draw, layers=["EMPTY"])
    with pytest.raises(NoProfileError, match="EMPTY"):
        drawing.require_profiles()


def test_an_empty_drawing_reads_and_says_so_when_asked(drawn):
    drawing = drawn(lambda m: None)
    assert (drawing.profiles, drawing.extents, drawing.gap) == ([], None, 0.0)
    with pytest.raises(NoProfileError, match="model space"):
        drawing.require_profiles()


@pytest.mark.parametrize(
    ("content", "word"),
    [
        (b"", "empty"),
        (b"AC1032\0\0\0\0\0\0\0binary", "DWG"),
        (b"hello world\n", "not a DXF"),
        (b"\x89PNG\r\n\x1a\n" + bytes(range(256)) * 8, "not a DXF"),
        (b"  0\nSECTION\n  2\nHEADER\n  9\n", "not a DXF"),
        (b"AutoCAD Binary DXF\r\n\x1a\0\x01\x02", "not a DXF"),
    ],
)
def test_what_is_not_a_drawing_gets_one_clear_line(tmp_path, content, word):
    path = tmp_path / "in.dxf"
    path.write_bytes(content)
    with pytest.raises(ReadError, match=word) as caught:
        read_drawing(path)
    assert str(path) in str(caught.value)
    assert "\n" not in str(caught.value)


def test_missing_files_and_folders(tmp_path):
    with pytest.raises(ReadError, match="cannot be read"):
        read_drawing(tmp_path / "no.dxf")
    with pytest.raises(ReadError, match="folder"):
        read_drawing(tmp_path)


def test_a_damaged_drawing_is_repaired_and_it_is_told(tmp_path):
    doc = ezdxf.new("R2010", units=4)
    doc.modelspace().add_lwpolyline([(0, 0), (4, 0), (4, 3)], close=True)
    path = tmp_path / "in.dxf"
    doc.saveas(path)
    text = path.read_text()
    path.write_text(text[: text.index("OBJECTS") + 40])  # cut off in the last section
    drawing = read_drawing(path)
    assert len(drawing.profiles) == 1
    assert "damaged" in " ".join(drawing.warnings)


def test_a_bare_r12_file_without_handles_or_tables(tmp_path):
    path = tmp_path / "in.dxf"
    lines = [
        "0 SECTION 2 ENTITIES",
        "0 LINE 8 0 10 0.0 20 0.0 11 4.0 21 0.0",
        "0 LINE 8 0 10 4.0 20 3.0 11 4.0 21 0.0",
        "0 LINE 8 0 10 4.0 20 3.0 11 0.0 21 0.0",
        "0 ENDSEC 0 EOF",
    ]
    path.write_text("\n".join(" ".join(lines).split()) + "\n")
    drawing = read_drawing(path)
    profile, part = only(drawing)
    assert drawing.version == "R12"
    assert profile.closed
    np.testing.assert_array_equal(part.points, [[0, 0], [4, 0], [4, 3]])
