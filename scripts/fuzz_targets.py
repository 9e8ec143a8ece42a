"""What the fuzzer aims at: functions of bytes that may end in a result or in the project's own errors only."""

from __future__ import annotations

import contextlib
import os
import shutil
from collections.abc import Callable
from dataclasses import dataclass
from functools import partial
from pathlib import Path

from cohort.errors import RunError, StudyError
from cohort.observe.design import searched_band
from cohort.observe.series import schedules
from cohort.observe.table import read_series
from cohort.study import describe, load_study, plan, study_from
from cohort.study.lines import locate
from cohort.study.units import DIMENSIONS, UnitError, parse

ROOT = Path(__file__).resolve().parent.parent
SHORT = b"""seed = 1
[subjects]
count = 16
[subjects.parameters]
td.lognormal = { median = "36 min", cv = 0.2 }
Rm.lognormal = { median = "210 mU/min", cv = 0.3 }
[[subjects.strata]]
name = "usual"
share = 0.75
[[subjects.strata]]
name = "<b>other</b>"
share = 0.25
[[arms]]
name = "steady"
duration = "10 h"
glucose = [ { shape = "constant", rate = "180 mg/min" } ]
"""
TABLE = b"""seed = 1
[subjects]
table = "TABLE"
[[subjects.strata]]
name = "a"
share = 0.5
[[subjects.strata]]
name = "b"
share = 0.5
[subjects.parameters]
Rm.empirical = { file = "TABLE", column = "td" }
[[arms]]
name = "steady"
duration = "10 h"
"""
RANKED = """
[sampling]
[[sampling.schedules]]
name = "every 20 min"
every = "20 min"
duration = "8 h"
[recruitment]
sizes = [12]
want = 6
[ranking]
method = "sobol"
outcomes = ["growth_per_min"]
base = 32
replicates = 4
tolerance = 0.9
[output]
time_courses = 2
"""


OF_FILES = {"units", "lines", "override", "study", "table", "parquet", "series"}
"""Targets that need no result folder."""


@dataclass(frozen=True)
class Target:
    """share: of all cases; time_share: of --seconds; patience: how much longer than others a case may take."""

    name: str
    run: Callable[[bytes], object]
    seeds: tuple[bytes, ...]
    share: float
    time_share: float
    allowed: tuple[type[Exception], ...] = (StudyError,)
    binary: bool = False
    patience: float = 1.0


def prepare(folder: Path, results: bool) -> None:
    """Put everything that targets read or harm below a folder: data files, odd files, and with `results` a small run."""
    place = folder / "study"
    place.mkdir()
    for name in ("people.csv", "halden-series.csv"):
        shutil.copy(ROOT / "studies" / name, place / name)
    (place / "seen.csv").write_text("td\n30\n36\n40\n")
    (place / "loop.csv").symlink_to("loop.csv")
    (place / "zero.csv").symlink_to("/dev/zero")
    (place / "folder.csv").mkdir()
    os.mkfifo(place / "pipe.csv")
    (place / "short.toml").write_bytes(SHORT + RANKED.encode())
    _parquet(place / "people.parquet")
    if results:
        _results(place / "short.toml", folder / "results")


def _parquet(path: Path) -> None:
    import pyarrow as pa
    import pyarrow.parquet as pq

    n = 12
    pq.write_table(pa.table({"id": [f"p{i}" for i in range(n)], "stratum": ["a", "b"] * 6, "td": [30.0 + i for i in range(n)],
                             "person": list(range(n)), "body_weight_kg": [70.0] * n}), path)  # fmt: skip


def _results(study: Path, out: Path) -> None:
    from cohort.execute.run import run_study
    from cohort.report.summary import rebuild

    run_study(load_study(study), out, workers=1, quiet=True)
    rebuild(out)


# ---- the targets -------------------------------------------------------------------------------------------------


def _study(place: Path, data: bytes) -> None:
    study = study_from(data, place / "fuzzed.toml", outside=data.count(b"\n") % 2 == 1)
    describe(study, plan(study, 2))


def _lines(data: bytes) -> None:
    locate(data.decode("utf-8", "replace"))


def _units(data: bytes) -> None:
    text = data.decode("utf-8", "surrogateescape")
    for kept in DIMENSIONS:
        try:
            number, _ = parse(text, kept)
        except UnitError:
            continue
        assert number == number, "not a number"


def _override(place: Path, data: bytes) -> None:
    words = data.decode("utf-8", "surrogateescape").split("\n")
    study = study_from(SHORT, place / "fuzzed.toml", words)
    describe(study, plan(study, 2))


def _table(place: Path, suffix: str, data: bytes) -> None:
    name = f"fuzzed{suffix}"
    (place / name).write_bytes(data)
    study_from(TABLE.replace(b"TABLE", name.encode()), place / "fuzzed.toml")


def _series(place: Path, data: bytes) -> None:
    path = place / "fuzzed-series.csv"
    path.write_bytes(data)
    for units in ({}, {"time": "h", "glucose": "mmol/L", "insulin": "pmol/L"}):
        try:
            found = read_series(path, units)
        except StudyError:
            if units:
                raise
            continue
        for times, _ in schedules(found):
            with contextlib.suppress(ValueError):  # what cannot be searched, said in words
                searched_band(times)


def _harmed(folder: Path, part: str, page: bool, data: bytes) -> None:
    """Report a result folder of which one file is something else."""
    from cohort.report.summary import closing_words, rebuild

    path = folder / "results" / part
    whole = path.read_bytes()
    path.write_bytes(data)
    try:
        closing_words(rebuild(folder / "results", page)[1])
    finally:
        path.write_bytes(whole)


def targets(folder: Path) -> tuple[Target, ...]:
    """Every target on a folder that was prepared; those of results only where there are some."""
    return (*_of_files(folder / "study"), *(_of_results(folder) if (folder / "results").is_dir() else ()))


def _of_files(place: Path) -> tuple[Target, ...]:
    shipped = (*sorted((ROOT / "studies").glob("*.toml")), ROOT / "tests/study/contract.toml")
    studies = tuple(path.read_bytes() for path in shipped)
    words = (b"subjects.count=500", b"arms.steady.duration='96 h'\nseed=3", b"subjects.strata.usual.share=0.5", b"title=x",
             b"subjects.parameters.td.lognormal.cv=0.4", b"arms.steady.glucose=[{shape='sine', mean=5, period=60}]")  # fmt: skip
    quantities = (b"36 min", b"216 mg/min", b"5.5 mmol/L", b"1_000.5e-3 h", b"60 %", b"3 mg/kg/min")
    long = b"time (min),subject,glucose (mg/dL),insulin (mU/L)\n" + b"".join(
        b"%d,a,9%d,%d\n" % (k, k, k) for k in range(9)
    )
    wide = b"time_h;anna (mmol/l);ben (mmol/l)\n" + b"".join(b"%d;5,%d;6\n" % (k, k) for k in range(9))
    return (
        Target("units", _units, quantities, 0.40, 0.1, (UnitError,)),
        Target("lines", _lines, studies, 0.14, 0.1),
        Target("override", partial(_override, place), words, 0.10, 0.15),
        Target("study", partial(_study, place), studies, 0.13, 0.3),
        Target("table", partial(_table, place, ".csv"), _read(place, "people.csv", "seen.csv"), 0.10, 0.1),
        Target("parquet", partial(_table, place, ".parquet"), _read(place, "people.parquet"), 0.03, 0.05, binary=True),
        Target("series", partial(_series, place), (long, wide, *_read(place, "halden-series.csv")), 0.094, 0.1),
    )  # fmt: skip


def _of_results(folder: Path) -> tuple[Target, ...]:
    results, both = folder / "results", (StudyError, RunError)
    parts = [path.relative_to(results).as_posix() for kind in ("outcomes", "subjects", "observations", "ranking")
             for path in sorted((results / kind).rglob("part-*.parquet"))[:1]]  # fmt: skip
    record = _read(results, "run.json")
    return (
        Target("record", partial(_harmed, folder, "run.json", False), record, 0.004, 0.05, both),
        Target("page", partial(_harmed, folder, "run.json", True), record, 0.0002, 0.02, both, patience=4.0),
        *(Target(f"part{k}", partial(_harmed, folder, part, False), _read(results, part), 0.0005, 0.01, both, binary=True)
          for k, part in enumerate(parts)),
    )  # fmt: skip


def _read(place: Path, *names: str) -> tuple[bytes, ...]:
    return tuple((place / name).read_bytes() for name in names)
