"""Numbers of a table: with decimal point or comma, or in feet, inches and eighths."""

import math
import re
from dataclasses import dataclass

__all__ = ["Entry", "entry_of", "is_value"]

_POINT = re.compile(r"[-+]?(?:[0-9]+\.?[0-9]*|\.[0-9]+)(?:[eE][-+]?[0-9]+)?", re.ASCII)
_COMMA = re.compile(r"[-+]?(?:[0-9]+,[0-9]*|,[0-9]+)(?:[eE][-+]?[0-9]+)?", re.ASCII)
_LOFT = re.compile(r"([-+]?)([0-9]+)-([0-9]+)-([0-9]+)(\+?)", re.ASCII)
_BOTH = re.compile(r"[-+]?[0-9][0-9.,]*[.,][0-9.,]*", re.ASCII)
_GROUPED = re.compile(r"[-+]?[1-9][0-9]{0,2},[0-9]{3}", re.ASCII)
_MOST = 1e12
_LONG = 40  # signs: no number of a table is longer


@dataclass(frozen=True, slots=True)
class Entry:
    """A number as written.

    Attributes:
        value: in the unit of the table, or in inches for `loft`.
        decimal: the decimal sign it has: ".", "," or "" for none.
        loft: whether it is in feet, inches and eighths.
        grouped: whether it has a comma with three figures behind it, as thousands are parted by some.
    """

    value: float
    decimal: str
    loft: bool = False
    grouped: bool = False


def is_value(text: str) -> bool:
    """Whether text looks like a number of a table, right or wrong: it begins as one does."""
    body = text.strip().lstrip("+-")
    return bool(body) and (body[0] in "0123456789" or (body[0] in ".," and body[1:2].isdigit()))


def entry_of(text: str) -> Entry:
    """Read a number: `12.5`, `12,5`, `1.25e2`, or `3-4-5` (3 feet 4 inches 5 eighths; `+` adds half an eighth).

    Feet, inches and eighths of an inch are how offsets are commonly written in mould lofts. A sign goes in front.

    Raises:
        ValueError: with the reason and what to do.
    """
    minus = text.replace("\u2212", "-")  # the typographic minus sign of text programs
    if len(minus) > _LONG:
        raise ValueError(f"{text[:_LONG]!r}... is too long for a number; write it with fewer figures")
    match = _LOFT.fullmatch(minus)
    if match is not None:
        return _loft(text, match)
    for pattern, sign in ((_POINT, "."), (_COMMA, ",")):
        if pattern.fullmatch(minus):
            value = float(minus.replace(",", "."))
            if not math.isfinite(value) or abs(value) > _MOST:
                raise ValueError(f"{text!r} is beyond {_MOST:g}, too large for a coordinate; correct it")
            return Entry(value, sign if sign in minus else "", grouped=bool(_GROUPED.fullmatch(minus)))
    if _BOTH.fullmatch(minus):
        raise ValueError(f"{text!r} has signs between thousands, or two decimal signs; write one decimal sign alone")
    if not text:
        raise ValueError("is empty where a number must stand; give a number or take the line out")
    raise ValueError(f"{text!r} is not a number; correct it or take the line out")


def _loft(text: str, match: "re.Match[str]") -> Entry:
    sign, feet, inches, eighths, half = match.groups()
    if int(inches) > 11 or int(eighths) > 7:
        raise ValueError(
            f"{text!r} is not feet-inches-eighths: inches go from 0 to 11, eighths from 0 to 7; correct it"
        )
    value = 12.0 * int(feet) + int(inches) + (int(eighths) + (0.5 if half else 0.0)) / 8.0
    if value > _MOST:
        raise ValueError(f"{text!r} is beyond {_MOST:g}, too large for a coordinate; correct it")
    return Entry(-value if sign == "-" else value, "", True)
