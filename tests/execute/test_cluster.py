"""Runs on a real dask scheduler with real workers in processes of their own, and shares for job arrays."""

import os
import signal
import socket
import subprocess
import sys
import time
from collections.abc import Iterator
from functools import partial
from pathlib import Path

import numpy as np
import pytest

from cohort.cli import main
from cohort.errors import RunError
from cohort.execute import cluster as clusters
from cohort.execute.run import run_study
from cohort.execute.stages import lost_rows, rows
from cohort.execute.tasks import Job, Narrower, Piece
from cohort.quantities import FAILURES, REGIMES
from cohort.report.summary import rebuild
from cohort.study import load_study

STUDY = """
title = "On other people's machines"
seed = 7
[subjects]
count = 6000
[subjects.parameters]
td.lognormal = { median = "36 min", cv = 0.2 }
Rm.lognormal = { median = "210 mU/min", cv = 0.3 }
[[arms]]
name = "steady"
duration = "12 h"
glucose = [ { shape = "constant", rate = "180 mg/min" } ]
[ranking]
method = "sobol"
outcomes = ["growth_per_min", "period_min"]
base = 32
replicates = 4
tolerance = 0.9
[output]
time_courses = 4
"""
SMALL = 1024
DASK = [sys.executable, "-m", "distributed.cli.dask_scheduler"], [sys.executable, "-m", "distributed.cli.dask_worker"]


def parts(out: Path) -> dict[str, bytes]:
    return {p.relative_to(out).as_posix(): p.read_bytes() for p in sorted(out.rglob("*.parquet"))}


def study(folder: Path):  # type: ignore[no-untyped-def]
    (folder / "s.toml").write_text(STUDY)
    return load_study(folder / "s.toml")


@pytest.fixture(scope="module")
def local(tmp_path_factory: pytest.TempPathFactory) -> dict[str, bytes]:
    folder = tmp_path_factory.mktemp("local")
    run_study(study(folder), folder / "out", quiet=True, shard_size=SMALL)
    rebuild(folder / "out", page=False)
    return parts(folder / "out")


@pytest.fixture(scope="module")
def address(tmp_path_factory: pytest.TempPathFactory) -> Iterator[str]:
    """A scheduler and two workers, each a process of its own."""
    folder = tmp_path_factory.mktemp("cluster")
    with socket.socket() as free:
        free.bind(("127.0.0.1", 0))
        port = free.getsockname()[1]
    where = f"tcp://127.0.0.1:{port}"
    environment = {
        **os.environ,
        "DASK_DISTRIBUTED__SCHEDULER__ALLOWED_FAILURES": "0",
        "PYTHONPATH": os.pathsep.join([str(Path(clusters.__file__).parents[2]), *sys.path]),
    }
    quiet = {"stdout": subprocess.DEVNULL, "stderr": subprocess.DEVNULL, "env": environment, "cwd": folder}
    scheduler = subprocess.Popen([*DASK[0], "--host", "127.0.0.1", "--port", str(port), "--no-dashboard"], **quiet)  # type: ignore[call-overload]
    workers = [
        subprocess.Popen([*DASK[1], where, "--nthreads", "1", "--no-dashboard", "--local-directory", str(folder / f"w{i}")],
                         **quiet)  # type: ignore[call-overload]
        for i in range(2)
    ]  # fmt: skip
    from distributed import Client

    with Client(where, timeout=60, set_as_default=False) as client:
        client.wait_for_workers(2, timeout=60)
    yield where
    for process in (*workers, scheduler):
        process.send_signal(signal.SIGTERM)
    for process in (*workers, scheduler):
        try:
            process.wait(20)
        except subprocess.TimeoutExpired:  # on a busy machine dask's own good-bye may hang
            process.kill()
            process.wait()


def test_a_cluster_writes_the_same_bytes_as_one_machine(local: dict[str, bytes], address: str, tmp_path: Path) -> None:
    run_study(study(tmp_path), tmp_path / "out", quiet=True, shard_size=SMALL, scheduler=address)
    rebuild(tmp_path / "out", page=False)
    assert parts(tmp_path / "out") == local


def test_a_worker_killed_in_the_middle_costs_nothing(local: dict[str, bytes], address: str, tmp_path: Path) -> None:
    from concurrent.futures import ThreadPoolExecutor

    from distributed import Client

    def kill_one() -> int:
        with Client(address, timeout=60, set_as_default=False) as client:
            while not list((tmp_path / "out" / "outcomes").rglob("part-*.parquet")):
                time.sleep(0.02)
            pids: dict[str, int] = client.run(os.getpid)
        victim = min(pids.values())
        os.kill(victim, signal.SIGKILL)
        return victim

    with ThreadPoolExecutor(1) as pool:
        killed = pool.submit(kill_one)
        run_study(study(tmp_path), tmp_path / "out", quiet=True, shard_size=SMALL, scheduler=address)
        assert killed.result(60) > 0
    rebuild(tmp_path / "out", page=False)
    assert parts(tmp_path / "out") == local


def test_workers_of_another_version_are_refused_unless_accepted(
    address: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    real = clusters.traits()
    monkeypatch.setattr(clusters, "traits", lambda: {**real, "numpy": "1.0", "processor": "abacus"})
    with pytest.raises(RunError, match=r"numpy .*, here 1\.0.*--mixed-machines|--mixed-machines accepts it\): .*numpy"):
        run_study(study(tmp_path), tmp_path / "out", quiet=True, shard_size=SMALL, scheduler=address)
    done = run_study(study(tmp_path), tmp_path / "out", quiet=True, shard_size=SMALL, scheduler=address, mixed=True)
    assert done.simulated > 6000


def test_workers_that_do_not_see_the_folder_are_told_apart_at_once(
    address: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    real = clusters._look
    monkeypatch.setattr(
        clusters, "_look", lambda token, wanted: real(token.with_name(f"{token.name}-elsewhere"), wanted)
    )
    with pytest.raises(RunError, match="do not see the result folder; --out must lie on a disk they share"):
        run_study(study(tmp_path), tmp_path / "out", quiet=True, scheduler=address)
    assert not list((tmp_path / "out").rglob("part-*"))


def test_a_scheduler_that_is_not_there_is_said_in_a_line(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(clusters, "REACHED_WITHIN_S", 1.0)
    study(tmp_path)
    words = ["run", str(tmp_path / "s.toml"), "--out", str(tmp_path / "out"), "--scheduler", "tcp://127.0.0.1:9"]
    assert main(words) == 3
    assert "no scheduler could be reached there" in capsys.readouterr().err


def test_shares_of_a_job_array_and_a_last_run_are_the_whole(local: dict[str, bytes], tmp_path: Path) -> None:
    made = study(tmp_path)
    for share in (2, 1, 3):
        run_study(made, tmp_path / "out", quiet=True, shard_size=SMALL, only=(share, 3))
        assert not (tmp_path / "out/ranking").exists()
    done = run_study(made, tmp_path / "out", quiet=True, shard_size=SMALL)
    assert done.kept >= 6000
    rebuild(tmp_path / "out", page=False)
    assert parts(tmp_path / "out") == local


def test_a_share_is_asked_for_as_k_of_n(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    study(tmp_path)
    with pytest.raises(SystemExit) as caught:
        main(["run", str(tmp_path / "s.toml"), "--shards", "4/3"])
    assert caught.value.code == 2 and "is not K/N" in capsys.readouterr().err
    assert main(["run", str(tmp_path / "s.toml"), "--out", str(tmp_path / "out"), "--shards", "1/1"]) == 0
    assert "When every share is done, run without --shards" in capsys.readouterr().out


def killing_rows(start: int, stop: int) -> dict[str, dict[str, np.ndarray]]:
    """Rows of subjects, unless it is number 11, who takes the process along."""
    if start <= 11 < stop:
        os.kill(os.getpid(), signal.SIGKILL)
    return {"subjects": {"subject": np.arange(start, stop)}}


def lost_row(subject: int) -> dict[str, dict[str, np.ndarray]]:
    return {"subjects": {"subject": np.array([-subject])}}


def test_a_task_that_kills_its_workers_is_narrowed_to_the_subject(address: str, tmp_path: Path) -> None:
    written = []
    pieces = tuple(
        Piece(8, partial(killing_rows, a, a + 8), Narrower(a, a + 8, killing_rows, lost_row)) for a in (0, 8)
    )
    with clusters.reached(address, tmp_path, mixed=False) as cluster:
        clusters._narrowed(cluster, Job("deadly", pieces, written.extend))
        with pytest.raises(RunError, match="workers die with it again and again"):
            clusters.run_on(cluster, [Job("hopeless", (Piece(8, partial(killing_rows, 8, 16)),), len)], None)
    whole = np.concatenate([piece["subjects"]["subject"] for piece in written])
    assert whole.tolist() == [*range(11), -11, *range(12, 16)]


def test_a_lost_subject_is_a_failed_row_that_says_why(tmp_path: Path) -> None:
    made = study(tmp_path)
    row = lost_rows(made, ["steady"], 5)
    seen = rows(made, 5, 6, ["steady"])
    assert row["subjects"]["td"] == seen["subjects"]["td"]
    outcomes = row["outcomes/steady"]
    assert set(outcomes) == set(seen["outcomes/steady"]) and np.isnan(outcomes["glucose_mean_mg_dl"]).all()
    assert outcomes["regime"][0] == REGIMES.index("failed") and outcomes["failure"][0] == FAILURES.index("process died")
    assert outcomes["oscillates"][0] == -1
