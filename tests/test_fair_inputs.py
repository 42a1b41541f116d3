"""The job `fair` on inputs of many kinds: tolerances, units, far away, in space, in pieces, old versions, nonsense."""

import ezdxf
import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from converter.errors import LengthError, NoProfileError
from converter.jobs.fair import FairSettings, fair_drawing
from converter.units import parse_length
from tests.test_samples import SAMPLES
from tests.traced_drawings import (
    HOOK,
    dense_points,
    entity,
    faired,
    new_drawing,
    rounded,
    sampled_deviation,
    save_outline,
)
from tests.tracing import circle, noisy

# Tolerance and units --------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("pitch", [0.25, 1.0, 40.0])
def test_auto_takes_its_share_of_the_pitch_of_a_staircase(tmp_path, pitch):
    record, _ = faired(save_outline(tmp_path / "in.dxf", pitch * HOOK))
    assert record.tolerance == "auto"
    assert record.profiles[0].tolerance == pytest.approx(0.85 * pitch)
    assert f"pitch {pitch:g}" in record.profiles[0].tolerance_reason


def test_auto_reads_the_scatter_of_hand_digitised_points(tmp_path):
    record, _ = faired(save_outline(tmp_path / "in.dxf", noisy(circle(200.0), 8.0, 0.4, 1)))
    assert record.profiles[0].left_as_drawn is None
    assert 2.0 * 0.4 <= record.profiles[0].tolerance <= 6.0 * 0.4
    assert "scatter" in record.profiles[0].tolerance_reason


def test_auto_leaves_sparse_points_of_a_smooth_curve_and_says_so(tmp_path):
    record, _ = faired(save_outline(tmp_path / "in.dxf", circle(100.0, count=24)))
    assert "no evidence" in record.profiles[0].left_as_drawn
    record, _ = faired(tmp_path / "in.dxf", "2")
    assert record.profiles[0].left_as_drawn is None
    assert any("taken as the outline" in warning for warning in record.profiles[0].warnings)


@pytest.mark.parametrize("tolerance", ["0.2", "0.05"])
def test_a_tolerance_below_the_steps_is_kept_but_said_to_leave_them(tmp_path, tolerance):
    record, _ = faired(save_outline(tmp_path / "in.dxf"), tolerance)  # steps of 1; sides of a polygon they are not
    assert record.profiles[0].left_as_drawn is None
    assert record.within_tolerance
    assert any("--tolerance auto would take 0.85: a pixel stair" in told for told in record.profiles[0].warnings)
    record, _ = faired(tmp_path / "in.dxf", "0.8")
    assert not any("--tolerance auto" in told for told in record.profiles[0].warnings)


def test_more_entities_than_vertices_given_are_pointed_out(tmp_path):
    source = save_outline(tmp_path / "in.dxf", circle(100.0, count=120))
    record, _ = faired(source, "1", corner_angle=0.0)
    assert record.profiles[0].entities > 120
    assert any("more than the 120 vertices given" in told for told in record.profiles[0].warnings)
    record, _ = faired(source, "1")
    assert not any("vertices given" in told for told in record.profiles[0].warnings)


def test_a_corner_angle_of_nothing_keeps_every_vertex_in_its_place(tmp_path):
    points = circle(100.0, (10.0, 20.0), count=120)
    record, output = faired(save_outline(tmp_path / "in.dxf", points), "1", corner_angle=0.0, form="lines")
    written = np.array(entity(output, record.profiles[0].id).get_points("xy"))
    assert np.abs(np.linalg.norm(written[:, None] - points[None], axis=2).min(axis=1)).max() < 1e-12
    assert len(written) == 120


@pytest.mark.parametrize(
    ("text", "units", "override", "expected"),
    [("1", 4, None, 1.0), ("0.05in", 4, None, 1.27), ("1mm", 5, None, 0.1), ("1mm", 0, "mm", 1.0), ("2", 0, None, 2.0)],
)
def test_a_stated_tolerance_counts_in_its_own_units(tmp_path, text, units, override, expected):
    size = 1.0 if units != 5 else 0.1
    record, _ = faired(save_outline(tmp_path / "in.dxf", size * HOOK, units=units), text, units=override)
    assert record.tolerance == pytest.approx(expected)
    assert record.profiles[0].tolerance == pytest.approx(expected)
    assert record.units == override or record.units == {0: "unitless", 4: "mm", 5: "cm"}[units]


@pytest.mark.parametrize(
    ("settings", "units", "words"),
    [
        ({"tolerance": "1mm"}, 0, "--units mm"),
        ({"tolerance": "0"}, 4, "not a length above 0"),
        ({"chord_error": "0mm"}, 4, "not a length above 0"),
        ({"tolerance": "1", "chord_error": "1"}, 4, "not below the tolerance"),
        ({"tolerance": "1mm", "chord_error": "2mm"}, 4, "not below the tolerance"),
    ],
)
def test_lengths_that_cannot_be_used_are_refused(tmp_path, settings, units, words):
    source = save_outline(tmp_path / "in.dxf", units=units)
    lengths = {name: parse_length(text) for name, text in settings.items()}
    with pytest.raises(LengthError, match=words):
        fair_drawing(source, tmp_path / "out.dxf", FairSettings(**lengths))
    assert [path.name for path in tmp_path.iterdir()] == ["in.dxf"]


def test_a_stated_chord_error_is_kept_apart_from_the_tolerance(tmp_path):
    source = save_outline(tmp_path / "in.dxf", rounded())
    coarse, _ = faired(source, "1", form="lines", chord_error=parse_length("0.3"))
    fine, _ = faired(source, "1", form="lines", chord_error=parse_length("0.01"))
    assert (coarse.chord_error, fine.chord_error) == (0.3, 0.01)
    assert fine.profiles[0].vertices_out > 2 * coarse.profiles[0].vertices_out
    assert coarse.profiles[0].deviation.certified <= 1.0


# Other inputs ---------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize("form", ["spline", "arcs"])
def test_far_from_the_origin_the_result_is_the_same(tmp_path, form):
    shift = np.array([500_000.0, 5_000_000.0])
    (tmp_path / "far").mkdir()
    near, near_output = faired(save_outline(tmp_path / "in.dxf"), "1", form=form)
    far, far_output = faired(save_outline(tmp_path / "far" / "in.dxf", HOOK + shift), "1", form=form)
    one, other = entity(near_output, near.profiles[0].id), entity(far_output, far.profiles[0].id)
    if form == "spline":
        a, b = (np.array([tuple(p)[:2] for p in e.control_points]) for e in (one, other))
        np.testing.assert_allclose(np.array(other.knots), np.array(one.knots), atol=1e-6)
    else:
        a, b = (np.array(e.get_points("xyb")) for e in (one, other))
        shift = np.array([*shift, 0.0])
    assert a.shape == b.shape
    np.testing.assert_allclose(b - shift, a, rtol=0.0, atol=1e-6)
    assert far.profiles[0].deviation.certified == pytest.approx(near.profiles[0].deviation.certified, abs=1e-6)
    assert far.profiles[0].area_out == pytest.approx(near.profiles[0].area_out, abs=1e-5)


def test_a_polyline_in_space_is_faired_in_space(tmp_path):
    rng = np.random.default_rng(5)
    angle = np.linspace(0.0, 4.0, 300)
    points = np.stack([40.0 * np.cos(angle), 40.0 * np.sin(angle), 12.0 * angle], axis=1)
    points += rng.normal(0.0, 0.1, points.shape)
    doc = new_drawing()
    doc.modelspace().add_polyline3d(points.tolist())
    doc.saveas(tmp_path / "in.dxf")
    record, output = faired(tmp_path / "in.dxf", "0.5", form="arcs")
    (profile,) = record.profiles
    assert profile.entity == "SPLINE"
    assert any("not" in warning and "plane" in warning for warning in profile.warnings)
    assert profile.deviation.mean_signed is None
    written = entity(output, profile.id)
    curve = np.array([tuple(p) for p in written.construction_tool().points(np.linspace(0, written.knots[-1], 6000))])
    apart = (distances_3d(points, curve), distances_3d(curve, points))
    assert max(apart) <= profile.deviation.certified + 1e-3 <= 0.5 + 1e-3  # 1e-3: chords between the 6000 points


def distances_3d(points, path):
    """Largest distance from points to a path in space."""
    start, step = path[:-1], np.diff(path, axis=0)
    worst = 0.0
    for block in np.array_split(points, max(1, len(points) // 100)):
        off = block[:, None] - start
        t = np.clip((off * step).sum(axis=2) / np.maximum((step * step).sum(axis=1), 1e-300), 0.0, 1.0)
        worst = max(worst, float(np.linalg.norm(off - t[..., None] * step, axis=2).min(axis=1).max()))
    return worst


def test_more_than_a_thousand_lines_in_any_order_and_direction_become_whole_profiles(tmp_path):
    rng = np.random.default_rng(11)
    shapes = [rounded(seed) + np.array([100.0 * seed, 0.0]) for seed in range(4)]
    shapes.append(HOOK + np.array([0.0, 100.0]))
    lines = np.concatenate([np.stack([shape, np.roll(shape, -1, axis=0)], axis=1) for shape in shapes])
    assert len(lines) > 1000
    turn = rng.random(len(lines)) < 0.5
    lines[turn] = lines[turn][:, ::-1]
    doc = new_drawing()
    for start, end in rng.permutation(lines).tolist():
        doc.modelspace().add_line(start, end, dxfattribs={"layer": "CUT"})
    doc.saveas(tmp_path / "in.dxf")
    record, output = faired(tmp_path / "in.dxf", "1")
    assert sorted(profile.vertices_in for profile in record.profiles) == sorted(map(len, shapes))
    assert [e.dxftype() for e in ezdxf.readfile(output).modelspace()] == ["SPLINE"] * len(shapes)
    assert all(profile.closed and profile.within_tolerance for profile in record.profiles)
    (tmp_path / "whole").mkdir()
    whole, _ = faired(save_outline(tmp_path / "whole" / "in.dxf", shapes[0]), "1")
    joined = min(record.profiles, key=lambda p: np.abs(p.area_in - whole.profiles[0].area_in))
    assert abs(joined.area_out) == pytest.approx(whole.profiles[0].area_out, rel=2e-3)


def test_the_exploded_sample_comes_back_as_fourteen_entities(tmp_path):
    source = tmp_path / "in.dxf"
    source.write_bytes((SAMPLES / "exploded.dxf").read_bytes())
    record, output = faired(source, "0.05mm", form="arcs")
    assert len(record.profiles) == 14
    assert all(profile.within_tolerance and profile.deviation.certified <= 0.05 for profile in record.profiles)
    kinds = [e.dxftype() for e in ezdxf.readfile(output).modelspace()]
    assert "LINE" not in kinds
    assert sum(kind in ("LWPOLYLINE", "CIRCLE") for kind in kinds) == 14
    assert record.passed_through == {"TEXT": 2}


def test_r12_has_no_spline_so_arcs_are_written_and_the_record_says_so(tmp_path):
    source = tmp_path / "in.dxf"
    doc = new_drawing("R12", 0)
    doc.modelspace().add_polyline2d(HOOK.tolist(), close=True, dxfattribs={"layer": "CUT"})
    doc.saveas(source)
    record, output = faired(source, "1")
    (profile,) = record.profiles
    assert profile.entity == "POLYLINE"
    assert any("R12 has no SPLINE" in warning for warning in profile.warnings)
    written = entity(output, profile.id)
    assert (written.dxftype(), written.is_closed, written.dxf.layer) == ("POLYLINE", True, "CUT")
    points = dense_points(written)
    assert sampled_deviation(HOOK, points) <= profile.deviation.certified + 1e-4
    assert ezdxf.readfile(output).dxfversion == "AC1009"


def test_a_newer_drawing_goes_to_r12(tmp_path):
    record, output = faired(save_outline(tmp_path / "in.dxf"), "1", version="r12")
    assert ezdxf.readfile(output).dxfversion == "AC1009"
    assert [e.dxftype() for e in ezdxf.readfile(output).modelspace()] == ["POLYLINE"]
    assert any("units" in warning for warning in record.warnings)


@pytest.mark.parametrize("closed", [True, False])
@settings(max_examples=8, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(
    points=st.lists(st.tuples(st.integers(-40, 40), st.integers(-40, 40)), min_size=2, max_size=40),
    form=st.sampled_from(["spline", "arcs", "lines"]),
)
def test_whatever_is_drawn_the_bound_holds_or_the_profile_stays_as_drawn(tmp_path, points, form, closed):
    source = save_outline(tmp_path / "in.dxf", np.array(points), closed=closed)
    try:
        record, output = faired(source, "1.5", form=form)
    except NoProfileError:
        assert len(set(points)) == 1
        return
    (profile,) = record.profiles
    written = entity(output, profile.id)
    if profile.left_as_drawn is not None:
        assert [p[:2] for p in written.get_points()] == points
        return
    kept = [p for p, q in zip(points, [None, *points[:-1]], strict=True) if p != q]
    found = sampled_deviation(np.array(kept, dtype=float), dense_points(written), closed)
    assert found <= profile.deviation.certified + 1e-3
    assert profile.within_tolerance == (profile.deviation.certified <= 1.5)
