"""Reading a table of stations: profiles of points, their knuckles, units, and an account of what was understood."""

import re
from collections import Counter
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

from converter.errors import ReadError
from converter.table.header import Columns, columns_of_header, columns_without_header, unit_of_comment
from converter.table.lines import Line, Separator, fields_of, read_lines, separator_of
from converter.table.numbers import Entry, entry_of, is_value
from converter.units import UNITLESS, Unit, unit_from_name
from geometry.arrays import FloatArray

__all__ = ["StationTable", "TableProfile", "read_table"]

_YES = frozenset({"yes", "y", "true", "1", "x", "corner", "knuckle", "k", "*"})
_NO = frozenset({"", "no", "n", "false", "0", "-", "none"})
_WORD = re.compile(r"[^\W\d]")


@dataclass(frozen=True, slots=True, eq=False)
class TableProfile:
    """Stations between blank lines.

    Attributes:
        points: shape (n, d), d = 2 or 3, in the unit of the table; the first is not repeated when closed.
        lines: line of the file of every station.
        corners: rows of the knuckles, rising.
        closed: whether the last line repeated the first station.
    """

    points: FloatArray
    lines: tuple[int, ...]
    corners: tuple[int, ...]
    closed: bool


@dataclass(frozen=True, slots=True, eq=False)
class StationTable:
    """A table as read.

    Attributes:
        path: the file.
        units: of its lengths.
        profiles: in order.
        names: headings of the coordinates, such as x and y.
        understood: how the text was read, in words.
        warnings: what the user should look at, one line each.
    """

    path: Path
    units: Unit
    profiles: list[TableProfile]
    names: tuple[str, ...]
    understood: str
    warnings: list[str]


@dataclass(slots=True)
class _Row:
    line: int
    entries: list[Entry]
    corner: bool


@dataclass(slots=True)
class _Said:
    """What the text states on the way: the decimal sign, units, and where."""

    path: Path
    decimal: str = ""
    decimal_line: int = 0
    unit: Unit | None = None
    unit_where: str = ""
    warnings: list[str] = field(default_factory=list)

    def error(self, line: int, message: str) -> ReadError:
        return ReadError(f"{self.path}: line {line}: {message}")

    def take_unit(self, unit: Unit, where: str, line: int) -> None:
        if self.unit is not None and self.unit is not unit:
            raise self.error(line, f"states {unit.symbol}, {self.unit_where} states {self.unit.symbol}; keep one")
        self.unit, self.unit_where = unit, self.unit_where or where

    def take_decimal(self, entry: Entry, line: int) -> None:
        if entry.decimal and self.decimal and entry.decimal != self.decimal:
            names = {".": "a decimal point", ",": "a decimal comma"}
            raise self.error(
                line, f"has {names[entry.decimal]}, line {self.decimal_line} {names[self.decimal]}; write one of them"
            )
        if entry.decimal and not self.decimal:
            self.decimal, self.decimal_line = entry.decimal, line


def read_table(path: Path, units: str | None = None) -> StationTable:
    """Read a table of stations from text: CSV, tabs, semicolons or blanks.

    Columns are named by a header or counted: x y, x y z, each with a corner column behind it if wanted. `#`, `%` and
    `//` begin comments, blank lines separate profiles, units stand in the header (`x (mm)`), in a comment
    (`# units: mm`) or are stated. A profile whose last station repeats its first is closed.

    Args:
        path: the file.
        units: name of the unit, overriding what the table states.

    Raises:
        ReadError: the table cannot be read; the line is named.
        LengthError: `units` is no unit.
    """
    override = None if units is None else unit_from_name(units)
    lines, said = read_lines(path), _Said(path)
    for line in lines:
        _read_comment(line, said)
    with_text = [line for line in lines if line.text and not line.blank]
    if not with_text:
        raise ReadError(f"{path}: holds no stations; give lines of x and y")
    separator = separator_of(with_text, is_value)
    header, columns = _columns(with_text, separator, said)
    blocks = _blocks(lines, header, columns, separator, said)
    unit, scale = _unit(blocks, override, said)
    profiles = [_profile(block, scale, unit, said) for block in blocks]
    _look(blocks, columns, header, said)
    return StationTable(
        path, unit, profiles, columns.names, _described(separator, columns, header, blocks, said), said.warnings
    )


def _read_comment(line: Line, said: _Said) -> None:
    try:
        unit = unit_of_comment(line.comment)
    except ValueError as error:
        raise said.error(line.number, str(error)) from error
    if unit is not None:
        said.take_unit(unit, f"line {line.number}", line.number)


def _is_header(fields: list[str]) -> bool:
    """Whether a line is words where coordinates would stand."""
    return not any(is_value(item) for item in fields[:2]) and any(_WORD.match(item) for item in fields)


def _columns(lines: list[Line], separator: Separator, said: _Said) -> tuple[Line | None, Columns]:
    first = lines[0]
    fields = fields_of(first, separator)
    try:
        if _is_header(fields):
            columns = columns_of_header(fields)
            if columns.unit is not None:
                said.take_unit(columns.unit, f"line {first.number}", first.number)
            return first, columns
        rows = [_trimmed(fields_of(line, separator)) for line in lines]
        counts = Counter(len(row) for row in rows)
        if 3 in counts and 2 in counts and len(counts) == 2 and not any(is_value(row[-1]) for row in rows if row[2:]):
            return None, columns_without_header(3, False)  # corners marked where they are
        if 4 in counts and 3 in counts and len(counts) == 2 and not any(is_value(row[3]) for row in rows if row[3:]):
            return None, columns_without_header(4, True)
        count = counts.most_common(1)[0][0]
        thirds = [row[2] for row in rows if len(row) == count and count > 2]
        return None, columns_without_header(count, any(is_value(third) for third in thirds))
    except ValueError as error:
        raise said.error(first.number, str(error)) from error


def _trimmed(fields: list[str]) -> list[str]:
    while len(fields) > 2 and not fields[-1]:
        fields = fields[:-1]
    return fields


def _blocks(
    lines: list[Line], header: Line | None, columns: Columns, separator: Separator, said: _Said
) -> list[list[_Row]]:
    blocks: list[list[_Row]] = [[]]
    heading = None if header is None else fields_of(header, separator)
    for line in lines:
        if line.blank:
            if blocks[-1]:
                blocks.append([])
            continue
        if not line.text or line is header:
            continue
        fields = fields_of(line, separator)
        if heading is not None and fields == heading:
            continue  # the header again, above another profile
        blocks[-1].append(_row(line, fields, columns, said))
    blocks = [block for block in blocks if block]
    if not blocks:
        raise ReadError(f"{said.path}: holds a header and no stations; give lines of {', '.join(columns.names)}")
    return blocks


def _row(line: Line, fields: list[str], columns: Columns, said: _Said) -> _Row:
    if len(_trimmed(fields)) > columns.count:
        hint = "; if commas are decimal signs, separate fields by semicolons" if "," in line.text else ""
        raise said.error(line.number, f"has {len(fields)} fields where {columns.count} are expected{hint}; correct it")
    entries = []
    for index, name in zip(columns.coordinates, columns.names, strict=True):
        if index >= len(fields):
            raise said.error(line.number, f"has no field for {name}; every station needs {', '.join(columns.names)}")
        try:
            entry = entry_of(fields[index])
        except ValueError as error:
            raise said.error(line.number, f"{name} {error}") from error
        said.take_decimal(entry, line.number)
        entries.append(entry)
    corner = False
    if columns.corner is not None and columns.corner < len(fields):
        word = fields[columns.corner].lower()
        if word not in _YES | _NO:
            raise said.error(line.number, f"corner {fields[columns.corner]!r} is neither yes nor no; write one of them")
        corner = word in _YES
    return _Row(line.number, entries, corner)


def _unit(blocks: list[list[_Row]], override: Unit | None, said: _Said) -> tuple[Unit, float]:
    """Return the unit of the table, and what an inch of feet-inches-eighths comes to in it."""
    if override is not None and said.unit is not None and said.unit is not override:
        said.warnings.append(f"{said.unit_where} states {said.unit.symbol}, which --units {override.symbol} overrides")
    unit = override or said.unit
    inch = unit_from_name("in")
    loft = [row for block in blocks for row in block if any(entry.loft for entry in row.entries)]
    if not loft:
        if unit is None:
            said.warnings.append("the table states no units; lengths count in its own units (state them by --units)")
        return unit or UNITLESS, 1.0
    if unit is UNITLESS:
        raise said.error(loft[0].line, "feet-inches-eighths in a table stated to be without units; state a unit")
    if unit is None:
        plain = [row.line for block in blocks for row in block if any(not e.loft and e.value for e in row.entries)]
        if plain:
            raise said.error(
                plain[0],
                f"a plain number beside feet-inches-eighths (line {loft[0].line}) may be in any unit; state it by "
                "--units, or as `# units: in` in the table",
            )
        return inch, 1.0
    return unit, 1.0 if unit is inch else inch.metres / unit.metres


def _profile(block: list[_Row], inch: float, unit: Unit, said: _Said) -> TableProfile:
    points = np.array([[e.value * inch if e.loft else e.value for e in row.entries] for row in block])
    lines = [row.line for row in block]
    corners = np.array([row.corner for row in block])
    repeats = np.flatnonzero((np.diff(points, axis=0) == 0.0).all(axis=1)) + 1
    for row in repeats.tolist():
        said.warnings.append(f"line {lines[row]} repeats the station of line {lines[row - 1]}; it counts once")
        corners[row - 1] |= corners[row]
    for row in repeats[::-1].tolist():  # a run of repeats hands its mark on to the first of it
        corners[row - 1] |= corners[row]
    keep = np.ones(len(points), dtype=np.bool_)
    keep[repeats] = False
    points, corners = points[keep], corners[keep]
    kept = [line for line, stays in zip(lines, keep.tolist(), strict=True) if stays]
    if len(points) < 2:
        raise said.error(lines[0], "is a profile of one station; blank lines part profiles: take them out or add more")
    closed = len(points) > 3 and bool((points[0] == points[-1]).all())
    if closed:
        corners[0] |= corners[-1]
        points, corners, kept = points[:-1], corners[:-1], kept[:-1]
    rows = tuple(np.flatnonzero(corners).tolist())
    return TableProfile(np.ascontiguousarray(points), tuple(kept), rows, closed)


def _look(blocks: list[list[_Row]], columns: Columns, header: Line | None, said: _Said) -> None:
    """Warn where a comma may part thousands, or a column that is counted and not named may be something else."""
    entries = [entry for block in blocks for row in block for entry in row.entries]
    with_comma = [entry for entry in entries if entry.decimal == ","]
    if with_comma and all(entry.grouped for entry in with_comma):
        said.warnings.append(
            "commas are taken for decimal signs, so that 1,234 is a little over one; take them out where they part "
            "thousands"
        )
    if header is not None or columns.z is None:
        return
    values = np.array([[entry.value for entry in row.entries] for block in blocks for row in block])
    if len(values) > 2 and (np.diff(values[:, 0]) == 1.0).all():
        said.warnings.append(
            "the first column counts 1 by 1 and is taken for x; if it numbers the stations, name the columns in a "
            "header, such as number,x,y"
        )
    if np.isin(values[:, 2], (0.0, 1.0)).all() and np.ptp(values[:, 2]) > 0.0:
        said.warnings.append(
            "the third column holds nothing but 0 and 1 and is taken for z; if it marks knuckles, put a header "
            "above, such as x,y,corner"
        )


def _described(
    separator: Separator, columns: Columns, header: Line | None, blocks: list[list[_Row]], said: _Said
) -> str:
    entries = [entry for block in blocks for row in block for entry in row.entries]
    loft = sum(entry.loft for entry in entries)
    sign = {".": "decimal points", ",": "decimal commas", "": "whole numbers"}[said.decimal]
    numbers = "feet-inches-eighths" if loft == len(entries) else f"feet-inches-eighths and {sign}" if loft else sign
    where = f"named in line {header.number}" if header is not None else "by their order, without a header"
    return f"fields separated by {separator.name}, {numbers}; columns {columns.described()}, {where}"
