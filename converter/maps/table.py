"""The deviation along NEW as a table (CSV)."""

import csv
import io
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, BinaryIO

import numpy as np

from converter.files import write_whole
from converter.maps.bands import Bands, bands_of
from converter.maps.legend import SENSE

if TYPE_CHECKING:
    from converter.jobs.comparison import Compared, Comparison

__all__ = ["write_table"]

_ROWS = 20_000  # written at a time


def write_table(comparison: "Comparison", path: Path, force: bool = False, inputs: Sequence[Path] = ()) -> None:
    """Write the samples of the deviation along NEW: `pair, along, x, y, deviation, band`.

    Lines that begin with `#` say which files, units, sense of sign and limits; a column `z` follows `y` where a profile
    is in space. Samples follow one another closely and are at every vertex; they are no proof of the largest deviation.

    Args:
        comparison: as measured.
        path: the output; it appears whole or not at all.
        force: whether an existing file may be replaced.
        inputs: files that must never be written.

    Raises:
        OutputError: the output exists without `force`, is an input, or cannot be written.
    """
    write_whole(path, lambda stream: _write(comparison, stream), force, inputs)


def _write(comparison: "Comparison", stream: BinaryIO) -> None:
    record = comparison.record
    bands = bands_of(comparison)
    space = any(pair.new.dimension == 3 for pair in comparison.pairs)
    limits = "none stated" if comparison.limits is None else comparison.limits.stated
    notes = [
        f"OLD {record.old}, NEW {record.new}, units: {record.units}, tolerance: {limits}",
        f"deviation of NEW from OLD, {SENSE}{'; without sign in space' if space else ''}",
        "bands: " + "; ".join(f"{band.key} {band.meaning}" for band in bands.bands),
    ]
    head = "".join(f"# {_one_line(note)}\n" for note in notes)
    head += ",".join(["pair", "along", "x", "y", *(["z"] if space else []), "deviation", "band"]) + "\n"
    stream.write(head.encode("utf-8", "replace"))
    for pair in comparison.pairs:
        _write_pair(pair, bands, space, stream)


def _one_line(text: str) -> str:
    return "".join(sign if sign.isprintable() else "?" for sign in text)


def _field(text: str) -> str:
    """Return text as one field of a CSV row."""
    row = io.StringIO()
    csv.writer(row, lineterminator="").writerow([_one_line(text)])
    return row.getvalue()


def _write_pair(pair: "Compared", bands: Bands, space: bool, stream: BinaryIO) -> None:
    course = pair.course
    names = np.array([band.key for band in bands.bands])
    name = _field(f"{pair.record.old_id}:{pair.record.new_id}").replace("%", "%%")
    row = f"{name},%.12g,%.15g,%.15g,{'%.15g,' if space else ''}%.9g,%s\n"
    points = course.points
    if space and points.shape[1] == 2:
        points = np.column_stack([points, np.zeros(len(points))])
    numbers = np.column_stack([course.along, points, course.deviation])
    for first in range(0, len(numbers), _ROWS):
        chunk = numbers[first : first + _ROWS]
        table = np.empty((len(chunk), chunk.shape[1] + 1), dtype=object)
        table[:, :-1] = chunk
        table[:, -1] = names[bands.index(chunk[:, -1])]
        stream.write((row * len(chunk) % tuple(table.ravel().tolist())).encode("utf-8", "replace"))
