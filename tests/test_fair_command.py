"""The command `fair` run as a process: what is printed, the exit codes, and that nothing is lost when it fails."""

import json
import os
import stat

import ezdxf
import numpy as np
import pytest

import converter.cli
from converter.jobs.forms import Search
from tests.test_cli import one_line_error, run
from tests.traced_drawings import HOOK, STADIUM, new_drawing, save_outline


@pytest.fixture
def folder(tmp_path):
    """A folder of drawings, good and bad."""
    save_outline(tmp_path / "in.dxf")
    save_outline(tmp_path / "unitless.dxf", units=0)
    save_outline(tmp_path / "there.dxf", STADIUM)
    new_drawing().saveas(tmp_path / "bare.dxf")
    (tmp_path / "empty.dxf").write_bytes(b"")
    (tmp_path / "text.dxf").write_text("this is a shopping list\nand no drawing\n")
    whole = (tmp_path / "in.dxf").read_bytes()
    (tmp_path / "cut.dxf").write_bytes(whole[: len(whole) // 3])
    return tmp_path


def snapshot(folder):
    return {path.name: path.read_bytes() if path.is_file() else None for path in folder.iterdir()}


def faired_in_this_process(*arguments):
    """Run the command in this process, so that parts of it can be replaced; return the exit code."""
    with pytest.raises(SystemExit) as caught:
        converter.cli.main(["fair", *map(str, arguments)])
    return caught.value.code


def test_the_summary_names_profiles_deviation_tolerance_and_cautions(folder):
    result = run("fair", "in.dxf", "-o", "out.dxf", "--report", "r.json", cwd=folder)
    assert (result.returncode, result.stderr) == (0, "")
    lines = result.stdout.splitlines()
    assert lines[0] == "in.dxf -> out.dxf, units: mm"
    assert lines[1].split() == [
        *("profile", "layer", "given", "written", "corners"),
        *("deviation", "of", "mean"),
    ]
    record = json.loads((folder / "r.json").read_text())
    (profile,) = record["profiles"]
    assert lines[2].split()[:3] == [profile["id"], "TRACE", "LWPOLYLINE,"]
    assert f"{profile['control_points']} control points" in lines[2]
    assert f"{profile['deviation']['certified']:.3g}" in lines[2].split()
    assert lines[3].split() == ["profile", "inflections", "curvature", "extrema", "least", "radius", "strain", "energy"]
    before, after = profile["fairness"]["before"], profile["fairness"]["after"]
    assert lines[4].split()[1:4] == [str(before["inflections"]), "->", str(after["inflections"])]
    assert lines[4].split()[-3:] == [f"{before['strain_energy']:.3g}", "->", "0"]  # straight sides, but for rounding
    assert after["strain_energy"] < 1e-9
    assert "pitch 1" in lines[5]
    assert lines[-2].startswith("1 profile faired; certified deviation at most ")
    assert lines[-2].endswith(" mm; none out of tolerance")
    for caution in ("scrap piece", "kerf", "licensed engineer"):
        assert caution in lines[-1]
    assert (record["command"], record["input"], record["output"]) == ("fair", "in.dxf", "out.dxf")


def test_quiet_prints_nothing(folder):
    result = run("fair", "in.dxf", "-o", "out.dxf", "--quiet", cwd=folder)
    assert (result.returncode, result.stdout, result.stderr) == (0, "", "")
    assert (folder / "out.dxf").exists()


def test_options_reach_the_job(folder):
    curve = "--tolerance 0.04in --as spline --degree 2 --chord-error 0.05mm --corner-angle 180"
    rest = "--units mm --gap 0.01 --layer trace --dxf-version r2000 --report r.json --quiet"
    words = f"unitless.dxf -o out.dxf {curve} {rest}".split()
    assert run("fair", *words, cwd=folder).returncode == 0
    record = json.loads((folder / "r.json").read_text())
    assert record["tolerance"] == pytest.approx(1.016)
    assert (record["chord_error"], record["degree"], record["gap"]) == (0.05, 2, 0.01)
    assert (record["units"], record["form"]) == ("mm", "spline")
    assert ezdxf.readfile(folder / "out.dxf").dxfversion == "AC1015"


def test_several_drawings_go_to_a_folder_and_one_failure_stops_no_other(folder):
    result = run("fair", "in.dxf", "empty.dxf", "there.dxf", "--out-dir", "out", "--report", "r.json", cwd=folder)
    assert result.returncode == 2
    assert result.stderr.startswith("error: empty.dxf: ")
    assert result.stderr.count("\n") == 1
    assert sorted(os.listdir(folder / "out")) == ["in.dxf", "there.dxf"]
    record = json.loads((folder / "r.json").read_text())
    assert [part["input"] for part in record["files"]] == ["in.dxf", "there.dxf"]
    assert len(record["failed"]) == 1


def test_a_profile_out_of_tolerance_is_exit_code_1_and_named(folder, monkeypatch, capsys):
    """No input is known that ends out of tolerance, so the search's last word is replaced by a curve moved aside."""

    def aside(*arguments, _search=Search.best):
        result = _search(*arguments)
        object.__setattr__(result, "curve", result.curve.moved(np.array([1.5, 0.0])))
        return result

    monkeypatch.setattr(Search, "best", aside)
    monkeypatch.chdir(folder)
    assert faired_in_this_process("in.dxf", "-o", "out.dxf", "--report", "r.json") == 1
    printed = capsys.readouterr()
    assert printed.err == ""
    (profile,) = json.loads((folder / "r.json").read_text())["profiles"]
    assert profile["within_tolerance"] is False
    assert f"out of tolerance: {profile['id']}" in printed.out.splitlines()[-2]
    assert " OUT " in printed.out
    assert (folder / "out.dxf").exists()  # written all the same: the user decides


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        ("in.dxf", ["-o OUT", "--out-dir"]),
        ("in.dxf there.dxf -o out.dxf", ["--out-dir"]),
        ("in.dxf ./in.dxf --out-dir new", ["two drawings are named in.dxf"]),
        ("missing.dxf -o out.dxf", ["missing.dxf", "cannot be read"]),
        ("empty.dxf -o out.dxf", ["empty.dxf", "empty"]),
        ("text.dxf -o out.dxf", ["text.dxf"]),
        ("cut.dxf -o out.dxf", ["cut.dxf"]),
        ("bare.dxf -o out.dxf", ["bare.dxf", "no profile", "fairbatten inspect"]),
        ("in.dxf -o out.dxf --layer NOWHERE", ["NOWHERE"]),
        ("in.dxf -o out.dxf --layer 0", ["no profile on layer 0"]),
        ("in.dxf -o out.dxf --tolerance thin", ["--tolerance", "not a length"]),
        ("in.dxf -o out.dxf --tolerance 0,2", ["decimal point"]),
        ("in.dxf -o out.dxf --tolerance 0", ["tolerance", "above 0"]),
        ("unitless.dxf -o out.dxf --tolerance 1mm", ["states none", "--units mm"]),
        ("in.dxf -o out.dxf --tolerance 1 --chord-error 1", ["chord error", "tolerance"]),
        ("in.dxf -o in.dxf --force", ["in.dxf", "input file"]),
        ("in.dxf -o ./in.dxf --force", ["input file"]),
        ("in.dxf -o there.dxf", ["there.dxf", "--force"]),
        ("in.dxf -o no/out.dxf", ["no folder"]),
        ("in.dxf -o out.dxf --report there.dxf", ["there.dxf", "--force"]),
        ("in.dxf -o out.dxf --report out.dxf", ["--report"]),
        ("in.dxf -o out.dxf --report in.dxf --force", ["input file"]),
        ("in.dxf -o out.dxf --as circles", ["--as"]),
        ("in.dxf -o out.dxf --degree 5", ["--degree"]),
        ("in.dxf -o out.dxf --dxf-version R9", ["--dxf-version"]),
        ("in.dxf -o out.dxf --corner-angle 200", ["--corner-angle"]),
        ("in.dxf -o out.dxf --corners-on NOWHERE", ["NOWHERE"]),
    ],
)
def test_an_error_is_one_line_exit_code_2_and_nothing_written(folder, arguments, words, monkeypatch, capsys):
    before = snapshot(folder)
    monkeypatch.chdir(folder)
    assert faired_in_this_process(*arguments.split()) == 2
    printed = capsys.readouterr()
    assert printed.out == ""
    assert printed.err.startswith("error: ")
    assert printed.err.count("\n") == 1
    for word in words:
        assert word in printed.err
    assert snapshot(folder) == before


@pytest.mark.parametrize("arguments", ["text.dxf -o out.dxf", "in.dxf -o there.dxf", "in.dxf -o out.dxf --as circles"])
def test_errors_of_the_process_are_the_same(folder, arguments):
    before = snapshot(folder)
    one_line_error(run("fair", *arguments.split(), cwd=folder))
    assert snapshot(folder) == before


def test_a_folder_that_refuses_the_file_leaves_nothing(folder, monkeypatch, capsys):
    """Permissions bind no administrator, so the system's refusal is made by hand; a closed folder adds the real one."""
    (folder / "closed").mkdir()
    (folder / "closed").chmod(stat.S_IRUSR | stat.S_IXUSR)

    def refused(*_, **__):
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr("converter.files.os.open", refused)
    monkeypatch.chdir(folder)
    assert faired_in_this_process("in.dxf", "-o", "closed/out.dxf") == 2
    message = capsys.readouterr().err
    assert message.startswith("error: closed/out.dxf: cannot be written (Permission denied)")
    assert message.count("\n") == 1
    assert list((folder / "closed").iterdir()) == []


def test_a_full_disk_leaves_the_old_output_whole(folder, monkeypatch, capsys):
    def full(*_):
        raise OSError(28, "No space left on device")

    before = snapshot(folder)
    monkeypatch.chdir(folder)
    monkeypatch.setattr("converter.files.os.fsync", full)
    assert faired_in_this_process("in.dxf", "-o", "there.dxf", "--force") == 2
    assert "No space left" in capsys.readouterr().err
    assert snapshot(folder) == before


def test_an_output_is_replaced_with_force(folder, monkeypatch):
    monkeypatch.chdir(folder)
    assert faired_in_this_process("in.dxf", "-o", "there.dxf", "--force", "--quiet") == 0
    assert [e.dxftype() for e in ezdxf.readfile(folder / "there.dxf").modelspace()] == ["SPLINE"]


def test_the_same_drawing_gives_the_same_geometry_each_time(folder, monkeypatch):
    assert run("fair", "in.dxf", "-o", "a.dxf", "--quiet", cwd=folder).returncode == 0
    monkeypatch.chdir(folder)
    assert faired_in_this_process("in.dxf", "-o", "b.dxf", "--quiet") == 0
    first, second = (next(iter(ezdxf.readfile(folder / name).modelspace())) for name in ("a.dxf", "b.dxf"))
    np.testing.assert_array_equal(np.array(first.control_points), np.array(second.control_points))
    np.testing.assert_array_equal(np.array(first.knots), np.array(second.knots))


def test_what_r12_cannot_hold_is_printed(folder, monkeypatch, capsys):
    monkeypatch.chdir(folder)
    assert faired_in_this_process("in.dxf", "-o", "out.dxf", "--dxf-version", "R12") == 0
    printed = capsys.readouterr().out
    assert "DXF R12 has no SPLINE: written as arcs" in printed
    assert "no place for the units" in printed


def test_a_drawing_cut_off_after_its_entities_is_faired_and_the_damage_told(folder, monkeypatch, capsys):
    text = (folder / "in.dxf").read_text()
    (folder / "torn.dxf").write_text(text[: text.rindex("OBJECTS")])
    monkeypatch.chdir(folder)
    assert faired_in_this_process("torn.dxf", "-o", "out.dxf") == 0
    assert "note: the file is damaged" in capsys.readouterr().out
    assert [e.dxftype() for e in ezdxf.readfile(folder / "out.dxf").modelspace()] == ["SPLINE"]


def test_many_profiles_are_told_in_few_lines(folder):
    doc = new_drawing()
    for i in range(60):
        doc.modelspace().add_circle((10 * i, 0), 3)
    doc.modelspace().add_lwpolyline((HOOK - np.array([0.0, 90.0])).tolist(), close=True)
    doc.saveas(folder / "many.dxf")
    result = run("fair", "many.dxf", "-o", "out.dxf", cwd=folder)
    assert result.returncode == 0
    lines = result.stdout.splitlines()
    assert len(lines) < 50
    assert "SPLINE" in lines[2]  # what was faired stands first
    assert any(line.startswith("and 21 more") for line in lines)
    assert lines[-2].startswith("1 profile faired, 60 left as drawn")
