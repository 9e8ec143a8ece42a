"""Jobs on dask's threaded scheduler: sub-batches side by side, and whoever comes home last writes the part."""

from __future__ import annotations

import threading
from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass
from typing import Any

from cohort.execute.progress import Progress

WINDOW_SUB_BATCHES = 64
"""Sub-batches handed to dask at once: enough to keep workers busy, few enough that memory stays flat."""


@dataclass(frozen=True)
class Narrower:
    """How a sub-batch of subjects start..stop-1 is made in smaller ranges, and what stands for a subject with whom no
    process survives."""

    start: int
    stop: int
    make: Callable[[int, int], Any]
    lost: Callable[[int], Any]


@dataclass(frozen=True)
class Piece:
    """One sub-batch: how many runs it makes, what makes them, and how it is narrowed to a subject that kills."""

    runs: int
    make: Callable[[], Any]
    narrower: Narrower | None = None


@dataclass(frozen=True)
class Job:
    """One part to write: its name among all jobs, the sub-batches it is made of, and what writes them in their order."""

    name: str
    pieces: tuple[Piece, ...]
    write: Callable[[Sequence[Any]], Any]


@dataclass(frozen=True)
class Hands:
    """Who does the work: so many threads of this process, or a cluster that was reached. guard is called before each part is
    written, and raises where none should be."""

    workers: int
    cluster: Any = None
    guard: Callable[[], None] | None = None

    def do(self, jobs: Iterable[Job], progress: Progress | None) -> None:
        """Do all jobs, a window of them at a time. What a job raises ends the run; no thread writes after it."""
        if self.cluster is not None:
            from cohort.execute.cluster import run_on

            run_on(self.cluster, jobs, progress)
            return
        for window in _windows(jobs):
            _run_window(window, self.workers, progress, self.guard)


def _windows(jobs: Iterable[Job]) -> Iterator[list[Job]]:
    window: list[Job] = []
    size = 0
    for job in jobs:
        window.append(job)
        size += len(job.pieces)
        if size >= WINDOW_SUB_BATCHES:
            yield window
            window, size = [], 0
    if window:
        yield window


def _run_window(
    window: Sequence[Job], workers: int, progress: Progress | None, guard: Callable[[], None] | None
) -> None:
    """One graph: a task a sub-batch, and for each job one that writes its part when the last is home."""
    from concurrent.futures import ThreadPoolExecutor

    from dask.threaded import get

    stop = threading.Event()

    def simulate(piece: Piece) -> Any:
        if stop.is_set():
            raise KeyboardInterrupt
        found = piece.make()
        if progress:
            progress.add(piece.runs)
        return found

    def write(job: Job, *pieces: Any) -> Any:
        if stop.is_set():
            raise KeyboardInterrupt
        if guard is not None:
            guard()
        return job.write(pieces)

    graph: dict[Any, Any] = {}
    for job in window:
        keys = [f"{job.name} {i}" for i in range(len(job.pieces))]
        graph |= {key: (simulate, piece) for key, piece in zip(keys, job.pieces, strict=True)}
        graph[job.name] = (write, job, *keys)
    with ThreadPoolExecutor(workers) as pool:  # its end waits: no thread writes once the folder is let go
        try:
            get(graph, [job.name for job in window], pool=pool)
        except BaseException:
            stop.set()
            raise
