"""The study file: the example holds, mistakes are taught, nothing hangs."""

import re
import subprocess
import sys
import tomllib
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from cohort.errors import StudyError
from cohort.model.protocol import AtEquilibrium, AtState, Bolus, Clamp, Constant, Meal, OnOff, Sine, Steps
from cohort.population.laws import Beta, Empirical, Fixed, Lognormal, Loguniform, Normal, Triangular, Uniform
from cohort.study import describe, load_study, plan, study_from
from cohort.study.keys import KEYS, children
from cohort.study.lines import locate
from cohort.study.schema import json_schema
from cohort.study.units import DIMENSIONS, UnitError, parse

HERE = Path(__file__).parent
EXAMPLE = (HERE / "contract.toml").read_text()
SHORT = """seed = 1
[subjects]
count = 10
[[arms]]
name = "a"
duration = "10 h"
"""


def load(text: str, *overrides: str):  # type: ignore[no-untyped-def]
    return study_from(text.encode(), HERE / "x.toml", overrides)


def problems(text: str, *overrides: str) -> str:
    with pytest.raises(StudyError) as caught:
        load(text, *overrides)
    return str(caught.value).replace(str(HERE) + "/", "")


# ---- what holds --------------------------------------------------------------------------------------------------


def test_the_example_says_what_it_says() -> None:
    study = load(EXAMPLE)
    assert study.model == "hepatic-lag" and study.seed == 41 and study.recipe.count == 4096
    usual, reduced = study.recipe.strata
    assert usual.laws["td"] == Lognormal(36.0, 0.2)
    assert usual.laws["tp"] == Normal(6.0, 1.0, low=2.0)
    assert usual.laws["E"] == Uniform(0.15, 0.25)
    assert usual.laws["Rm"] == Lognormal(210.0, 0.3, median_rse=0.05, cv_rse=0.2)
    assert usual.laws["Vg"] == Fixed(11.0)
    assert reduced.laws["C4"] == Lognormal(110.0, 0.3) and reduced.share == 0.25
    assert usual.weight == Lognormal(74.0, 0.18) and study.recipe.scaling == "per-kg"
    assert usual.correlations[0].spearman == 0.4
    fasting, steady = study.arms
    assert (fasting.duration_min, fasting.glucose) == (1440.0, ())
    assert steady.glucose == (Constant(180.0),) and steady.settle_min == 2880.0


@pytest.mark.parametrize(
    "drop",
    [
        "sampling",
        "recruitment",
        "ranking",
        "subjects.population",
        "subjects.size",
        "subjects.correlations",
        "subjects.strata",
        "subjects.parameters",
        "output",
    ],
)
def test_the_example_holds_block_by_block(drop: str) -> None:
    blocks = re.split(r"(?m)^(?=\[)", EXAMPLE)
    kept = [b for b in blocks if not b.startswith((f"[{drop}]", f"[[{drop}]]", f"[[{drop}.schedules]]"))]
    if drop == "subjects.parameters":
        kept = [b for b in kept if "correlations" not in b]
    assert load("".join(kept)).recipe.count == 4096


SHAPES = """
seed = 2
[subjects]
count = 8
[subjects.size]
weight = "80 kg"
[subjects.parameters]
meal_absorption.triangular = { low = "20 min", mode = 40, high = "1 h" }
td.loguniform = { low = 20, high = 60 }
C2.beta = { low = "100 mg/L", high = "20 mg/dL", alpha = 2, beta = 3.5 }
[[arms]]
name = "everything"
duration = "2 d"
start = { Ip = 200, Ii = 200, G = 12000, x1 = 60, x2 = 60, x3 = 60 }
secretion = 0.0
glucose = [
  { shape = "constant", rate = "3 mg/kg/min" },
  { shape = "steps", times = ["0 h", "6 h"], rates = ["120 mg/min", "240 mg/min"] },
  { shape = "on-off", rate = "10 g/h", period = "2 h", duty = 0.25 },
  { shape = "sine", mean = 100, relative_amplitude = 0.33, period = 120, phase = 1 },
  { shape = "meal", time = "7 h", amount = "60 g", absorption = "40 min", stages = 2, repeat = "24 h" },
  { shape = "bolus", time = "1 h", amount = "0.3 g/kg" },
]
insulin = [ { shape = "constant", rate = "1 mU/kg/min" }, { shape = "bolus", time = 5, amount = "1 U" } ]
[[arms]]
name = "held"
duration = "10 h"
start = "equilibrium"
displace = 0
glucose = [ { shape = "constant", rate = 100 } ]
[[arms]]
name = "clamped"
duration = "10 h"
clamp = { glucose = "5 mmol/L", from = "2 h" }
steady = "125 mg/min"
[[arms]]
name = "own"
duration = "10 h"
clamp = { glucose = "own fasting" }
"""


def test_every_shape_law_and_start() -> None:
    study = load(SHAPES)
    first, held, clamped, own = study.arms
    assert first.start == AtState({"Ip": 200, "Ii": 200, "G": 12000, "x1": 60, "x2": 60, "x3": 60})
    assert first.secretion == 0.0
    assert first.glucose == (
        Constant(3.0, per_kg=True),
        Steps((0.0, 360.0), (120.0, 240.0)),
        OnOff(10 * (1000 / 60), 120.0, 0.25),
        Sine(100.0, 0.33, 120.0, 1.0),
        Meal(420.0, 60_000.0, 40.0, 2, 1.0, 1440.0),
        Bolus(60.0, 300.0, per_kg=True),
    )
    assert first.insulin == (Constant(1.0, per_kg=True), Bolus(5.0, 1000.0))
    assert held.start == AtEquilibrium(0.0)
    assert clamped.clamp == Clamp(5 * 18.016, 120.0) and clamped.steady == 125.0
    assert own.clamp == Clamp(None, 0.0)
    laws = study.recipe.strata[0].laws
    assert laws["meal_absorption"] == Triangular(20.0, 40.0, 60.0)
    assert laws["td"] == Loguniform(20.0, 60.0) and laws["C2"] == Beta(100.0, 200.0, 2, 3.5)


def test_overrides_by_key_and_by_name() -> None:
    study = load(EXAMPLE, "subjects.count=500", "arms.steady 180.duration='96 h'", "title=Other",
                 "subjects.strata.usual.share=0.75")  # fmt: skip
    assert study.recipe.count == 500 and study.arms[1].duration_min == 5760.0 and study.title == "Other"
    assert study.overrides[0] == "subjects.count=500"
    assert "--set: arms.nobody.duration: arms has no entry named 'nobody'" in problems(
        EXAMPLE, "arms.nobody.duration=5"
    )
    assert "did you mean 'fasting'" in problems(EXAMPLE, "arms.fastin.duration=5")
    assert "--set: subjects.count: 0 is not allowed" in problems(EXAMPLE, "subjects.count=0")
    assert "is not KEY=VALUE" in problems(EXAMPLE, "subjects.count")
    assert "names a whole entry" in problems(EXAMPLE, "arms.fasting=5")


def test_the_plan_speaks_and_starts_no_compiler() -> None:
    study = load(EXAMPLE)
    found = plan(study, workers=2)
    assert (found.subjects, found.shards, found.runs) == (4096, 1, 8192)
    text = describe(study, found)
    assert "4,096 subjects x 2 arms = 8,192 runs" in text
    assert max(map(len, text.splitlines())) <= 80
    row = next(r for r in found.laws if r.parameter == "td")
    assert row.p50 == pytest.approx(36.0) and row.p5 < row.p50 < row.p95
    code = (
        "import sys; from cohort.study import *; s = load_study(sys.argv[1]); describe(s, plan(s)); "
        "print([m for m in ('numba', 'scipy', 'pyarrow', 'dask') if m in sys.modules])"
    )
    words = [sys.executable, "-c", code, str(HERE / "contract.toml")]
    assert subprocess.run(words, capture_output=True, text=True, check=True).stdout.strip() == "[]"


# ---- what is wrong ------------------------------------------------------------------------------------------------

P = "[subjects.parameters]\n"
BROKEN: list[tuple[str, str]] = [
    ("", "x.toml: seed is missing"),
    ("seed = -1", "x.toml:1: seed: -1 is not allowed"),
    ("seed = 1.5", "x.toml:1: seed: 1.5 is not allowed; a whole number is wanted"),
    ("seed = true", "seed: true is not allowed"),
    ("sead = 1", "x.toml:1: sead: no such key (did you mean 'seed'?)"),
    ("seed = 1\nseed = 2", "is not TOML: cannot overwrite a value"),
    ("seed = [", "x.toml:1: is not TOML"),
    ("seed = 1\n[subjects]\n[[arms]]\nname='a'\nduration=60", "x.toml:2: subjects: count is missing"),
    (SHORT.replace("count = 10", "count = 0"), "x.toml:3: subjects.count: 0 is not allowed"),
    (SHORT.replace("count = 10", "count = 1000000000000000000"), "subjects.count: 1000000000000000000 is not allowed"),
    (SHORT.replace("count = 10", "count = 'ten'"), "a whole number is wanted"),
    (SHORT.replace("count = 10", "count = 10\ndraw = 'randm'"), "'randm' is not allowed (did you mean 'random'?)"),
    (SHORT.replace("count = 10", "count = 1000\ndraw = 'sobol'"), "a power of two from 16 on is wanted (nearest: 1024)"),
    (SHORT.replace("count = 10", "count = 90000000\ndraw='latin-hypercube'"), "holds the whole design"),
    (SHORT.replace("[subjects]", "[subject]"), "subject: no such key (did you mean 'subjects'?)"),
    ("model = 'hepatic-lga'\n" + SHORT, "'hepatic-lga' is not a model (did you mean 'hepatic-lag'?)"),
    ("model = 3\n" + SHORT, "model: 3 is not allowed; a text is wanted"),
    (SHORT + P + "td.lognormal = { median = '36 min', cv = -0.2 }",
     "x.toml:8: subjects.parameters.td.lognormal.cv: -0.2 is not allowed; a coefficient of variation must be > 0."),
    (SHORT + P + "td.lognormal = { median = '36 min' }", "x.toml:8: subjects.parameters.td.lognormal: cv is missing"),
    (SHORT + P + "td.lognormal = { median = '36 mn', cv = 0.2 }", "'mn' is no unit of a time (did you mean 'min'?)"),
    (SHORT + P + "td.lognormal = { median = '36 mg', cv = 0.2 }", "'36 mg' is an amount of glucose; a time is wanted"),
    (SHORT + P + "td.lognormal = { median = 'soon', cv = 0.2 }", "'soon' is not a time"),
    (SHORT + P + "td.lognormal = { median = 0, cv = 0.2 }", "0 is not allowed; it must be > 0"),
    (SHORT + P + "td.lognorml = { median = 36, cv = 0.2 }", "no such key (did you mean 'lognormal'?)"),
    (SHORT + P + "td.lognormal = { median = 36, cv = 0.2 }\ntd.uniform = { low = 1, high = 2 }", "one law is wanted"),
    (SHORT + P + "td.lognormal = 36", "a table is wanted"),
    (SHORT + P + "td.lognormal = { median = 36, cv = 0.2, mode = 1 }", "lognormal.mode: no such key"),
    (SHORT + P + "td = {}", "a value or a law is wanted"),
    (SHORT + P + "tdd = 36", "x.toml:8: subjects.parameters.tdd: not a parameter of the model (did you mean 'td'?)"),
    ("model = 'prompt-liver'\n" + SHORT + P + "td = 36", "(model prompt-liver has no td)"),
    (SHORT + P + "Vg = '-3 L'", "-3 L is not allowed; physical values lie in 0.2 to 500 L"),
    (SHORT + P + "Vg = '1e9 L'", "physical values lie in"),
    (SHORT + P + "Vg = nan", "nan is not a finite number"),
    (SHORT + P + "Vg = inf", "inf is not a finite number"),
    (SHORT + P + "Vg = '1e999 L'", "is not a finite number"),
    (SHORT + P + "Vg = true", "True is not a volume"),
    (SHORT + P + "Vg = [1]", "is not a volume"),
    (SHORT + P + "E.uniform = { low = 0.3, high = 0.2 }", "low must be below high"),
    (SHORT + P + "E.uniform = { low = 0.2 }", "high is missing; uniform takes low, high"),
    (SHORT + P + "E.loguniform = { low = 0, high = 0.2 }", "0 is not allowed; it must be > 0"),
    (SHORT + P + "E.triangular = { low = 0.1, mode = 0.5, high = 0.2 }", "must lie between low and high"),
    (SHORT + P + "E.beta = { low = 0.1, high = 0.2, alpha = 0, beta = 1 }", "first shape must be > 0"),
    (SHORT + P + "tp.normal = { mean = 6, sd = 0 }", "0 is not allowed; it must be > 0"),
    (SHORT + P + "tp.normal = { mean = 6, sd = 6 }", "of this law lies outside the physical range 0.1 to 300 min"),
    (SHORT + P + "tp.normal = { mean = -6, sd = 1, mean_rse = 0.1 }", "must be > 0 where mean_rse or cv_rse is given"),
    (SHORT + P + "Um = 30", "Um (30) must be above U0 (40)"),
    (SHORT + P + "U0.lognormal = { median = 500, cv = 0.5 }", "of people Um would not be above U0; at most 1 % may be cut off"),
    (SHORT + P + "U0.lognormal = { median = 40, cv = 0.5 }\nUm.uniform = { low = 50, high = 60 }",
     "of people Um would not be above U0; at most 1 % may be cut off"),
    (SHORT + P + "Um.uniform = { low = 10, high = 110 }", "in 30.0% of people Um would not be above U0"),
    (SHORT + P + "td.empirical = { file = 'none.csv', column = 'td' }", "no file 'none.csv' beside the study"),
    (SHORT + P + "td.empirical = { file = '../../pyproject.toml', column = 'td' }", "lies outside the study's folder"),
    (SHORT + P + "td.empirical = { file = 'contract.toml', column = 'td' }", "contract.toml: row 2 has 1 cells"),
    (SHORT + "[subjects.size]\nscaling = 'per-kg'", "scaling: needs a weight beside it"),
    (SHORT + "[subjects.size]\nweight = '70 L'", "'70 L' is a volume; a body weight is wanted"),
    (SHORT + "[subjects.size]\nweight = '1 kg'", "must be >= 2 kg"),
    (SHORT + "[subjects.size]\nweight = 70\nscaling = 'per-lb'", "'per-lb' is not allowed"),
    (SHORT + "[[subjects.correlations]]\npair = ['td', 'Rm']\nspearman = 0.4", "'td' does not vary between subjects"),
    (SHORT + "[[subjects.correlations]]\npair = ['td']\nspearman = 0.4", "two different parameters are wanted"),
    (SHORT + "[[subjects.correlations]]\npair = ['td', 'Rm']\nspearman = 1.4", "must be <= 1"),
    (SHORT + "[[subjects.correlations]]\npair = ['td', 'Rm']", "pair and spearman are needed"),
    (SHORT + "[[subjects.strata]]\nname = 'a'\nshare = 0.4", "shares add to 0.4"),
    (SHORT + "[[subjects.strata]]\nshare = 1", "name is missing"),
    (SHORT + "[[subjects.strata]]\nname = 'a'", "share is missing"),
    (SHORT + "[[subjects.strata]]\nname='a'\nshare=0.5\n[[subjects.strata]]\nname='a'\nshare=0.5", "is the name of another"),
    ("seed = 1\n[subjects]\ncount = 5", "arms: is missing; at least one [[arms]]"),
    (SHORT.replace("name = \"a\"", ""), "arms[1]: name is missing"),
    (SHORT.replace('"a"', '"../a"'), "cannot name a folder"),
    (SHORT + "[[arms]]\nname = 'A'\nduration = 60", "'A' is the name of another arm"),
    (SHORT.replace('duration = "10 h"', ""), "arms[1]: duration is missing"),
    (SHORT.replace("10 h", "0 h"), "how long it lasts, settling included must be > 0 min"),
    (SHORT.replace("10 h", "1e9 h"), "must be <= 527,040 min"),
    (SHORT + "settle = '11 h'", "it must be shorter than duration (600 min)"),
    (SHORT + "glucose = 5", "a list of tables is wanted"),
    (SHORT + "glucose = [ { rate = 5 } ]", "x.toml:7: arms[1].glucose[1]: shape is missing: one of constant"),
    (SHORT + "glucose = [ { shape = 'constnt', rate = 5 } ]", "did you mean 'constant'?"),
    (SHORT + "glucose = [ { shape = 'constant' } ]", "rate is missing; constant takes rate"),
    (SHORT + "glucose = [ { shape = 'constant', rate = '-5 mg/min' } ]", "must be >= 0 mg/min"),
    (SHORT + "glucose = [ { shape = 'constant', rate = '5 mU/min' } ]", "is a rate of insulin; a rate of glucose is wanted"),
    (SHORT + "glucose = [ { shape = 'constant', rate = 5, period = 60 } ]", "does not go with shape 'constant'"),
    (SHORT + "glucose = [ { shape = 'constant', rate = '3 mg/kg/min' } ]", "need body weights"),
    (SHORT + "glucose = [ { shape = 'steps', times = [0, 60], rates = [1] } ]", "times has 2 entries, rates 1"),
    (SHORT + "glucose = [ { shape = 'steps', times = [60, 0], rates = [1, 2] } ]", "times: must rise"),
    (SHORT + "glucose = [ { shape = 'steps', times = [0, 700], rates = [1, 2] } ]", "but the arm ends at 600 min"),
    (SHORT + "glucose = [ { shape = 'on-off', rate = 5, period = 0 } ]", "must be >= 1 min"),
    (SHORT + "glucose = [ { shape = 'on-off', rate = 5, period = 60, duty = 1.5 } ]", "must be <= 1"),
    (SHORT + "glucose = [ { shape = 'sine', mean = 5, relative_amplitude = 1.5, period = 60 } ]", "must be <= 1"),
    (SHORT + "glucose = [ { shape = 'meal', time = 60, amount = '60 g' } ]", "absorption is missing; meal takes time, amount"),
    (SHORT + "glucose = [ { shape = 'meal', time = '11 h', amount = '60 g', absorption = 40 } ]", "the arm ends at 600 min"),
    (SHORT + "glucose = [ { shape = 'meal', time = 0, amount = '60 g', absorption = 40, stages = 3 } ]", "must be <= 2"),
    (SHORT + "insulin = [ { shape = 'meal', time = 0, amount = '60 g', absorption = 40 } ]", "'meal' is not allowed"),
    (SHORT + "insulin = [ { shape = 'bolus', time = 0, amount = '60 g' } ]", "an amount of insulin is wanted"),
    (SHORT + "secretion = -1", "must be >= 0"),
    (SHORT + "start = 'fastin'", "did you mean 'fasting'?"),
    (SHORT + "start = { Ip = 200 }", "Ii, G, x1, x2, x3 missing"),
    (SHORT + "start = { Ip = 200, Q = 1 }", "not a state of hepatic-lag"),
    (SHORT + "displace = 0.1", 'goes with start = "equilibrium"'),
    (SHORT + "start = 'equilibrium'\nglucose = [ { shape = 'bolus', time = 1, amount = 5 } ]", "needs a steady input"),
    (SHORT + "steady = 100", "this arm has a steady input of its own"),
    (SHORT + "clamp = { from = 60 }", "glucose is missing"),
    (SHORT + "clamp = { glucose = '120 mg/min' }", "a glucose concentration is wanted"),
    (SHORT + "clamp = { glucose = 120, from = '12 h' }", "the arm ends at 600 min"),
    (SHORT + "[ranking]\nmethod = 'sobl'", "x.toml:8: ranking.method: 'sobl' is not allowed (did you mean 'sobol'?)"),
    (SHORT + "[sampling]\nglucose_cvv = 1", "no such key (did you mean 'glucose_cv'?)"),
    (SHORT + "[output]\ntime_courses = -1", "must be >= 0"),
    (SHORT + "[output]\nevery = '0 min'", "must be >= 0.01 min"),
    (SHORT + "[outptu]\nevery = 5", "did you mean 'output'?"),
    (SHORT + "x = '''" + "a" * 100, "is not TOML"),
    ("a" * 2_000_001, "is larger than a study file may be"),
    ("x = " + "[" * 5000 + "]" * 5000, "x.toml: is nested too deeply"),
    ("seed = 1" + "0" * 5000, "is not TOML"),
]  # fmt: skip


@pytest.mark.parametrize(("text", "expected"), BROKEN, ids=range(len(BROKEN)))
def test_a_broken_study_is_taught(text: str, expected: str) -> None:
    assert expected in problems(text)


def test_there_are_enough_broken_studies() -> None:
    assert len(BROKEN) >= 80


def test_all_problems_come_at_once_in_the_files_order() -> None:
    text = problems(SHORT.replace("count = 10", "count = 0") + "settle = '11 h'\nglucse = []\n[output]\nevery = 'x'")
    lines = text.splitlines()
    assert len(lines) == 4
    numbers = [int(line.split(":")[1]) for line in lines]
    assert numbers == sorted(numbers)


def test_not_utf8_and_missing_files() -> None:
    with pytest.raises(StudyError, match="is not UTF-8 text"):
        study_from(b"seed = 1\n\xff\xfe", HERE / "x.toml")
    with pytest.raises(StudyError, match=r"cannot be read: no such file .*did you mean 'contract.toml'"):
        load_study(HERE / "contrat.toml")


def test_correlations_that_cannot_hold_come_with_the_nearest() -> None:
    laws = "".join(f"{p}.lognormal = {{ median = {m}, cv = 0.2 }}\n" for p, m in (("td", 36), ("tp", 6), ("ti", 100)))
    pairs = "".join(
        f"[[subjects.correlations]]\npair = ['{a}', '{b}']\nspearman = {r}\n"
        for a, b, r in (("td", "tp", 0.9), ("tp", "ti", 0.9), ("td", "ti", -0.9))
    )
    text = problems(SHORT + P + laws + pairs)
    assert "not positive semidefinite" in text and "largest change" in text


# ---- data files --------------------------------------------------------------------------------------------------

TABLE = "seed = 1\n[subjects]\ntable = 'people.csv'\n[[arms]]\nname = 'a'\nduration = '10 h'\n"


def with_table(folder: Path, rows: str | bytes, study: str = TABLE):  # type: ignore[no-untyped-def]
    (folder / "people.csv").write_bytes(rows.encode() if isinstance(rows, str) else rows)
    return study_from(study.encode(), folder / "x.toml")


def test_a_table_of_subjects(tmp_path: Path) -> None:
    study = with_table(tmp_path, "id,td,Vg,body_weight_kg\nanna,30,11,70\nben,40,12,81.5\n")
    table = study.recipe.table
    assert table is not None and study.recipe.count == 2
    assert table.id == ("anna", "ben") and table.columns["td"].tolist() == [30.0, 40.0]
    assert len(study.files["people.csv"]) == 64


@pytest.mark.parametrize(
    ("rows", "expected"),
    [
        ("", "is empty"),
        ("td,Vg\n", "holds no subjects"),
        ("td,Vg\n30\n", "row 2 has 1 cells, the header 2"),
        ("td,td\n30,30\n", "has the column 'td' twice"),
        ("tdd\n30\n", "column 'tdd' is no parameter of hepatic-lag (did you mean 'td'?)"),
        ("td\nabc\n", "row 1: 'abc' is not a number"),
        ("td\nnan\n", "row 1: nan is not a finite number"),
        ("Vg\n-3\n", "row 1: -3 is outside the physical range 0.2 to 500"),
        ("td\n30\n-1\n-2\n-3\n-4\n", "(and 1 more)"),
        ("id\na\n", "has no column of parameters"),
        ("td,stratum\n30,other\n", "'other' is no stratum of the study"),
        (b"td\n\xff\n", "is not UTF-8 text (line 2)"),
        (b"td\n\x00\n", "is not a text file"),
    ],
)
def test_a_broken_table_is_taught(tmp_path: Path, rows: str | bytes, expected: str) -> None:
    with pytest.raises(StudyError) as caught:
        with_table(tmp_path, rows)
    assert expected in str(caught.value)


def test_a_table_brings_its_own_subjects(tmp_path: Path) -> None:
    text = TABLE.replace("table =", "count = 5\ntable =") + "[subjects.size]\nweight = 70\n[subjects.parameters]\n"
    with pytest.raises(StudyError) as caught:
        with_table(tmp_path, "td\n30\n", text + "Rm.lognormal = { median = 210, cv = 0.2 }\n")
    for expected in ("subjects.count: not allowed beside table", "subjects.size: not allowed beside table",
                     "subjects.parameters.Rm: a law is not allowed beside table"):  # fmt: skip
        assert expected in str(caught.value)


def test_an_empirical_law_reads_its_column(tmp_path: Path) -> None:
    (tmp_path / "seen.csv").write_text("td\n40\n30\n35\n")
    study = study_from(
        (SHORT + P + "td.empirical = { file = 'seen.csv', column = 'td' }").encode(), tmp_path / "x.toml"
    )
    assert study.recipe.strata[0].laws["td"] == Empirical((30.0, 35.0, 40.0), "seen.csv:td")


# ---- oddities ----------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        (SHORT + P + "td = '36 min'", "fixed at 36, which is its published value anyway"),
        (SHORT.replace("10 h", "30 h"), "the measured window is 30 h, no whole days"),
        (SHORT.replace("10 h", "30 h") + "settle = '1 h'\nglucose = [{ shape = 'constant', rate = 216 }]",
         "shorter than the published body's slowest transient here (e-folding 7.5 h)"),
        (SHORT + "glucose = [{ shape = 'constant', rate = '3 mg/kg/min' }]\n[subjects.size]\nweight = 70\n"
         "scaling = 'allometric'", "heavy subjects get more for what they can use"),
        (SHORT + P + "U0.lognormal = { median = 250, cv = 0.35 }", "of people Um would not be above U0; that is cut off"),
    (SHORT + P + "tp.normal = { mean = 6, sd = 1.25 }", "of this law lies outside the physical range"),
    ],
)  # fmt: skip
def test_what_is_legal_but_odd_is_said(text: str, expected: str) -> None:
    assert expected in "\n".join(map(str, load(text).warnings))


# ---- properties --------------------------------------------------------------------------------------------------

CHARACTERS = st.sampled_from([*"[]{}=.,'\"#\n 0123456789eE+-_", "seed", "arms", "td", "rate", "min", "\\"])


@settings(max_examples=300)
@given(st.data())
def test_no_mutation_of_a_study_brings_anything_but_a_study_or_its_problems(data: st.DataObject) -> None:
    text = EXAMPLE + SHAPES.split("[[arms]]", 1)[1]
    for _ in range(data.draw(st.integers(1, 4))):
        at = data.draw(st.integers(0, len(text)))
        cut = data.draw(st.integers(0, 12))
        text = text[:at] + data.draw(CHARACTERS) + text[at + cut :]
    try:
        study_from(text.encode(), HERE / "x.toml")
    except StudyError as error:
        assert error.problems and all(p.message for p in error.problems)  # noqa: PT017


@settings(max_examples=300)
@given(st.text(alphabet="[]{}=.,'\"#\n ab01\\", max_size=60))
def test_the_line_locator_ends_on_anything_and_knows_every_key_of_valid_toml(text: str) -> None:
    lines = locate(text)
    try:
        tree = tomllib.loads(text)
    except tomllib.TOMLDecodeError:
        return
    for key, value in tree.items():
        if "\\" not in text:
            assert (key,) in lines and 1 <= lines[(key,)] <= text.count("\n") + 1, (key, value)


@given(st.sampled_from(sorted(DIMENSIONS)), st.floats(-1e6, 1e6), st.data())
def test_units_convert_by_their_factor(kept: str, number: float, data: st.DataObject) -> None:
    unit = data.draw(st.sampled_from(sorted(DIMENSIONS[kept].factors)))
    found, where = parse(f"{number!r} {unit}", kept)
    assert where == kept and found == pytest.approx(number * DIMENSIONS[kept].factors[unit], rel=1e-12)


def test_published_conversions() -> None:
    assert parse("5.5 mmol/L", "mg/dL")[0] == pytest.approx(99.088)  # 18.016 mg/dL per mmol/L
    assert parse("60 pmol/L", "mU/L")[0] == pytest.approx(10.0)  # 6.00 pmol per mU: Knopp et al. 2019
    with pytest.raises(UnitError, match="is not a finite number"):
        parse(10**400, "min")


# ---- the table of keys -------------------------------------------------------------------------------------------


def test_every_key_has_a_meaning_and_a_place() -> None:
    for path, key in KEYS.items():
        parent = re.sub(r"(\[\])?\.?[^.\[\]]+(\[\])?$", "", path)
        assert key.meaning and (not parent or parent in KEYS or parent.removesuffix("[]") in KEYS), path
    assert {"title", "model", "seed", "subjects", "arms", "output"} <= set(children(""))


def test_the_schema_allows_the_example_and_knows_every_available_key() -> None:
    schema = json_schema()

    def walk(value, node) -> None:  # type: ignore[no-untyped-def]
        options = node.get("anyOf", [node])
        if isinstance(value, dict):
            table = next(o for o in options if o.get("type") == "object")
            for name, inner in value.items():
                child = table["properties"].get(name, table.get("additionalProperties"))
                assert child, name
                walk(inner, child)
        elif isinstance(value, list):
            for item in value:
                walk(item, options[0]["items"])

    walk(tomllib.loads(EXAMPLE), schema)
    walk(tomllib.loads(SHAPES), schema)


def test_studies_that_ship_are_valid() -> None:
    found = sorted((HERE.parents[1] / "studies").glob("*.toml"))
    assert found
    for path in found:
        assert np.isfinite(plan(load_study(path)).seconds)
