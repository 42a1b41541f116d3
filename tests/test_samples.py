import importlib.util
from pathlib import Path

import ezdxf
import numpy as np
import pytest

from geometry.polyline import polygon_area

SAMPLES = Path(__file__).parent.parent / "samples"
DRAWINGS = ["bracket.dxf", "bracket-rev-b.dxf", "skiff-template.dxf", "exploded.dxf"]


@pytest.fixture(scope="module")
def maker():
    spec = importlib.util.spec_from_file_location("make_samples", SAMPLES / "make_samples.py")
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


@pytest.fixture(scope="module")
def fresh(maker, tmp_path_factory):
    folder = tmp_path_factory.mktemp("samples")
    maker.write(folder)
    return folder


def geometry(path):
    """Kind, layer and numbers of every entity in model space, in order."""
    found = []
    for entity in ezdxf.readfile(path).modelspace():
        match entity.dxftype():
            case "LWPOLYLINE":
                numbers = np.array(entity.get_points("xyb")).ravel()
            case "POLYLINE":
                numbers = np.array([tuple(v.dxf.location) for v in entity.vertices]).ravel()
            case "LINE":
                numbers = np.array([*entity.dxf.start, *entity.dxf.end])
            case "CIRCLE":
                numbers = np.array([*entity.dxf.center, entity.dxf.radius])
            case "TEXT":
                numbers = np.array([*entity.dxf.insert, entity.dxf.height])
            case _:
                numbers = np.array([*entity.dxf.defpoint2, *entity.dxf.defpoint3])
        found.append((entity.dxftype(), entity.dxf.layer, entity.dxf.handle, numbers))
    return found


@pytest.mark.parametrize("name", DRAWINGS)
def test_the_script_makes_the_committed_drawings(fresh, name):
    made, kept = geometry(fresh / name), geometry(SAMPLES / name)
    assert [entry[:3] for entry in made] == [entry[:3] for entry in kept]
    for (*_, a), (*_, b) in zip(made, kept, strict=True):
        np.testing.assert_allclose(a, b, rtol=0.0, atol=1e-6)


def test_the_script_makes_the_committed_table(fresh):
    assert (fresh / "stem-stations.csv").read_text() == (SAMPLES / "stem-stations.csv").read_text()


@pytest.mark.parametrize("name", DRAWINGS)
def test_drawings_are_sound_and_in_millimetres(name):
    drawing = ezdxf.readfile(SAMPLES / name)
    audit = drawing.audit()
    assert not audit.errors
    assert not audit.fixes
    assert drawing.header["$INSUNITS"] == 4
    assert any("QUERN & THOLE" in text.dxf.text for text in drawing.modelspace().query("TEXT"))


def test_the_scan_lies_along_the_true_shapes(maker):
    scans = [
        numbers.reshape(-1, 3)[:, :2]
        for kind, layer, _, numbers in geometry(SAMPLES / "bracket.dxf")
        if layer == "Scan"
    ]
    (nose, radius), slot = maker.NOSE_HOLE, maker.laid(maker.slot(*maker.SLOT_HOLE))
    truth = [maker.laid(maker.bracket_outline()), maker.laid(maker.arc(nose, radius, 0.0, 360.0)[:-1]), slot]
    for scan, shape in zip(scans, truth, strict=True):
        steps = np.roll(scan, -1, axis=0) - scan
        assert (np.abs(steps).min(axis=1) < 1e-9).all()  # every segment is level or upright
        whole = steps / maker.PITCH
        np.testing.assert_allclose(whole, np.round(whole), atol=1e-6)
        image, _ = maker.rasterise(shape, maker.PITCH)
        assert polygon_area(scan) == pytest.approx(image.sum() * maker.PITCH**2, rel=1e-9)
        # every pixel in or out by its middle: the areas agree to the noise of the rim, a small part of it times a pixel
        rim = np.linalg.norm(np.roll(shape, -1, axis=0) - shape, axis=1).sum()
        assert abs(polygon_area(scan) - abs(polygon_area(shape))) < 0.1 * rim * maker.PITCH
    centre = maker.laid(np.array([nose]))[0]
    away = np.abs(np.linalg.norm(scans[1] - centre, axis=1) - radius)
    assert (
        away.max() <= maker.PITCH / np.sqrt(2.0) + 1e-6
    )  # a vertex is half a diagonal from a pixel middle inside and out


def test_the_trace_goes_around_pixels_that_touch_by_a_corner(maker):
    image = np.array([[1, 0], [1, 1]], dtype=bool)
    walk = maker.outline_of_pixels(image)
    assert sorted(map(tuple, walk.tolist())) == [(0, 0), (0, 2), (1, 0), (1, 1), (2, 1), (2, 2)]
    assert polygon_area(walk.astype(float)) == 3.0
    ring = np.array([[1, 1, 1], [1, 0, 1], [0, 1, 1]], dtype=bool)  # the hole touches the outside by a corner
    walk = maker.outline_of_pixels(ring)
    assert polygon_area(walk.astype(float)) == 7.0  # the walk goes in and around the hole


def test_the_exploded_plate_falls_into_fourteen_closed_loops():
    ends = [n for kind, *_, n in geometry(SAMPLES / "exploded.dxf") if kind == "LINE"]
    assert len(ends) == 953
    links = {}
    for start, end in ((tuple(n[:2]), tuple(n[3:5])) for n in ends):
        links.setdefault(start, []).append(end)
        links.setdefault(end, []).append(start)
    assert all(len(found) == 2 for found in links.values())
    loops, seen = 0, set()
    for first in links:
        if first not in seen:
            loops += 1
            stack = [first]
            while stack:
                here = stack.pop()
                if here not in seen:
                    seen.add(here)
                    stack += links[here]
    assert loops == 14


def test_the_revision_differs_by_the_edits_that_the_readme_names(maker):
    new = maker.bracket_outline(120.0)
    assert np.ptp(new[:, 0]) - np.ptp(maker.bracket_outline()[:, 0]) == pytest.approx(2.0)
    circles = [n for kind, *_, n in geometry(SAMPLES / "bracket-rev-b.dxf") if kind == "CIRCLE"]
    old = [n for kind, *_, n in geometry(SAMPLES / "bracket.dxf") if kind == "CIRCLE"]
    assert circles[0][3] == pytest.approx(9.5)
    np.testing.assert_allclose(circles[1], old[0])
    assert np.linalg.norm(circles[2][:2] - old[1][:2]) == pytest.approx(1.0, abs=1e-5)


def test_the_table_has_one_knuckle():
    rows = (SAMPLES / "stem-stations.csv").read_text().splitlines()
    cells = [row.split(",") for row in rows if not row.startswith("#")]
    assert cells[0] == ["x", "y", "corner"]
    assert len(cells) == 15
    assert [row[2] for row in cells[1:]].count("yes") == 1
