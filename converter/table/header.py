"""The columns of a table: from its header, or from how many there are."""

import re
from dataclasses import dataclass

from converter.errors import LengthError
from converter.units import Unit, unit_from_name

__all__ = ["Columns", "columns_of_header", "columns_without_header", "unit_of_comment"]

_NAMES = {
    "x": "x",
    "along": "x",
    "y": "y",
    "offset": "y",
    "z": "z",
    "height": "z",
    "corner": "corner",
    "corners": "corner",
    "knuckle": "corner",
}
_HEADING = re.compile(r"\s*([^\s(\[/]+)\s*(?:\(([^)]*)\)|\[([^\]]*)\]|/\s*(\S+))?\s*")
_UNITS = re.compile(r"\bunits?\s*[:=]\s*([^\s,;.]+)", re.IGNORECASE)


@dataclass(frozen=True, slots=True)
class Columns:
    """Which field of a line is what.

    Attributes:
        x, y, z, corner: index of the field; None where there is none.
        names: headings of the coordinates as they stand, or x, y, z.
        ignored: headings of columns that are not used.
        count: number of fields.
        unit: stated in the headings; None if not.
    """

    x: int
    y: int
    z: int | None
    corner: int | None
    names: tuple[str, ...]
    ignored: tuple[str, ...]
    count: int
    unit: Unit | None = None

    @property
    def coordinates(self) -> tuple[int, ...]:
        """Indices of the coordinates."""
        return (self.x, self.y) if self.z is None else (self.x, self.y, self.z)

    def described(self) -> str:
        """Return the columns in words."""
        used = [*self.names, *(["corner"] if self.corner is not None else [])]
        return ", ".join(used) + (f" (not used: {', '.join(self.ignored)})" if self.ignored else "")


def columns_of_header(fields: list[str]) -> Columns:
    """Return the columns that a header names.

    `x` or `along`, `y` or `offset`, `z` or `height`, and `corner` or `knuckle`, in any order and any case, with a unit
    behind where wanted: `x (mm)`, `y [in]`. Where both names of one coordinate stand, the first of the pair is it.

    Raises:
        ValueError: x or y is not named, a name stands twice, or units differ; with what to do.
    """
    while fields and not fields[-1]:
        fields = fields[:-1]
    found: dict[str, int] = {}
    units: list[Unit] = []
    plain = [(match[1].lower() if (match := _HEADING.fullmatch(field)) else field.lower()) for field in fields]
    for index, (field, name) in enumerate(zip(fields, plain, strict=True)):
        role = _NAMES.get(name)
        if role is None:
            continue
        if role in found and plain[found[role]] == name:
            raise ValueError(f"column {field!r} stands twice in the header; name each column once")
        if role in found and name != role:  # `along` beside `x` is a result, not a coordinate
            continue
        found[role] = index
    for role in ("x", "y", "z"):
        match = _HEADING.fullmatch(fields[found[role]]) if role in found else None
        stated = match and next((part for part in match.groups()[1:] if part), None)
        if stated:
            units.append(_unit(stated))
    missing = [role for role in ("x", "y") if role not in found]
    if missing:
        either = {"x": "x (or along)", "y": "y (or offset)"}
        raise ValueError(f"the header names no column {' and '.join(either[role] for role in missing)}; name it")
    if any(unit is not units[0] for unit in units):
        raise ValueError(f"columns are in {' and '.join(unit.symbol for unit in units)}; give all in one unit")
    names = tuple(plain[found[role]] for role in ("x", "y", "z") if role in found)
    ignored = tuple(field or f"column {i + 1}" for i, field in enumerate(fields) if i not in found.values())
    return Columns(
        found["x"],
        found["y"],
        found.get("z"),
        found.get("corner"),
        names,
        ignored,
        len(fields),
        units[0] if units else None,
    )


def columns_without_header(count: int, third_is_number: bool) -> Columns:
    """Return the columns of a table without header: x y, x y z, x y corner or x y z corner.

    Args:
        count: fields in most lines.
        third_is_number: whether the third field holds numbers.

    Raises:
        ValueError: another number of fields; with what to do.
    """
    if count == 2:
        return Columns(0, 1, None, None, ("x", "y"), (), 2)
    if count == 3:
        if third_is_number:
            return Columns(0, 1, 2, None, ("x", "y", "z"), (), 3)
        return Columns(0, 1, None, 2, ("x", "y"), (), 3)
    if count == 4 and third_is_number:
        return Columns(0, 1, 2, 3, ("x", "y", "z"), (), 4)
    if count < 2:
        raise ValueError("one field where x and y must stand; separate fields by commas, semicolons, tabs or blanks")
    raise ValueError(f"{count} fields and no header that says which are x and y; put a header above, such as x,y")


def unit_of_comment(comment: str) -> Unit | None:
    """Return the unit of a comment such as `units: mm`; None where it states none.

    Raises:
        ValueError: the unit is not known.
    """
    match = _UNITS.search(comment)
    return None if match is None else _unit(match[1])


def _unit(name: str) -> Unit:
    try:
        return unit_from_name(name)
    except LengthError as error:
        raise ValueError(str(error)) from error
