"""The command `compare` as it is called: summary, outputs, exit codes, errors."""

import csv
import json

import ezdxf
import pytest

import converter.cli
from tests.test_compare import HOLES, RIM, save


@pytest.fixture
def folder(tmp_path, monkeypatch):
    save(tmp_path / "old.dxf")
    save(tmp_path / "same.dxf")
    save(tmp_path / "new.dxf", [RIM[0], (40.0, 0.0), (45.0, -0.8), (50.0, 0.0), *RIM[1:]])
    save(tmp_path / "less.dxf", holes=HOLES[:2])
    monkeypatch.chdir(tmp_path)
    return tmp_path


def compare(*arguments):
    with pytest.raises(SystemExit) as caught:
        converter.cli.main(["compare", *map(str, arguments)])
    return caught.value.code


def test_without_a_tolerance_there_are_figures_and_no_verdict(folder, capsys):
    assert compare("old.dxf", "new.dxf") == 0
    printed = capsys.readouterr().out.splitlines()
    assert printed[0] == "OLD old.dxf, NEW new.dxf, units: mm"
    assert printed[-1].startswith("no tolerance was stated, so there is no verdict; certified deviation at most 0.8")


def test_out_of_tolerance_is_exit_code_1_and_names_the_zone(folder, capsys):
    assert compare("old.dxf", "new.dxf", "--tolerance", "0.1mm") == 1
    printed = capsys.readouterr().out
    assert "OUT OF +-0.1 mm: 1 of 4 profiles in 1 zone" in printed
    row = next(line.split() for line in printed.splitlines() if line.split()[2:3] == ["outside"])
    assert row[3:6] == ["+0.8", "45", "-0.8"]


def test_within_tolerance_is_exit_code_0(folder, capsys):
    assert compare("old.dxf", "same.dxf", "--tolerance", 0.001) == 0
    assert "WITHIN +-0.001 mm: 4 profiles compared" in capsys.readouterr().out
    assert compare("old.dxf", "new.dxf", "--tolerance", 1, "--verdict") == 0
    assert compare("old.dxf", "new.dxf", "--tolerance", 0.7, "--verdict", "--quiet") == 1


def test_a_profile_without_a_partner_is_exit_code_1(folder, capsys):
    assert compare("old.dxf", "less.dxf", "--tolerance", 0.1) == 1
    printed = capsys.readouterr().out
    assert "only in OLD: CIRCLE" in printed
    assert "OUT OF +-0.1 mm: 1 profile without a partner" in printed
    assert compare("old.dxf", "less.dxf") == 0


def test_a_profile_zone_is_told_apart_from_a_tolerance(folder, capsys):
    assert compare("old.dxf", "new.dxf", "--profile-zone", 1.2, "--zone-shift", 0.3, "--report", "r.json") == 0
    assert "WITHIN profile zone 1.2 mm, middle at +0.3" in capsys.readouterr().out
    record = json.loads((folder / "r.json").read_text())
    assert record["tolerance"] is None
    assert record["profile_zone"] == {"width": 1.2, "shift": 0.3}
    assert compare("old.dxf", "new.dxf", "--profile-zone", 1.2, "--zone-shift=-0.3mm") == 1


def test_all_outputs_are_written_and_agree(folder, capsys):
    outputs = ("-o", "map.dxf", "--page", "map.html", "--table", "map.csv", "--report", "r.json")
    assert compare("old.dxf", "new.dxf", "--tolerance", 0.1, *outputs) == 1
    assert "-> map.dxf, map.html, map.csv, r.json" in capsys.readouterr().out.splitlines()[0]
    record = json.loads((folder / "r.json").read_text())
    (zone,) = [zone for pair in record["pairs"] for zone in pair["zones"]]
    assert zone["peak"] == pytest.approx(0.8, abs=1e-6)
    assert not ezdxf.readfile("map.dxf").audit().has_errors
    rows = csv.DictReader(line for line in (folder / "map.csv").read_text().splitlines() if not line.startswith("#"))
    assert max(float(row["deviation"]) for row in rows) == pytest.approx(0.8)
    assert "OUT OF" in (folder / "map.html").read_text()


def test_the_record_has_the_keys_that_scripts_rely_on(folder):
    assert compare("old.dxf", "less.dxf", "--tolerance", 0.1, "--report", "r.json", "--quiet") == 1
    record = json.loads((folder / "r.json").read_text())
    assert {"command", "old", "new", "tolerance", "align", "transform", "pairs", "only_in_old", "only_in_new"} <= set(
        record
    )
    assert record["within_tolerance"] is False
    pair = record["pairs"][0]
    assert {"old_id", "new_id", "deviation", "zones", "within_tolerance"} <= set(pair)
    assert {"certified", "measured", "rms", "mean_signed", "max_plus", "max_minus"} <= set(pair["deviation"])


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (("--verdict",), "there is no verdict without"),
        (("--verdict", "--tolerance", "1", "-o", "m.dxf"), "leaves nothing to be drawn"),
        (("-o", "map.svg"), "ends in .dxf"),
        (("-o", "m.dxf", "--table", "m.dxf"), "two outputs have this name"),
        (("--tolerance", "1", "--profile-zone", "1"), "state one of them"),
        (("--tolerance", "-1"), "is not a length"),
        (("--zone-shift", "1"), "state its width by --profile-zone"),
        (("--layer", "NONE"), "there is no layer 'NONE'"),
        (("--report", "old.dxf", "--force"), "is the input file"),
    ],
)
def test_what_cannot_be_used_is_one_line_and_exit_code_2(folder, capsys, arguments, words):
    before = (folder / "old.dxf").read_bytes()
    assert compare("old.dxf", "new.dxf", *arguments) == 2
    said = capsys.readouterr().err
    assert words in said
    assert said.count("\n") == 1
    assert (folder / "old.dxf").read_bytes() == before
    assert not (folder / "m.dxf").exists()


def test_existing_outputs_are_kept_without_force(folder, capsys):
    (folder / "map.csv").write_text("mine")
    assert compare("old.dxf", "new.dxf", "-o", "map.dxf", "--table", "map.csv") == 2
    assert (folder / "map.csv").read_text() == "mine"
    assert not (folder / "map.dxf").exists()  # checked before any work
    assert compare("old.dxf", "new.dxf", "--table", "map.csv", "--force", "--quiet") == 0
    assert (folder / "map.csv").read_text() != "mine"
