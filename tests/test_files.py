"""Output files appear whole or not at all."""

import os

import pytest

from converter.errors import OutputError
from converter.files import check_output, write_text, write_whole


def test_a_file_is_written_and_nothing_else_left(tmp_path):
    write_text(tmp_path / "a.txt", "grün\n", force=False)
    assert (tmp_path / "a.txt").read_bytes() == "grün\n".encode()
    assert os.listdir(tmp_path) == ["a.txt"]


def test_an_existing_file_needs_force(tmp_path):
    path = tmp_path / "a.txt"
    path.write_text("old")
    with pytest.raises(OutputError, match="--force"):
        write_text(path, "new", force=False)
    assert path.read_text() == "old"
    write_text(path, "new", force=True)
    assert path.read_text() == "new"


def test_a_file_that_appears_during_the_work_is_not_overwritten(tmp_path):
    path = tmp_path / "a.txt"

    def write(stream):
        stream.write(b"late")
        path.write_text("first")

    with pytest.raises(OutputError, match="exists already"):
        write_whole(path, write, force=False)
    assert path.read_text() == "first"
    assert os.listdir(tmp_path) == ["a.txt"]


@pytest.mark.parametrize("link", ["symlink", "link"])
def test_an_input_is_never_written_whatever_its_name(tmp_path, link):
    source, alias = tmp_path / "in.dxf", tmp_path / "alias.dxf"
    source.write_text("drawing")
    getattr(os, link)(source, alias)
    with pytest.raises(OutputError, match="input"):
        write_text(alias, "x", force=True, inputs=[source])
    with pytest.raises(OutputError, match="input"):
        check_output(tmp_path / "." / "in.dxf", True, [source])
    assert source.read_text() == "drawing"


def test_a_failure_while_writing_leaves_the_old_file(tmp_path):
    path = tmp_path / "a.txt"
    path.write_text("old")

    def write(stream):
        stream.write(b"half")
        raise OSError(28, "No space left on device")

    with pytest.raises(OutputError, match="No space left"):
        write_whole(path, write, force=True)
    assert path.read_text() == "old"
    assert os.listdir(tmp_path) == ["a.txt"]


def test_an_error_of_the_writer_itself_passes_and_leaves_nothing(tmp_path):
    def write(stream):
        raise KeyError("bug")

    with pytest.raises(KeyError):
        write_whole(tmp_path / "a.txt", write, force=False)
    assert os.listdir(tmp_path) == []


def test_places_that_cannot_be_written_are_named(tmp_path):
    with pytest.raises(OutputError, match="there is no folder"):
        write_text(tmp_path / "no" / "a.txt", "x", force=False)
    with pytest.raises(OutputError, match="is a folder"):
        write_text(tmp_path, "x", force=True)


def test_permissions_follow_the_users_mask(tmp_path):
    write_text(tmp_path / "a.txt", "x", force=False)
    (tmp_path / "b.txt").write_text("x")
    assert (tmp_path / "a.txt").stat().st_mode == (tmp_path / "b.txt").stat().st_mode
