"""What a cluster would do: measured costs of a shard and of the scheduler, then a simulation of 1,000 workers that fail.

    python3 scripts/scale.py [--shards N] [--paper]

Measured: a study of N shards on local threads and on dask workers of one thread each, 1, 2 and 4 of them; the scheduler's
cost of a task that does nothing. Simulated: tasks of 1, 2, 4 or 8 shards on 1,000 workers, each of which is lost after an
exponential time and comes back; what it had begun is done again. --paper: the simulation alone, with the costs of the last
measurement.
"""

from __future__ import annotations

import argparse
import heapq
import json
import os
import random
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parent))

ROOT = Path(__file__).resolve().parent.parent
SHARD = 16_384
WORKERS = 1_000
START_S, LOST_AFTER_H, BACK_AFTER_S = 20.0, (1e9, 1000.0, 100.0, 10.0), 60.0
GROUPS = (1, 2, 4, 8)
COHORTS = (10**7, 10**8, 10**9)
STUDY = """
title = "Cost of a shard"
seed = 7
[subjects]
count = {count}
[subjects.parameters]
td.lognormal = {{ median = "36 min", cv = 0.2 }}
Rm.lognormal = {{ median = "210 mU/min", cv = 0.3 }}
[[arms]]
name = "steady"
duration = "48 h"
glucose = [ {{ shape = "constant", rate = "180 mg/min" }} ]
[output]
time_courses = 0
"""


@dataclass(frozen=True)
class Costs:
    """Seconds of a shard on one thread, their spread (SD of the logarithm), and the scheduler's seconds of a task."""

    shard_s: float
    spread: float
    task_s: float


# ---- measured -----------------------------------------------------------------------------------------------------


def run(study: Path, out: Path, *words: str) -> float:
    """Seconds of a whole run, by its own record."""
    command = [sys.executable, "-m", "cohort", "run", str(study), "--out", str(out), *words]
    subprocess.run(command, cwd=ROOT, check=True, capture_output=True)
    return float(json.loads((out / "run.json").read_text())["timings"]["seconds"])


@contextmanager
def cluster(workers: int, folder: Path) -> Iterator[str]:
    """A scheduler and workers of one thread each, in processes of their own; its address."""
    place = folder / f"scheduler-{workers}.json"
    quiet = {"stdout": subprocess.DEVNULL, "stderr": subprocess.DEVNULL, "cwd": ROOT}
    started = [subprocess.Popen([sys.executable, "-m", "distributed.cli.dask_scheduler", "--port", "0", "--no-dashboard",
                                 "--scheduler-file", str(place)], **quiet)]  # type: ignore[call-overload]  # fmt: skip
    while not place.exists():
        time.sleep(0.1)
    command = [sys.executable, "-m", "distributed.cli.dask_worker", "--scheduler-file", str(place), "--nthreads", "1",
               "--no-dashboard", "--local-directory", str(folder)]  # fmt: skip
    environment = {**os.environ, "PYTHONPATH": str(ROOT)}
    started += [subprocess.Popen(command, env=environment, **quiet) for _ in range(workers)]  # type: ignore[call-overload]
    try:
        time.sleep(0.5)
        yield str(json.loads(place.read_text())["address"])
    finally:
        for process in reversed(started):
            process.terminate()
        for process in started:
            process.wait()


def empty_task(address: str, workers: int, tasks: int = 500) -> float:
    """The scheduler's seconds of a task that does nothing, a window of two a worker under way."""
    from distributed import Client, as_completed

    with Client(address, set_as_default=False) as client:
        client.wait_for_workers(workers)
        began = time.perf_counter()
        first = [client.submit(abs, i, key=f"empty-{i}", pure=False) for i in range(2 * workers)]
        waiting, sent = as_completed(first), len(first)
        for future in waiting:
            future.release()
            if sent < tasks:
                waiting.add(client.submit(abs, sent, key=f"empty-{sent}", pure=False))
                sent += 1
        return (time.perf_counter() - began) / tasks


def measured(shards: int) -> Costs:
    """Measure, print, and return the costs."""
    with tempfile.TemporaryDirectory() as folder:
        study = Path(folder) / "scale.toml"
        study.write_text(STUDY.format(count=shards * SHARD))
        run(study, Path(folder) / "warm", "--set", "subjects.count=1000")
        one = run(study, Path(folder) / "one", "--workers", "1")
        local = run(study, Path(folder) / "local")
        print(f"{shards} shards of {SHARD:,} subjects, one arm of 48 h, {os.cpu_count()} cores")
        print(f"  threads: 1 {one:.1f} s, all cores {local:.1f} s (x {one / local:.2f})")
        empty = []
        for workers in (1, 2, 4):
            with cluster(workers, Path(folder)) as address:
                empty.append(empty_task(address, workers))
                seconds = run(study, Path(folder) / f"cluster-{workers}", "--scheduler", address)
            ideal = one / min(workers, os.cpu_count() or 1)
            print(f"  {workers} worker processes: {seconds:.1f} s, efficiency {ideal / seconds:.0%}; "
                  f"an empty task {1e3 * empty[-1]:.2f} ms, {empty[-1] * shards / seconds:.2%} of it all")  # fmt: skip
    return Costs(one / shards, 0.15, statistics.median(empty))


# ---- on paper -----------------------------------------------------------------------------------------------------


def simulated(costs: Costs, shards: int, group: int, lost_after_h: float, seed: int = 1) -> float:
    """Efficiency of WORKERS workers on so many shards, `group` a task: useful seconds over workers x the whole time.

    The scheduler serves one task after another; workers begin within START_S of each other.
    """
    rng, free_s, end = random.Random(seed), 0.0, 0.0
    todo = [group] * (shards // group) + ([shards % group] if shards % group else [])
    ready = [(rng.uniform(0.0, START_S), worker) for worker in range(WORKERS)]
    heapq.heapify(ready)
    lost_at = [rng.expovariate(1.0 / (3600.0 * lost_after_h)) for _ in range(WORKERS)]
    while todo:
        at, worker = heapq.heappop(ready)
        free_s = max(free_s, at) + costs.task_s
        size = todo.pop()
        done = free_s + size * costs.shard_s * rng.lognormvariate(0.0, costs.spread)
        if done > lost_at[worker]:
            todo.append(size)
            back = max(lost_at[worker], free_s) + BACK_AFTER_S
            lost_at[worker] = back + rng.expovariate(1.0 / (3600.0 * lost_after_h))
            heapq.heappush(ready, (back, worker))
        else:
            end = max(end, done)
            heapq.heappush(ready, (done, worker))
    return shards * costs.shard_s / (WORKERS * end)


def paper(costs: Costs) -> None:
    """Print efficiencies by cohort, grouping and how long workers live, and where the scheduler is the limit."""
    print(f"\n{WORKERS:,} workers; a shard {costs.shard_s:.2f} s, the scheduler {1e3 * costs.task_s:.2f} ms a task")
    for subjects in COHORTS:
        shards = -(-subjects // SHARD)
        for hours in LOST_AFTER_H:
            found = {group: simulated(costs, shards, group, hours) for group in GROUPS}
            best = max(found, key=lambda g: found[g])
            lost = "never lost" if hours > 1e6 else f"lost after {hours:g} h"
            row = ", ".join(f"{group}: {found[group]:.0%}" for group in GROUPS)
            print(f"  {subjects:.0e} subjects ({shards:,} shards), {lost}: {row}; best {best}")
    print(f"  the scheduler is full with {costs.shard_s / costs.task_s:,.0f} workers at one shard a task")


def main() -> int:
    """Measure, then simulate."""
    asked = argparse.ArgumentParser(description="what a cluster would do")
    asked.add_argument("--shards", type=int, default=8)
    asked.add_argument("--paper", action="store_true")
    options = asked.parse_args()
    paper(Costs(2.4, 0.15, 0.002) if options.paper else measured(options.shards))
    return 0


if __name__ == "__main__":
    from setup_env import call as call_command
    from setup_env import ready as ready_environment

    if os.environ.get("COHORT_SCALE") != "inside":
        os.environ["COHORT_SCALE"] = "inside"
        sys.exit(call_command([str(ready_environment("run")), str(Path(__file__).resolve()), *sys.argv[1:]]))
    sys.path.insert(0, str(ROOT))
    sys.exit(main())
