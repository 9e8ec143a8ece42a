"""What this machine has, against what a study needs: refused before it begins, stopped before the disk is full."""

from __future__ import annotations

import contextlib
import os
import shutil
from pathlib import Path

from cohort.errors import RunError
from cohort.stores import is_remote
from cohort.study import Plan
from cohort.study.plan import size

RESERVE_BYTES = 200_000_000
"""Free disk below which a run stops: room for the parts that are under way and for other people."""


def free_bytes(out: Path) -> int:
    """Free disk where a folder is, or will be; without end in a store."""
    if is_remote(out):
        return 10**18
    place = out.absolute()
    while not os.path.exists(place):  # noqa: PTH110 -- Path.exists raises where a name is too long or a folder closed
        place = place.parent
    return shutil.disk_usage(place).free


def memory_bytes() -> int | None:
    """Memory of this machine; None where it does not say."""
    with contextlib.suppress(ValueError, OSError, AttributeError):
        return os.sysconf("SC_PAGE_SIZE") * os.sysconf("SC_PHYS_PAGES")
    return None


def lacking(plan: Plan, out: Path) -> list[str]:
    """What the plan needs and this machine does not have, with the numbers; empty where it fits."""
    found = []
    free, memory = free_bytes(out), memory_bytes()
    if plan.disk_mb * 1e6 + RESERVE_BYTES > free:
        found.append(f"needs about {size(plan.disk_mb)} of disk and {size(free / 1e6)} are free at {out}; fewer subjects, or "
                     "--out on another disk")  # fmt: skip
    if memory is not None and plan.memory_mb * 1e6 > memory:
        found.append(
            f"needs about {size(plan.memory_mb)} of memory and this machine has {size(memory / 1e6)}; fewer --workers"
        )
    return found


def watch_disk(out: Path) -> None:
    """Raise RunError where the disk is nearly full; what was finished stays."""
    free = free_bytes(out)
    if free < RESERVE_BYTES:
        raise RunError(f"{out}: {size(free / 1e6)} of disk are left; stopped before it is full. What was finished is kept: make "
                       "room and run again to carry on")  # fmt: skip
