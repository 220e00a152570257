"""Put a file in place whole or not at all."""

from __future__ import annotations

import errno
import os
from pathlib import Path

from latelight.errors import ProductError

__all__ = ["make_folder", "write_bytes"]

_CURES = {
    errno.ENOSPC: "free some space or set another output folder, then run again",
    errno.EDQUOT: "your quota is used up: free some space or set another output folder",
    errno.EFBIG: "the file system or a limit refuses files this large",
    errno.EACCES: "give yourself write permission there or set another output folder",
    errno.EPERM: "give yourself write permission there or set another output folder",
    errno.EROFS: "the file system is read-only: set another output folder",
    errno.ENOTDIR: "a part of the path is a file: move it or set another output folder",
    errno.EEXIST: "a file has the folder's name: move it or set another output folder",
    errno.EISDIR: "a folder has the file's name: move it or set another output folder",
    errno.ENOENT: "its folder does not exist: make it first",
    errno.ENAMETOOLONG: "the name is too long: shorten the field or frame names",
}
_OTHER_CURE = "check the disk, or set another output folder"


def write_bytes(path: Path, data: bytes) -> None:
    """Write a file so that nobody ever sees half of it.

    The bytes go to a temporary name in the same folder, are forced to the disk,
    and take the final name in one step; an older file stays until then.

    Parameters
    ----------
    path : Path
        The file; its folder must exist.
    data : bytes
        All of it.

    Raises
    ------
    ProductError
        If the system refuses (disk full, no permission, ...).  The temporary
        file is removed, and what ``path`` held before is untouched.
    """
    # The process number keeps two runs in one folder from sharing a name.
    temporary = path.with_name(f".{path.name}.{os.getpid()}.part")
    try:
        with temporary.open("wb") as stream:
            stream.write(data)
            stream.flush()
            os.fsync(stream.fileno())
        temporary.replace(path)
    except OSError as error:
        _remove(temporary)
        raise _refused(path, error) from error
    except BaseException:
        _remove(temporary)
        raise


def make_folder(path: Path) -> None:
    """Make a folder and those above it, if they are not there yet.

    Parameters
    ----------
    path : Path
        The folder.

    Raises
    ------
    ProductError
        If the system refuses.
    """
    try:
        path.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise _refused(path, error) from error


def _remove(temporary: Path) -> None:
    # The first error is the one to report: a second, from here, would hide it.
    try:
        temporary.unlink(missing_ok=True)
    except OSError:
        return


def _refused(path: Path, error: OSError) -> ProductError:
    said = error.strerror or str(error)
    cure = _CURES.get(error.errno or 0, _OTHER_CURE)
    return ProductError(path, f"cannot be written ({said}): {cure}")
