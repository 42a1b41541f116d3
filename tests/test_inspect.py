"""The job `inspect`: facts, defects, and what to do next."""

import json
import math

import ezdxf
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from converter.errors import ReadError
from converter.jobs.defects import repeated_segments, segment_lengths, self_crossings
from converter.jobs.inspect import InspectSettings, inspect_drawing
from converter.units import Length
from geometry.polyline import Polyline
from tests.tracing import circle, staircase


@pytest.fixture
def inspected(tmp_path):
    def make(draw, settings=None, units=4):
        doc = ezdxf.new("R2010", units=units)
        draw(doc.modelspace())
        doc.saveas(tmp_path / "in.dxf")
        return inspect_drawing(tmp_path / "in.dxf", settings)

    return make


def stepped(radius=30.0):
    return staircase(circle(radius))


def draw_mixed(m):
    m.add_lwpolyline(stepped().tolist(), close=True, dxfattribs={"layer": "SCAN"})
    m.add_lwpolyline([(60, 0), (80, 0), (80, 10), (60, 10)], close=True, dxfattribs={"layer": "SCAN"})
    m.add_circle((0, 0), 5, dxfattribs={"layer": "HOLES"})
    m.add_text("note", dxfattribs={"layer": "NOTES"})
    m.doc.blocks.new("B").add_line((0, 0), (1, 1))


def test_facts_of_a_drawing(inspected):
    record = inspected(draw_mixed)
    assert (record.dxf_version, record.units) == ("R2010", "mm")
    assert record.entities == {"HOLES": {"CIRCLE": 1}, "NOTES": {"TEXT": 1}, "SCAN": {"LWPOLYLINE": 2}}
    assert record.passed_through == {"TEXT": 1}
    assert record.in_blocks == {"LINE": 1}
    traced, box, hole = record.profiles
    assert (traced.looks_like, box.looks_like, hole.looks_like) == ("outline", "clean", "curves")
    assert traced.jaggedness["kind"] == "staircase"
    assert traced.jaggedness["size"] == pytest.approx(1.0)
    assert box.segments == {"count": 4, "shortest": 10.0, "median": 15.0, "longest": 20.0}
    assert (box.area, box.length, box.vertices, box.closed) == (200.0, 60.0, 4, True)
    assert hole.jaggedness is None
    assert hole.length == pytest.approx(10 * math.pi)
    assert record.extents["greatest"][0] == 80.0
    assert record.suggestion.startswith("fairbatten fair ")
    assert record.suggestion.endswith(" -o in-faired.dxf")


def test_the_record_is_json(inspected):
    record = inspected(draw_mixed)
    again = json.loads(json.dumps(record.as_json(), allow_nan=False))
    assert again["command"] == "inspect"
    assert again["profiles"][1]["vertices"] == 4
    assert set(again["seconds"]) == {"read", "look", "total"}


def test_the_suggestion_repeats_the_choices_and_quotes_names(inspected):
    def draw(m):
        m.add_lwpolyline(stepped().tolist(), close=True, dxfattribs={"layer": "MY SCAN"})

    record = inspected(draw, InspectSettings(("MY SCAN",), Length(0.01), "mm"))
    assert "--layer 'MY SCAN' --gap 0.01 --units mm" in record.suggestion


def test_nothing_to_do_is_said(inspected):
    assert inspected(lambda m: None).suggestion is None
    record = inspected(lambda m: m.add_circle((0, 0), 5))
    assert record.suggestion is None
    assert "needs fairing" in record.reason


def test_sparse_points_on_a_smooth_curve_look_like_stations(inspected):
    x = np.linspace(0, 100, 12)
    record = inspected(lambda m: m.add_lwpolyline(np.c_[x, 20 * np.sin(x / 30)].tolist()))
    assert record.profiles[0].looks_like == "stations"
    assert "stations" in record.reason


def test_defects_are_found_with_their_places(inspected):
    def draw(m):
        m.add_lwpolyline([(0, 0), (10, 10), (10, 0), (0, 10)], close=True)
        m.add_lwpolyline([(20, 0), (30, 0), (30, 0), (30, 10), (30, 10)])
        m.add_line((50, 0), (60, 0))
        m.add_line((60, 0), (50, 0))
        m.add_line((100, 0), (110, 0))
        m.add_line((110.05, 0), (120, 5))

    record = inspected(draw)
    bow, repeated, *_ = record.profiles
    assert bow.self_crossings == 1
    np.testing.assert_allclose(bow.crossings, [[5, 5]], atol=1e-12)
    assert repeated.zero_length_segments == 2
    assert repeated.segments["shortest"] == 10.0
    assert record.repeated_segments == 1
    (gap,) = record.near_gaps
    assert gap["size"] == pytest.approx(0.05)
    np.testing.assert_allclose(gap["place"], [110.025, 0, 0])


def test_what_cannot_be_used_is_listed(inspected):
    record = inspected(lambda m: m.add_lwpolyline([(0, 0), (math.nan, 1)]))
    assert record.skipped[0]["type"] == "LWPOLYLINE"
    assert not record.profiles


def test_errors_pass_through(tmp_path):
    with pytest.raises(ReadError):
        inspect_drawing(tmp_path / "no.dxf")


@settings(max_examples=40, deadline=None)
@given(st.integers(4, 25), st.booleans(), st.integers(0, 2**32 - 1))
def test_crossings_agree_with_every_pair(n, closed, seed):
    points = np.random.default_rng(seed).uniform(0, 1, (n, 2))
    path = np.vstack([points, points[:1]]) if closed else points
    expected = []
    for i in range(len(path) - 1):
        for j in range(i + 2, len(path) - 1):
            if closed and i == 0 and j == len(path) - 2:
                continue
            a, b, c, d = path[i], path[i + 1], path[j], path[j + 1]
            matrix = np.column_stack([b - a, c - d])
            s, t = np.linalg.solve(matrix, c - a)
            if 0 <= s <= 1 and 0 <= t <= 1:
                expected.append(a + s * (b - a))
    found = self_crossings(Polyline(points, closed))
    assert len(found) == len(expected)
    if expected:
        order = np.lexsort(np.round(found, 9).T)
        wanted = np.array(expected)[np.lexsort(np.round(expected, 9).T)]
        np.testing.assert_allclose(found[order], wanted, atol=1e-9)


@pytest.mark.parametrize(
    ("points", "closed", "count"),
    [
        ([(0, 0), (4, 0), (4, 4), (0, 4)], True, 0),
        ([(0, 0), (4, 0), (2, 0)], False, 1),  # turns back over itself
        ([(0, 0), (4, 0), (4, 4), (2, 0)], False, 1),  # touches itself
        ([(0, 0), (4, 0), (4, 4), (0, 0)], False, 1),  # an open end on the start
        ([(0, 0), (4, 0), (4, 4), (2, 2), (0, 4)], True, 0),
    ],
)
def test_touching_and_turning_back_count_and_neighbours_do_not(points, closed, count):
    assert len(self_crossings(Polyline(np.array(points, dtype=float), closed))) == count


def test_repeats_do_not_depend_on_direction_but_on_layer_and_bulge(tmp_path):
    from converter.drawing import read_drawing

    doc = ezdxf.new()
    m = doc.modelspace()
    m.add_lwpolyline([(0, 0, 0.5), (4, 0, 0)], format="xyb")
    m.add_lwpolyline([(4, 0, -0.5), (0, 0, 0)], format="xyb")  # the same arc the other way
    m.add_lwpolyline([(4, 0, 0.5), (0, 0, 0)], format="xyb")  # the arc on the other side
    m.add_lwpolyline([(0, 0, 0.5), (4, 0, 0)], format="xyb", dxfattribs={"layer": "OTHER"})
    doc.saveas(tmp_path / "in.dxf")
    assert repeated_segments(read_drawing(tmp_path / "in.dxf").profiles) == 1


def test_segment_lengths_of_arcs_and_splines(tmp_path):
    from converter.drawing import read_drawing

    doc = ezdxf.new()
    m = doc.modelspace()
    m.add_lwpolyline([(0, 0, 1), (2, 0, 0), (5, 0, 0)], format="xyb")
    m.add_open_spline([(0, 9), (1, 9), (2, 11), (3, 9)])
    doc.saveas(tmp_path / "in.dxf")
    chain, spline = read_drawing(tmp_path / "in.dxf").profiles
    lengths = segment_lengths(chain)
    assert (lengths.count, lengths.shortest, lengths.longest) == (2, 3.0, pytest.approx(math.pi))
    assert segment_lengths(spline) is None
