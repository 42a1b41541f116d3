"""Output files: never over another file without leave, never in part.

A file is written beside its place under a temporary name, forced to the disk, and then takes its name in one step.
"""

import contextlib
import os
import secrets
from collections.abc import Callable, Iterable
from pathlib import Path
from typing import BinaryIO

from converter.errors import OutputError

__all__ = ["check_output", "write_text", "write_whole"]


def check_output(path: Path, force: bool, inputs: Iterable[Path] = ()) -> None:
    """Check before any work that an output may be written.

    Args:
        path: the output.
        force: whether an existing file may be replaced.
        inputs: files that must never be written, reached by whatever link.

    Raises:
        OutputError: the output is an input, exists without `force`, is a folder or lies in none.
    """
    for source in inputs:
        if _same(path, source):
            raise OutputError(f"{path}: is the input file, which is never changed; choose another output")
    if path.is_dir():
        raise OutputError(f"{path}: is a folder; give a file name")
    if path.exists() and not force:
        raise OutputError(f"{path}: exists already; choose another name or allow replacing it by --force")
    folder = path.parent
    if not folder.is_dir():
        raise OutputError(f"{path}: there is no folder {folder}; make it first")


def _same(path: Path, other: Path) -> bool:
    try:
        return os.path.samefile(path, other)
    except OSError:  # one of them does not exist: then only the spelled-out places can agree
        return os.path.realpath(path) == os.path.realpath(other)


def write_whole(path: Path, write: Callable[[BinaryIO], None], force: bool, inputs: Iterable[Path] = ()) -> None:
    """Write a file that appears whole or not at all.

    Args:
        path: the output; a link is followed, so that the file it names is replaced and the link stays.
        write: writes the content to an open binary file.
        force: whether an existing file may be replaced.
        inputs: files that must never be written.

    Raises:
        OutputError: as `check_output`, and when the system refuses to write; nothing is left behind then.
    """
    check_output(path, force, inputs)
    place = Path(os.path.realpath(path))
    beside = place.with_name(f".{place.name[:100]}.{secrets.token_hex(6)}.part")
    try:
        handle = os.open(beside, os.O_WRONLY | os.O_CREAT | os.O_EXCL | getattr(os, "O_BINARY", 0), 0o666)
        with os.fdopen(handle, "wb") as stream:
            write(stream)
            stream.flush()
            os.fsync(stream.fileno())
        if force:
            os.replace(beside, place)
        else:
            _take_free_name(beside, place)
        _sync_folder(place.parent)
    except FileExistsError as error:
        raise OutputError(f"{path}: exists already; choose another name or allow replacing it by --force") from error
    except OSError as error:
        raise OutputError(f"{path}: cannot be written ({error.strerror or error}); choose another place") from error
    finally:
        with contextlib.suppress(OSError):
            beside.unlink()


def _take_free_name(beside: Path, place: Path) -> None:
    """Give the file its name only when that is still free."""
    try:
        os.link(beside, place)  # fails when the name was taken since the check, which a rename would not
    except FileExistsError:
        raise
    except OSError:  # a file system without hard links
        if place.exists():
            raise FileExistsError(str(place)) from None
        os.replace(beside, place)


def _sync_folder(folder: Path) -> None:
    """Force the new name to the disk too, where the system can."""
    if not hasattr(os, "O_DIRECTORY"):
        return
    with contextlib.suppress(OSError):  # some file systems refuse to synchronise a folder; the file itself is safe
        handle = os.open(folder, os.O_RDONLY | os.O_DIRECTORY)
        try:
            os.fsync(handle)
        finally:
            os.close(handle)


def write_text(path: Path, text: str, force: bool, inputs: Iterable[Path] = ()) -> None:
    """Write a UTF-8 text file that appears whole or not at all; errors as `write_whole`."""
    write_whole(path, lambda stream: _write_bytes(stream, text.encode("utf-8")), force, inputs)


def _write_bytes(stream: BinaryIO, data: bytes) -> None:
    stream.write(data)
