"""Files that people write, read whole; and paths with their links followed."""

from __future__ import annotations

import errno
import os
import stat
from pathlib import Path

LARGEST_INPUT_BYTES = 1 << 26
"""More than any job, layout or table: what is larger is something else, or without end."""


def read_input(path: str | Path) -> bytes:
    """Return what a file holds.

    A pipe that nobody writes to is empty here, instead of being waited for; one with a writer is read to its end.

    Parameters
    ----------
    path : str or Path
        The file.

    Raises
    ------
    OSError
        If the system refuses, or the file is larger than `LARGEST_INPUT_BYTES`; ``strerror`` says so.
    ValueError
        If the path cannot be one.
    """
    descriptor = os.open(path, os.O_RDONLY | os.O_NONBLOCK)
    with open(descriptor, "rb") as file:
        mode = os.fstat(descriptor).st_mode
        if stat.S_ISDIR(mode):
            raise IsADirectoryError(errno.EISDIR, os.strerror(errno.EISDIR), str(path))
        os.set_blocking(descriptor, True)
        content = file.read(LARGEST_INPUT_BYTES + 1)
    if len(content) > LARGEST_INPUT_BYTES:
        raise OSError(errno.EFBIG, f"larger than {LARGEST_INPUT_BYTES >> 20} MiB", str(path))
    return content


def real_path(path: str | Path) -> Path:
    """Return an absolute path with links followed as far as they lead; a link to itself stays as it is."""
    return Path(os.path.realpath(path))
