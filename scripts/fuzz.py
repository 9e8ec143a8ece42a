"""Guided fuzzing of everything the package reads: python3 scripts/fuzz.py [--cases N] [--seconds N] [--seed N]

Each target of scripts/fuzz_targets.py takes bytes and may end in a result or in one of the project's own errors.
Inputs that reach new steps from line to line in cohort/ are kept and mutated further. The same seed and number of
cases give the same inputs. What crashes is made small and kept in --out; the exit code says whether anything did.
"""

from __future__ import annotations

import argparse
import json
import mmap
import os
import random
import resource
import signal
import subprocess
import sys
import tempfile
import time
import warnings
from collections.abc import Callable
from dataclasses import asdict, dataclass, field
from pathlib import Path
from types import CodeType, FrameType
from typing import Any

ROOT = Path(__file__).resolve().parent.parent
sys.path[:0] = [str(ROOT), str(ROOT / "scripts")]

from fuzz_mutate import mutated  # noqa: E402
from fuzz_targets import OF_FILES, Target, prepare, targets  # noqa: E402

TRACED_EVERY = 8
"""One case in so many is watched line by line, which costs ten times its time."""
SECONDS_A_CASE = 5.0
MEMORY_BYTES = 1_500_000_000
"""Address space that a target may take beyond what it has when it begins."""
MOST_KEPT = 4000
SHRINK_TRIES = 400


class TooSlowError(BaseException):
    """A case ran beyond its time; no `except Exception` may swallow it."""


@dataclass
class Row:
    """One line of the table."""

    target: str
    cases: int = 0
    paths: int = 0
    crashes: dict[str, str] = field(default_factory=dict)
    slowest_s: float = 0.0
    peak_mb: float = 0.0
    seconds: float = 0.0


def late(*_: Any) -> None:
    """What the alarm of a case does."""
    raise TooSlowError(f"more than {SECONDS_A_CASE:g} s")


class Paths:
    """Steps from line to line in cohort/ that were ever seen."""

    def __init__(self) -> None:
        self.seen: set[int] = set()
        self.now: set[int] = set()
        self.codes: dict[CodeType, int] = {}
        self.inside = str(ROOT / "cohort") + os.sep

    def enter(self, frame: FrameType, _event: str, _arg: Any) -> Any:
        """The tracing function: watches frames of cohort/ only."""
        code = frame.f_code
        if not code.co_filename.startswith(self.inside):
            return None
        base = self.codes.setdefault(code, len(self.codes)) << 40
        last, now = frame.f_lineno, self.now

        def step(frame: FrameType, event: str, _arg: Any) -> Any:
            nonlocal last
            if event == "line":
                now.add(base | last << 20 | frame.f_lineno)
                last = frame.f_lineno
            return step

        return step

    def new(self) -> int:
        """How many steps were new since the last call."""
        fresh = len(self.now - self.seen)
        self.seen |= self.now
        self.now.clear()
        return fresh


def memory_mb(what: str) -> float:
    """A number of /proc/self/status in MB: VmHWM is the most memory held so far, VmSize the address space."""
    text = Path("/proc/self/status").read_text()
    return int(text.split(f"{what}:")[1].split()[0]) * 1024 / 1e6


def attempt(target: Target, data: bytes, paths: Paths | None = None) -> str:
    """Run one case; returns what is wrong with how it ended, as one line that names the place, or an empty text."""
    signal.setitimer(signal.ITIMER_REAL, SECONDS_A_CASE * (4 if paths else 1) * target.patience)
    try:
        if paths is not None:
            sys.settrace(paths.enter)
        try:
            target.run(data)
        finally:
            sys.settrace(None)
    except target.allowed as error:
        return unfit(str(error))
    except (Exception, TooSlowError) as error:  # noqa: BLE001 -- whatever else it is, it is a finding
        return f"{type(error).__name__} at {place(error)}: {str(error)[:120]!r}"
    finally:
        signal.setitimer(signal.ITIMER_REAL, 0.0)
    return ""


def unfit(message: str) -> str:
    """What is wrong with a message: an empty or endless line, or characters that steer a terminal."""
    lines = message.split("\n")
    if not all(line.strip() for line in lines):
        return f"an empty line in a message: {message[:80]!r}"
    if any(not c.isprintable() and ord(c) < 0xA0 for line in lines for c in line):
        return f"a control character in a message: {message[:80]!r}"
    return f"an endless message: {message[:80]!r}" if max(map(len, lines)) > 3000 else ""


def place(error: BaseException) -> str:
    """The innermost line of cohort/ that an error came through."""
    found, trace = "?", error.__traceback__
    while trace is not None:
        name = trace.tb_frame.f_code.co_filename
        if "/cohort/" in name:
            found = f"{name.rsplit('/cohort/', 1)[1]}:{trace.tb_lineno}"
        trace = trace.tb_next
    return found


def same(wrong: str) -> str:
    """What two crashes of one cause share: kind and place."""
    return wrong.split(": ", 1)[0]


def shrunk(target: Target, data: bytes, wrong: str) -> bytes:
    """A shorter input that ends the same way at the same place."""
    piece = max(len(data) // 2, 1)
    tries = 0 if wrong.startswith("TooSlow") else SHRINK_TRIES
    while piece and tries > 0:
        at = 0
        while at < len(data) and tries > 0:
            shorter, tries = data[:at] + data[at + piece :], tries - 1
            if same(attempt(target, shorter)) == same(wrong):
                data = shorter
            else:
                at += piece
        piece //= 2
    return data


def fuzz(target: Target, cases: int, seed: int, seconds: float, out: Path, shelf: mmap.mmap) -> Row:
    """Run one target in this process, keeping each case on the shelf in case the process dies of it."""
    rng, paths, row = random.Random(f"{seed} {target.name}"), Paths(), Row(target.name)
    corpus = list(target.seeds)
    Path("/proc/self/clear_refs").write_text("5")  # the peak counts from here on
    began, usual = time.monotonic(), memory_mb("VmHWM")
    while row.cases < cases and time.monotonic() - began < seconds:
        first = row.cases < len(target.seeds)
        data = corpus[row.cases] if first else mutated(rng, corpus, target.binary)
        shelf[:8] = len(data).to_bytes(8, "little")
        shelf[8 : 8 + len(data)] = data
        watched = paths if first or row.cases % TRACED_EVERY == 0 else None
        start = time.monotonic()
        wrong = attempt(target, data, watched)
        if watched is None:
            row.slowest_s = max(row.slowest_s, time.monotonic() - start)
        row.cases += 1
        fresh = paths.new()
        row.paths += fresh
        if fresh and not first and len(corpus) < MOST_KEPT:
            corpus.append(data)
        key = same(wrong)
        if wrong and key not in row.crashes:
            row.crashes[key] = wrong
            (out / f"{target.name}-{len(row.crashes):03d}").write_bytes(shrunk(target, data, wrong))
    row.seconds = time.monotonic() - began
    row.peak_mb = memory_mb("VmHWM") - usual
    return row


def child(name: str, words: argparse.Namespace) -> int:
    """One target under its limits; prints its row as JSON."""
    folder = Path(words.folder)
    target = {t.name: t for t in targets(folder)}[name]
    warnings.simplefilter("error")

    signal.signal(signal.SIGALRM, late)
    attempt(target, target.seeds[0])  # what is imported and compiled late is there before memory is limited
    most = int(memory_mb("VmSize") * 1e6) + MEMORY_BYTES
    resource.setrlimit(resource.RLIMIT_AS, (most, most))
    with (folder / "shelf").open("r+b") as file:
        row = fuzz(target, words.cases, words.seed, words.seconds, Path(words.out), mmap.mmap(file.fileno(), 0))
    print(json.dumps(asdict(row)))
    return 0


def alone(target: Target, words: argparse.Namespace, folder: Path, left: float) -> Row:
    """One target in a process of its own; where that dies, the case that it died of is kept."""
    cases = max(int(words.cases * target.share), len(target.seeds))
    (folder / "shelf").write_bytes(bytes(1 << 26))
    command = [sys.executable, __file__, "--child", target.name, "--cases", str(cases), "--seed", str(words.seed),
               "--seconds", str(left * target.time_share), "--folder", str(folder), "--out", words.out]  # fmt: skip
    done = subprocess.run(command, capture_output=True, text=True, check=False)
    if done.returncode == 0:
        return Row(**json.loads(done.stdout.splitlines()[-1]))
    shelf = (folder / "shelf").read_bytes()
    (Path(words.out) / f"{target.name}-died").write_bytes(shelf[8 : 8 + int.from_bytes(shelf[:8], "little")])
    return Row(target.name, crashes={"died": f"ended with {done.returncode}: {done.stderr[-2000:]}"})


def report(rows: list[Row]) -> str:
    """The table, and a line for every crash."""
    crashes = {f"{r.target}: {k}": v for r in rows for k, v in r.crashes.items()}
    whole = Row("all", sum(r.cases for r in rows), sum(r.paths for r in rows), crashes,
                max(r.slowest_s for r in rows), max(r.peak_mb for r in rows), sum(r.seconds for r in rows))  # fmt: skip
    head = (
        f"{'target':10s}{'cases':>11s}{'paths':>8s}{'crashes':>9s}{'slowest, s':>12s}{'peak, MB':>10s}{'time, s':>9s}"
    )
    found = [f"{r.target}: {text}" for r in rows for text in r.crashes.values()]
    return "\n".join([head, *map(_line, [*rows, whole]), *found])


def _line(r: Row) -> str:
    return (f"{r.target:10s}{r.cases:11,d}{r.paths:8,d}{len(r.crashes):9d}{r.slowest_s:12.2f}{r.peak_mb:10.0f}"
            f"{r.seconds:9.0f}")  # fmt: skip


def main(words: list[str]) -> int:
    """Run every target, print the table, and return 1 where one of them crashed."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--cases", type=int, default=20_000, help="of all targets together")
    parser.add_argument("--seconds", type=float, default=1e9, help="stop the targets after about so long")
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--only", nargs="+", default=[], metavar="TARGET", help="these targets only")
    parser.add_argument("--out", default="build/fuzz", help="where crashing inputs go")
    parser.add_argument("--child", default="", help=argparse.SUPPRESS)
    parser.add_argument("--folder", default="", help=argparse.SUPPRESS)
    asked = parser.parse_args(words)
    if asked.child:
        return child(asked.child, asked)
    Path(asked.out).mkdir(parents=True, exist_ok=True)
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        prepare(folder, not asked.only or not set(asked.only) <= OF_FILES)
        chosen = [t for t in targets(folder) if not asked.only or t.name in asked.only]
        rows = [alone(t, asked, folder, asked.seconds) for t in chosen]
    print(report(rows))
    return int(any(r.crashes for r in rows))


if __name__ == "__main__":
    run: Callable[[list[str]], int] = main
    sys.exit(run(sys.argv[1:]))
