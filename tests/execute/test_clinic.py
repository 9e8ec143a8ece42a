"""What the clinic would see and how many to recruit, as whole runs: observations, eligibility, weights, predictions."""

import json
from pathlib import Path

import numpy as np
import pytest

from cohort.cli import main
from cohort.errors import RunError, StudyError
from cohort.execute.run import run_study
from cohort.infer.counts import wilson
from cohort.infer.predict import central, from_counts, predicted
from cohort.report.results import Results
from cohort.report.summary import closing_words, rebuild, weighted_quantiles
from cohort.study import load_study, plan
from cohort.tables import read_parts, read_table

STUDY = """
title = "A small clinic"
seed = 7
[subjects]
count = 600
[subjects.parameters]
td.lognormal = { median = "36 min", cv = 0.2 }
Rm.lognormal = { median = "210 mU/min", cv = 0.3 }
C4.lognormal = { median = "80 mU/L", cv = 0.3 }
[[subjects.strata]]
name = "usual"
share = 0.5
[[subjects.strata]]
name = "reduced sensitivity"
share = 0.5
parameters.C4.lognormal = { median = "120 mU/L", cv = 0.3 }
[[arms]]
name = "fasting"
duration = "8 h"
[[arms]]
name = "steady"
duration = "30 h"
settle = "22 h"
glucose = [ { shape = "constant", rate = "180 mg/min" } ]
[sampling]
glucose_cv = 0.02
insulin_cv = 0.06
glucose_background = { sd = 0.03, time = "30 min" }
insulin_background = { sd = 0.06, time = "30 min" }
[[sampling.schedules]]
name = "every 20 min"
every = "20 min"
duration = "8 h"
[[sampling.schedules]]
name = "hourly"
every = "60 min"
duration = "8 h"
[recruitment]
sizes = [12, 24]
want = 6
assurance = 0.9
evaluable = 0.9
[output]
time_courses = 0
"""


def study(folder: Path, *overrides: str, text: str = STUDY):  # type: ignore[no-untyped-def]
    path = folder / "clinic.toml"
    path.write_text(text)
    return load_study(path, overrides)


def run(folder: Path, *overrides: str, text: str = STUDY, out: str = "out", workers: int = 2) -> Results:
    run_study(study(folder, *overrides, text=text), folder / out, workers=workers, quiet=True, shard_size=1024)
    return rebuild(folder / out, page=False)[0]


@pytest.fixture(scope="module")
def whole(tmp_path_factory: pytest.TempPathFactory) -> Results:
    return run(tmp_path_factory.mktemp("clinic"))


def incidence(results: Results, **wanted: str | None) -> list[dict]:  # type: ignore[type-arg]
    rows = results.incidence().to_pylist()
    return [r for r in rows if all(r[k] == v for k, v in wanted.items())]


def recruited(results: Results, **wanted: object) -> list[dict]:  # type: ignore[type-arg]
    rows = results.recruitment().to_pylist()
    return [r for r in rows if all(r[k] == v for k, v in wanted.items())]


def test_every_subject_is_observed_twice_through_each_schedule(whole: Results) -> None:
    seen = whole.observations("steady", "every 20 min")
    assert seen.num_rows == 1200
    assert seen.column("subject").to_pylist()[:4] == [0, 0, 1, 1]
    assert seen.column("analyte").to_pylist()[:2] == ["glucose", "insulin"]
    assert set(seen.column("schedule").to_pylist()) == {"every 20 min"}
    assert seen.column("detected").null_count == 0
    for field in seen.schema:
        assert field.metadata[b"meaning"]


def test_an_oscillating_cohort_is_seen_at_20_min_and_missed_or_aliased_hourly(whole: Results) -> None:
    """The field's own finding: sampling every 10 to 20 min shows the oscillation, hourly sampling misses or aliases it."""
    truly = np.array(whole.outcomes("steady").column("oscillates").to_pylist(), dtype=bool)
    period = np.array(whole.outcomes("steady").column("period_min").to_pylist(), dtype=float)[truly]

    def right(schedule: str) -> float:
        seen = whole.observations("steady", schedule).to_pandas().query("analyte == 'glucose'")
        found = seen[truly]
        return float(np.mean(found.detected.astype(bool) & (np.abs(found.period_min / period - 1.0) < 0.1)))

    assert right("every 20 min") > 0.75
    assert right("hourly") < 0.5 * right("every 20 min")
    (at_period,) = incidence(whole, arm="steady", schedule="every 20 min", stratum="everyone",
                             regime="detected at the true period")  # fmt: skip
    assert at_period["n"] == round(right("every 20 min") * truly.sum())


def test_detected_is_split_into_true_and_false(whole: Results) -> None:
    def n(regime: str, stratum: str = "everyone") -> int:
        (row,) = incidence(whole, arm="steady", schedule="every 20 min", stratum=stratum, regime=regime)
        return int(row["n"])

    assert n("detected") == n("detected and oscillating") + n("detected and not oscillating")
    assert n("detected") == n("detected", "usual") + n("detected", "reduced sensitivity")
    seen = whole.observations("steady", "every 20 min").to_pandas().query("analyte == 'glucose'")
    assert n("detected") == int(seen.detected.sum())


def test_predictions_are_those_of_the_counted_share(whole: Results) -> None:
    (count,) = incidence(whole, arm="steady", schedule=None, stratum="everyone", regime="oscillates")
    (row,) = recruited(whole, arm="steady", schedule=None, stratum="everyone", counted="oscillates", recruited=24)
    assert row["expected"] == pytest.approx(24 * 0.9 * count["share"], rel=0.01)
    assert (row["low"], row["high"]) == central(predicted(from_counts(count["n"], 600), 24, 0.9))
    assert 0.0 < row["at_least_wanted"] < 1.0 and row["uncertainty"].startswith("Monte Carlo error")
    (needed,) = [r for r in recruited(whole, arm="steady", schedule=None, stratum="everyone", counted="oscillates")
                 if r["to_recruit"]]  # fmt: skip
    assert 6 / count["share"] < needed["to_recruit"] < 60


def test_no_count_to_recruit_where_the_model_contradicts_people(whole: Results) -> None:
    rows = recruited(whole, arm="fasting")
    assert rows and all(r["expected"] is None and "disagrees with published people" in r["refused"] for r in rows
                        if not r["counted"].startswith("power"))  # fmt: skip
    words = closing_words(json.loads((whole.folder / "summary.json").read_text()))
    assert "no count to" in words and max(map(len, words.splitlines())) <= 80
    assert "published: glucose 90 mg/dL" in words and "usual: glucose" in words


def test_pairs_of_schedules_are_compared_on_the_same_people(whole: Results) -> None:
    (row,) = recruited(whole, arm="steady", schedule="hourly minus every 20 min", recruited=24)
    every, hourly = (
        whole.observations("steady", s).to_pandas().query("analyte == 'glucose'").detected.to_numpy(dtype=bool)
        for s in ("every 20 min", "hourly")
    )
    assert row["share"] == pytest.approx(hourly.mean() - every.mean())
    assert row["expected"] == pytest.approx(24 * 0.9 * row["share"]) and row["low"] <= row["expected"] <= row["high"]


def test_the_power_to_tell_strata_apart_is_listed(whole: Results) -> None:
    rows = recruited(whole, arm="steady", schedule=None, counted="power: oscillates")
    assert [r["recruited"] for r in rows] == [12, 24] and rows[0]["stratum"] == "usual against reduced sensitivity"
    assert 0.0 < rows[0]["at_least_wanted"] < rows[1]["at_least_wanted"] < 1.0


def test_workers_and_shards_do_not_change_what_is_observed(whole: Results, tmp_path: Path) -> None:
    run_study(study(tmp_path), tmp_path / "out", workers=1, quiet=True, shard_size=2048)
    for table in ("observations/steady/every 20 min", "observations/fasting/hourly"):
        assert read_parts(tmp_path / "out" / table).equals(read_parts(whole.folder / table))


def test_schedules_may_be_added_and_errors_not_changed(tmp_path: Path) -> None:
    text = STUDY.replace('[[sampling.schedules]]\nname = "hourly"\nevery = "60 min"\nduration = "8 h"\n', "")
    run(tmp_path, "subjects.count=64", text=text)
    more = run(tmp_path, "subjects.count=64")
    assert more.observations("steady", "hourly").num_rows == 128
    with pytest.raises(StudyError, match=r"sampling\.glucose_cv"):
        run(tmp_path, "subjects.count=64", "sampling.glucose_cv=0.05")


def test_the_eligible_alone_are_counted_and_the_others_kept(tmp_path: Path) -> None:
    text = STUDY.replace("[[subjects.strata]]", '[subjects.eligible]\n"fasting.equilibrium_glucose_mg_dl" = ["70 mg/dL", '
                         '"5.9 mmol/L"]\n[[subjects.strata]]', 1)  # fmt: skip
    results = run(tmp_path, text=text)
    glucose = np.array(results.outcomes("fasting").column("equilibrium_glucose_mg_dl").to_pylist())
    inside = (glucose >= 70.0) & (glucose <= 5.9 * 18.016)
    assert 50 < inside.sum() < 600
    truly = np.array(results.outcomes("steady").column("oscillates").to_pylist(), dtype=bool)
    (row,) = incidence(results, arm="steady", schedule=None, stratum="everyone", regime="oscillates")
    assert (row["n"], row["denominator"]) == (int((truly & inside).sum()), int(inside.sum()))
    assert (row["low"], row["high"]) == wilson(row["n"], row["denominator"])
    weights = read_table(results.folder / "weights.parquet")
    assert weights.column("eligible").to_pylist() == inside.tolist()
    assert results.outcomes("steady").num_rows == 600
    words = closing_words(json.loads((results.folder / "summary.json").read_text()))
    assert f"{inside.sum()} of 600 subjects are eligible" in words
    few = text.replace('"70 mg/dL", "5.9 mmol/L"', '"30 mg/dL", "31 mg/dL"')
    with pytest.raises(RunError, match="are eligible"):
        rebuild(run_and_return(tmp_path, few), page=False)


def run_and_return(folder: Path, text: str) -> Path:
    run_study(study(folder, text=text), folder / "few", workers=2, quiet=True)
    return folder / "few"


def test_weights_bring_the_cohort_to_published_summaries(tmp_path: Path) -> None:
    text = STUDY.replace("[[subjects.strata]]", '[subjects.match]\n"fasting.equilibrium_glucose_mg_dl" = { mean = "100 mg/dL", '
                         'sd = "7.1 mg/dL" }\n[[subjects.strata]]', 1)  # fmt: skip
    text += '[ranking]\nmethod = "sobol"\noutcomes = ["growth_per_min"]\n'
    results = run(tmp_path, "subjects.count=2400", text=text)
    weight = np.array(read_table(results.folder / "weights.parquet").column("weight").to_pylist())
    glucose = np.array(results.outcomes("fasting").column("equilibrium_glucose_mg_dl").to_pylist())
    mean = np.average(glucose, weights=weight)
    assert mean == pytest.approx(100.0, abs=1e-6)
    assert np.sqrt(np.average((glucose - mean) ** 2, weights=weight)) == pytest.approx(7.1, abs=1e-6)
    truly = np.array(results.outcomes("steady").column("oscillates").to_pylist(), dtype=float)
    (row,) = incidence(results, arm="steady", schedule=None, stratum="everyone", regime="oscillates")
    assert row["share"] == pytest.approx(np.average(truly, weights=weight)) and "effective n" in row["method"]
    refused = [r for r in results.sensitivity().to_pylist() if r["estimand"] == "everyone"]
    assert refused and all("people are selected by an outcome" in r["refused"] for r in refused)
    given = [r for r in results.sensitivity().to_pylist() if r["estimand"] == "association" and r["value"] is not None]
    assert {r["parameter"] for r in given} == {"td", "Rm", "C4"}
    with pytest.raises(RunError, match="cannot match"):
        rebuild(run_and_return(tmp_path, text.replace("100 mg/dL", "300 mg/dL")))


def test_an_uncertain_population_widens_predictions_and_adds_nothing_else(tmp_path: Path) -> None:
    text = STUDY.replace("cv = 0.2 }", "cv = 0.2, median_rse = 0.1, cv_rse = 0.2 }", 1)
    text = text.replace("[[subjects.strata]]", "[subjects.population]\nouter = 40\ninner = 64\n[[subjects.strata]]", 1)
    assert plan(study(tmp_path, text=text)).drawn == 41 * 64 * 2
    results = run(tmp_path, text=text)
    table = read_parts(results.folder / "population").to_pandas()
    assert sorted(set(table.draw)) == list(range(41)) and set(table.schedule.dropna()) == {"every 20 min", "hourly"}
    stated = table.query("draw == 0 and arm == 'steady' and stratum == 'everyone' and schedule.isna()")
    truly = results.outcomes("steady").column("oscillates").to_pylist()[:64]
    assert int(stated.oscillating.iloc[0]) == sum(truly) and int(stated.n.iloc[0]) == 64
    usual = table.query("stratum == 'usual' and draw == 0")
    assert usual.td_median.iloc[0] == 36.0 and usual.td_cv.iloc[0] == 0.2
    moved = table.query("stratum == 'usual' and draw > 0 and arm == 'steady' and schedule.isna()").td_median
    assert np.log(moved / 36.0).std() == pytest.approx(0.1, abs=0.03)
    (wide,) = recruited(results, arm="steady", schedule=None, stratum="everyone", counted="oscillates", recruited=24)
    assert wide["uncertainty"].startswith("uncertainty of the population")
    again = run(tmp_path, text=text, out="again", workers=1)
    assert read_parts(again.folder / "population").equals(read_parts(results.folder / "population"))


def test_several_draws_of_one_person_count_as_one(tmp_path: Path) -> None:
    rng = np.random.default_rng(2)
    rows = ["td,Rm,C4,person"]
    for person in range(60):
        draws = 1 if person < 30 else 9
        for _ in range(draws):
            td, rm, c4 = np.array([36, 210, 80]) * np.exp(0.25 * rng.normal(size=3))
            rows.append(f"{td},{rm},{c4},p{person}")
    (tmp_path / "people.csv").write_text("\n".join(rows))
    text = STUDY.replace("count = 600", 'table = "people.csv"')
    text = text[: text.index("[subjects.parameters]")] + text[text.index("[[arms]]") :]
    results = run(tmp_path, text=text)
    frame = results.subjects().to_pandas()
    frame["yes"] = np.array(results.outcomes("steady").column("oscillates").to_pylist(), dtype=float)
    (row,) = incidence(results, arm="steady", schedule=None, stratum="everyone", regime="oscillates")
    assert row["share"] == pytest.approx(frame.groupby("person").yes.mean().mean())
    assert row["method"] == "Wilson 95 %, effective n 60"


def test_weighted_quantiles_of_equal_weights_are_numpys() -> None:
    values = np.random.default_rng(1).normal(size=101)
    assert np.allclose(weighted_quantiles(values, np.ones(101)), np.quantile(values, [0.05, 0.25, 0.5, 0.75, 0.95]))


@pytest.mark.parametrize(
    ("old", "new", "said"),
    [
        ('duration = "8 h"\n[[sampling', 'duration = "9 h"\n[[sampling', "ends 9 h after settling, and arm 'fasting' has 8 h"),
        ('every = "60 min"', 'every = "2 h"', "5 samples; the detector takes 8 to 1000"),
        ('name = "hourly"', 'name = "every 20 min"', "is the name of another schedule"),
        ('name = "hourly"', 'name = "a/b"', "cannot name a folder"),
        ('every = "60 min"\n', "", "every and duration are needed"),
        ("sizes = [12, 24]", "sizes = [12.5]", "12.5 is not allowed; a whole number"),
        ("sizes = [12, 24]\nwant = 6\n", "", "sizes or want is missing"),
        ("evaluable = 0.9", "evaluable = 0", "must be >= 0.05"),
        ("glucose_cv = 0.02", "band = ['240 min', '60 min']", "the shorter first"),
        ("glucose_cv = 0.02", "detect_in = 'glucos'", "did you mean 'glucose'"),
    ],
)  # fmt: skip
def test_mistakes_in_sampling_and_recruitment_are_named(tmp_path: Path, old: str, new: str, said: str) -> None:
    assert old in STUDY
    with pytest.raises(StudyError) as error:
        study(tmp_path, text=STUDY.replace(old, new, 1))
    assert said in str(error.value)


@pytest.mark.parametrize(
    ("block", "said"),
    [
        ('[subjects.eligible]\n"fastin.equilibrium_glucose_mg_dl" = [70, 100]', "did you mean 'fasting'"),
        ('[subjects.eligible]\n"fasting.equilibrium_glucose" = [70, 100]', "is not an outcome (did you mean"),
        ('[subjects.eligible]\n"fasting.equilibrium_glucose_mg_dl" = [100, 70]', "holds nobody"),
        ('[subjects.eligible]\n"fasting.equilibrium_glucose_mg_dl" = [100]', "the least and the greatest are wanted"),
        ('[subjects.eligible]\n"fasting.equilibrium_glucose_mg_dl" = ["70 min", "80 min"]', "min"),
        ('[subjects.match]\n"fasting.equilibrium_glucose_mg_dl" = { mean = 90 }', "sd is missing"),
        ('[subjects.match]\n"fasting.equilibrium_glucose_mg_dl" = { mean = 90, sd = 0 }', "an SD above 0 is wanted"),
    ],
)
def test_mistakes_in_who_is_recruited_are_named(tmp_path: Path, block: str, said: str) -> None:
    with pytest.raises(StudyError) as error:
        study(tmp_path, text=STUDY.replace("[[subjects.strata]]", f"{block}\n[[subjects.strata]]", 1))
    assert said in str(error.value)


def test_draws_of_a_population_that_is_exactly_known_are_pointed_out(tmp_path: Path) -> None:
    text = STUDY.replace("[[subjects.strata]]", "[subjects.population]\nouter = 20\ninner = 32\n[[subjects.strata]]", 1)
    assert any("no law says how well it is known" in w.message for w in study(tmp_path, text=text).warnings)


def test_a_schedule_that_aliases_is_never_silent(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    path = tmp_path / "clinic.toml"
    path.write_text(STUDY)
    assert main(["check", str(path)]) == 0
    assert "sampled every 60 min, 110 min appears as 132 min" in capsys.readouterr().err


def test_a_real_studys_share_is_corrected_by_the_detectors_errors(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    path = tmp_path / "clinic.toml"
    path.write_text(STUDY)
    series = Path(__file__).resolve().parents[2] / "studies" / "halden-series.csv"
    longer = ["--set", "arms.steady.duration='34 h'"]
    assert (
        main(["detect", str(series), "--study", str(path), "--arm", "steady", *longer, "--out", str(tmp_path / "d")])
        == 0
    )
    said = capsys.readouterr().out
    assert "7 of 12 people detected" in said and "truly oscillate (95 %:" in said
    table = read_table(tmp_path / "d" / "detections.parquet")
    assert table.num_rows == 24 and table.column("id").to_pylist()[0] == "H01"
    assert (tmp_path / "d" / "series.svg").read_text().startswith("<?xml")
    for words, why in (([], "which arm were the people in"), (["--arm", "stedy"], "did you mean 'steady'"),
                       (["--arm", "steady"], "has 8 h after settling, and the series last 12 h")):  # fmt: skip
        assert main(["detect", str(series), "--study", str(path), *words]) == 2
        assert why in capsys.readouterr().err


def test_the_demo_series_is_what_the_tool_makes_of_the_invented_cohort() -> None:
    import sys

    root = Path(__file__).resolve().parents[2]
    sys.path.insert(0, str(root / "scripts"))
    from demo_series import table

    assert table() == (root / "studies" / "halden-series.csv").read_text()


def test_clamped_and_forced_arms_are_sampled_too_and_an_echo_is_called_one(tmp_path: Path) -> None:
    text = STUDY.replace("[sampling]", """[[arms]]
name = "held"
duration = "8 h"
clamp = { glucose = "110 mg/dL", from = "1 h" }
[[arms]]
name = "on-off"
duration = "8 h"
glucose = [ { shape = "on-off", rate = "300 mg/min", period = "2 h" } ]
[sampling]""", 1)  # fmt: skip
    results = run(tmp_path, "subjects.count=64", text=text)
    held = results.observations("held", "every 20 min").to_pandas()
    assert len(held) == 128 and held.p_value.notna().all()
    assert not incidence(results, arm="on-off", schedule="every 20 min", regime="detected at the true period")
    assert results.observations("on-off", "every 20 min").to_pandas().power_at_forcing.notna().all()
    words = closing_words(json.loads((results.folder / "summary.json").read_text()))
    assert "a rhythm there may" in words


def test_a_share_of_all_or_none_is_as_sure_as_its_number_of_people(tmp_path: Path) -> None:
    """64 of 64 leave little doubt: four recruits give three oscillators, not six."""
    text = (
        STUDY.replace("count = 600", "count = 64")
        .replace("cv = 0.2 }", "cv = 0.01 }")
        .replace("cv = 0.3 }", "cv = 0.01 }")
    )
    text = (
        text.replace("evaluable = 0.9", "evaluable = 1.0")
        .replace("want = 6", "want = 3")
        .replace("120 mU/L", "80 mU/L")
    )
    results = run(tmp_path, text=text)
    (count,) = incidence(results, arm="steady", schedule=None, stratum="everyone", regime="oscillates")
    assert count["share"] == 1.0
    rows = recruited(results, arm="steady", schedule=None, stratum="everyone", counted="oscillates")
    assert [r["to_recruit"] for r in rows if r["to_recruit"]] == [3]
    assert [(r["low"], r["high"]) for r in rows if r["recruited"] == 12] == [(11.0, 12.0)]
