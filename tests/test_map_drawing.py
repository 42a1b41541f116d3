"""The deviation map as DXF."""

import ezdxf
import numpy as np
import pyogrio
import pytest
import shapely

from converter.errors import OutputError, VersionError
from converter.maps.bands import bands_of
from converter.maps.drawing import write_map
from geometry.arcs import ArcChain
from geometry.bspline import Spline
from geometry.polyline import Polyline
from tests.comparisons import LIMITS, bumped, circle, comparison_of, plate, revised


def written(comparison, path, *more, **named):
    write_map(comparison, path, *more, **named)
    document = ezdxf.readfile(path)
    assert not document.audit().has_errors
    assert not document.audit().has_fixes
    return document


def texts(document):
    return [text.dxf.text for text in document.modelspace().query("TEXT")]


@pytest.mark.parametrize("version", [None, "R12", "R2000", "R2004", "R2007", "R2010", "R2013", "R2018"])
def test_every_version_is_sound(tmp_path, version, capfd, caplog):
    document = written(revised(), tmp_path / "map.dxf", version)
    assert document.acad_release == (version or "R2010")
    assert document.header.get("$INSUNITS", 0) == (0 if version == "R12" else 4)
    assert capfd.readouterr() == ("", "")
    assert not caplog.records
    kinds = {e.dxftype() for e in document.modelspace() if e.dxf.layer.startswith("MAP_NEW")}
    assert ("LWPOLYLINE" in kinds) == (version != "R12")


def test_stretches_lie_on_layers_of_their_bands(tmp_path):
    comparison = revised()
    document = written(comparison, tmp_path / "map.dxf")
    bands = bands_of(comparison).bands
    drawn = {e.dxf.layer for e in document.modelspace().query("LWPOLYLINE")}
    near = {bands[k].layer for k in (1, 2, 3, 4, 5, 6)}
    assert drawn == {"MAP_OLD", "MAP_ONLY_OLD", "MAP_ONLY_NEW", *near}
    for band in bands:
        layer = document.layers.get(band.layer)
        assert "#{:02x}{:02x}{:02x}".format(*layer.rgb) == band.colour
        assert layer.color == band.index_colour
        assert (layer.dxf.linetype == "MAP_DASHED") == band.dashed


def geometry(path, kinds):
    """What GDAL reads: the union of lines on the given layers, by layer prefix."""
    frame = pyogrio.raw.read(path)
    fields = list(frame[0]["fields"])
    layers = frame[3][fields.index("Layer")]
    shapes = shapely.from_wkb(frame[2])
    return shapely.union_all([s for s, layer in zip(shapes, layers, strict=True) if layer.startswith(kinds)])


def test_another_library_finds_the_same_geometry(tmp_path):
    old = plate()
    new = bumped(old, 60.0, 0.5, 12.0)
    path = tmp_path / "map.dxf"
    written(comparison_of([(old, new)], LIMITS), path)
    found = geometry(path, ("MAP_NEW",))
    given = shapely.LinearRing(new.points)
    assert shapely.hausdorff_distance(found, given) < 1e-6
    assert found.length == pytest.approx(given.length, abs=1e-6)


def test_arcs_are_read_back_as_arcs(tmp_path):
    moved = circle(0.3, 0.0, 10.0)
    document = written(comparison_of([(circle(0.0, 0.0, 10.0), moved)], LIMITS), tmp_path / "map.dxf")
    parts = [e for e in document.modelspace().query("LWPOLYLINE") if e.dxf.layer.startswith("MAP_NEW")]
    assert len(parts) > 4
    length = 0.0
    for part in parts:
        values = np.array(part.lwpoints.values).reshape(-1, 5)
        chain = ArcChain(values[:, :2], values[:, 4] if part.closed else values[:-1, 4], part.closed)
        length += chain.length()
        middles = chain.flatten(1e-7).points - [0.3, 0.0]
        np.testing.assert_allclose(np.linalg.norm(middles, axis=1), 10.0, atol=1e-9)
    assert length == pytest.approx(moved.length(), rel=1e-12)


def test_labels_and_legend_say_what_is_meant(tmp_path):
    said = texts(written(revised(), tmp_path / "map.dxf", whiskers=25.0))
    assert "1: +0.5 mm" in said
    assert "2: -0.3 mm" in said
    every = " ".join(said)
    for words in (
        "OUT OF +-0.2 mm",
        "OLD old.dxf",
        "NEW new.dxf",
        "units: mm",
        "NEW compared where it lies",
        "deviation drawn 25 times",
        "NEW beyond +0.4 mm, out of tolerance",
        "only in OLD",
        "only in NEW",
        "Before cutting",
    ):
        assert words in every


def test_labels_do_not_lie_on_one_another(tmp_path):
    new = plate()
    for at in range(20, 100, 6):  # a peak every 6 mm
        new = bumped(new, float(at), 0.4, 2.5)
    document = written(comparison_of([(plate(), new)], LIMITS), tmp_path / "map.dxf")
    labels = [t for t in document.modelspace().query("TEXT") if t.dxf.layer == "MAP_ZONES"]
    assert 10 <= len(labels) <= 14
    places = [(t.get_placement()[1], len(t.dxf.text) * 0.6 * t.dxf.height, t.dxf.height) for t in labels]
    for k, (a, wide, high) in enumerate(places):
        for b, *_ in places[k + 1 :]:
            assert abs(a.x - b.x) > 0.9 * wide or abs(a.y - b.y) > 0.9 * high


@pytest.mark.parametrize("name", ["a%%d.dxf", "new\n999\nline.dxf", "caret^J.dxf", "\udce4\u202e.dxf", "höhe Ω.dxf"])
def test_file_names_cannot_break_the_drawing(tmp_path, name):
    for version in ("R12", "R2010"):
        path = tmp_path / f"{version}.dxf"
        document = written(comparison_of([(plate(), plate())], LIMITS, names=("old.dxf", name)), path, version)
        said = [text for text in texts(document) if text.startswith("NEW ")]
        assert said
        assert not any("%%" in text or "\n" in text for text in said)


def test_layer_names_of_the_drawings_are_not_used_as_layers(tmp_path):
    document = written(revised(layer="bad/name*<>"), tmp_path / "map.dxf")
    assert {layer.dxf.name for layer in document.layers} - {"0", "Defpoints"} == {
        layer.dxf.name for layer in document.layers if layer.dxf.name.startswith("MAP_")
    }


def test_space_curves_are_polylines_in_space(tmp_path):
    t = np.linspace(0.0, 6.0, 200)
    old = Polyline(np.stack([10 * np.cos(t), 10 * np.sin(t), t], axis=1))
    new = Polyline(old.points + np.array([0.0, 0.0, 0.5]))
    document = written(comparison_of([(old, new)], LIMITS), tmp_path / "map.dxf")
    parts = [p for p in document.modelspace().query("POLYLINE") if p.dxf.layer.startswith("MAP_NEW")]
    assert all(part.is_3d_polyline for part in parts)
    points = np.array([v.dxf.location.xyz for part in parts for v in part.vertices])
    np.testing.assert_allclose(points[[0, -1]], new.points[[0, -1]], atol=1e-12)
    assert "in space it has no sign" in " ".join(texts(document))


def test_splines_are_drawn_within_what_the_legend_says(tmp_path):
    knots = np.array([0.0, 0, 0, 0, 1, 2, 2, 2, 2])
    spline = Spline(knots, np.array([[0.0, 0], [10, 20], [40, -20], [60, 30], [100, 0]]), 3)
    path = tmp_path / "map.dxf"
    document = written(comparison_of([(spline, spline.moved(np.array([0.0, 0.05])))], LIMITS), path)
    said = " ".join(texts(document))
    dense = shapely.LineString(spline.evaluate(np.linspace(0.0, 2.0, 20_001)))
    assert shapely.hausdorff_distance(geometry(path, ("MAP_OLD",)), dense) < 3e-4
    assert "splines are drawn as polylines within 0.000" in said


def test_no_tolerance_and_nothing_to_compare(tmp_path):
    document = written(revised(limits=None), tmp_path / "a.dxf")
    assert "no verdict" in " ".join(texts(document))
    assert not any("tolerance," in text for text in texts(document))
    written(comparison_of([], LIMITS, only_old=[plate()]), tmp_path / "b.dxf")


def test_outputs_are_guarded(tmp_path):
    path = tmp_path / "map.dxf"
    comparison = comparison_of([(plate(), plate())])
    with pytest.raises(VersionError, match="R11"):
        write_map(comparison, path, "R11")
    assert not path.exists()
    write_map(comparison, path)
    with pytest.raises(OutputError, match="exists already"):
        write_map(comparison, path)
    with pytest.raises(OutputError, match="is the input file"):
        write_map(comparison, path, force=True, inputs=[path])
    write_map(comparison, path, force=True)


def test_labels_without_room_are_left_out_and_counted(tmp_path):
    new = plate()
    for at in np.arange(20.0, 100.0, 2.0):
        new = bumped(new, at, 0.4, 0.9, 0.1)
    comparison = comparison_of([(plate(), new)], LIMITS)
    document = written(comparison, tmp_path / "map.dxf")
    labels = [t for t in document.modelspace().query("TEXT") if t.dxf.layer == "MAP_ZONES"]
    zones = len(comparison.record.pairs[0].zones)
    assert 8 < len(labels) < zones
    assert f"{zones - len(labels)} of {zones} zones have no label for want of room" in texts(document)
