"""report.html: whole, self-contained, readable without sight, script or colour; its numbers are the tables' own."""

import csv
import json
import re
import shutil
import subprocess
import xml.etree.ElementTree as ET
from html.parser import HTMLParser
from pathlib import Path

import pytest

from cohort.execute.run import run_study
from cohort.report.answer import answer
from cohort.report.results import Results
from cohort.report.summary import rebuild
from cohort.study import load_study

STUDY = """
title = "What of <b>these</b> & those?"
seed = 7
[subjects]
count = 256
[subjects.parameters]
td.lognormal = { median = "36 min", cv = 0.2 }
Rm.lognormal = { median = "210 mU/min", cv = 0.3 }
C4.lognormal = { median = "80 mU/L", cv = 0.3 }
[[arms]]
name = "steady 180"
duration = "30 h"
settle = "22 h"
glucose = [ { shape = "constant", rate = "180 mg/min" } ]
[[arms]]
name = "fasting"
duration = "8 h"
[[arms]]
name = "lunch"
duration = "8 h"
glucose = [ { shape = "meal", time = "1 h", amount = "50 g", absorption = "40 min", stages = 2 } ]
[sampling]
[[sampling.schedules]]
name = "every 20 min"
every = "20 min"
duration = "8 h"
[recruitment]
sizes = [12, 24]
want = 6
[ranking]
method = "sobol"
outcomes = ["oscillates", "period_min"]
base = 32
replicates = 4
tolerance = 0.9
[output]
time_courses = 8
"""
VOID = {"meta", "br", "hr", "img", "input", "link"}


def run(folder: Path, text: str = STUDY) -> Results:
    path = folder / "page.toml"
    path.write_text(text)
    run_study(load_study(path), folder / "out", workers=2, quiet=True)
    return rebuild(folder / "out")[0]


@pytest.fixture(scope="module")
def whole(tmp_path_factory: pytest.TempPathFactory) -> Results:
    return run(tmp_path_factory.mktemp("page"))


@pytest.fixture(scope="module")
def page(whole: Results) -> str:
    return (whole.folder / "report.html").read_text()


class Reader(HTMLParser):
    """Checks nesting, and keeps what is asked about."""

    def __init__(self) -> None:
        super().__init__()
        self.open: list[str] = []
        self.ids: list[str] = []
        self.headings: list[int] = []
        self.tags: list[tuple[str, dict[str, str | None]]] = []

    def handle_starttag(self, tag, attrs) -> None:  # type: ignore[no-untyped-def]
        self.tags.append((tag, dict(attrs)))
        self.ids += [value for name, value in attrs if name == "id"]
        if re.fullmatch(r"h[1-6]", tag):
            self.headings.append(int(tag[1]))
        if tag not in VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag, attrs) -> None:  # type: ignore[no-untyped-def]
        self.tags.append((tag, dict(attrs)))
        self.ids += [value for name, value in attrs if name == "id"]

    def handle_endtag(self, tag: str) -> None:
        assert self.open.pop() == tag


def read(page: str) -> Reader:
    reader = Reader()
    reader.feed(page)
    assert not reader.open
    return reader


def test_the_page_is_well_formed_and_needs_nothing_else(page: str) -> None:
    reader = read(page)
    assert len(set(reader.ids)) == len(reader.ids)
    assert len(page) < 3_000_000
    for tag, attributes in reader.tags:
        assert tag not in ("link", "img", "iframe", "object", "embed")
        assert "src" not in attributes
        for name in ("href", "xlink:href"):
            assert (attributes.get(name) or "#").startswith("#")
    assert not re.search(r"@import|url\((?!#)", page)
    references = set(re.findall(r'(?:href="#|url\(#)([^")]+)', page))
    assert references <= set(reader.ids)


def test_what_a_user_wrote_is_text_and_never_markup(page: str) -> None:
    assert "What of &lt;b&gt;these&lt;/b&gt; &amp; those?" in page and "<b>these" not in page


def test_it_can_be_read_without_sight(page: str) -> None:
    reader = read(page)
    assert reader.headings[0] == 1 and reader.headings.count(1) == 1
    assert all(b - a <= 1 for a, b in zip(reader.headings, reader.headings[1:], strict=False))
    pictures = [attributes for tag, attributes in reader.tags if tag == "svg"]
    assert len(pictures) >= 8
    assert all(p.get("role") == "img" and len(p.get("aria-label") or "") > 30 for p in pictures)
    assert all(attributes.get("scope") == "col" for tag, attributes in reader.tags if tag == "th")
    assert ("html", {"lang": "en"}) in reader.tags and any(a.get("class") == "skip" for _, a in reader.tags)


def test_it_leads_with_the_answer_and_holds_every_section(page: str, whole: Results) -> None:
    said = re.search(r'<p class="answer">(.*?)</p>', page)
    assert said is not None and said[1].startswith("In this model, of 24 recruits expect ")
    assert "sampled every 20 min you would see" in said[1] and "mmol/L" in said[1]
    for title in ("Who oscillates", "Period and amplitude", "Glucose excursions", "Time courses", "What decides it",
                  "What the clinic would see", "How many to recruit", "What was refused, and why",
                  "Fasting values beside published ones", "Method, definitions and limits"):  # fmt: skip
        assert f">{title}</h2>" in page
    assert "not for diagnosis, dosing or care" in page and "no proof of a limit cycle" in page
    assert "the model disagrees with published people here" in page
    assert "pmol/L" in page and "undefined for" in page and "seed 7" in page
    assert not re.search(r"\bnan\b|None|Traceback", page)


def test_every_figure_has_its_file_its_numbers_and_its_n(page: str, whole: Results) -> None:
    figures = whole.figures()
    assert len({f.name for f in figures}) == len(figures) >= 8
    for figure in figures:
        name = re.sub(r"[^A-Za-z0-9._-]+", "-", figure.name)
        ET.parse(whole.folder / "figures" / f"{name}.svg")
        rows = list(csv.reader((whole.folder / "figures" / f"{name}.csv").read_text().splitlines()))
        assert tuple(rows[0]) == figure.columns and len(rows) == len(figure.rows) + 1
        assert f"figures/{name}.svg" in page and figure.n[1:] in page.replace("&#x27;", "'")


def test_the_numbers_are_those_of_the_tables(page: str, whole: Results) -> None:
    (row,) = [r for r in whole.incidence().to_pylist()
              if (r["arm"], r["schedule"], r["regime"]) == ("steady 180", None, "oscillates")]  # fmt: skip
    assert f"{100 * row['share']:.1f} % ({100 * row['low']:.1f} % to {100 * row['high']:.1f} %)" in page
    (figure,) = [f for f in whole.figures() if f.name == "who-oscillates"]
    assert figure.rows[0][2:4] == (row["n"], row["denominator"])


def test_building_it_again_gives_the_same_page(page: str, whole: Results) -> None:
    rebuild(whole.folder)
    assert (whole.folder / "report.html").read_text() == page


def test_an_unfinished_run_says_so_first(whole: Results, tmp_path: Path) -> None:
    shutil.copytree(whole.folder, tmp_path / "out")
    record = json.loads((tmp_path / "out/run.json").read_text())
    (tmp_path / "out/run.json").write_text(json.dumps({**record, "shards": 9}))
    rebuild(tmp_path / "out")
    assert "Unfinished: counted are 1 of 9 shards only." in (tmp_path / "out/report.html").read_text()


def test_where_the_model_contradicts_people_the_answer_says_that(whole: Results) -> None:
    summary = json.loads((whole.folder / "summary.json").read_text())
    summary["arms"] = {"fasting": summary["arms"]["fasting"]}
    assert answer(summary).startswith("The model disagrees with published people here")


def test_a_study_of_meals_answers_in_glucose(whole: Results) -> None:
    summary = json.loads((whole.folder / "summary.json").read_text())
    summary["arms"] = {"lunch": summary["arms"]["lunch"]}
    assert re.match(
        r"In this model glucose rises to \d+ mg/dL \(\d+\.\d mmol/L\) at the median under lunch", answer(summary)
    )


CHROMIUM = shutil.which("chromium") or shutil.which("chromium-browser") or shutil.which("google-chrome")


@pytest.mark.skipif(CHROMIUM is None, reason="no Chromium on this machine")
def test_a_browser_opens_it_from_a_file_without_a_word_on_its_console(whole: Results, tmp_path: Path) -> None:
    assert CHROMIUM is not None
    words = ["--headless", "--no-sandbox", "--disable-gpu", "--no-first-run", "--disable-background-networking",
             f"--user-data-dir={tmp_path}", "--enable-logging=stderr", "--dump-dom"]  # fmt: skip
    page = (whole.folder / "report.html").resolve().as_uri()
    said = subprocess.run([CHROMIUM, *words, page], capture_output=True, text=True, timeout=60, check=True)
    assert 'class="js"' in said.stdout and 'id="told"' in said.stdout  # its script ran
    assert "CONSOLE" not in said.stderr
