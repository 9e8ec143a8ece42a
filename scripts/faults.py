"""Provoke faults and count what they cost: python3 scripts/faults.py [--kills N]

Every fault is followed by the same command again; the result must be the bytes of a run that nothing disturbed, and no
finished part may be written a second time.
"""

from __future__ import annotations

import json
import os
import random
import resource
import shutil
import signal
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parent))

ROOT = Path(__file__).resolve().parent.parent
KILLS = 100
STUDY = """
title = "To be disturbed"
seed = 7
[subjects]
count = 120_000
[subjects.parameters]
td.lognormal = { median = "36 min", cv = 0.2 }
Rm.lognormal = { median = "210 mU/min", cv = 0.3 }
[[arms]]
name = "steady"
duration = "6 h"
glucose = [ { shape = "constant", rate = "180 mg/min" } ]
[ranking]
method = "sobol"
outcomes = ["growth_per_min", "period_min"]
base = 256
replicates = 8
tolerance = 0.9
[output]
time_courses = 2
"""


@dataclass
class Row:
    """One line of the table: the fault, how it was provoked, how often, parts lost or written twice, and whether the end
    was the undisturbed one."""

    fault: str
    how: str
    times: int
    lost: int
    identical: bool


class Bench:
    """A folder with the study, the undisturbed result, and the means to run and to compare."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.study = folder / "disturbed.toml"
        self.study.write_text(STUDY)
        self.out = folder / "out"
        self.run(folder / "undisturbed")
        self.whole = parts(folder / "undisturbed")

    def command(self, out: Path, *words: str) -> list[str]:
        return [sys.executable, "-m", "cohort", "run", str(self.study), "--out", str(out), *words]

    def start(self, out: Path, *words: str) -> subprocess.Popen[bytes]:
        return subprocess.Popen(self.command(out, *words), cwd=ROOT, stdout=subprocess.DEVNULL, stderr=subprocess.PIPE)

    def run(self, out: Path, *words: str) -> tuple[int, str]:
        done = subprocess.run(self.command(out, *words), cwd=ROOT, capture_output=True, text=True, check=False)
        return done.returncode, done.stderr

    def fresh(self) -> Path:
        shutil.rmtree(self.out, ignore_errors=True)
        return self.out

    def finished(self) -> Path:
        out = self.fresh()
        shutil.copytree(self.folder / "undisturbed", out)
        return out


def parts(out: Path) -> dict[str, bytes]:
    """Every part of a folder, by name."""
    return {p.relative_to(out).as_posix(): p.read_bytes() for p in sorted(out.rglob("part-*.parquet"))}


def stamps(out: Path) -> dict[str, int]:
    """When each part was written."""
    return {p.relative_to(out).as_posix(): p.stat().st_mtime_ns for p in out.rglob("part-*.parquet")}


def killed(bench: Bench, kills: int) -> Row:
    """kill -9 of the whole run at random moments, then the same command again."""
    rng, count, twice = random.Random(1), 0, 0
    same = True
    while count < kills:
        out = bench.fresh()
        while True:
            before = stamps(out)
            process = bench.start(out)
            try:
                process.wait(rng.uniform(0.3, 6.0) if count < kills else None)
            except subprocess.TimeoutExpired:
                process.kill()
                count += 1
            process.wait()
            after = stamps(out)
            twice += sum(after.get(name) != at for name, at in before.items() if "time_courses" not in name)
            if process.returncode == 0:
                break
        same &= parts(out) == bench.whole
    return Row("the run is killed", "kill -9 at random moments, run again", count, twice, same)


def interrupted(bench: Bench) -> Row:
    """Ctrl-C and SIGTERM."""
    rng, codes = random.Random(2), []
    out = bench.fresh()
    for word in (signal.SIGINT, signal.SIGTERM) * 3:
        process = bench.start(out)
        time.sleep(rng.uniform(1.5, 4.0))
        process.send_signal(word)
        codes.append(process.wait(60))
    bench.run(out)
    good = all(code in (130, 0) for code in codes)
    return Row(
        "the run is interrupted",
        "SIGINT and SIGTERM in turn: exit 130",
        len(codes),
        0,
        good and parts(out) == bench.whole,
    )


def harmed(bench: Bench) -> Row:
    """Parts truncated, flipped, missing, foreign and half written are found and made anew."""
    rng, times = random.Random(3), 0
    same, lost = True, 0
    for harm in (truncate, flip, remove, swap, leave_half) * 3:
        out = bench.finished()
        paths = sorted(out.rglob("part-*.parquet"))
        victim = rng.choice(paths)
        before = stamps(out)
        harm(victim, rng, paths)
        bench.run(out)
        after = stamps(out)
        touched = {victim.relative_to(out).as_posix()}
        lost += (
            sum(after[name] != at for name, at in before.items() if name not in touched and "time_courses" not in name)
            > 2
        )
        same &= parts(out) == bench.whole
        times += 1
    return Row("parts are harmed", "cut, a bit flipped, removed, exchanged, half written", times, lost, same)


def truncate(victim: Path, rng: random.Random, _: list[Path]) -> None:
    """Keep the first part of a file."""
    data = victim.read_bytes()
    victim.write_bytes(data[: rng.randrange(len(data))])


def flip(victim: Path, rng: random.Random, _: list[Path]) -> None:
    """Flip one bit."""
    data = bytearray(victim.read_bytes())
    data[rng.randrange(len(data))] ^= 1 << rng.randrange(8)
    victim.write_bytes(bytes(data))


def remove(victim: Path, _: random.Random, __: list[Path]) -> None:
    """Remove a part."""
    victim.unlink()


def swap(victim: Path, rng: random.Random, paths: list[Path]) -> None:
    """Put another part in its place."""
    shutil.copyfile(rng.choice([p for p in paths if p != victim]), victim)


def leave_half(victim: Path, _: random.Random, __: list[Path]) -> None:
    """Leave what a process that died in the middle of writing leaves."""
    victim.with_name(f".{victim.name}.1.tmp").write_bytes(victim.read_bytes()[:500])
    victim.unlink()


def disk_full(bench: Bench) -> Row:
    """A file that cannot grow, in the middle of a part."""
    out = bench.fresh()
    same = True
    for limit in (2_000, 60_000, 200_000):

        def small(size: int = limit) -> None:
            signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
            resource.setrlimit(resource.RLIMIT_FSIZE, (size, size))

        done = subprocess.run(
            bench.command(out), cwd=ROOT, capture_output=True, text=True, check=False, preexec_fn=small
        )
        same &= done.returncode == 3 and "Traceback" not in done.stderr
    bench.run(out)
    return Row(
        "a part cannot be written",
        "files may not grow past 2, 60, 200 kB: exit 3",
        3,
        0,
        same and parts(out) == bench.whole,
    )


def two_at_once(bench: Bench) -> Row:
    """A second run in the same folder refuses; a lock of a dead process does not hold."""
    out = bench.fresh()
    first = bench.start(out)
    time.sleep(3.0)
    code, said = bench.run(out)
    refused = code == 3 and "is running in this folder" in said
    first.kill()
    first.wait()
    code, _ = bench.run(out)
    return Row("two runs in one folder", "the second refuses; a dead one's lock does not hold", 2, 0,
               refused and code == 0 and parts(out) == bench.whole)  # fmt: skip


def edited(bench: Bench) -> Row:
    """A study edited half-way is refused by the key that changed, and what is there stays."""
    out = bench.finished()
    named = 0
    changes = {"seed=8": "seed", "subjects.parameters.td.lognormal.cv=0.3": "td", "ranking.replicates=4": "replicates",
               "arms.steady.duration='7 h'": "duration", "subjects.count=100": "count"}  # fmt: skip
    for word, key in changes.items():
        code, said = bench.run(out, "--set", word)
        named += code == 2 and key in said and "Traceback" not in said
    return Row("the study is edited half-way", "five keys changed, each refused by name", named, 5 - named,
               named == 5 and parts(out) == bench.whole)  # fmt: skip


def workers_killed(bench: Bench) -> Row:
    """Workers of a cluster killed at random moments; the run goes on."""
    port = 18_000 + os.getpid() % 1000
    where = f"tcp://127.0.0.1:{port}"
    quiet = {"stdout": subprocess.DEVNULL, "stderr": subprocess.DEVNULL, "cwd": bench.folder}
    environment = {**os.environ, "PYTHONPATH": str(ROOT)}
    dask = [sys.executable, "-m"]
    scheduler = subprocess.Popen([*dask, "distributed.cli.dask_scheduler", "--host", "127.0.0.1", "--port", str(port),
                                  "--no-dashboard"], env=environment, **quiet)  # type: ignore[call-overload]  # fmt: skip
    nanny = subprocess.Popen([*dask, "distributed.cli.dask_worker", where, "--nworkers", "2", "--nthreads", "1",
                              "--no-dashboard"], env=environment, **quiet)  # type: ignore[call-overload]  # fmt: skip
    rng, count = random.Random(4), 0
    out = bench.fresh()
    try:
        time.sleep(6.0)
        process = bench.start(out, "--scheduler", where)
        while process.poll() is None:
            time.sleep(rng.uniform(4.0, 8.0))
            children = subprocess.run(
                ["pgrep", "-P", str(nanny.pid)], capture_output=True, text=True, check=False
            ).stdout.split()
            if children and count < 4:
                os.kill(int(rng.choice(children)), signal.SIGKILL)
                count += 1
        code = process.returncode
    finally:
        for one in (nanny, scheduler):
            one.terminate()
        for one in (nanny, scheduler):
            one.wait(30)
    if code != 0:
        bench.run(out)
    return Row(
        "workers of a cluster are killed",
        "kill -9 of worker processes while it runs",
        count,
        0,
        parts(out) == bench.whole,
    )


def main(words: list[str]) -> int:
    """Provoke every fault and print the table, and the same as JSON."""
    kills = int(words[words.index("--kills") + 1]) if "--kills" in words else KILLS
    began = time.monotonic()
    with tempfile.TemporaryDirectory() as place:
        bench = Bench(Path(place))
        faults: list[Callable[[Bench], Row]] = [harmed, disk_full, two_at_once, edited, interrupted, workers_killed]
        rows = [killed(bench, kills), *(fault(bench) for fault in faults)]
    print(f"{'fault':34s}{'how':58s}{'times':>6s}{'lost':>6s}  identical")
    for row in rows:
        print(f"{row.fault:34s}{row.how:58s}{row.times:6d}{row.lost:6d}  {'yes' if row.identical else 'NO'}")
    print(f"\n{time.monotonic() - began:.0f} s")
    print(json.dumps([vars(row) for row in rows]))
    return 0 if all(row.identical and not row.lost for row in rows) else 1


if __name__ == "__main__":
    from setup_env import call as call_command
    from setup_env import ready

    if os.environ.get("COHORT_FAULTS") != "inside":
        os.environ["COHORT_FAULTS"] = "inside"
        sys.exit(call_command([str(ready("test")), str(Path(__file__).resolve()), *sys.argv[1:]]))
    os.environ["PYTHONPATH"] = str(ROOT)
    sys.exit(main(sys.argv[1:]))
