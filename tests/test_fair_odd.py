"""Outlines that are odd but valid: each ends in a certified curve or is left as drawn, never in a fault."""

import ezdxf
import numpy as np
import pytest
import shapely

from converter.drawing import read_drawing
from converter.jobs.fair import FairSettings, fair_drawing
from converter.units import Length
from geometry.polyline import Polyline
from geometry.simple import is_simple
from tests.tracing import circle, noisy, staircase


def odd_outline(rng):
    """Points and whether they close: triangles, specks, tangles, sparse rings, random walks, spikes, repeats."""
    kind = rng.integers(0, 8)
    if kind == 0:
        return rng.uniform(-50, 50, (3, 2)), True
    if kind == 1:
        return rng.uniform(-50, 50, (2, 2)), False
    if kind == 2:
        return rng.uniform(-0.3, 0.3, (rng.integers(3, 9), 2)), True
    if kind == 3:
        return rng.uniform(-50, 50, (rng.integers(4, 30), 2)), bool(rng.integers(2))
    if kind == 4:
        return np.cumsum(rng.normal(0, 1, (rng.integers(3, 150), 2)), axis=0), bool(rng.integers(2))
    if kind == 5:
        return np.repeat(rng.uniform(-20, 20, (6, 2)), rng.integers(1, 4), axis=0), True
    if kind == 6:
        x = np.arange(0, 20, 0.5)
        return np.stack([x, np.where(np.arange(len(x)) % 2, 0.0, rng.uniform(0.1, 20))], axis=1), False
    return np.linspace(0, 50, rng.integers(3, 60))[:, None] * [1.0, 0.3], False


def sampled_distance(a, b):
    """Largest distance found between two paths, both ways, from points every 4000th of the length and the vertices."""
    middle = a.mean(axis=0)
    lines = [shapely.LineString(path - middle) for path in (a, b)]

    def one_way(first, second):
        even = shapely.line_interpolate_point(first, np.linspace(0, first.length, 4000))
        corners = shapely.points(shapely.get_coordinates(first))
        return max(shapely.distance(even, second).max(), shapely.distance(corners, second).max())

    return max(one_way(lines[0], lines[1]), one_way(lines[1], lines[0]))


@pytest.mark.parametrize("seed", range(40))
def test_an_odd_outline_is_certified_or_left_as_drawn(tmp_path, seed):
    rng = np.random.default_rng(seed)
    points, closed = odd_outline(rng)
    scale = 10.0 ** rng.integers(-2, 3)
    points = points * scale + rng.choice([0.0, 5e5]) * scale
    doc = ezdxf.new("R2010", units=4)
    doc.modelspace().add_lwpolyline(points.tolist(), close=closed)
    source, output = tmp_path / "in.dxf", tmp_path / "out.dxf"
    doc.saveas(source)
    settings = FairSettings(
        tolerance=Length(float(rng.choice([0.05, 0.5, 2.0, 20.0]) * scale)),
        form=str(rng.choice(["spline", "arcs", "lines"])),
        degree=int(rng.choice([2, 3])),
        corner_angle=[None, None, 0.0, 180.0][rng.integers(0, 4)],
    )
    record = fair_drawing(source, output, settings)
    (given,), (written,) = read_drawing(source).profiles, read_drawing(output).profiles
    (profile,) = record.profiles
    if profile.left_as_drawn is not None:
        assert written.types == given.types
        np.testing.assert_array_equal(written.flatten(1.0).points, given.flatten(1.0).points)
        return
    found = sampled_distance(given.flatten(1.0).path(), written.flatten(1e-5 * scale).path())
    assert found <= profile.deviation.certified + 2e-5 * scale
    assert profile.within_tolerance == (profile.deviation.certified <= profile.tolerance)


def save(path, points, closed=True):
    doc = ezdxf.new("R2010", units=4)
    doc.modelspace().add_lwpolyline(np.asarray(points).tolist(), close=closed)
    doc.saveas(path)
    return path


def test_a_tolerance_as_large_as_the_profile_leaves_it_as_drawn(tmp_path):
    source = save(tmp_path / "in.dxf", staircase(circle(5.0, (0.3, 0.1))))
    record = fair_drawing(source, tmp_path / "out.dxf", FairSettings(tolerance=Length(25.4)))
    assert "check the units" in record.profiles[0].left_as_drawn


def test_a_flat_polyline_in_space_stays_one(tmp_path):
    doc = ezdxf.new("R2010", units=4)
    ring = noisy(circle(40.0), 2.0, 0.15, 5)
    ring = np.column_stack([ring, np.full(len(ring), 7.0)])
    ring[3, 2] = 7.3  # a profile in space, whose curve may well come out flat
    doc.modelspace().add_polyline3d(ring.tolist(), close=True)
    doc.saveas(tmp_path / "in.dxf")
    for form in ("spline", "lines"):
        settings = FairSettings(tolerance=Length(0.7), form=form)
        record = fair_drawing(tmp_path / "in.dxf", tmp_path / f"{form}.dxf", settings)
        assert record.within_tolerance
        assert record.profiles[0].left_as_drawn is None


def test_there_and_back_is_not_simple():
    assert not is_simple(Polyline(np.array([[0.0, 0.0], [1.0, 0.0]]), True))
