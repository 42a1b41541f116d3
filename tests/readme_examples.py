"""The examples of README.md: found, run in a folder of their own, and compared with what the page shows.

An example is a line `$ ...` in a block fenced with ```console, and the lines up to the next such line are what it
printed. `fairbatten` runs in this process; `| head -n N` and `| tail -n N` keep lines as the shell would; `echo $?`
prints the exit code of the command before it.
"""

import contextlib
import io
import re
import shlex
import shutil
from dataclasses import dataclass
from pathlib import Path

import converter.cli

ROOT = Path(__file__).parent.parent
README = ROOT / "README.md"
_BLOCK = re.compile(r"^```console\n(.*?)^```$", re.MULTILINE | re.DOTALL)
_COUNTED = re.compile(r" (control points|arcs|lines|vertices)")
_COUNTED_AFTER = re.compile(r"(-> | (spline|arcs|lines) (\d+ )?|\(least )$")  # before a count in a table
_NUMBER = re.compile(r"[-+]?\d+\.?\d*(?:e[-+]?\d+)?")


@dataclass(frozen=True)
class Example:
    """A command as README shows it, with the lines it is said to print, and where these stand in the text."""

    command: str
    shown: tuple[str, ...]
    start: int
    end: int


def examples(text):
    """Return the examples of the page in order."""
    found = []
    for block in _BLOCK.finditer(text):
        pieces = re.split(r"^\$ ", block[1], flags=re.MULTILINE)
        assert pieces[0] == "", f"a block does not begin with a command: {block[1]!r}"
        at = block.start(1)
        for piece in pieces[1:]:
            command, _, shown = piece.partition("\n")
            start = at + len("$ ") + len(command) + 1
            at = start + len(shown)
            found.append(Example(command, tuple(shown.splitlines()), start, at))
    return found


def prepare(folder):
    """Copy the samples, which is all that the examples need."""
    shutil.copytree(ROOT / "samples", folder / "samples", ignore=shutil.ignore_patterns("__pycache__"))


def run(command, last_code):
    """Run one example in the current folder; return what it prints and its exit code."""
    if command == "echo $?":
        return [str(last_code)], 0
    command, _, keep = command.partition(" | ")
    words = shlex.split(command)
    assert words[0] == "fairbatten", f"not a command that is known here: {command}"
    printed = io.StringIO()
    with contextlib.redirect_stdout(printed), contextlib.redirect_stderr(printed):
        try:
            converter.cli.main(words[1:])
        except SystemExit as stop:
            code = int(stop.code or 0)
    lines = [line.rstrip() for line in printed.getvalue().splitlines()]
    if keep:
        which, count = re.fullmatch(r"(head|tail) -n (\d+)", keep).groups()
        lines = lines[: int(count)] if which == "head" else lines[-int(count) :]
    return lines, code


def run_all(found, folder):
    """Run examples one after the other in a folder; return the printed lines of each."""
    prepare(folder)
    printed, code = [], 0
    with contextlib.chdir(folder):
        for example in found:
            lines, code = run(example.command, code)
            printed.append(lines)
    return printed


def agrees(shown, printed):
    """Tell whether a shown line stands for a printed one.

    Words and whole numbers must be the same, but other processors and library releases round otherwise: numbers
    written with a point may differ by a twentieth or by 0.005, whichever is more, and how many control points, arcs,
    lines, vertices and inflections come out, or are the least, by a fifth or by 2. Spaces count as one, since columns
    are as wide as their numbers.
    """
    a, b = " ".join(shown.split()), " ".join(printed.split())
    if _NUMBER.sub("#", a) != _NUMBER.sub("#", b):
        return False
    return all(_near(one, other, a) for one, other in zip(_NUMBER.finditer(a), _NUMBER.finditer(b), strict=True))


def _near(one, other, line):
    if any("." in number or "e" in number for number in (one[0], other[0])):
        share, least = 0.05, 0.005
    elif _COUNTED.match(line, one.end()) or _COUNTED_AFTER.search(line, 0, one.start()):
        share, least = 0.2, 2.0
    else:
        return one[0] == other[0]
    x, y = float(one[0]), float(other[0])
    return abs(x - y) <= max(share * max(abs(x), abs(y)), least)
