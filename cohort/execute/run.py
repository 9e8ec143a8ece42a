"""Run a study into a folder: start, or carry on where it stopped."""

from __future__ import annotations

import contextlib
import json
import os
import platform
import signal
import sys
import threading
import time
from collections.abc import Iterator, Mapping
from dataclasses import asdict, dataclass
from functools import partial
from importlib import metadata
from pathlib import Path
from typing import Any

from cohort.compiled import kernel_sources
from cohort.errors import CohortError, Problem, RunError, StudyError
from cohort.execute.courses import keep_courses
from cohort.execute.facts import arm_facts, fasting_facts, sampling_facts
from cohort.execute.identity import arm_identity, changed_files, first_difference, subjects_identity
from cohort.execute.limits import watch_disk
from cohort.execute.maps import run_maps
from cohort.execute.population import run_population
from cohort.execute.progress import Progress
from cohort.execute.ranking import run_ranking, slots_of
from cohort.execute.shards import Work, commit, missing, shards, strays
from cohort.execute.stages import lost_rows, rows, warm
from cohort.execute.tasks import Hands, Job, Narrower, Piece
from cohort.infer.facts import as_plain
from cohort.infer.salib import load as load_salib
from cohort.model.catalogue import MODELS
from cohort.quantities import PARAMETERS
from cohort.reading import Maybe, misfit, read_json
from cohort.stores import as_os_error, beating, holder_of, is_remote, myself, note, store_lock, watched_alive
from cohort.study import Study, plan
from cohort.study.plan import SHARD
from cohort.tables import write_bytes


@dataclass(frozen=True)
class Finished:
    """A run that reached its end: the folder, runs simulated now and before, seconds of the clock."""

    folder: Path
    simulated: int
    kept: int
    seconds: float


def run_study(
    study: Study,
    out: Path,
    workers: int | None = None,
    shard_size: int = SHARD,
    quiet: bool = False,
    log: Path | None = None,
    scheduler: str | None = None,
    mixed: bool = False,
    only: tuple[int, int] | None = None,
    lock: bool = True,
) -> Finished:
    """Simulate what is missing in `out` and write it there; what happens, and when, is added to `log`.

    scheduler: address of a dask.distributed cluster to do it on, whose workers may differ from this process where `mixed`;
    only: (k, n), the k-th of n shares of the cohort's shards and nothing else, for job arrays, several at once;
    lock: whether the folder is held against other runs (a store that cannot do it is refused otherwise).
    Raises StudyError where the folder holds another study, RunError where it cannot finish, KeyboardInterrupt when
    interrupted (also by SIGTERM); what is done stays."""
    workers = workers or os.cpu_count() or 1
    began = time.monotonic()
    _make(out)
    if only is not None:
        return _run_share(study, out, workers, shard_size, quiet, log, only, began)
    with _locked(out, lock), _terminable(), _hands(workers, scheduler, out, mixed) as hands:
        before = _check_folder(study, out)
        record = _record(study, workers, shard_size, before)
        with _recorded(out, record):
            _write_record(out, record, "running")
            for path in strays(study, out, shard_size):
                path.unlink(missing_ok=True)  # a worker of a run that died may still be at work on it
            with _progress(quiet, log) as progress:
                done, kept = _all_runs(study, out, hands, shard_size, progress, record)
            seconds = time.monotonic() - began
            record["timings"] = {"seconds": round(seconds, 3), "runs": done}
            _write_record(out, record, "done")
    return Finished(out, done, kept, seconds)


def _make(out: Path) -> None:
    """The result folder; a store has none to make, and is asked whether it answers."""
    try:
        if is_remote(out):
            with as_os_error():
                out.fs.info(out.drive or out.path)  # type: ignore[attr-defined]
        else:
            out.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise RunError(f"{out}: cannot be made: {_why(error)}") from None


def _run_share(
    study: Study,
    out: Path,
    workers: int,
    shard_size: int,
    quiet: bool,
    log: Path | None,
    only: tuple[int, int],
    began: float,
) -> Finished:
    """One share of the shards, beside others that write other shares into the same folder; no record is kept of it."""
    share, shares = only
    _refuse_foreign(out)
    _check_folder(study, out)
    with _terminable(), _progress(quiet, log) as progress:
        _compile(study)
        left = [w for w in missing(study, out, shard_size) if w.shard.number % shares == share - 1]
        todo = sum(len(w.arms) * (w.shard.last - w.shard.first) for w in left)
        if progress:
            progress.begin(todo, 0)
        if not (out / "run.json").exists():
            _write_record(out, _record(study, workers, shard_size, {}), "running")
        Hands(workers, guard=partial(watch_disk, out)).do((_job(study, out, work) for work in left), progress)
    return Finished(out, todo, 0, time.monotonic() - began)


@contextlib.contextmanager
def _hands(workers: int, scheduler: str | None, out: Path, mixed: bool) -> Iterator[Hands]:
    if scheduler is None:
        yield Hands(workers, guard=partial(watch_disk, out))
        return
    from cohort.execute.cluster import reached

    with reached(scheduler, out, mixed) as cluster:
        yield Hands(workers, cluster)


@contextlib.contextmanager
def _progress(quiet: bool, log: Path | None) -> Iterator[Progress | None]:
    if quiet and log is None:
        yield None
        return
    progress = Progress(None if quiet else sys.stderr, log)
    progress.note(f"begins; {' '.join(sys.argv)}")
    try:
        yield progress
        progress.note(f"ends; {progress.done:,} runs are there")
    except BaseException as error:
        progress.note(f"stops: {type(error).__name__}: {error}")
        raise
    finally:
        progress.end()


def _all_runs(
    study: Study, out: Path, hands: Hands, shard_size: int, progress: Progress | None, record: dict[str, Any]
) -> tuple[int, int]:
    """The cohort, then the ranking; what the ranking did goes into the record."""
    if study.ranking:
        threading.Thread(target=load_salib, daemon=True).start()  # takes a second or two, beside the simulation
    _compile(study)
    done, kept = _simulate(study, out, hands, shard_size, progress)
    keep_courses(study, out)
    run_maps(study, out)
    slots = record["slots"]
    if study.recipe.population:
        made, there = run_population(study, out, hands, progress, slots)
        done, kept = done + made, kept + there
    if study.ranking:
        ranked = run_ranking(study, out, hands, progress, slots)
        record["ranking"] = as_plain(ranked.facts)
        done, kept = done + ranked.made, kept + ranked.kept
    return done, kept


@contextlib.contextmanager
def _recorded(out: Path, record: Mapping[str, Any]) -> Iterator[None]:
    """Whatever ends a run, its record says so as far as the disk allows, and a user reads one line."""
    try:
        yield
    except KeyboardInterrupt:
        with contextlib.suppress(OSError):
            _write_record(out, record, "interrupted")
        raise
    except Exception as error:
        with contextlib.suppress(OSError):
            _write_record(out, record, "stopped")
        if isinstance(error, CohortError):
            raise
        why = _why(error) if isinstance(error, OSError) else f"{type(error).__name__}: {error}"
        raise RunError(f"{out}: {why}; what was finished is kept, run again to carry on") from error


def _why(error: OSError) -> str:
    return (error.strerror or str(error)).lower()


def _simulate(study: Study, out: Path, hands: Hands, shard_size: int, progress: Progress | None) -> tuple[int, int]:
    """Do the missing work of the cohort; returns (runs simulated, runs that were there)."""
    left = missing(study, out, shard_size)
    todo = sum(len(w.arms) * (w.shard.last - w.shard.first) for w in left)
    there = study.recipe.count * len(study.arms) - todo
    if progress:
        progress.begin(todo + there, there)
    hands.do((_job(study, out, work) for work in left), progress)
    return todo, there


def _job(study: Study, out: Path, work: Work) -> Job:
    arms = work.arms
    pieces = tuple(
        Piece(
            (end - start) * len(arms),
            partial(rows, study, start, end, arms),
            Narrower(start, end, partial(_range_rows, study, arms), partial(lost_rows, study, arms)),
        )
        for start, end in work.shard.sub_batches()
    )
    return Job(f"shard {work.shard.number}", pieces, partial(commit, study, out, work))


def _range_rows(study: Study, arms: tuple[str, ...], start: int, stop: int) -> dict[str, Any]:
    return rows(study, start, stop, arms)


def _compile(study: Study) -> None:
    """Compile once, before there are threads."""
    warm(study)
    rows(study, 0, 1, [arm.name for arm in study.arms])


# ---- the folder --------------------------------------------------------------------------------------------------


def _refuse_foreign(out: Path) -> None:
    """Before anything is written: a folder with other things in it and no record is somebody else's."""
    other = [p.name for p in (out.iterdir() if out.exists() else ()) if not p.name.startswith(".")]
    if other and not (out / "run.json").exists():
        raise StudyError(
            [Problem("", f"holds {other[0]!r} and no run.json; name an empty folder with --out", str(out))]
        )


@contextlib.contextmanager
def _locked(out: Path, lock: bool) -> Iterator[None]:
    """Hold the folder for this process. Raises RunError where another run holds it.

    On this host the kernel lets go of a lock if its process dies. On a disk that hosts share a lock of another host is watched:
    one that counts on is alive.
    """
    _refuse_foreign(out)
    if not lock:
        yield
    elif is_remote(out):
        with store_lock(out):
            yield
    else:
        with _flocked(out / ".lock", out):
            yield


@contextlib.contextmanager
def _flocked(path: Path, out: Path) -> Iterator[None]:
    import fcntl

    try:
        opened = path.open("ab+")
    except OSError as error:
        raise RunError(f"{out}: {_why(error)}") from None

    def read() -> bytes:
        opened.seek(0)
        return opened.read()

    def write(data: bytes) -> None:
        opened.truncate(0)
        opened.write(data)
        opened.flush()

    with opened:
        try:
            fcntl.flock(opened, fcntl.LOCK_EX | fcntl.LOCK_NB)
        except OSError:
            raise RunError(f"{out}: {holder_of(read())} is running in this folder") from None
        before = read()
        elsewhere = before and not holder_of(before).endswith(f" on {platform.node()}")
        if elsewhere and watched_alive(lambda: path.read_bytes(), before):
            raise RunError(f"{out}: {holder_of(before)} is running in this folder")
        write(note(myself(), 0))
        with beating(write):
            yield
        opened.truncate(0)


@contextlib.contextmanager
def _terminable() -> Iterator[None]:
    """SIGTERM ends a run as Ctrl-C does."""

    def interrupt(*_: Any) -> None:
        raise KeyboardInterrupt

    if threading.current_thread() is not threading.main_thread():
        yield
        return
    before = signal.signal(signal.SIGTERM, interrupt)
    try:
        yield
    finally:
        signal.signal(signal.SIGTERM, before)


def _text(value: Any) -> bool:
    return isinstance(value, str)


def _slot(value: Any) -> bool:
    return isinstance(value, int) and 0 <= value < 1000


_BEFORE = {
    "settings": {None: _text}, "arms": [_text], "identities": {"subjects": _text, "outcomes": {None: _text}},
    "slots": Maybe({None: _slot}), "study_texts": Maybe([_text]),
}  # fmt: skip
"""What a run reads of the record that is there."""


def _check_folder(study: Study, out: Path) -> dict[str, Any]:
    """Refuse a folder that holds something else; returns the record that was there, or {}."""
    path = out / "run.json"
    if not path.exists():
        return {}
    try:
        before: dict[str, Any] = read_json(path)
        if misfit(before, _BEFORE):
            raise ValueError("of another shape")
        settings, identities = before["settings"], before["identities"]
        key = first_difference(settings, study.settings, set(before["arms"]), study.recipe.draw)
        changed = changed_files(before, study)
    except (ValueError, KeyError, TypeError, SyntaxError, OSError, RecursionError, MemoryError):
        raise StudyError([Problem("", "is not a run's record; name another folder with --out", str(path))]) from None
    if key:
        raise StudyError([_refusal(key, settings, study.settings, out)])
    if identities["subjects"] != subjects_identity(study) or any(
        identities["outcomes"].get(arm.name, now) != now
        for arm in study.arms
        for now in [arm_identity(study, arm, "outcomes")]
    ):
        raise StudyError([Problem("", f"holds results of {changed}; name another folder with --out, or go on with "
                                      "what made them", str(out))])  # fmt: skip
    return before


def _refusal(key: str, before: Mapping[str, str], now: Mapping[str, str], out: Path) -> Problem:
    was, is_now = before.get(key, "not given"), now.get(key, "not given")
    grows = "may only grow" if key == "subjects.count" else "cannot change"
    return Problem(key, f"was {was} in the results that {out} holds and is {is_now} now; it {grows} there. Name another "
                   "folder with --out, or put it back")  # fmt: skip


def _record(study: Study, workers: int, shard_size: int, before: Mapping[str, Any]) -> dict[str, Any]:
    texts = [t for t in before.get("study_texts", []) if t != study.text.decode("utf-8", "replace")]
    found, card = plan(study, workers), MODELS[study.model]
    return {
        "title": study.title,
        "model": study.model,
        "model_facts": {"title": card.title, "source": card.source, "limits": list(card.limits)},
        "units": {p: PARAMETERS[p].unit for p in card.parameters},
        "seed": study.seed,
        "count": study.recipe.count,
        "shards": len(shards(study.recipe.count, shard_size)),
        "draw": study.recipe.draw if study.recipe.table is None else "table",
        "arms": [arm.name for arm in study.arms],
        "strata": list(study.recipe.stratum_names),
        "arm_facts": {arm.name: arm_facts(arm) for arm in study.arms},
        "varied": list(study.recipe.varied),
        "identities": {
            "subjects": subjects_identity(study),
            "outcomes": {arm.name: arm_identity(study, arm, "outcomes") for arm in study.arms},
        },
        "slots": slots_of(study, before),
        "sampling": sampling_facts(study),
        "recruitment": asdict(study.recruitment) if study.recruitment else None,
        "selection": asdict(study.selection),
        "persons": study.recipe.table is not None and study.recipe.table.person is not None,
        "population": asdict(study.recipe.population) if study.recipe.population else None,
        "fasting": fasting_facts(study),
        "settings": dict(study.settings),
        "overrides": list(study.overrides),
        "study_texts": [*texts, study.text.decode("utf-8", "replace")],
        "files": dict(study.files),
        "versions": _versions(),
        "sources": kernel_sources(),
        "plan": {"runs": found.runs, "shards": found.shards, "workers": workers},
    }


def _versions() -> dict[str, str]:
    packages = ("numpy", "numba", "llvmlite", "pyarrow", "dask")
    own = "0.1.0"
    with contextlib.suppress(metadata.PackageNotFoundError):
        own = metadata.version("ultradian-cohort")
    return {"cohort": own, "python": sys.version.split()[0]} | {p: metadata.version(p) for p in packages}


def _write_record(out: Path, record: Mapping[str, Any], state: str) -> None:
    """run.json first: a folder that has it can be carried on, whatever else is missing."""
    write_bytes(out / "run.json", (json.dumps({**record, "state": state}, indent=2) + "\n").encode())
    write_bytes(out / "study.toml", record["study_texts"][-1].encode())
