"""Results in an object store: an S3-compatible server in its own process, through the real client."""

import os
import socket
import subprocess
import sys
import threading
import time
from collections.abc import Iterator
from pathlib import Path

import pytest

from cohort import stores
from cohort.cli import main
from cohort.errors import RunError, StudyError
from cohort.execute.run import run_study
from cohort.stores import note, place, put
from cohort.study import load_study

STUDY = """
title = "stored elsewhere"
seed = 9
[subjects]
count = 1500
[subjects.parameters]
td.lognormal = { median = "36 min", cv = 0.2 }
[[arms]]
name = "steady"
duration = "3 h"
glucose = [ { shape = "constant", rate = "180 mg/min" } ]
[output]
time_courses = 2
"""
BUCKET = "planning"


@pytest.fixture(scope="module")
def server() -> Iterator[str]:
    with socket.socket() as free:
        free.bind(("127.0.0.1", 0))
        port = free.getsockname()[1]
    at = f"http://127.0.0.1:{port}"
    command = [sys.executable, "-m", "moto.server", "-H", "127.0.0.1", "-p", str(port)]
    with subprocess.Popen(command, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL) as running:
        keys = {
            "AWS_ACCESS_KEY_ID": "k",
            "AWS_SECRET_ACCESS_KEY": "s",
            "AWS_ENDPOINT_URL": at,
            "AWS_DEFAULT_REGION": "us-east-1",
        }
        before = {key: os.environ.get(key) for key in keys}
        os.environ.update(keys)
        import s3fs

        until = time.monotonic() + 60
        while time.monotonic() < until:
            with socket.socket() as asking:
                if not asking.connect_ex(("127.0.0.1", port)):
                    break
            time.sleep(0.1)
        s3fs.S3FileSystem(skip_instance_cache=True).mkdir(BUCKET)
        yield at
        running.terminate()
        for key, value in before.items():
            os.environ.pop(key) if value is None else os.environ.update({key: value})


def files(folder: Path) -> dict[str, bytes]:
    """Parts by their name below the folder."""
    base = str(folder).rstrip("/")
    return {str(p)[len(base) :].lstrip("/"): p.read_bytes() for p in folder.rglob("part-*.parquet")}


def written(folder: Path) -> Path:
    path = folder / "far.toml"
    path.write_text(STUDY)
    return path


def test_a_store_holds_the_bytes_of_a_local_run_and_a_harmed_object_is_made_anew(
    server: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    study = written(tmp_path)
    run_study(load_study(study), tmp_path / "near", shard_size=1024, quiet=True)
    far = place(f"s3://{BUCKET}/whole")
    run_study(load_study(study), far, shard_size=1024, quiet=True)
    expected = files(tmp_path / "near")
    assert files(far) == expected
    assert not (far / ".lock").exists()
    names = sorted(expected)
    (far / names[0]).unlink()
    (far / names[1]).write_bytes(expected[names[1]][:-40])
    (far / names[2]).write_bytes(expected[names[2]].replace(b"PAR1", b"PAR2"))
    when = {name: (far / name).stat().st_mtime for name in names[3:]}
    time.sleep(1.1)  # times in a store are whole seconds
    run_study(load_study(study), far, shard_size=1024, quiet=True)
    assert files(far) == expected
    assert {name: (far / name).stat().st_mtime for name in names[3:]} == when
    assert main(["report", f"s3://{BUCKET}/whole"]) == 0
    assert "oscillate" in capsys.readouterr().out
    assert b"<!DOCTYPE html>" in (far / "report.html").read_bytes()


def test_a_second_run_is_refused_while_the_first_counts_on(
    server: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(stores, "BEAT_EVERY_S", 0.2)
    monkeypatch.setattr(stores, "STALE_AFTER_S", 15.0)  # a live one is told as soon as it counts on
    far, study = place(f"s3://{BUCKET}/held"), load_study(written(tmp_path), ["subjects.count=64"])
    over = threading.Event()

    def hold() -> None:
        with stores.store_lock(far):
            over.wait(20)

    holder = threading.Thread(target=hold)
    holder.start()
    while not (far / ".lock").exists():
        time.sleep(0.05)
    with pytest.raises(RunError, match=r"process \d+ on .* is running in this folder"):
        run_study(study, far, quiet=True)
    over.set()
    holder.join()
    monkeypatch.setattr(stores, "STALE_AFTER_S", 1.5)
    (far / ".lock").write_bytes(note("process 1 on a machine that died", 7))
    run_study(study, far, quiet=True)  # taken over: its count did not move
    assert not (far / ".lock").exists()


def test_a_lock_of_another_host_on_a_shared_disk_is_told_live_from_stale(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(stores, "BEAT_EVERY_S", 0.1)
    monkeypatch.setattr(stores, "STALE_AFTER_S", 0.8)
    study, out = load_study(written(tmp_path), ["subjects.count=64"]), tmp_path / "out"
    out.mkdir()
    lock, over = out / ".lock", threading.Event()

    def beat() -> None:
        for count in range(1000):
            lock.write_bytes(note("process 5 on elsewhere", count))
            if over.wait(0.1):
                return

    other = threading.Thread(target=beat)
    other.start()
    time.sleep(0.1)
    with pytest.raises(RunError, match="process 5 on elsewhere is running in this folder"):
        run_study(study, out, quiet=True)
    over.set()
    other.join()
    began = time.monotonic()
    run_study(study, out, quiet=True)
    assert time.monotonic() - began > 0.8
    assert lock.read_bytes() == b""


def test_a_store_that_cannot_lock_or_is_not_there_is_refused_in_a_line(
    server: str, tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    study = str(written(tmp_path))
    for uri, code, said in (
        (f"s3://{BUCKET}x/a", 3, "cannot be made"),
        ("nosuch://a/b", 2, "an object store cannot be used here"),
    ):
        assert main(["run", study, "--out", uri]) == code
        found = capsys.readouterr().err
        assert said in found
        assert "Traceback" not in found
    import s3fs

    monkeypatch.setattr(s3fs.S3FileSystem, "_pipe_file", lambda self, path, data: None)
    with pytest.raises(StudyError, match="--no-lock"), stores.store_lock(place(f"s3://{BUCKET}/plain")):
        pass


def test_what_a_store_does_not_give_back_is_not_taken_as_written(monkeypatch: pytest.MonkeyPatch) -> None:
    path = place("memory://somewhere/part")
    put(path, b"whole")
    monkeypatch.setattr(type(path), "read_bytes", lambda self: b"half")
    with pytest.raises(OSError, match="the store holds 4 other bytes after 5 were written"):
        put(path, b"whole")


def test_without_a_lock_on_request(server: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    out = f"s3://{BUCKET}/unlocked"
    assert main(["run", str(written(tmp_path)), "--out", out, "--no-lock", "--set", "subjects.count=64"]) == 0
    assert (place(out) / "summary.json").exists()
    capsys.readouterr()
