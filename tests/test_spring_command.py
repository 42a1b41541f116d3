"""The command `spring`: tables and drawings in, drawings and points out, and a judgement of the stations."""

import json

import ezdxf
import numpy as np
import pytest

import converter.cli
from tests.test_samples import SAMPLES
from tests.traced_drawings import new_drawing


@pytest.fixture
def folder(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    return tmp_path


def spring(*arguments):
    with pytest.raises(SystemExit) as caught:
        converter.cli.main(["spring", *map(str, arguments)])
    return caught.value.code


def points_of(path):
    rows = [line for line in path.read_text().splitlines() if line and not line.startswith("#")]
    return np.array([[float(value) for value in row.split(",")] for row in rows[1:]]), rows[0]


def test_the_sample_table_is_sprung_through_every_station(folder, capsys):
    assert spring(SAMPLES / "stem-stations.csv", "-o", "stem.dxf") == 0
    assert "14, open" in capsys.readouterr().out
    (spline,) = ezdxf.readfile("stem.dxf").modelspace()
    assert spline.dxftype() == "SPLINE"
    dense = np.array([tuple(p)[:2] for p in spline.construction_tool().approximate(20_000)])
    rows = [line.split(",") for line in (SAMPLES / "stem-stations.csv").read_text().splitlines()[3:]]
    for row in rows:
        assert np.linalg.norm(dense - [float(row[0]), float(row[1])], axis=1).min() < 0.05
    assert not ezdxf.readfile("stem.dxf").audit().has_errors


@pytest.mark.parametrize(
    "text",
    [
        "x,y\n0,0\n10,2\n20,5\n30,9\n",
        "0;0\n10,0;2,0\n20;5\n30;9\n",
        "0\t0\n10\t2\n20\t5\n30\t9\n",
        "# units: mm\n0 0\n10 2\n20 5\n\n",
        "x y\r\n0 0\r\n10 2\r\n20 5\r\n",
    ],
)
def test_tables_of_many_hands_are_read(folder, capsys, text):
    (folder / "in.txt").write_text(text, newline="")
    assert spring("in.txt", "-o", "out.csv", "--units", "mm", "--stations", "keep", "--chord-error", "0.01") == 0
    assert "read as:" in capsys.readouterr().out
    found, names = points_of(folder / "out.csv")
    assert names == "x,y,along,heading_deg,radius"
    for station in ((0.0, 0.0), (10.0, 2.0), (20.0, 5.0)):
        assert np.linalg.norm(found[:, :2] - station, axis=1).min() < 1e-9


def test_points_keep_every_limit(folder):
    angle = np.linspace(0.0, 2.0, 9)
    np.savetxt("arc.csv", 100.0 * np.stack([np.cos(angle), np.sin(angle)], axis=1), delimiter=",", header="x,y")
    limits = ("--chord-error", 0.02, "--max-step", 3.0, "--max-turn", 1.5)
    assert spring("arc.csv", "-o", "out.csv", *limits, "--quiet") == 0
    found, _ = points_of(folder / "out.csv")
    step = np.diff(found[:, :2], axis=0)
    assert np.linalg.norm(step, axis=1).max() <= 3.0 * (1.0 + 1e-12)
    heading = np.unwrap(np.arctan2(step[:, 1], step[:, 0]))
    assert np.abs(np.degrees(np.diff(heading))).max() <= 1.5 + 1e-9
    assert np.abs(np.linalg.norm(found[:, :2], axis=1) - 100.0).max() < 0.02
    assert found[:, 4] == pytest.approx(100.0, rel=0.05)
    assert len(found) <= 1.05 * 2.0 / np.radians(1.5) + 3


def test_a_mistyped_station_is_named_with_its_line(folder, capsys):
    x = np.arange(0.0, 121.0, 10.0)
    y = np.round(0.01 * x**2 + 5.0 * np.sin(x / 40.0), 1)
    rows = [f"{a:g},{b:.1f}" for a, b in zip(x, y, strict=True)]
    y_wrong = f"{x[6]:g},{y[6] * 10.0:.1f}"
    (folder / "in.csv").write_text("x,y\n" + "\n".join([*rows[:6], y_wrong, *rows[7:]]) + "\n")
    assert spring("in.csv", "--report", "r.json") == 0
    assert "check: line 8: y" in capsys.readouterr().out
    (suspect,) = json.loads((folder / "r.json").read_text())["profiles"][0]["judgement"]["suspects"]
    assert suspect["fair"] == pytest.approx(y[6], abs=1.0)
    (folder / "in.csv").write_text("x,y\n" + "\n".join(rows) + "\n")
    assert spring("in.csv") == 0
    assert "mistyped" not in capsys.readouterr().out


def test_an_exploded_circle_comes_back_in_full_size(folder):
    doc = new_drawing()
    angle = 2.0 * np.pi * np.arange(48) / 48
    points = 8.0 * np.stack([np.cos(angle), np.sin(angle)], axis=1)
    for a, b in zip(points, np.roll(points, -1, axis=0), strict=True):
        doc.modelspace().add_line(a.tolist(), b.tolist())
    doc.saveas("in.dxf")
    assert spring("in.dxf", "-o", "out.dxf", "--as", "arcs", "--quiet") == 0
    (circle,) = ezdxf.readfile("out.dxf").modelspace()
    assert circle.dxftype() == "CIRCLE"
    assert circle.dxf.radius == pytest.approx(8.0, abs=1e-4)


@pytest.mark.parametrize(
    ("text", "words"),
    [("x,y\n1,2\n3,q\n", "line 3: y 'q' is not a number"), ("", "in.csv"), ("x,y\n1,2\n", "in.csv")],
)
def test_a_table_that_cannot_be_used_is_one_line_and_exit_code_2(folder, capsys, text, words):
    (folder / "in.csv").write_text(text)
    assert spring("in.csv", "-o", "out.dxf") == 2
    said = capsys.readouterr().err
    assert words in said
    assert said.count("\n") == 1
    assert not (folder / "out.dxf").exists()
