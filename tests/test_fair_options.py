"""Options of `fair` about what is written, called from the command line and read back from the file."""

import json
import math

import ezdxf
import numpy as np
import pytest

import converter.cli
from tests.traced_drawings import (
    DISC,
    HOOK,
    STADIUM,
    dense_points,
    entity,
    new_drawing,
    sampled_deviation,
    save_outline,
)


@pytest.fixture
def folder(tmp_path, monkeypatch):
    save_outline(tmp_path / "in.dxf")
    monkeypatch.chdir(tmp_path)
    return tmp_path


def fair(*arguments):
    with pytest.raises(SystemExit) as caught:
        converter.cli.main(["fair", *map(str, arguments)])
    return caught.value.code


def profiles(folder):
    return json.loads((folder / "r.json").read_text())["profiles"]


def only(folder):
    (profile,) = profiles(folder)
    return profile


OUT = ("in.dxf", "-o", "out.dxf", "--report", "r.json", "--force")


def test_several_forms_are_counted_and_nothing_is_written_without_a_place(folder, capsys):
    assert fair("in.dxf", "--as", "arcs", "--as", "lines", "--as", "spline", "--report", "r.json") == 0
    printed = capsys.readouterr().out
    assert printed.startswith("in.dxf -> nothing written")
    assert not (folder / "out.dxf").exists()
    record = json.loads((folder / "r.json").read_text())
    assert record["output"] is None
    (profile,) = record["profiles"]
    assert [choice["form"] for choice in profile["choices"]] == ["arcs", "lines", "spline"]
    for choice in profile["choices"]:
        assert choice["within_tolerance"]
        assert choice["certified"] <= profile["tolerance"]
        row = next(line.split() for line in printed.splitlines() if line.split()[1:2] == [choice["form"]])
        assert row[2] == str(choice["entities"])
    assert all(choice["least"] > 0.0 for choice in profile["choices"])
    first = profile["choices"][0]
    assert (first["entities"], first["least"]) == (profile["entities"], profile["least"])
    assert f"(least {math.ceil(first['least'])})" in printed


def test_of_several_forms_the_first_is_written(folder):
    assert fair(*OUT, "--as", "lines", "--as", "spline") == 0
    assert entity("out.dxf", only(folder)["id"]).dxftype() == "LWPOLYLINE"


@pytest.mark.parametrize("form", ["spline", "arcs", "lines"])
def test_decimals_round_what_is_written_and_what_is_certified(folder, form):
    assert fair(*OUT, "--as", form, "--decimals", 2) == 0
    profile = only(folder)
    written = entity("out.dxf", profile["id"])
    numbers = np.array(written.control_points)[:, :2] if form == "spline" else np.array(written.get_points("xy"))
    assert np.array_equal(numbers, np.round(numbers, 2))
    sampled = sampled_deviation(HOOK, dense_points(written))
    assert profile["deviation"]["certified"] >= sampled - 1e-4
    assert profile["within_tolerance"]


def test_a_circle_is_rounded_by_centre_and_radius(folder):
    save_outline(folder / "in.dxf", DISC)
    assert fair(*OUT, "--as", "arcs", "--decimals", 1) == 0
    circle = entity("out.dxf", only(folder)["id"])
    for value in (*circle.dxf.center, circle.dxf.radius):
        assert value == round(value, 1)


@pytest.mark.parametrize(("version", "form"), [("R12", "arcs"), ("R12", "lines"), ("R2010", "spline")])
def test_three_decimals_far_from_the_origin_are_certified_as_they_are_read_back(folder, version, form):
    """Eastings and northings in millions: what is proven is of the numbers in the file, all of them of three places."""
    far = HOOK + np.array([3_512_345.678, 5_412_345.123])
    save_outline(folder / "in.dxf", far)
    assert fair(*OUT, "--as", form, "--decimals", 3, "--dxf-version", version) == 0
    profile = only(folder)
    written = entity("out.dxf", profile["id"])
    assert written.dxftype() == {"R12": "POLYLINE", "R2010": "SPLINE"}[version]
    vertices = written.control_points if form == "spline" else [vertex.dxf.location for vertex in written.vertices]
    numbers = np.array([tuple(vertex)[:2] for vertex in vertices])
    assert np.array_equal(numbers, np.round(numbers, 3))
    text = (folder / "out.dxf").read_text()
    assert f"{numbers[0, 0]:.3f}".rstrip("0") in text
    sampled = sampled_deviation(HOOK, dense_points(written) - (far[0] - HOOK[0]))
    assert sampled - 1e-3 <= profile["deviation"]["certified"] <= profile["tolerance"]
    assert profile["deviation"]["certified"] <= 1.05 * sampled + 1e-3


def test_too_few_decimals_for_the_tolerance_leave_the_profile_and_say_so(folder, capsys):
    assert fair(*OUT, "--decimals", 0) == 1
    printed = capsys.readouterr().out
    assert printed.count("left as drawn: 0 decimals") == 1  # told once
    assert "state more of them" in printed
    assert f"could not be faired as asked: {only(folder)['id']}" in printed
    assert only(folder)["left_as_drawn"].startswith("0 decimals move points by up to")


def test_the_degree_is_of_splines_alone(folder):
    counted = []
    for degree in (2, 3):
        assert fair(*OUT, "--as", "spline", "--as", "arcs", "--degree", degree) == 0
        counted.append(only(folder)["choices"])
    assert counted[0][0]["entities"] != counted[1][0]["entities"]
    assert counted[0][1] == counted[1][1]


def test_a_drawing_is_written_to_a_name_that_says_so(folder, capsys):
    assert fair("in.dxf", "-o", "out.svg") == 2
    assert "out.svg: what is written is DXF" in capsys.readouterr().err
    assert not (folder / "out.svg").exists()


def test_a_budget_is_kept_and_its_chord_error_told(folder):
    assert fair(*OUT, "--as", "lines") == 0
    usual = only(folder)
    assert fair(*OUT, "--as", "lines", "--budget", usual["entities"] + 10) == 0
    finer = only(folder)
    assert finer["entities"] <= usual["entities"] + 10
    assert finer["chord_error"] < usual["chord_error"]
    assert finer["within_budget"]
    assert len(entity("out.dxf", finer["id"])) == finer["vertices_out"]


def test_a_budget_out_of_reach_is_named_and_is_exit_code_1(folder, capsys):
    assert fair(*OUT, "--as", "lines", "--budget", 4) == 1  # five corners
    printed = capsys.readouterr().out
    profile = only(folder)
    assert not profile["within_budget"]
    assert profile["within_tolerance"]
    assert (
        f"a budget of 4 entities is not reached within the tolerance: the fewest found are {profile['entities']}"
        in (printed)
    )
    assert fair(*OUT, "--as", "lines") == 0
    assert profile["entities"] <= only(folder)["entities"]
    assert f"over the budget: {profile['id']}" in printed.splitlines()[-2]


def test_forms_over_the_budget_are_marked_in_the_table(folder, capsys):
    assert fair("in.dxf", "--as", "arcs", "--as", "lines", "--budget", 9, "--report", "r.json") == 0
    arcs, lines = only(folder)["choices"]
    assert arcs["within_budget"]
    assert arcs["entities"] <= 9
    assert not lines["within_budget"] or lines["entities"] <= 9
    assert fair("in.dxf", "--as", "arcs", "--as", "lines", "--budget", 4) == 1  # five corners
    rows = [line.split() for line in capsys.readouterr().out.splitlines()]
    assert [row[3] for row in rows if row[1:2] in (["arcs"], ["lines"])][-2:] == ["OVER", "OVER"]


def test_forms_that_the_version_does_not_have_are_named_in_the_table(folder, capsys):
    assert fair(*OUT, "--as", "arcs", "--as", "spline", "--dxf-version", "R12") == 0
    profile = only(folder)
    assert [choice["form"] for choice in profile["choices"]] == ["arcs"]
    assert profile["warnings"] == ["spline not counted: DXF R12 has no SPLINE"]
    assert fair(*OUT, "--as", "spline", "--as", "lines", "--as", "arcs", "--dxf-version", "R12") == 0
    profile = only(folder)
    assert [choice["form"] for choice in profile["choices"]] == ["arcs", "lines"]  # the first as it was written
    assert profile["choices"][0]["entities"] == profile["arcs"] + profile["lines"]


def test_turns_that_rounding_spoils_are_told(folder, capsys):
    save_outline(folder / "in.dxf", STADIUM)
    options = ("--as", "lines", "--max-step", "2mm", "--max-turn", "8")
    assert fair(*OUT, *options, "--decimals", "1", "--tolerance", "1") == 0
    assert "rounding to 1 decimals makes" in capsys.readouterr().out
    points = np.array(entity("out.dxf", only(folder)["id"]).get_points("xy"))
    edges = np.diff(np.vstack([points, points[:1]]), axis=0)
    assert np.linalg.norm(edges, axis=1).max() <= 2.0 * (1.0 + 1e-9)  # steps allow for the rounding
    assert fair(*OUT, *options, "--decimals", "6") == 0
    assert "rounding" not in capsys.readouterr().out


def test_steps_turns_and_places_of_vertices(folder):
    save_outline(folder / "in.dxf", STADIUM)
    assert fair(*OUT, "--as", "lines", "--max-step", "2mm", "--max-turn", 10, "--vertices", "on-curve") == 0
    points = np.array(entity("out.dxf", only(folder)["id"]).get_points("xy"))
    edges = np.diff(np.vstack([points, points[:2]]), axis=0)
    assert np.linalg.norm(edges, axis=1).max() <= 2.0 * (1.0 + 1e-9)
    heading = np.unwrap(np.arctan2(edges[:, 1], edges[:, 0]))
    assert np.degrees(np.abs(np.diff(heading))).max() <= 10.0 * (1.0 + 1e-6)


def test_a_largest_radius_is_kept_or_named(folder, capsys):
    save_outline(folder / "in.dxf", STADIUM)
    assert fair(*OUT, "--as", "arcs", "--most-radius", 40, "--least-radius", 5) == 0
    rows = np.array(entity("out.dxf", only(folder)["id"]).get_points("xyb"))
    ends = np.roll(rows[:, :2], -1, axis=0)
    chord = np.linalg.norm(ends - rows[:, :2], axis=1)
    bent = rows[:, 2] != 0.0
    radius = (chord * (1.0 + rows[:, 2] ** 2))[bent] / (4.0 * np.abs(rows[bent, 2]))
    outside = (radius > 40.0 * (1.0 + 1e-6)) | (radius < 5.0 * (1.0 - 1e-6))
    assert outside.any() == ("are not kept" in capsys.readouterr().out)


def test_radii_out_of_reach_are_named_with_their_places(folder, capsys):
    save_outline(folder / "in.dxf", STADIUM)
    assert fair(*OUT, "--as", "arcs", "--least-radius", 30) == 0
    printed = capsys.readouterr().out
    assert "radii from 30 are not kept within the tolerance: 1" in printed  # its ends have a radius of 14.3
    assert " near (" in printed


@pytest.mark.parametrize(
    ("options", "said"),
    [
        (("--max-step", "1"), "--max-step is for lines only, and spline is asked for"),
        (("--as", "arcs", "--max-turn", "5"), "--max-turn is for lines only"),
        (("--as", "arcs", "--vertices", "on-curve"), "--vertices on-curve is for lines only"),
        (("--as", "lines", "--least-radius", "5"), "--least-radius is for arcs only"),
        (("--as", "spline", "--most-radius", "5"), "--most-radius is for arcs only"),
        (("--as", "arcs", "--least-radius", "5", "--most-radius", "2"), "least radius 5 is not below most radius 2"),
        (("--budget", "9", "--chord-error", "0.1"), "a budget finds the chord error itself"),
        (("--as", "lines", "--max-turn", "0"), "is not between 0 and 180"),
        (("--as", "lines", "--max-step", "0"), "longest step 0 is not a length above 0"),
        (("--as", "lines", "--max-step", "-1"), "'-1' is not a length"),
        (("--budget", "1"), "'--budget'"),
        (("--decimals", "16"), "'--decimals'"),
        (
            ("--decimals", "0", "--tolerance", "1"),
            "0 decimals move points by up to 0.866, too much for a tolerance of 1;",
        ),
        (("--as", "lines", "--decimals", "1", "--max-step", "0.1"), "1 decimals are too few for a longest step of 0.1"),
    ],
)
def test_options_that_do_not_fit_are_one_line_and_exit_code_2(folder, capsys, options, said):
    assert fair("in.dxf", "-o", "out.dxf", *options) == 2
    printed = capsys.readouterr()
    assert printed.out == ""
    assert printed.err.count("\n") == 1
    assert said in printed.err
    assert not (folder / "out.dxf").exists()


def test_a_limit_of_another_form_that_is_counted_too_is_allowed(folder):
    assert fair(*OUT, "--as", "arcs", "--as", "lines", "--max-step", "3", "--most-radius", "90") == 0
    arcs, lines = only(folder)["choices"]
    assert arcs["least"] is not None
    assert lines["least"] is None  # the step asks for more than the chord error does


def test_profiles_in_space_keep_step_and_decimals(folder):
    doc = new_drawing()
    angle = np.linspace(0.0, 6.0, 400)
    rng = np.random.default_rng(2)
    points = np.stack([30.0 * np.cos(angle), 30.0 * np.sin(angle), 3.0 * angle], axis=1) + rng.normal(0, 0.05, (400, 3))
    doc.modelspace().add_polyline3d(points.tolist())
    doc.saveas(folder / "in.dxf")
    assert fair(*OUT, "--as", "lines", "--tolerance", "0.5", "--max-step", "2", "--decimals", "3") == 0
    written = ezdxf.readfile("out.dxf").entitydb[only(folder)["id"]]
    numbers = np.array([tuple(vertex.dxf.location) for vertex in written.vertices])
    assert np.array_equal(numbers, np.round(numbers, 3))
    assert np.linalg.norm(np.diff(numbers, axis=0), axis=1).max() <= 2.0
