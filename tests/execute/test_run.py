"""Whole runs as the user makes them: identical whatever the workers, interruptions and kills; extended; refused."""

import json
import os
import shutil
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest

from cohort.cli import main
from cohort.errors import RunError, StudyError
from cohort.execute import run as running
from cohort.execute.run import run_study
from cohort.report.results import Results
from cohort.report.summary import rebuild
from cohort.study import load_study
from cohort.tables import read_parts, row_digest

ROOT = Path(__file__).resolve().parents[2]

STUDY = """
title = "A small study of two arms"
seed = 7
[subjects]
count = 2500
[subjects.parameters]
td.lognormal = { median = "36 min", cv = 0.2 }
Rm.lognormal = { median = "210 mU/min", cv = 0.3 }
[[subjects.strata]]
name = "usual"
share = 0.6
[[subjects.strata]]
name = "resistant"
share = 0.4
parameters.C4.lognormal = { median = "110 mU/L", cv = 0.3 }
[[arms]]
name = "steady"
duration = "6 h"
glucose = [ { shape = "constant", rate = "180 mg/min" } ]
[[arms]]
name = "lunch"
duration = "6 h"
glucose = [ { shape = "meal", time = "1 h", amount = "50 g", absorption = "40 min", stages = 2 } ]
[output]
time_courses = 6
every = "10 min"
"""
SMALL = 1024
"""Subjects of a shard in these tests, so that a small cohort has several."""


def study(folder: Path, *overrides: str, text: str = STUDY):  # type: ignore[no-untyped-def]
    path = folder / "small.toml"
    path.write_text(text)
    return load_study(path, overrides)


def part_bytes(out: Path) -> dict[str, bytes]:
    return {p.relative_to(out).as_posix(): p.read_bytes() for p in sorted(out.rglob("part-*.parquet"))}


@pytest.fixture(scope="module")
def whole(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("whole")
    run_study(study(folder), folder / "out", workers=1, shard_size=SMALL, quiet=True)
    return folder / "out"


def test_a_run_leaves_every_table(whole: Path) -> None:
    names = set(part_bytes(whole))
    for table in ("subjects", "outcomes/steady", "outcomes/lunch", "meals/lunch"):
        assert {f"{table}/part-{i:06d}.parquet" for i in range(3)} <= names
    assert {"time_courses/steady/part-000000.parquet", "time_courses/lunch/part-000000.parquet"} <= names
    record = json.loads((whole / "run.json").read_text())
    assert record["state"] == "done" and record["count"] == 2500
    assert (whole / "study.toml").read_text() == STUDY
    assert read_parts(whole / "subjects").column("subject").to_pylist() == list(range(2500))
    meals = read_parts(whole / "meals/lunch")
    assert meals.num_rows == 2500 and meals.column("meal").to_pylist()[:2] == [1, 1]


def test_missing_is_null_and_columns_carry_unit_and_meaning(whole: Path) -> None:
    table = read_parts(whole / "outcomes/steady")
    period, regime = table.column("period_min"), table.column("regime").to_pylist()
    for value, word in zip(period.to_pylist(), regime, strict=True):
        assert (value is not None) == (word in ("sustained", "bistable"))
    assert table.column("oscillates").to_pylist() == [w in ("sustained", "bistable") for w in regime]
    for field in read_parts(whole / "outcomes/lunch").schema:
        assert field.metadata[b"meaning"], field.name
    lunch = read_parts(whole / "outcomes/lunch")
    assert lunch.column("regime").null_count == 2500
    assert set(lunch.column("cycle_note").to_pylist()) == {"no steady input"}
    assert not np.isnan(np.asarray(table.column("glucose_mean_mg_dl"))).any()


def test_two_workers_write_the_same_bytes(whole: Path, tmp_path: Path) -> None:
    run_study(study(tmp_path), tmp_path / "out", workers=2, shard_size=SMALL, quiet=True)
    assert part_bytes(tmp_path / "out") == part_bytes(whole)


def test_another_shard_size_holds_the_same_rows(whole: Path, tmp_path: Path) -> None:
    run_study(study(tmp_path), tmp_path / "out", workers=2, shard_size=2048, quiet=True)
    for table, keys in (
        ("subjects", ["subject"]),
        ("outcomes/steady", ["subject"]),
        ("meals/lunch", ["subject", "meal"]),
    ):
        here, there = (row_digest(read_parts(f / table), keys) for f in (whole, tmp_path / "out"))
        assert here == there


class Crash(BaseException):
    """Stands for a process that dies."""


@pytest.mark.parametrize("after", [0, 1, 3, 5, 8])
def test_a_run_that_dies_between_any_two_parts_carries_on_to_the_same_bytes(
    whole: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, after: int
) -> None:
    from cohort.execute import shards

    written = 0
    real = shards.write_part

    def dying(*words, **named):  # type: ignore[no-untyped-def]
        nonlocal written
        if written == after:
            raise Crash
        written += 1
        real(*words, **named)

    monkeypatch.setattr(shards, "write_part", dying)
    with pytest.raises(Crash):
        run_study(study(tmp_path), tmp_path / "out", workers=1, shard_size=SMALL, quiet=True)
    monkeypatch.undo()
    done = run_study(study(tmp_path), tmp_path / "out", workers=2, shard_size=SMALL, quiet=True)
    assert done.kept + done.simulated == 5000
    assert part_bytes(tmp_path / "out") == part_bytes(whole)


def test_kill_9_loses_nothing_that_was_finished(tmp_path: Path) -> None:
    text = STUDY.replace("count = 2500", "count = 20000")
    path = tmp_path / "killed.toml"
    path.write_text(text)
    code = (
        "import sys; from pathlib import Path; from cohort.study import load_study; "
        "from cohort.execute.run import run_study; "
        f"run_study(load_study(sys.argv[1]), Path(sys.argv[2]), 2, {SMALL}, True)"
    )
    words = [sys.executable, "-c", code, str(path), str(tmp_path / "out")]
    kept: dict[str, bytes] = {}
    for wanted in (3, 20, 45):  # killed as soon as so many parts are there
        process = subprocess.Popen(words, cwd=ROOT)
        while len(found := part_bytes(tmp_path / "out")) < wanted and process.poll() is None:
            time.sleep(0.02)
        process.send_signal(signal.SIGKILL)
        process.wait()
        assert all(found[name] == data for name, data in kept.items())
        kept = part_bytes(tmp_path / "out")
        assert len(kept) >= wanted
    subprocess.run(words, cwd=ROOT, check=True)
    run_study(load_study(path), tmp_path / "whole", 1, SMALL, True)
    assert part_bytes(tmp_path / "out") == part_bytes(tmp_path / "whole")


def test_a_first_run_that_dies_while_it_writes_its_record_can_be_carried_on(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    real, calls = running.write_bytes, 0

    def dying(*words) -> None:  # type: ignore[no-untyped-def]
        nonlocal calls
        calls += 1
        if calls == 2:
            raise Crash
        real(*words)

    monkeypatch.setattr(running, "write_bytes", dying)
    with pytest.raises(Crash):
        run_study(study(tmp_path), tmp_path / "out", quiet=True)
    monkeypatch.undo()
    assert run_study(study(tmp_path), tmp_path / "out", quiet=True).simulated == 5000


@pytest.mark.parametrize("error", [ValueError("odd"), MemoryError(), OSError(5, "Input/output error")])
def test_whatever_a_worker_meets_is_one_line(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, error: Exception, capsys: pytest.CaptureFixture[str]
) -> None:
    def failing(*_: object) -> None:
        raise error

    monkeypatch.setattr(running, "commit", failing)
    path = tmp_path / "small.toml"
    path.write_text(STUDY)
    assert main(["run", str(path), "--out", str(tmp_path / "out"), "--set", "subjects.count=50"]) == 3
    assert "what was finished is kept" in capsys.readouterr().err
    assert json.loads((tmp_path / "out/run.json").read_text())["state"] == "stopped"


def test_a_report_counts_whole_shards_only_and_says_so(
    whole: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    out = tmp_path / "out"
    shutil.copytree(whole, out)
    (out / "outcomes/lunch/part-000001.parquet").unlink()
    assert main(["report", str(out)]) == 0
    assert "counted are 2 of 3 shards only" in capsys.readouterr().out
    (out / "outcomes/lunch/part-000000.parquet").write_bytes(b"short")
    assert main(["report", str(out)]) == 3
    assert "run the study again to make it anew" in capsys.readouterr().err
    for part in out.glob("subjects/*"):
        part.unlink()
    assert main(["report", str(out)]) == 2
    assert "holds no finished shard" in capsys.readouterr().err


@pytest.mark.parametrize("harm", ["truncate", "flip", "remove", "foreign", "empty"])
def test_a_part_that_cannot_be_trusted_is_made_again(whole: Path, tmp_path: Path, harm: str) -> None:
    out = tmp_path / "out"
    shutil.copytree(whole, out)
    part = out / "outcomes/steady/part-000001.parquet"
    data = bytearray(part.read_bytes())
    if harm == "truncate":
        part.write_bytes(data[: len(data) // 2])
    elif harm == "flip":
        for at in range(2000, len(data) - 5000, 400):
            data[at] ^= 0x55
        part.write_bytes(data)
    elif harm == "remove":
        part.unlink()
    elif harm == "foreign":
        shutil.copy(out / "outcomes/steady/part-000000.parquet", part)
    else:
        part.write_bytes(b"")
    done = run_study(study(tmp_path), out, workers=1, shard_size=SMALL, quiet=True)
    assert done.simulated == SMALL
    assert part_bytes(out) == part_bytes(whole)


def test_a_larger_count_keeps_whole_shards_and_replaces_the_short_one(whole: Path, tmp_path: Path) -> None:
    out = tmp_path / "out"
    shutil.copytree(whole, out)
    stamps = {p: p.stat().st_mtime_ns for p in out.rglob("part-00000[01].parquet") if "time_courses" not in str(p)}
    done = run_study(study(tmp_path, "subjects.count=4000"), out, workers=2, shard_size=SMALL, quiet=True)
    assert done.kept == 2 * 2048
    assert all(p.stat().st_mtime_ns == then for p, then in stamps.items())
    run_study(study(tmp_path, "subjects.count=4000"), tmp_path / "fresh", workers=1, shard_size=SMALL, quiet=True)
    assert part_bytes(out) == part_bytes(tmp_path / "fresh")
    with pytest.raises(StudyError, match=r"subjects.count: was 4000 .* is 2500 now; it may only grow"):
        run_study(study(tmp_path), out, shard_size=SMALL, quiet=True)


ARM = """[[arms]]
name = "fasting"
duration = "3 h"
"""


def test_an_added_arm_is_all_that_is_computed(whole: Path, tmp_path: Path) -> None:
    out = tmp_path / "out"
    shutil.copytree(whole, out)
    longer = study(tmp_path, text=STUDY.replace("[output]", ARM + "[output]"))
    done = run_study(longer, out, workers=2, shard_size=SMALL, quiet=True)
    assert (done.kept, done.simulated) == (5000, 2500)
    old, new = part_bytes(whole), part_bytes(out)
    assert all(new[name] == data for name, data in old.items())
    assert len(json.loads((out / "run.json").read_text())["study_texts"]) == 2


@pytest.mark.parametrize(
    ("before", "now", "key"),
    [
        ("cv = 0.2 }", "cv = 0.25 }", "subjects.parameters.td.lognormal.cv"),
        ("seed = 7", "seed = 8", "seed"),
        ('rate = "180 mg/min"', 'rate = "190 mg/min"', "arms.steady.glucose.1.rate"),
        ('duration = "6 h"\nglucose = [ { shape = "meal"', 'duration = "7 h"\nglucose = [ { shape = "meal"',
         "arms.lunch.duration"),
        ("share = 0.6", "share = 0.60", None),
        ("A small study", "Another title of the study", None),
        ("time_courses = 6", "time_courses = 7", None),
    ],
)  # fmt: skip
def test_a_changed_study_is_refused_by_its_first_changed_key(
    whole: Path, tmp_path: Path, before: str, now: str, key: str | None
) -> None:
    out = tmp_path / "out"
    shutil.copytree(whole, out)
    changed = study(tmp_path, text=STUDY.replace(before, now))
    if key is None:
        assert run_study(changed, out, shard_size=SMALL, quiet=True).simulated == 0
        return
    with pytest.raises(StudyError, match=rf"{key}: was .* cannot change there"):
        run_study(changed, out, shard_size=SMALL, quiet=True)
    assert part_bytes(out) == part_bytes(whole)


def test_an_arm_named_like_another_with_a_dot_is_new(whole: Path, tmp_path: Path) -> None:
    out = tmp_path / "out"
    shutil.copytree(whole, out)
    longer = study(tmp_path, text=STUDY.replace("[output]", ARM.replace("fasting", "steady.2") + "[output]"))
    assert run_study(longer, out, shard_size=SMALL, quiet=True).simulated == 2500


def test_a_latin_hypercube_cannot_grow(tmp_path: Path) -> None:
    text = STUDY.replace("count = 2500", 'count = 50\ndraw = "latin-hypercube"')
    run_study(study(tmp_path, text=text), tmp_path / "out", quiet=True)
    with pytest.raises(StudyError, match=r"subjects\.count: was 50"):
        run_study(study(tmp_path, "subjects.count=60", text=text), tmp_path / "out", quiet=True)


def test_foreign_folders_and_records_are_refused(tmp_path: Path) -> None:
    (tmp_path / "out").mkdir()
    (tmp_path / "out" / "letter.txt").write_text("dear")
    with pytest.raises(StudyError, match=r"holds 'letter.txt' and no run.json"):
        run_study(study(tmp_path), tmp_path / "out", quiet=True)
    (tmp_path / "out" / "run.json").write_text("{}")
    with pytest.raises(StudyError, match="is not a run's record"):
        run_study(study(tmp_path), tmp_path / "out", quiet=True)


def test_a_second_run_in_the_folder_is_refused(tmp_path: Path) -> None:
    (tmp_path / "out").mkdir()
    with (
        running._locked(tmp_path / "out", True),
        pytest.raises(RunError, match=f"process {os.getpid()} on .* is running"),
    ):
        run_study(study(tmp_path), tmp_path / "out", quiet=True)


def test_a_full_disk_stops_the_run_and_keeps_what_is_done(
    whole: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    from cohort.execute import shards

    real, written = shards.write_part, 0

    def full(*words, **named):  # type: ignore[no-untyped-def]
        nonlocal written
        written += 1
        if written > 6:
            raise OSError(28, "No space left on device")
        real(*words, **named)

    monkeypatch.setattr(shards, "write_part", full)
    with pytest.raises(RunError, match="no space left on device; what was finished is kept"):
        run_study(study(tmp_path), tmp_path / "out", workers=1, shard_size=SMALL, quiet=True)
    assert json.loads((tmp_path / "out/run.json").read_text())["state"] == "stopped"
    monkeypatch.undo()
    run_study(study(tmp_path), tmp_path / "out", shard_size=SMALL, quiet=True)
    assert part_bytes(tmp_path / "out") == part_bytes(whole)


def heed_interrupts() -> None:
    """What a terminal gives a program; a test run in the background would hand down ignored interrupts."""
    signal.signal(signal.SIGINT, signal.SIG_DFL)


def test_ctrl_c_and_sigterm_end_with_130_and_can_be_carried_on(tmp_path: Path) -> None:
    path = tmp_path / "big.toml"
    path.write_text(STUDY.replace("count = 2500", "count = 300000"))
    words = [sys.executable, "-m", "cohort", "run", str(path), "--out", str(tmp_path / "out")]
    for number in (signal.SIGINT, signal.SIGTERM):
        process = subprocess.Popen(words, cwd=ROOT, stderr=subprocess.PIPE, text=True, preexec_fn=heed_interrupts)
        time.sleep(3.5)
        process.send_signal(number)
        _, said = process.communicate(timeout=60)
        assert process.returncode == 130, said
        assert "interrupted; what was finished is kept" in said
        assert "Traceback" not in said
    assert json.loads((tmp_path / "out/run.json").read_text())["state"] == "interrupted"


# ---- the command line --------------------------------------------------------------------------------------------


def test_the_command_line_end_to_end(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    path = tmp_path / "small.toml"
    path.write_text(STUDY)
    assert main(["check", str(path)]) == 0
    assert "2,500 subjects x 2 arms = 5,000 runs" in capsys.readouterr().out
    out = str(tmp_path / "out")
    assert main(["run", str(path), "--out", out, "--set", "subjects.count=600"]) == 0
    said = capsys.readouterr().out
    assert "in this model" in said and "usual:" in said and "not for diagnosis" in said
    assert max(map(len, said.splitlines()[:-1])) <= 80  # the last line is the folder's path
    assert main(["run", str(path), "--out", out, "--set", "subjects.count=600", "--json"]) == 0
    summary = json.loads(capsys.readouterr().out)
    assert summary["arms"]["steady"]["strata"]["everyone"]["oscillates"]["of"] == 600
    assert main(["report", out]) == 0
    assert capsys.readouterr().out.startswith("A small study of two arms")
    assert main(["report", str(tmp_path / "nowhere")]) == 2
    assert "is not a result folder" in capsys.readouterr().err


def test_wrong_calls_end_with_2_and_a_line(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    path = tmp_path / "small.toml"
    path.write_text(STUDY.replace("seed = 7", "seed = -7"))
    assert main(["run", str(path)]) == 2
    said = capsys.readouterr().err
    assert f"{path}:3: seed: -7 is not allowed" in said and "1 problem found; nothing was run" in said
    for words in (["run"], ["fly"], ["run", str(path), "--workers", "0"]):
        with pytest.raises(SystemExit) as caught:
            main(words)
        assert caught.value.code == 2
    (tmp_path / "file").write_text("")
    path.write_text(STUDY)
    assert main(["run", str(path), "--out", str(tmp_path / "file" / "out")]) == 3
    assert "cannot be made" in capsys.readouterr().err


def test_models_schema_and_certify(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["models"]) == 0 and "prompt-liver" in capsys.readouterr().out
    assert main(["models", "hepatic-lag"]) == 0
    assert "total delay from plasma insulin to the liver's response" in capsys.readouterr().out
    assert main(["models", "hepatic"]) == 2 and "did you mean 'hepatic-lag'" in capsys.readouterr().err
    assert main(["schema"]) == 0 and json.loads(capsys.readouterr().out)["title"] == "cohort study"
    path = tmp_path / "small.toml"
    path.write_text(STUDY)
    assert main(["certify", str(path), "20"]) == 0
    assert "promised: 1e-06; kept" in capsys.readouterr().out


def test_results_open_in_python(whole: Path) -> None:
    results, summary = rebuild(whole, page=False)
    assert isinstance(results, Results) and results.arms == ("steady", "lunch")
    counts = results.incidence().to_pylist()
    everyone = next(r for r in counts if r["stratum"] == "everyone" and r["regime"] == "oscillates")
    flags = results.outcomes("steady", ["oscillates"]).column("oscillates").to_pylist()
    assert everyone["n"] == sum(flags) and everyone["low"] < everyone["share"] < everyone["high"]
    assert {r["stratum"] for r in counts} == {"everyone", "usual", "resistant"}
    assert results.summary() == summary
    course = results.time_courses("lunch")
    assert len(set(course.column("subject").to_pylist())) == 6
    assert results.meals("lunch").num_rows == 2500
    assert results.subjects(["td"]).num_columns == 1
    with pytest.raises(StudyError, match="has no table meals/steady"):
        results.meals("steady")


def test_odd_corners_run_to_their_end(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    path = tmp_path / "odd.toml"
    path.write_text(ODD)
    assert main(["run", str(path), "--out", str(tmp_path / "out")]) == 0
    said = capsys.readouterr().out
    late = said.split("clamp late")[1]
    assert "no steady input" in late and "oscillate" not in late
    assert "failed" not in said.split("suppressed")[1].split("clamp late")[0]


ODD = """
seed = 0
[subjects]
count = 5
[subjects.parameters]
td.loguniform = { low = "1 min", high = "900 min" }
[[arms]]
name = "a minute"
duration = "1 min"
[[arms]]
name = "suppressed"
duration = "30 h"
secretion = 0
glucose = [ { shape = "constant", rate = 100 } ]
[[arms]]
name = "clamp late"
duration = "20 h"
settle = "19 h"
clamp = { glucose = "400 mg/dL", from = "19.5 h" }
insulin = [ { shape = "constant", rate = "100 mU/min" } ]
"""


def test_a_sobol_cohort_counts_by_its_scrambles(tmp_path: Path) -> None:
    text = STUDY.replace("count = 2500", 'count = 1024\ndraw = "sobol"')
    run_study(study(tmp_path, text=text), tmp_path / "out", quiet=True)
    _, summary = rebuild(tmp_path / "out", page=False)
    counted = summary["arms"]["steady"]["strata"]["everyone"]["oscillates"]
    assert counted["method"] == "t over 8 scrambles, 95 %"
    assert counted["low"] < counted["share"] < counted["high"]


def test_what_cannot_fit_is_refused_with_the_numbers(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    path = tmp_path / "small.toml"
    path.write_text(STUDY)
    huge = ["--set", "subjects.count=1_000_000_000", "--set", "output.time_courses=0"]
    assert main(["check", str(path), *huge]) == 2
    said = capsys.readouterr().err
    assert "of disk and" in said and "are free at" in said
    assert main(["run", str(path), *huge, "--out", str(tmp_path / "out")]) == 2
    assert not (tmp_path / "out").exists()


def test_a_run_stops_before_the_disk_is_full_and_carries_on(
    whole: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    from cohort.execute import limits

    left = [10**9] * 2 + [10**6] * 10
    with monkeypatch.context() as patch:
        patch.setattr(limits, "free_bytes", lambda _: left.pop(0))
        with pytest.raises(RunError, match="stopped before it is full"):
            run_study(study(tmp_path), tmp_path / "out", workers=1, shard_size=SMALL, quiet=True)
    assert 0 < len(part_bytes(tmp_path / "out")) < len(part_bytes(whole))
    run_study(study(tmp_path), tmp_path / "out", workers=1, shard_size=SMALL, quiet=True)
    assert part_bytes(tmp_path / "out") == part_bytes(whole)


def test_data_files_lie_below_the_study_unless_allowed(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (tmp_path / "people.csv").write_text("td\n30\n40\n")
    (tmp_path / "inner").mkdir()
    path = tmp_path / "inner" / "s.toml"
    path.write_text('seed = 1\n[subjects]\ntable = "../people.csv"\n[[arms]]\nname = "a"\nduration = "1 h"\n')
    assert main(["check", str(path)]) == 2
    assert "--allow-outside" in capsys.readouterr().err
    assert main(["check", str(path), "--allow-outside"]) == 0
