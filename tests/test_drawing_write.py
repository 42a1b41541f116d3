"""Replacing profiles and saving: the new entity stands where the old one stood, and nothing else changes."""

import os

import ezdxf
import numpy as np
import pytest

from converter.drawing import read_drawing, replace, save, supports, written_curve
from converter.drawing.write import circle_of
from converter.errors import ConverterError, OutputError, VersionError
from geometry.arcs import ArcChain, full_circle
from geometry.bspline import Spline
from geometry.polyline import Polyline
from tests.dxf_text import handle, records

VERSIONS = ["R12", "R2000", "R2010", "R2018"]
SQUARE = [(0.0, 0.0), (10 / 3, 0.1), (10.0, 0.0), (10.0, 10.0), (0.0, 10.0)]
PROPERTIES = {"layer": "CUT", "color": 3, "linetype": "DASHED", "thickness": 1.5}
MODERN = {"true_color": 0x123456, "lineweight": 35, "ltscale": 2.5}
CORNERED = Spline(
    np.array([0, 0, 0, 0, 1, 1, 1, 2, 3, 3, 3, 3.0]),
    np.array([[0, 0], [1, 0], [2, 1], [1 / 3, 2], [4, 5], [3, 7], [1, 1], [0, 0.0]]),
    3,
    True,
)


def busy_document(version):
    """A drawing with a chain of lines, a polyline, and much that must not change."""
    doc = ezdxf.new(version, setup=True, units=0 if version == "R12" else 4)
    doc.layers.add("CUT", color=5)
    doc.layers.add("NOTES", color=1)
    m = doc.modelspace()
    m.add_text("Rücken 20 µm", dxfattribs={"layer": "NOTES", "height": 2.5})
    m.add_polyline2d(SQUARE, close=True, dxfattribs=PROPERTIES | (MODERN if version != "R12" else {}))
    m.add_circle((3, 3), 1, dxfattribs={"layer": "CUT"})
    block = doc.blocks.new("STAMP")
    block.add_polyline2d([(0, 0), (1, 0), (1, 1)])
    block.add_attdef("NAME", (0, 0))
    m.add_blockref("STAMP", (4, 4), dxfattribs={"xscale": 2}).add_attrib("NAME", "A1", (4, 4))
    m.add_line((20, 0), (30, 0), dxfattribs={"layer": "CUT"})
    m.add_line((30, 5), (30, 0), dxfattribs={"layer": "CUT"})
    m.add_point((1, 2, 3))
    doc.appids.add("SHOP")
    m.add_line((0, 40), (1, 41), dxfattribs={"layer": "NOTES"}).set_xdata("SHOP", [(1000, "note"), (1040, 2.5)])
    m.add_linear_dim(base=(0, -3), p1=(0, 0), p2=(10, 0)).render()
    doc.layout("Layout1").add_line((0, 0), (5, 5))
    if version != "R12":
        m.add_mtext("two\nlines", dxfattribs={"layer": "NOTES"})
        hatch = m.add_hatch(color=2)
        hatch.paths.add_polyline_path([(0, 0), (1, 0), (1, 1)])
        m.add_spline([(50, 0), (51, 3), (54, 1)], dxfattribs={"layer": "NOTES"})
        m.add_ellipse((60, 0), (5, 0), 0.5, dxfattribs={"layer": "NOTES"})
    return doc


def save_twins(tmp_path, doc, fmt):
    """Save as the input in the wanted form, and as an ASCII twin to compare with."""
    doc.saveas(tmp_path / "twin.dxf")
    doc = ezdxf.readfile(tmp_path / "twin.dxf")  # the library completes some links only when it reads
    doc.saveas(tmp_path / "twin.dxf")
    doc.saveas(tmp_path / "in.dxf", fmt=fmt)
    return tmp_path / "in.dxf", tmp_path / "twin.dxf"


def without_stamps(section):
    """Leave out the times at which the drawing library wrote the file: texts such as `1.4.5 @ 2026-01-01T...`."""
    return [[(code, value) for code, value in record if " @ 20" not in value] for record in section]


@pytest.mark.parametrize("version", VERSIONS)
@pytest.mark.parametrize("fmt", ["asc", "bin"])
def test_what_is_not_replaced_is_the_same_tag_by_tag(tmp_path, version, fmt):
    source, twin = save_twins(tmp_path, busy_document(version), fmt)
    drawing = read_drawing(source, layers=["CUT"])
    polygon, circle, chain = drawing.profiles
    assert (polygon.types, circle.types, chain.types) == (("POLYLINE",), ("CIRCLE",), ("LINE", "LINE"))
    new = {}
    for profile in (polygon, chain):
        new[profile.id] = replace(drawing, profile, profile.flatten(0.01).moved(np.array([0.25, 0.0])))
    save(drawing, tmp_path / "out.dxf")
    before, after = records(twin), records(tmp_path / "out.dxf")
    owners = {polygon.id, *chain.handles}

    def untouched(section):
        inside = False
        for record in section:
            kind = record[0][1]
            if kind not in {"VERTEX", "SEQEND"}:
                inside = handle(record) in owners
            if not inside:
                yield record

    assert list(untouched(before["ENTITIES"])) == list(untouched(after["ENTITIES"]))
    assert without_stamps(before["BLOCKS"]) == without_stamps(after["BLOCKS"])
    assert before["TABLES"] == after["TABLES"]
    assert before.get("CLASSES") == after.get("CLASSES")
    assert without_stamps(before.get("OBJECTS", [])) == without_stamps(after.get("OBJECTS", []))
    order = [handle(record) for record in after["ENTITIES"] if record[0][1] not in {"VERTEX", "SEQEND"}]
    wanted = [handle(record) for record in before["ENTITIES"] if record[0][1] not in {"VERTEX", "SEQEND"}]
    assert order == [h for h in wanted if h != chain.handles[1]]  # in its place, under its handle; the rest gone


@pytest.mark.parametrize("version", VERSIONS)
@pytest.mark.parametrize("kind", ["polyline", "arcs", "circle", "spline"])
def test_the_curve_in_the_file_is_the_curve_reported(tmp_path, version, kind):
    source, _ = save_twins(tmp_path, busy_document(version), "asc")
    drawing = read_drawing(source, layers=["CUT"])
    profile = drawing.profiles[0]
    curve = {
        "polyline": Polyline(np.array(SQUARE) / 3, True),
        "arcs": ArcChain(np.array(SQUARE) / 3, np.array([0, 0.3, -0.1, 0, 1 / 3]), True),
        "circle": full_circle(np.array([1 / 3, 2.0]), 0.7),
        "spline": CORNERED,
    }[kind]
    if kind == "spline" and version == "R12":
        with pytest.raises(VersionError, match="R12 has no SPLINE"):
            replace(drawing, profile, curve)
        assert drawing.document.entitydb.get(profile.id).dxftype() == "POLYLINE"  # still there
        return
    written = replace(drawing, profile, curve)
    light = "POLYLINE" if version == "R12" else "LWPOLYLINE"
    assert written.type == {"polyline": light, "arcs": light, "circle": "CIRCLE", "spline": "SPLINE"}[kind]
    save(drawing, tmp_path / "out.dxf")
    doc = ezdxf.readfile(tmp_path / "out.dxf")
    assert not doc.audit().has_issues
    entity = doc.entitydb[written.handle]
    read = written_curve(entity)
    assert type(read) is type(curve)
    assert read.closed
    if isinstance(read, Spline):
        np.testing.assert_array_equal(read.knots, curve.knots)
        np.testing.assert_array_equal(read.control, curve.control)
        np.testing.assert_array_equal(written.curve.control, curve.control)
        assert entity.dxf.flags == 1 | 8  # closed, planar
        assert len(read.corner_breaks) == 1
    else:
        np.testing.assert_array_equal(read.points, written.curve.points)
        if kind != "circle":
            np.testing.assert_array_equal(read.points, curve.points)
    if kind == "arcs":
        np.testing.assert_array_equal(read.bulges, curve.bulges)
    since = {"true_color": "R2004", "lineweight": "R2000", "ltscale": "R2000"}  # R12 and R2000 sort as they should
    for name, value in (PROPERTIES | MODERN).items():
        if (version == "R12" and name in since) or version < since.get(name, "R12"):
            continue
        if not (name == "thickness" and kind == "spline"):
            assert entity.dxf.get(name) == value, name
    assert ("thickness" in " ".join(written.lost)) == (kind == "spline")


@pytest.mark.parametrize("version", ["R12", "R2010"])
@pytest.mark.parametrize("extrusion", [(0, 0, 1), (0, 0, -1), (1, 2, 3)])
@pytest.mark.parametrize("kind", ["polyline", "arcs", "circle", "spline"])
def test_every_plane_is_right_in_world_coordinates(tmp_path, version, extrusion, kind):
    if kind == "spline" and version == "R12":
        pytest.skip("R12 has no SPLINE")
    doc = ezdxf.new(version)
    attribs = {"extrusion": extrusion, "elevation": (0, 0, 2), "thickness": 3}
    rows = [(0, 0, 0.5), (4, 0, 0), (4, 3, -0.2)]
    doc.modelspace().add_polyline2d(rows, format="xyb", close=True, dxfattribs=attribs)
    doc.saveas(tmp_path / "in.dxf")
    drawing = read_drawing(tmp_path / "in.dxf")
    (profile,) = drawing.profiles
    (chain,) = profile.parts
    centre = chain.points.mean(axis=0)
    curve = {"polyline": chain.flatten(0.1), "arcs": chain, "circle": full_circle(centre, 2.0), "spline": CORNERED}[
        kind
    ]
    written = replace(drawing, profile, curve)
    save(drawing, tmp_path / "out.dxf")
    entity = ezdxf.readfile(tmp_path / "out.dxf").entitydb[written.handle]
    expected = profile.frame.to_world(curve.flatten(1e-4).points)
    found = np.array([tuple(v) for v in ezdxf.path.make_path(entity).flattening(1e-4)])  # the library's own reading
    gap = np.linalg.norm(expected[:, None] - found[None], axis=-1)
    assert gap.min(axis=1).max() < 0.1
    assert gap.min(axis=0).max() < 0.1
    assert _plane_error(found, profile) < 1e-6  # its circles and arcs are Bezier approximations
    if kind != "spline":
        assert entity.dxf.thickness == 3
        np.testing.assert_allclose(
            tuple(entity.dxf.extrusion), np.array(extrusion) / np.linalg.norm(extrusion), atol=1e-15
        )
    again = written_curve(entity, profile.frame)
    assert again.dimension == 2
    np.testing.assert_allclose(again.flatten(0.01).points, written.curve.flatten(0.01).points, atol=1e-14)


def _plane_error(points, profile):
    return float(np.abs(points @ profile.frame.axes()[2] - profile.elevation).max())


def test_three_dimensional_polylines(tmp_path):
    doc = ezdxf.new("R2010")
    doc.modelspace().add_polyline3d([(0, 0, 0), (1, 0, 1), (2, 1, 1)], dxfattribs={"layer": "CUT"})
    doc.saveas(tmp_path / "in.dxf")
    drawing = read_drawing(tmp_path / "in.dxf")
    (profile,) = drawing.profiles
    points = np.array([[0, 0, 0], [1, 0.5, 1 / 3], [2, 1, 1]])
    written = replace(drawing, profile, Polyline(points))
    assert written.type == "POLYLINE"
    save(drawing, tmp_path / "out.dxf")
    doc = ezdxf.readfile(tmp_path / "out.dxf")
    assert not doc.audit().has_issues
    np.testing.assert_array_equal(written_curve(doc.entitydb[written.handle]).points, points)
    with pytest.raises(ConverterError, match="replaced already"):
        replace(drawing, profile, Polyline(points))


def test_a_curve_of_the_wrong_dimension_is_refused(tmp_path):
    source, _ = save_twins(tmp_path, busy_document("R2010"), "asc")
    drawing = read_drawing(source, layers=["CUT"])
    with pytest.raises(ConverterError, match="3-D curve"):
        replace(drawing, drawing.profiles[0], Polyline(np.zeros((4, 3))))


def test_groups_dictionaries_and_data_stay_with_the_entity(tmp_path):
    doc = ezdxf.new("R2010", units=4)
    doc.appids.add("SHOP")
    m = doc.modelspace()
    lines = [m.add_line((0, 0), (1, 0)), m.add_line((1, 0), (1, 1)), m.add_text("x")]
    lines[0].set_xdata("SHOP", [(1000, "part 7")])
    lines[0].new_extension_dict().add_dictionary_var("KEY", "value")
    doc.groups.new("G").extend(lines)
    doc.saveas(tmp_path / "in.dxf")
    drawing = read_drawing(tmp_path / "in.dxf")
    (profile,) = drawing.profiles
    written = replace(drawing, profile, profile.parts[0])
    save(drawing, tmp_path / "out.dxf")
    doc = ezdxf.readfile(tmp_path / "out.dxf")
    assert not doc.audit().has_issues
    entity = doc.entitydb[written.handle]
    assert entity.get_xdata("SHOP")[0].value == "part 7"
    assert entity.get_extension_dict()["KEY"].dxf.value == "value"
    assert {member.dxftype() for member in doc.groups.get("G")} == {"LWPOLYLINE", "TEXT"}


@pytest.mark.parametrize(
    ("draw", "kept"),
    [
        (lambda m: m.add_lwpolyline([(0, 0), (4, 0), (4, 3)], dxfattribs={"const_width": 0.5}), 0.5),
        (lambda m: m.add_lwpolyline([(0, 0, 0.5, 0.5), (4, 0, 0.5, 0.5), (4, 3, 0.5, 0.5)]), 0.5),
        (lambda m: m.add_lwpolyline([(0, 0, 0.1, 0.5), (4, 0), (4, 3)]), None),
        (lambda m: m.add_lwpolyline([(0, 0), (4, 0), (4, 3)]), 0.0),
    ],
)
@pytest.mark.parametrize("spline", [False, True])
def test_widths_are_kept_or_their_loss_is_told(tmp_path, draw, kept, spline):
    doc = ezdxf.new()
    draw(doc.modelspace())
    doc.saveas(tmp_path / "in.dxf")
    drawing = read_drawing(tmp_path / "in.dxf")
    (profile,) = drawing.profiles
    curve = Spline(np.array([0, 0, 1, 2, 2.0]), profile.parts[0].points, 1) if spline else profile.parts[0]
    written = replace(drawing, profile, curve)
    told = "width" in " ".join(written.lost)
    assert told == (kept is None or (spline and kept != 0.0))
    if not spline:
        assert written.entity.dxf.get("const_width", 0.0) == (kept or 0.0)


def test_what_is_a_whole_circle_and_what_is_not():
    circle = full_circle(np.array([5e5, 5e6]), 30.0)
    centre, radius = circle_of(circle)
    np.testing.assert_allclose(centre, [5e5, 5e6], rtol=1e-15)
    assert radius == pytest.approx(30.0, rel=1e-12)
    assert circle_of(circle.reversed()) is not None
    three = ArcChain(np.array([[1, 0], [-0.5, 0.75**0.5], [-0.5, -(0.75**0.5)]]), np.full(3, np.tan(np.pi / 6)), True)
    assert circle_of(three) is not None
    bent = ArcChain(three.points, three.bulges * [1, 1, 1.001], True)
    lens = ArcChain(circle.points, np.array([0.9, 0.9]), True)
    twice = ArcChain(np.tile(circle.points, (2, 1)), np.ones(4), True)
    eight = ArcChain(circle.points, np.array([1.0, -1.0]), True)
    for chain in (bent, lens, twice, eight, ArcChain(circle.points, circle.bulges[:1])):
        assert circle_of(chain) is None


def test_conversion_to_r12_writes_polylines_and_says_so(tmp_path):
    doc = ezdxf.new("R2010", units=4)
    m = doc.modelspace()
    m.add_lwpolyline([(0, 0, 0.5), (4, 0, 0), (4, 3, 0)], format="xyb", dxfattribs={"layer": "OTHER", "color": 2})
    m.add_lwpolyline(SQUARE, close=True, dxfattribs={"layer": "CUT", "const_width": 0.2, "elevation": 3})
    doc.blocks.new("B").add_lwpolyline([(0, 0), (1, 0)])
    doc.saveas(tmp_path / "in.dxf")
    drawing = read_drawing(tmp_path / "in.dxf", layers=["CUT"])
    (profile,) = drawing.profiles
    written = replace(drawing, profile, profile.parts[0], version="R12")
    assert written.type == "POLYLINE"
    said = save(drawing, tmp_path / "out.dxf", version="R12")
    assert any("2 LWPOLYLINE" in line for line in said)
    assert any("units" in line for line in said)
    back = read_drawing(tmp_path / "out.dxf")
    assert back.version == "R12"
    assert [(p.id, p.layer, p.closed, p.elevation) for p in back.profiles] == [
        (back.profiles[0].id, "OTHER", False, 0.0),
        (profile.id, "CUT", True, 3.0),
    ]
    np.testing.assert_array_equal(back.profiles[0].parts[0].bulges, [0.5, 0])
    np.testing.assert_array_equal(back.profiles[1].parts[0].points, SQUARE)
    assert back.document.entitydb[profile.id].dxf.default_start_width == 0.2
    assert back.in_blocks["POLYLINE"] == 1
    assert not back.document.audit().has_issues


def test_what_a_version_cannot_express_is_named_and_nothing_written(tmp_path):
    source, _ = save_twins(tmp_path, busy_document("R2010"), "asc")
    drawing = read_drawing(source)
    with pytest.raises(VersionError, match="1 ELLIPSE, 1 HATCH, 2 MTEXT, 1 SPLINE"):
        save(drawing, tmp_path / "out.dxf", version="R12")
    with pytest.raises(VersionError, match="choose one of R12"):
        save(drawing, tmp_path / "out.dxf", version="R99")
    assert not (tmp_path / "out.dxf").exists()


@pytest.mark.parametrize("target", ["R2000", "R2004", "R2007", "R2010", "R2013", "R2018"])
@pytest.mark.parametrize("origin", ["R12", "R2018"])
def test_conversion_between_versions(tmp_path, origin, target):
    source, _ = save_twins(tmp_path, busy_document(origin), "asc")
    drawing = read_drawing(source, layers=["CUT"])
    written = replace(drawing, drawing.profiles[0], CORNERED, version=target)
    assert save(drawing, tmp_path / "out.dxf", version=target) == []
    back = read_drawing(tmp_path / "out.dxf")
    assert back.version == target
    assert not back.document.audit().has_issues
    np.testing.assert_array_equal(written_curve(back.document.entitydb[written.handle]).control, CORNERED.control)
    assert back.document.query("TEXT").first.dxf.text == "Rücken 20 µm"


def test_the_input_is_never_written_and_an_output_only_with_force(tmp_path):
    source, _ = save_twins(tmp_path, busy_document("R2010"), "asc")
    before = source.read_bytes()
    drawing = read_drawing(source)
    os.symlink(source, tmp_path / "alias.dxf")
    for name in ("in.dxf", "alias.dxf"):
        with pytest.raises(OutputError, match="input"):
            save(drawing, tmp_path / name, force=True)
    (tmp_path / "out.dxf").write_text("mine")
    with pytest.raises(OutputError, match="--force"):
        save(drawing, tmp_path / "out.dxf")
    assert (tmp_path / "out.dxf").read_text() == "mine"
    save(drawing, tmp_path / "out.dxf", force=True)
    assert source.read_bytes() == before
    assert sorted(os.listdir(tmp_path)) == ["alias.dxf", "in.dxf", "out.dxf", "twin.dxf"]


def test_a_drawing_can_be_changed_and_saved_again(tmp_path):
    source, _ = save_twins(tmp_path, busy_document("R2010"), "asc")
    drawing = read_drawing(source, layers=["CUT"])
    polygon, _, chain = drawing.profiles
    replace(drawing, chain, chain.parts[0])
    save(drawing, tmp_path / "one.dxf")
    replace(drawing, polygon, polygon.parts[0])
    save(drawing, tmp_path / "two.dxf")
    assert [p.types for p in read_drawing(tmp_path / "two.dxf", layers=["CUT"]).profiles] == [
        ("LWPOLYLINE",),
        ("CIRCLE",),
        ("LWPOLYLINE",),
    ]


def test_what_versions_have():
    assert supports("r12", "POLYLINE")
    assert not supports("R12", "LWPOLYLINE")
    assert supports("R2000", "SPLINE")
