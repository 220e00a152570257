import errno
import os
from pathlib import Path

import pytest

from latelight.errors import ProductError
from latelight.products.atomic import make_folder, write_bytes


def names_in(folder):
    return [path.name for path in folder.iterdir()]


def test_writes_and_replaces(tmp_path):
    path = tmp_path / "a.bin"
    write_bytes(path, b"one")
    write_bytes(path, b"two")
    assert path.read_bytes() == b"two"
    assert names_in(tmp_path) == ["a.bin"]


class FullDisk:
    """A file that takes some bytes and then has no room."""

    def __init__(self, stream):
        self._stream = stream

    def write(self, data):
        self._stream.write(data[: len(data) // 2])
        self._stream.flush()
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    def __enter__(self):
        return self

    def __exit__(self, *exc):
        self._stream.close()


def test_disk_full_in_mid_write_leaves_the_old_file_and_nothing_else(
    tmp_path, monkeypatch
):
    path = tmp_path / "a.bin"
    write_bytes(path, b"old")
    real_open = Path.open
    monkeypatch.setattr(
        Path, "open", lambda path, mode: FullDisk(real_open(path, mode))
    )
    with pytest.raises(ProductError, match="No space left on device") as caught:
        write_bytes(path, b"new and longer")
    monkeypatch.undo()
    assert "free some space" in str(caught.value)
    assert str(path) in str(caught.value)
    assert path.read_bytes() == b"old"
    assert names_in(tmp_path) == ["a.bin"]


def test_a_failed_rename_removes_the_temporary_file(tmp_path):
    path = tmp_path / "taken"
    path.mkdir()
    with pytest.raises(ProductError, match="a folder has the file's name"):
        write_bytes(path, b"data")
    assert names_in(tmp_path) == ["taken"]


def test_an_interrupt_removes_the_temporary_file(tmp_path, monkeypatch):
    def interrupt(_descriptor):
        raise KeyboardInterrupt

    monkeypatch.setattr(os, "fsync", interrupt)
    with pytest.raises(KeyboardInterrupt):
        write_bytes(tmp_path / "a.bin", b"data")
    assert names_in(tmp_path) == []


@pytest.mark.parametrize(
    ("number", "cure"),
    [
        (errno.EACCES, "write permission"),
        (errno.EROFS, "read-only"),
        (errno.EDQUOT, "quota"),
        (errno.EIO, "check the disk"),
    ],
)
def test_what_the_system_says_comes_with_a_cure(tmp_path, monkeypatch, number, cure):
    def refuse(self, mode):
        raise OSError(number, os.strerror(number))

    monkeypatch.setattr(Path, "open", refuse)
    with pytest.raises(ProductError, match=cure) as caught:
        write_bytes(tmp_path / "a.bin", b"data")
    assert os.strerror(number) in str(caught.value)


def test_folders(tmp_path):
    make_folder(tmp_path / "a" / "b")
    make_folder(tmp_path / "a" / "b")
    assert (tmp_path / "a" / "b").is_dir()
    (tmp_path / "file").write_text("x")
    with pytest.raises(ProductError, match="a part of the path is a file"):
        make_folder(tmp_path / "file" / "b")
    with pytest.raises(ProductError, match="a file has the folder's name"):
        make_folder(tmp_path / "file")
    with pytest.raises(ProductError, match="its folder does not exist"):
        write_bytes(tmp_path / "none" / "a.bin", b"")
