"""The lines of a table: encoding, comments, blank lines, and what separates the fields."""

import csv
import re
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

from converter.errors import ReadError

__all__ = ["Line", "Separator", "fields_of", "read_lines", "separator_of"]

_COMMENTS = ("#", "%", "//")
_MOST_BYTES = 200_000_000
_COMMA_NUMBER = re.compile(r"[-+]?[0-9]+,[0-9]+(?:[eE][-+]?[0-9]+)?")


@dataclass(frozen=True, slots=True)
class Line:
    """A line of the file.

    Attributes:
        number: from 1.
        text: without comment and outer blanks; empty for a line that holds nothing else.
        comment: what stands behind the comment sign, or empty.
    """

    number: int
    text: str
    comment: str

    @property
    def blank(self) -> bool:
        """Whether it parts profiles: empty, or nothing but separators; a line with a comment alone does not."""
        return not self.comment and not self.text.strip(",;\t ")


@dataclass(frozen=True, slots=True)
class Separator:
    """What separates fields; `sign` is None for blanks."""

    name: str
    sign: str | None


TABS, SEMICOLONS = Separator("tabs", "\t"), Separator("semicolons", ";")
COMMAS, BLANKS = Separator("commas", ","), Separator("blanks", None)


def read_lines(path: Path) -> list[Line]:
    """Return the lines of a text file in UTF-8, with or without a byte order mark, or in UTF-16 with one.

    Raises:
        ReadError: the file cannot be read, is no text, or is in another encoding.
    """
    try:
        if path.is_dir():
            raise ReadError(f"{path}: is a folder; give a table of stations or a DXF file")
        if path.stat().st_size > _MOST_BYTES:
            raise ReadError(f"{path}: is larger than {_MOST_BYTES // 1_000_000} MB, too large for a table; split it")
        data = path.read_bytes()
    except OSError as error:
        raise ReadError(f"{path}: cannot be read ({error.strerror or error}); check the name") from error
    text = _decoded(path, data)
    # only these ends of lines: other signs that count as such may stand in a comment
    return [_line(number, line) for number, line in enumerate(re.split(r"\r\n|\n|\r", text), start=1)]


def _decoded(path: Path, data: bytes) -> str:
    if data.startswith((b"\xff\xfe", b"\xfe\xff")):
        try:
            return data.decode("utf-16")
        except UnicodeDecodeError as error:
            raise ReadError(f"{path}: begins as UTF-16 text and is not; save it as UTF-8 text") from error
    if b"\0" in data:
        raise ReadError(f"{path}: is not text (it holds zero bytes); give a table as text, such as CSV, or a DXF file")
    try:
        return data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = len(re.findall(rb"\r\n|\n|\r", data[: error.start])) + 1
        byte = data[error.start]
        raise ReadError(f"{path}: line {line}: byte {byte:#04x} is not UTF-8 text; save the table as UTF-8") from error


def _line(number: int, raw: str) -> Line:
    text = raw.strip(" \v\f\u00a0\ufeff")
    found = [text.find(sign) for sign in _COMMENTS if sign in text]
    at = min(found, default=len(text))
    return Line(number, text[:at].rstrip(" \u00a0"), text[at:].lstrip("#%/ ").strip() or ("#" if found else ""))


def separator_of(lines: list[Line], is_value: Callable[[str], bool]) -> Separator:
    """Return what separates the fields, from all lines that hold any.

    Tabs and semicolons are separators wherever most lines have them. Commas are, unless blanks part the fields and
    every comma stands inside a number: such a line read by its commas would have two numbers in one field.

    Args:
        lines: those with text.
        is_value: whether a piece of text looks like a number.
    """
    texts = [line.text for line in lines]
    most = 0.5 * len(texts)
    if sum("\t" in text for text in texts) > most:
        pieces = [piece.split() for text in texts for piece in text.split("\t")]
        columns = any(len(words) > 1 and all(map(is_value, words)) for words in pieces)  # tabs and blanks, mixed
        return BLANKS if columns else TABS
    if sum(";" in text for text in texts) > most:
        return SEMICOLONS
    with_comma = [text for text in texts if "," in text]
    if len(with_comma) <= most:
        return BLANKS
    decimal = sum(_decimal_commas(text.split(), is_value) for text in with_comma)
    return BLANKS if decimal > 0.5 * len(with_comma) else COMMAS


def _decimal_commas(words: list[str], is_value: Callable[[str], bool]) -> bool:
    """Whether a line parted at its blanks has two values or more, with commas inside numbers only."""
    numbers = (_COMMA_NUMBER.fullmatch(word) or ("," not in word and is_value(word)) for word in words[:3])
    return len(words) > 1 and any("," in word for word in words) and all(numbers)


def fields_of(line: Line, separator: Separator) -> list[str]:
    """Return the fields of a line, without outer blanks; quotes about a field are taken off."""
    if separator.sign is None:
        return line.text.split()
    if '"' not in line.text:
        return [field.strip() for field in line.text.split(separator.sign)]
    try:
        row = next(csv.reader([line.text], delimiter=separator.sign, skipinitialspace=True), [])
    except csv.Error:  # a quote that does not end, say: the field will be named as it stands
        row = line.text.split(separator.sign)
    return [field.strip() for field in row]
