"""Result folders that somebody harmed or made up: reported, or refused in words; nothing of them is run or unpickled."""

import json
import os
import pickle
import re
import shutil
import xml.etree.ElementTree as ET
from html.parser import HTMLParser
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from cohort import tables
from cohort.cli import main
from cohort.errors import CohortError, StudyError
from cohort.execute.run import run_study
from cohort.report import figures
from cohort.report.results import Results
from cohort.report.summary import closing_words, rebuild
from cohort.study import load_study

PACKAGE = Path(__file__).resolve().parents[2] / "cohort"
SCRIPT = "<script>alert(1)</script>"
STUDY = f"""
title = "{SCRIPT} & $\\\\frac{{$"
seed = 7
[subjects]
count = 64
[subjects.parameters]
td.lognormal = {{ median = "36 min", cv = 0.2 }}
Rm.lognormal = {{ median = "210 mU/min", cv = 0.3 }}
[[subjects.strata]]
name = "{SCRIPT}"
share = 0.5
[[subjects.strata]]
name = '''$\\frac{{$ "onload="alert(1)'''
share = 0.5
[[arms]]
name = "steady 180"
duration = "30 h"
settle = "22 h"
glucose = [ {{ shape = "constant", rate = "180 mg/min" }} ]
[recruitment]
sizes = [12]
want = 6
[output]
time_courses = 4
"""


@pytest.fixture(scope="module")
def whole(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("hostile")
    (folder / "x.toml").write_text(STUDY)
    run_study(load_study(folder / "x.toml"), folder / "out", workers=2, quiet=True)
    return folder / "out"


@pytest.fixture
def folder(whole: Path, tmp_path: Path) -> Path:
    return Path(shutil.copytree(whole, tmp_path / "out"))


def outcomes(folder: Path) -> Path:
    return folder / "outcomes" / "steady 180" / "part-000000.parquet"


def refused(folder: Path, capsys: pytest.CaptureFixture[str]) -> str:
    """The one line, or two, that `cohort report` ends with."""
    code = main(["report", str(folder)])
    said = capsys.readouterr().err
    assert code in (2, 3) and said.count("\n") == 4 - code and "Traceback" not in said
    return said


class Tags(HTMLParser):
    """Elements and attributes of a page."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.scripts: list[str] = []
        self.attributes: set[str] = set()
        self.inside = ""
        self.feed(text)

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.inside = tag
        self.attributes |= {name for name, _ in attrs}

    def handle_data(self, data: str) -> None:
        if self.inside == "script":
            self.scripts.append(data)

    def handle_endtag(self, tag: str) -> None:
        self.inside = ""


def check_page(folder: Path) -> None:
    page = (folder / "report.html").read_text()
    tags = Tags(page)
    assert len(tags.scripts) == 1 and "alert" not in tags.scripts[0]
    assert not {name for name in tags.attributes if name.startswith("on")}
    assert SCRIPT not in page
    for path in (folder / "figures").glob("*.svg"):
        root = ET.parse(path).getroot()
        assert not [e for e in root.iter() if e.tag.endswith("script")]


def test_names_are_text_in_the_page_and_in_figures(folder: Path) -> None:
    _, summary = rebuild(folder)
    check_page(folder)
    text = (folder / "report.html").read_text()
    assert "&lt;script&gt;alert(1)&lt;/script&gt;" in text and "$\\frac{$" in text
    assert SCRIPT in closing_words(summary)  # a terminal shows it as it stands


def rewrite(path: Path, column: str, values: list[Any]) -> None:
    """A part with other values in one column and a digest that fits: made by somebody who knows how."""
    table = pq.read_table(path)
    place = table.column_names.index(column)
    harmed = table.set_column(place, table.schema.field(place), pa.array(values, table.schema.field(place).type))
    marks = {**table.schema.metadata, b"digest": tables.digest(harmed).encode()}
    path.write_bytes(tables._parquet(harmed.replace_schema_metadata(marks)))


def test_text_planted_in_a_column_is_text_in_the_page_and_on_the_terminal(folder: Path) -> None:
    rewrite(outcomes(folder), "failure", [f"{SCRIPT}\x1b[2J\n"] * 64)
    courses = folder / "time_courses" / "steady 180" / "part-000000.parquet"
    rewrite(courses, "why", [f"typical{SCRIPT}"] * pq.read_metadata(courses).num_rows)
    _, summary = rebuild(folder)
    check_page(folder)
    assert "\x1b" not in closing_words(summary) and "\\x1b[2J\\n" in closing_words(summary)


def test_a_stratum_that_the_record_does_not_name_is_refused(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    rewrite(folder / "subjects" / "part-000000.parquet", "stratum", [SCRIPT] * 63 + ["other"])
    assert "strata that run.json does not name" in refused(folder, capsys)


class Planted:
    """What, unpickled, leaves a mark."""

    def __init__(self, mark: Path) -> None:
        self.mark = mark

    def __reduce__(self) -> tuple[Any, ...]:
        return Path.touch, (self.mark,)


def test_nothing_of_a_folder_is_unpickled_or_executed(
    folder: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    mark = tmp_path / "mark"
    for name in ("run.pickle", "run.pkl", "subjects/part-000000.pkl", "null.npy"):
        (folder / name).write_bytes(pickle.dumps(Planted(mark)))
    np.save(folder / "subjects" / "part-000001.npy", np.array([Planted(mark)], dtype=object))
    for name in ("conftest.py", "sitecustomize.py", "cohort.py", "numpy.py", "subjects/__init__.py"):
        (folder / name).write_text(f"from pathlib import Path\nPath({str(mark)!r}).touch()\n")
    (folder / "matplotlibrc").write_text("svg.fonttype: path\n")
    for place in (folder / "subjects", outcomes(folder).parent):
        path = place / "part-000000.parquet"
        table = pq.read_table(path)
        kind = pa.field("planted", pa.binary(), metadata={b"ARROW:extension:name": b"arrow.py_extension_type",
                                                          b"ARROW:extension:metadata": pickle.dumps(Planted(mark))})  # fmt: skip
        planted = table.append_column(kind, pa.array([pickle.dumps(Planted(mark))] * 64, pa.binary()))
        path.write_bytes(tables._parquet(planted.replace_schema_metadata(table.schema.metadata)))
    monkeypatch.chdir(folder)
    with pytest.raises(CohortError, match="are not those it was written with"):
        rebuild(folder)
    rebuild(folder, verify=False)
    assert not mark.exists()


def test_the_package_unpickles_and_evaluates_nothing() -> None:
    wild = re.compile(
        r"(?<![\w.])(?:eval|exec|compile|__import__)\(|\bpickle\b|\bmarshal\b|\bshelve\b|allow_pickle=True|os\.system"
    )
    for path in PACKAGE.rglob("*.py"):
        for line in path.read_text().splitlines():
            asked_for = path.name == "own.py" and "--allow-model-code" in line  # a user's own model, on request only
            assert asked_for or not wild.search(line) or line.lstrip().startswith("#"), (path.name, line)


# ---- the record --------------------------------------------------------------------------------------------------


def edit(folder: Path, **changes: Any) -> None:
    record = json.loads((folder / "run.json").read_text())
    (folder / "run.json").write_text(json.dumps({**record, **changes}))


@pytest.mark.parametrize(
    ("changes", "expected"),
    [
        ({"seed": SCRIPT}, "seed is missing or not"),
        ({"count": "64"}, "count is missing or not"),
        ({"arms": ["../steady 180"]}, "arms[1] is missing or not"),
        ({"arms": ["/etc"]}, "arms[1] is missing or not"),
        ({"arms": []}, "do not belong together"),
        ({"arms": ["steady 180"] * 2}, "do not belong together"),
        ({"arms": ["other"]}, "do not belong together"),
        ({"strata": 3}, "strata is missing or not"),
        ({"title": "a\x1b[2J"}, "title is missing or not"),
        ({"model": "other"}, "model is missing or not"),
        ({"arm_facts": {"steady 180": {}}}, "arm_facts.steady 180.hours is missing"),
        ({"recruitment": {"sizes": ["x"], "want": None, "assurance": 0.9, "evaluable": 1.0}}, "recruitment.sizes[1]"),
        ({"sampling": {"schedules": ["../x"]}}, "sampling"),
        ({"selection": {"eligible": [{"arm": "zzz", "outcome": "x", "low": 0, "high": 1}], "match": []}}, "do not belong"),
        ({"fasting": {"a": {"n": 1, "glucose_mg_dl": ["x"], "insulin_mu_l": []}}}, "fasting.a.glucose_mg_dl[1]"),
        ({"shards": 10**30}, "shards is missing or not"),
        ({"versions": {"a\nb": "1"}}, "versions"),
    ],
)  # fmt: skip
def test_a_harmed_record_is_refused_by_its_first_harmed_key(
    folder: Path, capsys: pytest.CaptureFixture[str], changes: dict[str, Any], expected: str
) -> None:
    edit(folder, **changes)
    assert expected in refused(folder, capsys)


@pytest.mark.parametrize(
    "data",
    [
        b"",
        b"{",
        b"[]",
        b"null",
        b"[" * 100_000,
        b'{"arms": ' * 100_000,
        b"\xff\xfe{}",
        b"1" + b"0" * 10_000,
        b"NaN",
        b"{}\0",
    ],
    ids=range(10),
)
def test_what_is_no_record_is_refused(folder: Path, capsys: pytest.CaptureFixture[str], data: bytes) -> None:
    (folder / "run.json").write_bytes(data)
    assert "is not a result folder" in refused(folder, capsys)
    assert main(["run", str(folder.parent / "x.toml"), "--out", str(folder)]) == 2


@pytest.mark.parametrize("changes", [{"settings": []}, {"settings": {"subjects.count": "x"}}, {"slots": {"a": "x"}},
                                     {"identities": 3}, {"settings": {"ranking.outcomes": "["}}])  # fmt: skip
def test_a_run_refuses_a_harmed_record_in_words(
    folder: Path, capsys: pytest.CaptureFixture[str], changes: dict[str, Any]
) -> None:
    edit(folder, **changes)
    (folder.parent / "x.toml").write_text(STUDY)
    assert main(["run", str(folder.parent / "x.toml"), "--out", str(folder)]) == 2
    assert "Traceback" not in capsys.readouterr().err


def test_a_harmed_summary_is_made_anew(folder: Path) -> None:
    (folder / "summary.json").write_bytes(b"[" * 100_000)
    with pytest.raises(StudyError, match="no readable summary"):
        Results(folder).summary()
    rebuild(folder, page=False)
    assert Results(folder).summary()["subjects"] == 64


# ---- parts and foreign files -------------------------------------------------------------------------------------


def test_foreign_files_do_not_count(folder: Path) -> None:
    (folder / "outcomes" / "steady 180" / "part-abcdef.parquet").write_bytes(b"x")
    (folder / "subjects" / "part-abcdef.parquet").write_bytes(b"x")
    (folder / "subjects" / "part-000001.parquet").mkdir()
    (folder / "time_courses" / "steady 180" / "part-zzz.parquet").write_bytes(b"x")
    assert rebuild(folder)[1]["shards"] == 1


def test_parts_that_are_no_plain_files_do_not_hang(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    path = outcomes(folder)
    path.unlink()
    os.mkfifo(path)
    assert "is no plain file" in refused(folder, capsys)
    path.unlink()
    path.symlink_to("/dev/zero")
    assert "is no plain file" in refused(folder, capsys)
    path.unlink()
    path.symlink_to(path)
    assert refused(folder, capsys)
    path.unlink()
    path.mkdir()
    assert "is no plain file" in refused(folder, capsys)


@pytest.mark.parametrize(
    "name", ["run.json", "report.html", "summary.json", "figures", "incidence.parquet", "weights.parquet"]
)
@pytest.mark.parametrize("kind", ["pipe", "folder", "link out"])
def test_what_stands_in_the_way_is_replaced_or_named(
    folder: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str], name: str, kind: str
) -> None:
    (tmp_path / "victim").write_text("whole")
    path = folder / name
    if path.is_dir():
        shutil.rmtree(path)
    path.unlink(missing_ok=True)
    if kind == "pipe":
        os.mkfifo(path)
    elif kind == "folder":
        path.mkdir()
    else:
        path.symlink_to(tmp_path / "victim")
    code = main(["report", str(folder)])
    assert code in (0, 2, 3) and "Traceback" not in capsys.readouterr().err
    assert (tmp_path / "victim").read_text() == "whole"


def test_parts_of_other_subjects_or_kinds_are_refused(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    path = outcomes(folder)
    whole = path.read_bytes()
    table = pq.read_table(path)

    def put(made: pa.Table, **marks: bytes) -> str:
        said = {**table.schema.metadata, **{k.encode(): v for k, v in marks.items()}}
        path.write_bytes(tables._parquet(made.replace_schema_metadata(said)))
        return refused(folder, capsys)

    assert "holds 63 rows for 64 subjects" in put(table.slice(1))
    assert "are not of the same subjects" in put(table, first=b"64", last=b"128")
    assert "is no part of a run's table" in put(table, last=b"-5")
    assert "is no part of a run's table" in put(table, format=b"other")
    assert "invalid literal" in put(table, first=b"x")
    assert "'regime' is missing or of another kind" in put(table.drop_columns("regime"))
    number = table.set_column(0, "subject", pa.array(np.zeros(64)))
    assert "'subject' is missing or of another kind" in put(number)
    assert "are not those it was written with" in put(table.take(np.arange(64)[::-1]))
    path.write_bytes(whole[: len(whole) // 2])
    assert refused(folder, capsys)
    path.write_bytes(whole)
    assert main(["report", str(folder)]) == 0


@pytest.mark.parametrize(
    "label", ["x" * 122, "漢字 العربية 😀", "_x", "$\\frac{$", "<&\">'", "", "\ue000", "\u202eabc", "a" * 56]
)
def test_any_name_can_be_a_label(label: str) -> None:
    x = np.array([1.0, 2.0])
    for svg in (
        figures.intervals([label, "b"], x, x - 1.0, x + 1.0, "axis"),
        figures.whiskers([label, "b"], np.tile(np.arange(5.0), (2, 1)), "axis"),
        figures.distributions([label, "b"], np.arange(3.0), np.full((2, 2), 0.5), "axis"),
        figures.lines([(label, x, x), ("b", x, x)], ("x", "y")),
        figures.courses([(label, x, x)], 0.0, None),
        figures.series_figure([figures.Panel(label, "no rhythm", x, x, "mg/dL", False)]),
    ):
        texts = "".join(ET.fromstring(svg).itertext())
        assert label[:20] in texts
