"""The one way a file that a user names is opened: a plain file, no larger than stated, read once."""

from __future__ import annotations

import os
import stat
from pathlib import Path

SHOWN_NAMES = 2000


class UnreadableError(ValueError):
    """A file that is not read; the message says why, without its name."""


def read_plain(path: Path, most: int) -> bytes:
    """Return a plain file's bytes. Raises UnreadableError for pipes, devices and folders and for more than `most` bytes,
    FileNotFoundError where there is none, OSError where it cannot be opened."""
    try:
        opened = os.open(path, os.O_RDONLY | os.O_NONBLOCK)  # a pipe that nobody writes to does not hold us up
    except ValueError:
        raise UnreadableError("its name holds a NUL") from None
    with os.fdopen(opened, "rb") as file:
        found = os.fstat(file.fileno())
        if not stat.S_ISREG(found.st_mode):
            raise UnreadableError("is no plain file")
        if found.st_size > most:
            raise UnreadableError(f"has {found.st_size:,} bytes; at most {most:,} are allowed")
        data = file.read(most + 1)
    if len(data) > most:  # it grew, or the system does not say how large it is
        raise UnreadableError(f"has more than {most:,} bytes, which is the most allowed")
    return data


def why_unread(error: OSError | UnreadableError) -> str:
    """Why a file was not read, in words without its name."""
    if isinstance(error, UnreadableError):
        return str(error)
    return (error.strerror or type(error).__name__).lower()


def names_in(folder: Path) -> list[str]:
    """Names of a folder's entries for suggestions, the first some thousand; empty where it cannot be listed."""
    found = []
    try:
        with os.scandir(folder) as entries:
            for entry in entries:
                found.append(entry.name)
                if len(found) == SHOWN_NAMES:
                    break
    except (OSError, ValueError):
        return []
    return found
