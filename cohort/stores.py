"""Where results lie: a local folder, or a prefix of an object store named by a URI such as s3://bucket/results.

A store has no rename and no folders. A file is one PUT to its final key, read back and compared; a lock is a conditional PUT
whose holder counts on. What is remote is a path of universal_pathlib, which is asked as a local one is.
"""

from __future__ import annotations

import contextlib
import hashlib
import inspect
import json
import os
import platform
import threading
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any, cast

from cohort.errors import CohortError, Problem, RunError, StudyError

BEAT_EVERY_S = 3.0
STALE_AFTER_S = 15.0
"""A lock whose count does not move while it is watched for so long is nobody's. No clocks are compared."""

NEEDS = "pip install 'ultradian-cohort[store]' (universal_pathlib, and s3fs for s3://)"


def place(name: str | os.PathLike[str]) -> Path:
    """A folder by its name, local or, where it is a URI, in a store. Raises StudyError where that cannot be had."""
    text = os.fspath(name)
    if "://" not in text:
        return Path(text)
    try:
        from upath import UPath

        found = UPath(text, use_listings_cache=False)
        found.fs  # noqa: B018 - made now, so that what is missing is said now
    except (ImportError, ValueError) as error:
        why = f"an object store cannot be used here: {str(error).splitlines()[0]}; {NEEDS}"
        raise StudyError([Problem("", why, text)]) from None
    return cast("Path", found)


def is_remote(path: Path) -> bool:
    """Whether a path is in a store."""
    return not isinstance(path, Path)


def put(path: Path, data: bytes) -> None:
    """Write an object whole and read it back. Raises OSError where the store refuses or holds something else after."""
    with as_os_error():
        path.write_bytes(data)
        back = path.read_bytes()
    if len(back) != len(data) or hashlib.sha256(back).digest() != hashlib.sha256(data).digest():
        raise OSError(f"the store holds {len(back):,} other bytes after {len(data):,} were written")


@contextlib.contextmanager
def as_os_error() -> Iterator[None]:
    """What a store's client raises is an OSError with one line of words."""
    try:
        yield
    except (OSError, CohortError):
        raise
    except Exception as error:  # noqa: BLE001 - each client has kinds of its own
        raise OSError(f"{type(error).__name__}: {(str(error).splitlines() or [''])[0][:200]}") from None


# ---- locks --------------------------------------------------------------------------------------------------------


class _Beat:
    """Counts on in a lock until told to stop."""

    def __init__(self, write: Any, holder: str) -> None:
        self._write, self._holder, self._count = write, holder, 0
        self._over = threading.Event()
        self._thread = threading.Thread(target=self._run, daemon=True)

    def _run(self) -> None:
        while not self._over.wait(BEAT_EVERY_S):
            self._count += 1
            with contextlib.suppress(Exception):  # the next one may go through
                self._write(note(self._holder, self._count))

    def __enter__(self) -> None:
        self._thread.start()

    def __exit__(self, *_: object) -> None:
        self._over.set()
        self._thread.join()


def note(holder: str, count: int) -> bytes:
    """What a lock holds: who, and how far it has counted."""
    return json.dumps({"holder": holder, "count": count}).encode()


def holder_of(data: bytes) -> str:
    """Who holds a lock, from what it holds."""
    try:
        return str(json.loads(data)["holder"])
    except (ValueError, KeyError, TypeError):
        return "another run"


def myself() -> str:
    """This process, in words."""
    return f"process {os.getpid()} on {platform.node()}"


@contextlib.contextmanager
def beating(write: Any) -> Iterator[None]:
    """Keep a lock alive; write: a function that puts bytes into it."""
    with _Beat(write, myself()):
        yield


def watched_alive(read: Any, first: bytes) -> bool:
    """Whether the count in a lock moves within STALE_AFTER_S; read: a function that returns what it holds, b"" for none."""
    until, empty = time.monotonic() + STALE_AFTER_S, 0
    while time.monotonic() < until and empty < 4:  # once it may be empty in the middle of being written
        time.sleep(BEAT_EVERY_S / 3)
        now = read()
        if now not in (first, b""):
            return True
        empty = 0 if now else empty + 1
    return False


@contextlib.contextmanager
def store_lock(out: Path) -> Iterator[None]:
    """Hold a prefix of a store. Raises RunError where another run holds it, StudyError where the store cannot lock."""
    fs: Any = cast("Any", out).fs
    key = out / ".lock"
    if "mode" not in inspect.signature(getattr(fs, "_pipe_file", fs.pipe_file)).parameters:
        raise StudyError([Problem("", "this store cannot lock (no conditional PUT); --no-lock goes without, where no other run "
                                  "can be at work", str(out))])  # fmt: skip

    def read() -> bytes:
        try:
            return key.read_bytes()
        except FileNotFoundError:
            return b""

    with as_os_error():
        if not _created(fs, key):
            held = read()
            if watched_alive(read, held):
                raise RunError(f"{out}: {holder_of(held)} is running in this folder")
            key.unlink(missing_ok=True)
            if not _created(fs, key):
                raise RunError(f"{out}: another run has just begun in this folder")
    try:
        with beating(key.write_bytes):
            yield
    finally:
        with contextlib.suppress(Exception):
            key.unlink(missing_ok=True)


def _created(fs: Any, key: Path) -> bool:
    """Make the lock where there is none."""
    try:
        fs.pipe_file(cast("Any", key).path, note(myself(), 0), mode="create")
    except FileExistsError:
        return False
    except OSError as error:
        if "precondition" in str(error).lower() or "PreconditionFailed" in repr(error.__cause__):
            return False
        raise
    return True
