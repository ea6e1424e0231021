"""Files are written whole or not at all."""

from __future__ import annotations

import errno
import os
from pathlib import Path

import pytest

from optisize.errors import OptisizeError, one_line, shorten
from optisize.files import SIZE_LIMIT, read_bytes, write_text


def test_a_text_is_written_as_it_is(tmp_path: Path) -> None:
    write_text(tmp_path / "a.txt", "one\ntwo µ\n")
    assert (tmp_path / "a.txt").read_bytes() == "one\ntwo µ\n".encode()
    assert [p.name for p in tmp_path.iterdir()] == ["a.txt"]


@pytest.mark.parametrize(("room", "step"), [(os, "replace"), (Path, "write_bytes"), (os, "chmod")])
def test_a_disk_that_fails_leaves_the_old_file_and_nothing_else(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, room: object, step: str
) -> None:
    def full(*_: object, **__: object) -> None:
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    write_text(tmp_path / "a.txt", "old")
    monkeypatch.setattr(room, step, full)
    with pytest.raises(OptisizeError, match=r"a\.txt: cannot be written: No space left") as caught:
        write_text(tmp_path / "a.txt", "new")
    assert caught.value.exit_code == 1
    monkeypatch.undo()
    assert (tmp_path / "a.txt").read_text() == "old"
    assert [p.name for p in tmp_path.iterdir()] == ["a.txt"]


def test_a_place_that_is_no_directory_is_said(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("")
    with pytest.raises(OptisizeError, match=r"cannot be written: (Not a directory|File exists)"):
        write_text(tmp_path / "file" / "a.txt", "new")


def test_a_large_file_is_not_read_to_its_end(tmp_path: Path) -> None:
    path = tmp_path / "large"
    with path.open("wb") as file:
        file.truncate(50 * SIZE_LIMIT)
    with pytest.raises(OptisizeError, match="larger than 1000 kB"):
        read_bytes(path)


def test_values_are_shown_as_files_write_them_on_one_short_line() -> None:
    assert shorten("a\nb\x1b[31m") == '"a?b?[31m"'
    assert shorten(True) == "true"
    assert shorten(["2 um", 3]) == '["2 um", 3]'
    assert len(shorten("x" * 1000)) == 60
    assert one_line("a\n  b\tc\x00") == "a b c?"
    assert len(one_line("x " * 5000)) == 2000
