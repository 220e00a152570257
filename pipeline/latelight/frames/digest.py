"""The fingerprint of a file, for the record of a run."""

from __future__ import annotations

import hashlib
from pathlib import Path

from latelight.errors import FrameError

__all__ = ["file_digest"]


def file_digest(path: Path) -> str:
    """Return the SHA-256 of a file's bytes, 64 hexadecimal digits.

    The file is streamed, so its size does not matter.

    Parameters
    ----------
    path : Path
        The file.

    Raises
    ------
    FrameError
        If the file cannot be read.
    """
    try:
        with path.open("rb") as stream:
            return hashlib.file_digest(stream, "sha256").hexdigest()
    except OSError as error:
        reason = f"cannot be read ({error.strerror}): check the path and its rights"
        raise FrameError(path, reason) from error
