"""README is held to what the code does: its examples run, its tables match, its studies give the stated answers."""

import re
import subprocess
import sys
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from cohort.execute.run import run_study
from cohort.execute.several import run_several
from cohort.report.results import Results
from cohort.report.several import compare
from cohort.report.summary import rebuild
from cohort.study import Study, load_study
from cohort.tables import numbers

ROOT = Path(__file__).resolve().parents[2]
README = (ROOT / "README.md").read_text()


def test_the_table_of_keys_is_the_codes() -> None:
    made = subprocess.run([sys.executable, ROOT / "scripts" / "keys.py"], capture_output=True, text=True, check=True)
    for table in made.stdout.strip().split("\n\n"):
        assert table in README, "python3 scripts/keys.py prints what README should hold"


def test_the_study_read_line_by_line_is_the_shipped_one() -> None:
    def bare(text: str) -> list[str]:
        lines = (re.sub(r"\s+#.*", "", line).rstrip() for line in text.splitlines())
        return [line for line in lines if line and not line.startswith("#")]

    block = re.search(r"```toml\n(.*?)```", README, re.DOTALL)
    assert block is not None
    assert bare(block[1]) == bare((ROOT / "studies" / "steady-infusion.toml").read_text())


def test_python_examples_run(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    blocks = re.findall(r"```python\n(.*?)```", README, re.DOTALL)
    assert len(blocks) == 3
    (tmp_path / "studies").symlink_to(ROOT / "studies")
    monkeypatch.chdir(tmp_path)
    names: dict[str, object] = {}
    for block in blocks:
        exec(block, names)
    assert names["course"].sample([0.0]).shape == (3, 4, 1)  # type: ignore[attr-defined]


ROWS = re.findall(r"(?m)^\| ([a-z-]+) \| [^|]+\? \| ([^|]+) \|$", README)
PROMISE = re.compile(r"`([^`]+)`: (?:(oscillates) ([\d.]+)-([\d.]+) %|median (\w+) ([\d.]+)-([\d.]+))")
DETECTS = re.compile(r"`([^`]+)`: ([\w ]+) detects ([\d.]+)-([\d.]+) %")
RECRUIT = re.compile(r"`([^`]+)`: recruit ([\d.]+)-([\d.]+)")
CAPTURES = re.compile(r"`([^`]+)`: captures ([\d.]+)-([\d.]+) %")
LEADS = re.compile(r"`([^`]+)`: (\w+) leads (\w+) \(([^)]+)\)")


def test_every_study_that_ships_is_in_the_table() -> None:
    assert {name for name, _ in ROWS} == {path.stem for path in (ROOT / "studies").glob("*.toml")}


def answered(study: Study, out: Path) -> tuple[Results, dict[str, Any]]:
    """Results and summary of a run; with several models, arms are named `model: arm`."""
    if not study.others:
        run_study(study, out, quiet=True)
        return rebuild(out, page=False)
    run_several(study, out, quiet=True)
    each = compare(out)["models"]
    arms = {f"{model}: {arm}": facts for model, one in each.items() for arm, facts in one["arms"].items()}
    return Results(out / study.model), {"arms": arms}


@pytest.mark.parametrize(("name", "expected"), ROWS, ids=[name for name, _ in ROWS])
def test_a_shipped_study_gives_its_stated_answer(name: str, expected: str, tmp_path: Path) -> None:
    fewer = [] if name == "from-a-table" else ["subjects.count=768"]
    text = (ROOT / "studies" / f"{name}.toml").read_text()
    if 'method = "sobol"' in text:
        fewer += ["ranking.base=64", "ranking.tolerance=0.9"]
    fewer += ["map.points=12"] if "[map]" in text else ["subjects.count=192"] if "natural" in text else []
    study = load_study(ROOT / "studies" / f"{name}.toml", [*fewer, "output.time_courses=2"])
    results, summary = answered(study, tmp_path / "out")
    promises, leads = PROMISE.findall(expected), LEADS.findall(expected)
    detects, recruits = DETECTS.findall(expected), RECRUIT.findall(expected)
    captures = CAPTURES.findall(expected)
    assert len(promises) + len(leads) + len(detects) + len(recruits) + len(captures) == expected.count("`") // 2
    for arm, low, high in captures:
        counted = summary["arms"][arm]["strata"]["everyone"]["oscillating and locked 1:1"]
        assert counted["high"] * 100 >= float(low) and counted["low"] * 100 <= float(high), (arm, counted)
    for arm, schedule, low, high in detects:
        counted = summary["arms"][arm]["schedules"][schedule]["everyone"]["detected"]
        assert counted["high"] * 100 >= float(low) and counted["low"] * 100 <= float(high), (arm, counted)
    for arm, low, high in recruits:
        needed = [
            row["to_recruit"]
            for row in summary["recruitment"]["rows"]
            if row["arm"] == arm and row["counted"] == "oscillates" and row.get("to_recruit")
        ]
        assert float(low) <= needed[0] <= float(high), (arm, needed)
    for arm, leader, outcome, estimand in leads:
        (found,) = [
            ranked
            for ranked in summary["ranking"]["lists"]
            if (ranked["arm"], ranked["outcome"], ranked["estimand"]) == (arm, outcome, estimand)
        ]
        assert found["factors"][0]["name"] == leader
    for arm, oscillates, low, high, column, least, most in promises:
        if oscillates:
            counted = summary["arms"][arm]["strata"]["everyone"]["oscillates"]
            assert counted["high"] * 100 >= float(low) and counted["low"] * 100 <= float(high), (arm, counted)
        else:
            middle = np.nanmedian(numbers(results.outcomes(arm), column))
            assert float(least) <= middle <= float(most), (arm, column, middle)


def test_commands_named_are_the_ones_there_are() -> None:
    said = subprocess.run(
        [sys.executable, "-m", "cohort", "--help"], capture_output=True, text=True, check=True, cwd=ROOT
    )
    there = set(re.findall(r"(?m)^    ([a-z]+) ", said.stdout))
    assert set(re.findall(r"`cohort ([a-z]+)", README)) <= there
    assert there <= set(re.findall(r"(?m)^\| `cohort ([a-z]+)", README))


def test_every_option_stands_beside_its_command() -> None:
    for command in re.findall(r"(?m)^\| `cohort ([a-z]+)", README):
        help_ = subprocess.run(
            [sys.executable, "-m", "cohort", command, "--help"], capture_output=True, text=True, check=True, cwd=ROOT
        ).stdout
        (line,) = re.findall(rf"(?m)^\| `cohort {command}\b([^|]*)", README)
        assert set(re.findall(r"(?m)^  (--[a-z-]+)", help_)) - {"--help"} == set(re.findall(r"--[a-z-]+", line)), (
            command
        )
        assert "examples:" in help_
