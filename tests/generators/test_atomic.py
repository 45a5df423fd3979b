"""Files are there whole or not at all."""

from __future__ import annotations

import os
import stat
from pathlib import Path

import pytest

from generators.errors import InputError
from generators.files.atomic import atomic_write


def test_new_file_has_the_usual_permissions(tmp_path: Path) -> None:
    """A new file gets the permissions that any program's would under the umask."""
    usual = tmp_path / "usual"
    usual.touch()

    atomic_write(tmp_path / "new", "é\r\n")

    assert (tmp_path / "new").read_bytes() == b"\xc3\xa9\r\n"
    assert (tmp_path / "new").stat().st_mode == usual.stat().st_mode


def test_existing_file_keeps_its_permissions(tmp_path: Path) -> None:
    """The permissions of a file that is replaced stay."""
    path = tmp_path / "old"
    path.write_text("old")
    path.chmod(0o640)

    atomic_write(path, b"new")

    assert path.read_text() == "new"
    assert stat.S_IMODE(path.stat().st_mode) == 0o640


def test_link_stays(tmp_path: Path) -> None:
    """Writing through a symbolic link replaces the file it points at, not the link."""
    (tmp_path / "target").write_text("old")
    (tmp_path / "link").symlink_to("target")

    atomic_write(tmp_path / "link", "new")

    assert (tmp_path / "link").is_symlink()
    assert (tmp_path / "target").read_text() == "new"


@pytest.mark.parametrize("failing", ["fsync", "replace"])
def test_failure_leaves_the_old_file(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, failing: str) -> None:
    """When the disk is full the old file stays, nothing else does, and the error is the machine's."""

    def fail(*_: object) -> None:
        raise OSError(28, "No space left on device")

    (tmp_path / "file").write_text("old")
    monkeypatch.setattr(os, failing, fail)

    with pytest.raises(OSError, match="No space left"):
        atomic_write(tmp_path / "file", "new")

    assert [path.name for path in tmp_path.iterdir()] == ["file"]
    assert (tmp_path / "file").read_text() == "old"


def test_paths_that_cannot_be_written(tmp_path: Path) -> None:
    """A missing folder, a folder, a device and a path that is none are refused in one line."""
    os.mkfifo(tmp_path / "pipe")

    for path, message in {
        tmp_path / "none" / "file": "cannot be written: No such file or directory.",
        tmp_path: "cannot be written: it is a folder.",
        tmp_path / "pipe": "cannot be written: it is not a regular file.",
        tmp_path / "pipe" / "file": "cannot be written: Not a directory.",
        tmp_path / "nu\0l": "cannot be written: embedded null byte.",
    }.items():
        with pytest.raises(InputError) as caught:
            atomic_write(path, "text")
        assert str(caught.value).endswith(f": {message}")

    assert [path.name for path in tmp_path.iterdir()] == ["pipe"]


def test_characters_that_utf8_cannot_hold(tmp_path: Path) -> None:
    """Half of a surrogate pair is refused, and no file appears."""
    with pytest.raises(InputError, match=r"UTF-8 cannot hold the character '\\ud800'"):
        atomic_write(tmp_path / "file", "a\ud800")

    assert list(tmp_path.iterdir()) == []
