"""Bulges, units and written entities against the DXF Reference and an independent reader (GDAL through pyogrio)."""

import math

import ezdxf
import numpy as np
import pyogrio
import pytest
import shapely

from converter.drawing import read_drawing, replace, save
from converter.units import unit_from_code
from geometry.arcs import ArcChain, full_circle
from geometry.bspline import Spline
from geometry.polyline import Polyline


# DXF Reference, VERTEX, group code 42: "the bulge is the tangent of one fourth the included angle for an arc segment,
# made negative if the arc goes clockwise from the start point to the end point". 1/2 over a unit chord is a 3-4-5
# triangle (exact) and, unlike a half circle, shows a wrong sign.
@pytest.mark.parametrize(("bulge", "centre"), [(0.5, (0.5, 0.375)), (-0.5, (0.5, -0.375))])
@pytest.mark.parametrize("version", ["R12", "R2000"])
def test_bulge_arc_agrees_with_the_dxf_definition(tmp_path, bulge, centre, version):
    doc = ezdxf.new(version)
    doc.modelspace().add_polyline2d([(0, 0, bulge), (1, 0, 0)], format="xyb")
    doc.saveas(tmp_path / "in.dxf")
    (profile,) = read_drawing(tmp_path / "in.dxf").profiles
    (chain,) = profile.parts
    centres, radii = chain.circles()
    np.testing.assert_allclose(centres[0], centre, rtol=0.0, atol=1e-15)  # a few roundings near 1
    assert radii[0] == pytest.approx(0.625, abs=1e-15)
    middle = chain.flatten(0.02).points
    assert np.sign(middle[1:-1, 1]).tolist() == [-math.copysign(1, bulge)] * (
        len(middle) - 2
    )  # right of travel if left-turning


# DXF Reference, ARC, group codes 50 and 51: start and end angle in degrees, the arc running anticlockwise.
def test_arc_angles_run_anticlockwise(tmp_path):
    doc = ezdxf.new("R2010")
    doc.modelspace().add_arc((0, 0), 2, 300, 30)
    doc.saveas(tmp_path / "in.dxf")
    (profile,) = read_drawing(tmp_path / "in.dxf").profiles
    assert profile.parts[0].sweeps().sum() == pytest.approx(math.pi / 2, rel=1e-14)
    assert profile.parts[0].bounds()[1][0] == pytest.approx(2.0, abs=1e-15)  # it passes the east point


# DXF Reference, HEADER, $INSUNITS; metres per unit from the definitions of the units themselves: the international
# inch is 25.4 mm (1959), the US survey foot 1200/3937 m, the parsec 3.0857e16 m (IAU 2015 B2).
METRES = {
    1: 0.0254, 2: 0.3048, 3: 1609.344, 4: 0.001, 5: 0.01, 6: 1.0, 7: 1000.0, 8: 2.54e-8, 9: 2.54e-5, 10: 0.9144,
    11: 1e-10, 12: 1e-9, 13: 1e-6, 14: 0.1, 15: 10.0, 16: 100.0, 17: 1e9, 18: 1.495978707e11, 19: 9.4607304725808e15,
    20: 3.0856775814913673e16, 21: 1200 / 3937, 22: 100 / 3937, 23: 3600 / 3937, 24: 6336000 / 3937,
}  # fmt: skip


@pytest.mark.parametrize("code", METRES)
def test_units_agree_with_their_definitions(code):
    assert unit_from_code(code).metres == pytest.approx(METRES[code], rel=1e-14)


def test_unit_names_agree_with_the_drawing_library():
    from ezdxf.units import decode

    for code in (1, 2, 3, 4, 5, 6, 7, 9, 10, 14, 15, 16, 18, 19, 20):
        assert decode(code).lower() in unit_from_code(code).names


RNG = np.random.default_rng(7)
ROUND = np.linspace(0, 2 * np.pi, 13)[:-1]
POINTS = np.c_[90 * np.cos(ROUND), 50 * np.sin(ROUND)] + RNG.normal(size=(12, 2))
CURVES = {
    "polyline": Polyline(POINTS, True),
    "open": Polyline(POINTS),
    "arcs": ArcChain(POINTS, RNG.uniform(-0.4, 0.8, 12), True),
    "circle": full_circle(np.array([10 / 3, 7.0]), 41.0),
    "cubic": Spline(
        np.concatenate([[0] * 4, [1, 2, 2, 2, 3.5, 4, 5], [6] * 4]), np.vstack([POINTS[:10], POINTS[:1]]), 3, True
    ),
    "quadratic": Spline(np.concatenate([[0] * 3, np.arange(1, 10), [10] * 3]), POINTS, 2),
}


def farthest(points, path):
    return float(shapely.distance(shapely.points(points), shapely.LineString(path)).max())


@pytest.mark.parametrize("origin", [(0.0, 0.0), (500_000.0, 5_000_000.0)])
@pytest.mark.parametrize("version", ["R12", "R2000", "R2018"])
@pytest.mark.parametrize("kind", CURVES)
def test_gdal_reads_the_same_curve(tmp_path, kind, version, origin):
    curve = CURVES[kind].moved(np.array(origin))
    if version == "R12" and isinstance(curve, Spline):
        pytest.skip("R12 has no SPLINE")
    doc = ezdxf.new(version)
    doc.modelspace().add_polyline2d((POINTS + origin).tolist(), close=True, dxfattribs={"layer": "CUT"})
    doc.saveas(tmp_path / "in.dxf")
    drawing = read_drawing(tmp_path / "in.dxf")
    replace(drawing, drawing.profiles[0], curve)
    save(drawing, tmp_path / "out.dxf")
    pyogrio.set_gdal_config_options({"OGR_ARC_STEPSIZE": "0.1", "DXF_CLOSED_LINE_AS_POLYGON": "FALSE"})
    _, _, shapes, fields = pyogrio.raw.read(tmp_path / "out.dxf", columns=["Layer"])
    assert fields[0].tolist() == ["CUT"]
    (shape,) = shapely.from_wkb(shapes)
    read = shapely.get_coordinates(shape) - origin
    extent = float(np.linalg.norm(np.ptp(POINTS, axis=0)))
    ours = curve.flatten(1e-7 * extent)
    path = ours.path() - origin
    assert farthest(read[:: max(1, len(read) // 500)], path) <= 1e-6 * extent  # every vertex it reads lies on our curve
    # the other way the reader's own chords come in: 0.1 degrees of arc, and its fixed number of points on a spline
    chords = np.linalg.norm(np.diff(read, axis=0), axis=1).max()
    assert farthest(path[:: max(1, len(path) // 500)], read) <= (
        0.02 * chords if isinstance(curve, Spline) else 1e-6 * extent
    )
    np.testing.assert_allclose(read[[0, -1]][:, :2], path[[0, -1]], atol=1e-6 * extent)
