"""The one way a file that somebody else may have written is opened: a plain file, no larger than stated, read once; and
the shape of JSON, checked before any of it is used."""

from __future__ import annotations

import json
import os
import stat
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

SHOWN_NAMES = 2000
LARGEST_JSON = 100_000_000

Shape = Any
"""A predicate of one value; {name: shape} of a table's keys; {None: shape} of a table with any names; [shape] of a list;
`Maybe(shape)` where it may be null or missing."""


@dataclass(frozen=True)
class Maybe:
    """A value that may be null, and where `absent` missing too."""

    shape: Shape
    absent: bool = True


class UnreadableError(ValueError):
    """A file that is not read; the message says why, without its name."""


def read_plain(path: Path, most: int) -> bytes:
    """Return a plain file's bytes. Raises UnreadableError for pipes, devices and folders and for more than `most` bytes,
    FileNotFoundError where there is none, OSError where it cannot be opened."""
    if not isinstance(path, Path):  # in a store there are objects only
        if (size := path.stat().st_size) > most:
            raise UnreadableError(f"has {size:,} bytes; at most {most:,} are allowed")
        return bytes(path.read_bytes())
    try:
        opened = os.open(path, os.O_RDONLY | os.O_NONBLOCK)  # a pipe that nobody writes to does not hold us up
    except ValueError:
        raise UnreadableError("its name holds a NUL") from None
    found = os.fstat(opened)
    if not stat.S_ISREG(found.st_mode):
        os.close(opened)
        raise UnreadableError("is no plain file")
    with os.fdopen(opened, "rb") as file:
        if found.st_size > most:
            raise UnreadableError(f"has {found.st_size:,} bytes; at most {most:,} are allowed")
        data = file.read(found.st_size + 1)  # no more is set aside than there is
        if len(data) > found.st_size:
            data += file.read(most + 1 - len(data))
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


def read_json(path: Path) -> Any:
    """What a JSON file holds. Raises OSError, or ValueError where it is none."""
    try:
        return json.loads(read_plain(path, LARGEST_JSON))
    except RecursionError:
        raise ValueError("is nested too deeply") from None


def misfit(value: Any, shape: Shape, name: str = "") -> str:
    """The dotted name of the first entry that is missing or of another shape, or an empty text."""
    if isinstance(shape, Maybe):
        return "" if value is None else misfit(value, shape.shape, name)
    if callable(shape):
        return "" if shape(value) else name or "it"
    if isinstance(shape, dict):
        return _misfit_table(value, shape, name)
    if not isinstance(value, list) or (isinstance(shape, tuple) and len(value) != len(shape)):
        return name or "it"
    shapes = shape if isinstance(shape, tuple) else shape * len(value)
    return next(
        filter(None, (misfit(v, s, f"{name}[{i + 1}]") for i, (v, s) in enumerate(zip(value, shapes, strict=True)))), ""
    )


def _misfit_table(value: Any, shape: Mapping[str | None, Shape], name: str) -> str:
    if not isinstance(value, dict):
        return name or "it"
    if None in shape:
        odd = next((key for key in value if not key.isprintable()), None)
        shape = dict.fromkeys(value, shape[None]) if odd is None else {f"{odd:.20}": lambda _: False}
    base = f"{name}." if name else ""
    lacking = [key for key, s in shape.items() if key not in value and not (isinstance(s, Maybe) and s.absent)]
    if lacking:
        return f"{base}{lacking[0]}"
    return next(filter(None, (misfit(value.get(key), s, f"{base}{key}") for key, s in shape.items())), "")
