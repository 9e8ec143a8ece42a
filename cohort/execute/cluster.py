"""The same jobs on a dask.distributed cluster: whole parts a task, written where the run's folder is, a sliding window.

A task is one job: it makes all sub-batches of one shard, writes the part and returns a number. It may be done twice, or by
two workers at once: the bytes are the same, and a part appears whole or not at all.
"""

from __future__ import annotations

import contextlib
import hashlib
import os
import secrets
import sys
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass
from importlib import metadata
from itertools import islice
from pathlib import Path
from typing import Any

from cohort.errors import RunError
from cohort.execute.progress import Progress
from cohort.execute.tasks import Job, Narrower
from cohort.stores import is_remote

IN_FLIGHT_PER_THREAD = 2
"""Tasks handed out for each thread of a worker: enough to keep it busy, few enough to lose little with it."""
REACHED_WITHIN_S = 20.0
PACKAGES = ("numpy", "numba", "llvmlite", "pyarrow", "scipy", "dask", "distributed")


@dataclass(frozen=True)
class Cluster:
    """A scheduler that was reached, and whose workers agreed with this process; scope: this connection's own word, part of
    its tasks' keys, since a scheduler takes tasks of one key for one task (those of a run that was cut off, too)."""

    client: Any
    threads: int
    scope: str


@contextlib.contextmanager
def reached(address: str, out: Path, mixed: bool) -> Iterator[Cluster]:
    """Connect to a scheduler and compare its workers with this process.

    Raises RunError where it cannot be reached, has no workers, a worker does not see `out`, or (unless `mixed`) has other
    versions, other kernels or another processor.
    """
    from distributed import Client

    try:
        client = Client(address, timeout=REACHED_WITHIN_S, set_as_default=False)
    except (OSError, ValueError, TimeoutError) as error:
        why = str(error).splitlines()[0] if str(error) else type(error).__name__
        raise RunError(f"{address}: no scheduler could be reached there ({why})") from None
    with client:
        token = out / f".seen-{secrets.token_hex(4)}.tmp"
        token.write_text(hashlib.blake2b(str(out).encode()).hexdigest())
        try:
            found = client.run(_look, _absolute(token), token.read_text())
        finally:
            token.unlink(missing_ok=True)
        if not found:
            raise RunError(f"{address}: the scheduler has no workers; start some with `dask worker {address}`")
        _agree(found, mixed)
        yield Cluster(client, sum(client.nthreads().values()), secrets.token_hex(8))


def _absolute(path: Path) -> Path:
    return path if is_remote(path) else path.resolve()


def traits() -> dict[str, str]:
    """What a worker must share with the process that sends it work: versions, kernels, processor."""
    from cohort.compiled import cpu_name, detector_identity, kernel_identity

    found = {"python": ".".join(map(str, sys.version_info[:3]))}
    found |= {name: metadata.version(name) for name in PACKAGES}
    return {**found, "kernels": kernel_identity() + detector_identity(), "processor": cpu_name()}


def _look(token: Path, wanted: str) -> dict[str, str]:
    """On a worker: its traits, and whether it sees the run's folder."""
    try:
        sees = token.read_text() == wanted
    except OSError:
        sees = False
    return {**traits(), "sees": "yes" if sees else f"no (host {os.uname().nodename})"}


def _agree(found: dict[str, dict[str, str]], mixed: bool) -> None:
    blind = [f"{worker}: {known['sees']}" for worker, known in found.items() if known["sees"] != "yes"]
    if blind:
        raise RunError(
            "these workers do not see the result folder; --out must lie on a disk they share: " + "; ".join(blind)
        )
    if mixed:
        return
    mine = traits()
    unlike = [
        f"{worker}: {name} {known[name][:24]}, here {mine[name][:24]}"
        for worker, known in found.items()
        for name in mine
        if known.get(name) != mine[name]
    ]
    if unlike:
        raise RunError("workers differ from this process (--mixed-machines accepts it): " + "; ".join(unlike[:6]))


def run_on(cluster: Cluster, jobs: Iterable[Job], progress: Progress | None) -> None:
    """Do all jobs there, a window of them at a time. What a job raises ends the run; what is under way is cancelled. Jobs
    with which workers died are narrowed when all others are home: whoever dies then died of his own task."""
    from distributed import KilledWorker, as_completed

    left = iter(jobs)
    sent: dict[str, Job] = {}
    waiting = as_completed([], loop=cluster.client.loop)
    add = progress.add if progress else (lambda _: None)

    def send(number: int) -> None:
        for job in _taken(left, number):
            key = f"cohort-{hashlib.blake2b(f'{cluster.scope} {job.name}'.encode(), digest_size=12).hexdigest()}"
            sent[key] = job
            waiting.add(cluster.client.submit(do_job, job, key=key, pure=False, retries=2))

    deadly: list[Job] = []
    try:
        send(IN_FLIGHT_PER_THREAD * max(cluster.threads, 1))
        for future in waiting:
            job = sent.pop(future.key)
            try:
                add(future.result())
            except KilledWorker:
                deadly.append(job)
            future.release()
            send(1)
        for job in deadly:
            _narrowed(cluster, job)
            add(runs_of(job))
    except BaseException:
        cluster.client.cancel(list(waiting.futures), force=True)
        raise


def _taken(jobs: Iterator[Job], number: int) -> Sequence[Job]:
    return list(islice(jobs, number))


def _narrowed(cluster: Cluster, job: Job) -> None:
    """A job with which workers died again and again: its sub-batches one by one, halved down to the subjects that kill,
    who become failed rows. Raises RunError for a job that cannot be narrowed."""
    if any(piece.narrower is None for piece in job.pieces):
        raise RunError(f"{job.name}: workers die with it again and again; look at their logs for why (memory, often)")
    job.write([_survivors(cluster, piece.narrower, piece.narrower.start, piece.narrower.stop)
               for piece in job.pieces if piece.narrower is not None])  # fmt: skip


def _survivors(cluster: Cluster, narrower: Narrower, start: int, stop: int) -> Any:
    from distributed import KilledWorker

    from cohort.execute.stages import joined_tables

    future = cluster.client.submit(narrower.make, start, stop, pure=False)
    try:
        return future.result()
    except KilledWorker:
        if stop - start == 1:
            return narrower.lost(start)
    middle = (start + stop) // 2
    return joined_tables([_survivors(cluster, narrower, start, middle), _survivors(cluster, narrower, middle, stop)])


def do_job(job: Job) -> int:
    """One whole job in this process: every sub-batch, then the part. Returns its runs."""
    job.write([piece.make() for piece in job.pieces])
    return runs_of(job)


def runs_of(job: Job) -> int:
    """How many runs a job makes."""
    return sum(piece.runs for piece in job.pieces)
