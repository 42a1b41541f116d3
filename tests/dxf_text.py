"""A plain reader of ASCII DXF for the tests: group codes and values, entity by entity, without any library."""

from pathlib import Path

Tags = list[tuple[int, str]]


def records(path: Path) -> dict[str, list[Tags]]:
    """Return the records (tags from one group code 0 to the next) of every section, in file order."""
    lines = path.read_bytes().decode("utf-8", "surrogateescape").replace("\r\n", "\n").split("\n")
    tags = [(int(code), value) for code, value in zip(lines[0::2], lines[1::2], strict=False) if code.strip()]
    sections: dict[str, list[Tags]] = {}
    current: list[Tags] = []
    waiting = False
    for code, value in tags:
        if code == 0 and value == "SECTION":
            waiting = True
        elif waiting and code == 2:
            current = sections.setdefault(value, [])
            waiting = False
        elif code == 0:
            current.append([(code, value)])
        elif current:
            current[-1].append((code, value))
    return sections


def handle(record: Tags) -> str:
    """Return the handle of a record, or an empty string."""
    wanted = 105 if record[0][1] == "DIMSTYLE" else 5
    return next((value for code, value in record if code == wanted), "")
