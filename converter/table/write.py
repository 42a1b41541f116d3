"""Tables of points and of ordinates, written as text in pieces, so that their length costs no memory."""

from collections.abc import Iterable, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, BinaryIO

import numpy as np

from converter.files import write_whole
from geometry.arrays import FloatArray

if TYPE_CHECKING:
    from geometry.dense import Dense

__all__ = ["write_ordinates", "write_points"]

_ROWS = 20_000  # written at a time


def write_points(
    path: Path,
    profiles: Iterable[tuple[str, "Dense"]],
    units: str,
    dimension: int,
    notes: Sequence[str] = (),
    force: bool = False,
    inputs: Sequence[Path] = (),
) -> None:
    """Write points along curves: x, y[, z], along, heading_deg, radius.

    A comment states the units; before every profile stands a comment with its name, between profiles a blank line, so
    that the table can be read again. Coordinates have as many figures as it takes to read the same number back, the
    others 12 and 9. Heading is counterclockwise from x, radius positive in left turns and `inf` where it is straight.

    Args:
        path: the output; it appears whole or not at all.
        profiles: name and points, of one dimension.
        units: symbol of the unit.
        dimension: 2, or 3 for a column z.
        notes: comments on top.
        force: whether an existing file may be replaced.
        inputs: files that must never be written.

    Raises:
        OutputError: the output exists without `force`, is an input, or cannot be written.
    """

    def write(stream: BinaryIO) -> None:
        columns = ["x", "y", *(["z"] if dimension == 3 else []), "along", "heading_deg", "radius"]
        _head(stream, [*notes, f"units: {units}"], columns)
        row = "%r," * dimension + "%.12g,%.9g,%.9g\n"
        for number, (name, dense) in enumerate(profiles):
            stream.write(_text(("\n" if number else "") + f"# profile {_one_line(name)}\n"))
            for low in range(0, len(dense.points), _ROWS):
                part = slice(low, low + _ROWS)
                points = dense.points[part]
                numbers = np.column_stack(
                    [points, dense.along[part], np.degrees(dense.heading[part]), dense.radius[part]]
                )
                stream.write((row * len(numbers) % tuple(numbers.ravel().tolist())).encode("ascii"))

    write_whole(path, write, force, inputs)


def write_ordinates(
    path: Path,
    branches: Iterable[tuple[str, FloatArray]],
    names: Sequence[str],
    units: str,
    notes: Sequence[str] = (),
    force: bool = False,
    inputs: Sequence[Path] = (),
) -> None:
    """Write ordinates of curves, a blank line between branches.

    Args:
        path: the output; it appears whole or not at all.
        branches: name and points, shape (n, d), all of one d.
        names: headings of the coordinates.
        units: symbol of the unit.
        notes: comments on top.
        force: whether an existing file may be replaced.
        inputs: files that must never be written.

    Raises:
        OutputError: the output exists without `force`, is an input, or cannot be written.
    """

    def write(stream: BinaryIO) -> None:
        _head(stream, [*notes, f"units: {units}"], names)
        for number, (name, points) in enumerate(branches):
            stream.write(_text(("\n" if number else "") + f"# profile {_one_line(name)}\n"))
            row = ",".join(["%r"] * points.shape[1]) + "\n"
            stream.write((row * len(points) % tuple(points.ravel().tolist())).encode("ascii"))

    write_whole(path, write, force, inputs)


def _head(stream: BinaryIO, notes: Sequence[str], columns: Sequence[str]) -> None:
    stream.write(_text("".join(f"# {_one_line(note)}\n" for note in notes) + ",".join(columns) + "\n"))


def _one_line(text: str) -> str:
    return "".join(sign if sign.isprintable() else "?" for sign in text)


def _text(text: str) -> bytes:
    return text.encode("utf-8", "replace")
