"""The deviation along NEW as CSV."""

import csv

import numpy as np
import pytest

from converter.errors import OutputError
from converter.maps.bands import bands_of
from converter.maps.table import write_table
from geometry.polyline import Polyline
from tests.comparisons import LIMITS, comparison_of, plate, revised


def rows(path):
    lines = path.read_text(encoding="utf-8").splitlines()
    notes = [line for line in lines if line.startswith("#")]
    return notes, list(csv.DictReader(line for line in lines if not line.startswith("#")))


def test_every_sample_is_a_row(tmp_path):
    comparison = revised()
    write_table(comparison, tmp_path / "map.csv")
    notes, found = rows(tmp_path / "map.csv")
    assert list(found[0]) == ["pair", "along", "x", "y", "deviation", "band"]
    assert len(found) == sum(len(pair.course.along) for pair in comparison.pairs)
    assert {row["pair"] for row in found} == {"A0:B0", "A1:B1"}
    course = comparison.pairs[0].course
    first = [row for row in found if row["pair"] == "A0:B0"]
    np.testing.assert_allclose([float(row["along"]) for row in first], course.along, rtol=1e-11)
    np.testing.assert_array_equal(
        [[float(row["x"]), float(row["y"])] for row in first][:9], course.points[:9].round(14)
    )
    np.testing.assert_allclose([float(row["deviation"]) for row in first], course.deviation, rtol=1e-8)
    bands = bands_of(comparison)
    assert [row["band"] for row in first] == [bands.bands[k].key for k in bands.index(course.deviation)]
    assert "old.dxf" in notes[0]
    assert "units: mm" in notes[0]
    assert "+-0.2 mm" in notes[0]
    assert "+ is outside" in notes[1]
    assert "plus_out +0.2 to +0.4 mm, out of tolerance" in notes[2]


def test_space_adds_a_column(tmp_path):
    old = Polyline(np.array([[0.0, 0.0, 0.0], [10.0, 0.0, 5.0]]))
    new = Polyline(np.array([[0.0, 0.0, 0.1], [10.0, 0.0, 5.1]]))
    flat = Polyline(np.array([[0.0, 0.0], [10.0, 0.0]]))
    write_table(comparison_of([(old, new), (flat, flat)], LIMITS), tmp_path / "map.csv")
    notes, found = rows(tmp_path / "map.csv")
    assert list(found[0]) == ["pair", "along", "x", "y", "z", "deviation", "band"]
    assert float(found[0]["z"]) == 0.1
    assert float(found[-1]["z"]) == 0.0
    assert "without sign in space" in notes[1]


def test_names_cannot_break_rows(tmp_path):
    comparison = comparison_of([(plate(), plate())], names=("a\nb,c.dxf", "\udce4%s.dxf"))
    comparison.pairs[0].record.new_id = 'x,"%d'
    write_table(comparison, tmp_path / "map.csv")
    notes, found = rows(tmp_path / "map.csv")
    assert len(notes) == 3
    assert found[0]["pair"] == 'A0:x,"%d'
    assert len(found) == len(comparison.pairs[0].course.along)


def test_outputs_are_guarded(tmp_path):
    path = tmp_path / "map.csv"
    path.write_text("mine", encoding="utf-8")
    with pytest.raises(OutputError, match="exists already"):
        write_table(comparison_of([(plate(), plate())]), path)
    assert path.read_text(encoding="utf-8") == "mine"
