"""Whole rankings as the user runs them: interrupted, extended, with one worker or two; refusals and what stands in."""

import json
import shutil
from pathlib import Path

import numpy as np
import pyarrow.parquet as pq
import pytest

from cohort.cli import main
from cohort.errors import RunError, StudyError
from cohort.execute import ranking as ranking_room
from cohort.execute.run import run_study
from cohort.measure.outcomes import outcomes
from cohort.report.results import Results
from cohort.report.summary import closing_words, rebuild
from cohort.study import load_study
from cohort.tables import read_parts, read_table, row_digest

STUDY = """
title = "A small ranking"
seed = 7
[subjects]
count = 64
[subjects.parameters]
td.lognormal = { median = "36 min", cv = 0.2 }
Rm.lognormal = { median = "210 mU/min", cv = 0.3 }
C4.lognormal = { median = "80 mU/L", cv = 0.3 }
[[arms]]
name = "steady"
duration = "6 h"
glucose = [ { shape = "constant", rate = "180 mg/min" } ]
[[arms]]
name = "lunch"
duration = "6 h"
glucose = [ { shape = "meal", time = "1 h", amount = "50 g", absorption = "40 min", stages = 2 } ]
[ranking]
method = "sobol"
outcomes = ["oscillates", "growth_per_min", "period_min", "glucose_peak_mg_dl", "meal_1.peak_mg_dl"]
base = 64
replicates = 4
tolerance = 0.9
[output]
time_courses = 0
"""
KEYS = ["stratum", "arm", "kind", "doubling", "replicate", "block", "position"]


def study(folder: Path, *overrides: str, text: str = STUDY):  # type: ignore[no-untyped-def]
    path = folder / "small.toml"
    path.write_text(text)
    return load_study(path, overrides)


def run(folder: Path, *overrides: str, text: str = STUDY, workers: int = 2, out: str = "out") -> Results:
    run_study(study(folder, *overrides, text=text), folder / out, workers=workers, quiet=True)
    return rebuild(folder / out, page=False)[0]


def files(results: Results) -> dict[str, bytes]:
    found = sorted([*results.folder.rglob("part-*.parquet"), *results.folder.glob("*.parquet")])
    return {p.relative_to(results.folder).as_posix(): p.read_bytes() for p in found}


def listed(results: Results, **wanted: str) -> list[dict]:  # type: ignore[type-arg]
    rows = results.sensitivity().to_pylist()
    return [r for r in rows if all(r[k] == v for k, v in wanted.items())]


@pytest.fixture(scope="module")
def whole(tmp_path_factory: pytest.TempPathFactory) -> Results:
    return run(tmp_path_factory.mktemp("ranked"))


def test_every_outcome_is_ranked_or_refused_with_its_reason(whole: Results) -> None:
    plain = listed(whole, arm="steady", estimand="everyone")
    assert {r["outcome"] for r in plain if r["value"] is not None} >= {
        "oscillates",
        "growth_per_min",
        "glucose_peak_mg_dl",
    }
    (refused,) = [r for r in plain if r["outcome"] == "period_min"]
    assert refused["value"] is None and "runs (" in refused["refused"] and "not oscillating" in refused["refused"]
    assert listed(whole, arm="steady", outcome="meal_1.peak_mg_dl")[0]["refused"] == "the arm has 0 meals"
    assert listed(whole, arm="lunch", outcome="period_min")[0]["refused"] == "the arm has no steady input"
    among = {r["estimand"] for r in listed(whole, arm="steady", outcome="period_min")}
    assert among >= {"association among oscillators", "mechanism among oscillators", "fair share among oscillators"}


def test_the_period_is_decided_by_the_delay_and_intervals_say_how_sure(whole: Results) -> None:
    for estimand in ("mechanism among oscillators", "fair share among oscillators"):
        rows = listed(whole, arm="steady", outcome="period_min", estimand=estimand)
        best = max((r for r in rows if r["parameter"] != "(dummy)"), key=lambda r: r["value"])
        assert best["parameter"] == "td" and best["low"] < best["value"] < best["high"]
        assert best["verdict"] == "decides" and best["n"] > 100


def test_runs_are_stored_in_the_order_of_the_design(whole: Results) -> None:
    table = whole.ranking()
    assert table.column_names[:7] == KEYS
    design = table.to_pandas().query("kind == 'design' and arm == 'steady'")
    assert len(design) == 64 * 4 * 5 and design.oscillates.notna().all()
    order = design[["doubling", "replicate", "position"]]
    assert order.doubling.is_monotonic_increasing
    assert set(design.block) == {"A", "B", "A, td of B", "A, Rm of B", "A, C4 of B"}
    a = design.query("block == 'A' and replicate == 1").sort_values("position")
    swapped = design.query("block == 'A, Rm of B' and replicate == 1").sort_values("position")
    assert np.array_equal(a.td, swapped.td) and not np.isclose(a.Rm.to_numpy(), swapped.Rm.to_numpy()).any()
    for field in table.schema:
        assert field.metadata[b"meaning"]


def test_arms_share_the_design_and_differences_are_paired(whole: Results) -> None:
    rows = listed(whole, arm="steady minus lunch", outcome="glucose_peak_mg_dl", estimand="difference between arms")
    assert {(r["parameter"], r["index"]) for r in rows} == {(p, i) for p in ("td", "Rm", "C4") for i in ("S1", "ST")}
    one, two = (
        next(r for r in listed(whole, arm=arm, outcome="glucose_peak_mg_dl", parameter="C4", index="ST"))
        for arm in ("steady", "lunch")
    )
    (difference,) = [r for r in rows if r["parameter"] == "C4" and r["index"] == "ST"]
    assert difference["value"] == pytest.approx(one["value"] - two["value"])


def test_convergence_holds_every_doubling_and_ends_at_the_result(whole: Results) -> None:
    steps = whole.convergence().to_pandas().query("arm == 'steady' and outcome == 'growth_per_min' and index == 'ST'")
    assert sorted(set(steps.doubling)) == [0, 1, 2]
    last = steps[(steps.doubling == 2) & (steps.parameter == "td")].value.item()
    (final,) = listed(whole, arm="steady", outcome="growth_per_min", estimand="everyone", parameter="td", index="ST")
    assert last == final["value"]


def test_one_worker_writes_the_same_bytes(whole: Results, tmp_path: Path) -> None:
    assert files(run(tmp_path, workers=1)) == files(whole)


class Crash(BaseException):
    """Stands for a process that dies."""


@pytest.mark.parametrize("after", [0, 2, 4, 7, 9])
def test_a_ranking_that_dies_between_any_two_parts_carries_on_to_the_same_bytes(
    whole: Results, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, after: int
) -> None:
    written = 0
    real = ranking_room.write_part

    def dying(*words, **named):  # type: ignore[no-untyped-def]
        nonlocal written
        if written == after:
            raise Crash
        written += 1
        real(*words, **named)

    with monkeypatch.context() as patch:
        patch.setattr(ranking_room, "write_part", dying)
        with pytest.raises(Crash):
            run(tmp_path)
    assert files(run(tmp_path)) == files(whole)


def test_an_extension_reruns_nothing_and_equals_a_run_of_that_size(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    run(tmp_path)
    runs = 0

    def counting(model, values, weight, arm, responses):  # type: ignore[no-untyped-def]
        nonlocal runs
        runs += len(values)
        return outcomes(model, values, weight, arm, responses=responses)

    with monkeypatch.context() as patch:
        patch.setattr(ranking_room, "outcomes", counting)
        extended = run(tmp_path, "ranking.base=256", workers=1)
    assert runs == (256 - 64) * 4 * 5 * 2
    fresh = run(tmp_path, "ranking.base=256", out="fresh")
    assert row_digest(extended.ranking(), KEYS) == row_digest(fresh.ranking(), KEYS)
    for table in ("sensitivity.parquet", "convergence.parquet"):
        assert (extended.folder / table).read_bytes() == (fresh.folder / table).read_bytes()


def test_doubling_goes_on_until_settled_or_out_of_runs(tmp_path: Path) -> None:
    settled = run(tmp_path, "ranking.tolerance=0.12", out="settled")
    (stratum,) = settled.record["ranking"]["strata"]
    assert stratum["stopped"] == "settled" and stratum["doubling"] > 2
    plain = [r for r in listed(settled, arm="steady", estimand="everyone") if r["index"] in ("S1", "ST")]
    assert max(r["high"] - r["low"] for r in plain) < 0.24
    short = run(tmp_path, "ranking.tolerance=0.001", "ranking.max_runs=12_000", out="short")
    (stratum,) = short.record["ranking"]["strata"]
    assert "max_runs = 12,000 is reached" in stratum["stopped"] and "half-width" in stratum["stopped"]
    assert short.ranking().num_rows <= 12_000


def test_arms_and_outcomes_may_be_added_and_nothing_else_changed(whole: Results, tmp_path: Path) -> None:
    shutil.copytree(whole.folder, tmp_path / "out")
    more = STUDY.replace('"period_min", ', '"period_min", "glucose_mean_mg_dl", ')
    more = more.replace(
        "[ranking]",
        '[[arms]]\nname = "fast"\nduration = "6 h"\nglucose = [ { shape = "constant", rate = 240.0 } ]\n[ranking]',
    )
    before = files(whole)
    results = run(tmp_path, text=more)
    after = files(results)
    assert all(after[name] == content for name, content in before.items() if "ranking/" in name)
    assert listed(results, arm="fast", outcome="glucose_mean_mg_dl", index="ST")
    for change in ("ranking.replicates=8", "ranking.method='morris'", "ranking.base=32", "seed=8"):
        with pytest.raises(StudyError):
            run(tmp_path, change, text=more)


def test_a_run_whose_rows_are_not_the_designs_is_not_analysed(whole: Results, tmp_path: Path) -> None:
    shutil.copytree(whole.folder, tmp_path / "out")
    path = min((tmp_path / "out/ranking").glob("part-0*-000.parquet"))
    table = pq.read_table(path)
    pq.write_table(pq.read_table(path).take([1, 0, *range(2, table.num_rows)]), path)
    with pytest.raises(RunError, match="its values are not those it was written with"):
        rebuild(tmp_path / "out", page=False)
    with pytest.raises(RunError, match="not the one that the design has there"):
        rebuild(tmp_path / "out", page=False, verify=False)
    pq.write_table(table.slice(5), path)
    with pytest.raises(RunError, match="where the design has"):
        rebuild(tmp_path / "out", page=False, verify=False)
    again = run(tmp_path)  # found on resume, and made anew
    assert files(again) == files(whole)


def test_unresolved_runs_count_once_as_no_and_once_as_yes_and_many_refuse(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def with_unresolved(every: int):  # type: ignore[no-untyped-def]
        def made(model, values, weight, arm, responses):  # type: ignore[no-untyped-def]
            found = outcomes(model, values, weight, arm, responses=responses)
            mark = (values[:, 6] * 1e6).astype(np.int64) % every == 0
            for name, code in (("oscillates", -1), ("regime", 4)):
                column = found.outcomes[name]
                found.outcomes[name] = np.where(mark, code, column).astype(column.dtype)
            return found

        return made

    with monkeypatch.context() as patch:
        patch.setattr(ranking_room, "outcomes", with_unresolved(2000))
        few = run(tmp_path, "ranking.base=256", out="few")
    both = listed(few, arm="steady", outcome="oscillates", estimand="everyone", parameter="td", index="ST")[0]
    no, yes = (
        listed(few, arm="steady", outcome="oscillates", estimand=f"unresolved as {w}", parameter="td", index="ST")[0]
        for w in ("no", "yes")
    )
    assert both["low"] == min(no["low"], yes["low"]) and both["high"] == max(no["high"], yes["high"])
    with monkeypatch.context() as patch:
        patch.setattr(ranking_room, "outcomes", with_unresolved(50))
        many = run(tmp_path, out="many")
    (refused,) = listed(many, arm="steady", outcome="oscillates", estimand="everyone")
    assert "unresolved" in refused["refused"] and "above 0.1 %" in refused["refused"]


def test_a_failed_run_refuses_and_says_where_it_lies(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """One missing output among thousands gives SALib's and SciPy's indices of exactly 0 without a word."""

    def failing(model, values, weight, arm, responses):  # type: ignore[no-untyped-def]
        found = outcomes(model, values, weight, arm, responses=responses)
        mark = values[:, 6] == values[:, 6].max() if len(values) == 640 else np.zeros(len(values), bool)
        for name, code in (("regime", 5), ("oscillates", -1), ("failure", 0)):
            column = found.outcomes[name]
            found.outcomes[name] = np.where(mark, code, column).astype(column.dtype)
        for name in ("growth_per_min", "glucose_peak_mg_dl"):
            found.outcomes[name] = np.where(mark, np.nan, found.outcomes[name])
        return found

    monkeypatch.setattr(ranking_room, "outcomes", failing)
    results = run(tmp_path)
    for outcome in ("growth_per_min", "glucose_peak_mg_dl"):
        (row,) = listed(results, arm="steady", outcome=outcome, estimand="everyone")
        assert "failed: replicate" in row["refused"] and "td " in row["refused"] and row["value"] is None


def test_correlated_parameters_are_refused_and_fair_shares_stand_in(tmp_path: Path) -> None:
    tied = STUDY.replace("[[arms]]", '[[subjects.correlations]]\npair = ["Rm", "C4"]\nspearman = 0.6\n[[arms]]', 1)
    results = run(tmp_path, text=tied)
    for outcome in ("oscillates", "growth_per_min", "period_min"):
        (row,) = listed(results, arm="steady", outcome=outcome, estimand="everyone")
        assert "Rm and C4 are correlated" in row["refused"]
    for estimand, index in (("fair share", "shapley"), ("left unexplained", "T"), ("association", "S1")):
        rows = listed(results, arm="steady", outcome="growth_per_min", estimand=estimand, index=index)
        assert {r["parameter"] for r in rows} >= {"td", "Rm", "C4"} and all(r["value"] is not None for r in rows)
    assert not results.ranking().to_pandas().query("kind == 'design'").size
    assert listed(results, outcome="period_min", estimand="mechanism among oscillators")[0]["refused"]
    grouped = tied.replace("[output]", 'groups = { secretion = ["Rm", "C4"] }\n[output]')
    together = run(tmp_path, text=grouped, out="grouped")
    rows = listed(together, arm="steady", outcome="growth_per_min", estimand="everyone", index="ST")
    assert [r["parameter"] for r in rows] == ["td", "secretion"]


def test_strata_are_ranked_one_by_one_and_a_stratum_with_one_input_is_refused(tmp_path: Path) -> None:
    text = STUDY.replace("[[arms]]", """[[subjects.strata]]
name = "usual"
share = 0.5
[[subjects.strata]]
name = "alike"
share = 0.5
parameters = { td = "36 min", Rm = "210 mU/min" }
[[arms]]""", 1)  # fmt: skip
    results = run(tmp_path, text=text)
    assert listed(results, stratum="usual", outcome="growth_per_min", index="ST")
    (row,) = listed(results, arm="steady", stratum="alike", outcome="growth_per_min")
    assert row["refused"] == "1 varied input; a ranking compares two or more"


def test_a_table_of_people_is_ranked_by_given_data_alone(tmp_path: Path) -> None:
    rng = np.random.default_rng(2)
    lines = [
        "td,Rm,C4",
        *(f"{a},{b},{c}" for a, b, c in np.array([36, 210, 80]) * np.exp(0.25 * rng.normal(size=(400, 3)))),
    ]
    (tmp_path / "people.csv").write_text("\n".join(lines))
    text = STUDY.replace("count = 64", 'table = "people.csv"')
    text = text[: text.index("[subjects.parameters]")] + text[text.index("[[arms]]") :]
    results = run(tmp_path, text=text)
    (row,) = listed(results, arm="steady", outcome="growth_per_min", estimand="everyone")
    assert "from a table" in row["refused"]
    assert (
        listed(results, arm="steady", outcome="growth_per_min", estimand="association", parameter="C4")[0]["value"]
        > 0.1
    )
    assert not (results.folder / "ranking").exists()


def test_morris_screens_and_its_period_has_no_plain_effects(tmp_path: Path) -> None:
    text = STUDY.replace('method = "sobol"', 'method = "morris"\ntrajectories = 24').replace("base = 64\n", "")
    text = text.replace("replicates = 4\ntolerance = 0.9\n", "")
    results = run(tmp_path, text=text)
    rows = listed(results, arm="steady", outcome="growth_per_min", estimand="elementary effects")
    assert {r["index"] for r in rows} == {"mu", "mu_star", "sigma"} and len(rows) == 9
    (refused,) = listed(results, arm="steady", outcome="period_min", estimand="elementary effects")
    assert "not oscillating" in refused["refused"]
    assert listed(results, outcome="period_min", estimand="mechanism among oscillators")[0]["value"] is not None
    words = closing_words(json.loads((results.folder / "summary.json").read_text()))
    assert "mu_star, 1/min" in words and max(map(len, words.splitlines())) <= 80


def test_nobody_oscillates_and_a_constant_outcome(tmp_path: Path) -> None:
    text = STUDY.replace('rate = "180 mg/min"', 'rate = "0 mg/min"').replace("duration", "secretion = 1.0\nduration")
    text = text.replace('"growth_per_min", ', '"time_above_250_min", ')
    results = run(tmp_path, text=text)
    (row,) = listed(results, arm="steady", outcome="time_above_250_min", estimand="everyone")
    assert row["refused"].startswith("the same in all ") and row["refused"].endswith("as far as they are accurate (0)")
    (row,) = listed(results, arm="steady", outcome="period_min", estimand="association among oscillators")
    assert "independent rows oscillate; at least 100 are needed" in row["refused"]


def test_second_order_lists_pairs(tmp_path: Path) -> None:
    results = run(tmp_path, "ranking.second_order=true")
    rows = listed(results, arm="steady", outcome="glucose_peak_mg_dl", index="S2")
    assert [(r["parameter"], r["other"]) for r in rows] == [("td", "Rm"), ("td", "C4"), ("Rm", "C4")]
    assert results.ranking().to_pandas().query("kind == 'design' and arm == 'steady'").shape[0] == 64 * 4 * 8


def test_the_command_prints_a_ranked_list_that_fits(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    path = tmp_path / "small.toml"
    path.write_text(STUDY)
    assert main(["run", str(path), "--out", str(tmp_path / "out")]) == 0
    said = capsys.readouterr().out
    assert "what decides it" in said and "matters" in said and "refused: undefined for" in said
    assert max(map(len, said.splitlines()[:-1])) <= 80  # the last is a path of this machine
    summary = json.loads((tmp_path / "out/summary.json").read_text())
    assert summary["ranking"]["lists"][0]["factors"][0]["value"] > 0
    assert main(["report", str(tmp_path / "out"), "--json"]) == 0


def test_part_files_open_together(whole: Results) -> None:
    import pandas as pd

    frame = pd.read_parquet(whole.folder / "ranking")
    assert len(frame) == whole.ranking().num_rows
    assert read_table(whole.folder / "sensitivity.parquet").num_rows == read_parts(
        whole.folder / "subjects"
    ).num_rows * 0 + len(listed(whole))


def test_scipys_own_design_and_estimators_give_a_second_opinion_on_the_model(tmp_path: Path) -> None:
    """Another sampler, other quantile functions and other code, on the equilibrium's glucose under a steady infusion."""
    from scipy.stats import lognorm, sobol_indices

    from cohort.model.catalogue import MODELS

    text = STUDY.replace('"growth_per_min"', '"equilibrium_glucose_mg_dl"')
    results = run(tmp_path, "ranking.base=256", "ranking.replicates=8", text=text)
    arm = next(a for a in study(tmp_path, text=text).arms if a.name == "steady")
    card = MODELS["hepatic-lag"]
    names = ("td", "Rm", "C4")

    def glucose(x):  # type: ignore[no-untyped-def]
        values = np.repeat([[*card.nominal.values(), np.nan, np.nan]], x.shape[1], axis=0)
        values[:, [card.parameters.index(n) for n in names]] = x.T
        found = outcomes("hepatic-lag", values, np.full(len(values), np.nan), arm).outcomes
        return found["equilibrium_glucose_mg_dl"][None]

    def law(median: float, cv: float):  # type: ignore[no-untyped-def]
        return lognorm(s=np.sqrt(np.log1p(cv * cv)), scale=median)

    theirs = sobol_indices(func=glucose, n=2048, dists=[law(36, 0.2), law(210, 0.3), law(80, 0.3)], rng=5)
    for index, values in (("S1", np.ravel(theirs.first_order)), ("ST", np.ravel(theirs.total_order))):
        rows = listed(results, arm="steady", outcome="equilibrium_glucose_mg_dl", estimand="everyone", index=index)
        for row, theirs_value in zip(rows, values, strict=True):
            assert row["value"] == pytest.approx(theirs_value, abs=0.02), (row["parameter"], index)


def test_seed_zero_is_a_seed(tmp_path: Path) -> None:
    """To SALib it is none: two analyses then differ."""
    small = ("seed=0", "ranking.base=16", 'ranking.outcomes=["growth_per_min"]')
    assert files(run(tmp_path, *small, out="one")) == files(run(tmp_path, *small, out="two"))
    morris = STUDY.replace('method = "sobol"', 'method = "morris"').replace('"period_min", ', "")
    assert files(run(tmp_path, "seed=0", text=morris, out="a")) == files(run(tmp_path, "seed=0", text=morris, out="b"))


def test_a_design_is_never_analysed_as_another(whole: Results, tmp_path: Path) -> None:
    """SALib takes a first-order design for a second-order one, and effects at the wrong number of levels."""
    shutil.copytree(whole.folder, tmp_path / "out")
    with pytest.raises(StudyError, match=r"ranking\.second_order"):
        run(tmp_path, "ranking.second_order=true")
    morris = STUDY.replace('method = "sobol"', 'method = "morris"').replace('"period_min", ', "")
    run(tmp_path, text=morris, out="morris")
    with pytest.raises(StudyError, match=r"ranking\.levels"):
        run(tmp_path, "ranking.levels=8", text=morris, out="morris")


def test_a_group_has_no_sigma_and_no_sign(tmp_path: Path) -> None:
    morris = STUDY.replace('method = "sobol"', 'method = "morris"').replace('"period_min", ', "")
    morris = morris.replace("[output]", "groups = { both = ['td', 'Rm'] }\n[output]")
    rows = listed(run(tmp_path, text=morris), arm="steady", outcome="growth_per_min")
    assert [r["index"] for r in rows if r["parameter"] == "both"] == ["mu_star"]
    assert {r["index"] for r in rows if r["parameter"] == "C4"} == {"mu", "mu_star", "sigma"}


def test_given_data_indices_of_a_rare_oscillation_are_refused(tmp_path: Path) -> None:
    """A handful of oscillators among two thousand rows would give an interval of no width around nothing."""
    tied = STUDY.replace("[[arms]]", '[[subjects.correlations]]\npair = ["Rm", "C4"]\nspearman = 0.6\n[[arms]]', 1)
    results = run(tmp_path, text=tied.replace('rate = "180 mg/min"', 'rate = "15 mg/min"'))
    rows = listed(results, arm="steady", outcome="oscillates", estimand="association")
    assert rows and all(r["value"] is None for r in rows)
    assert all("2,048 rows differ from the rest; at least 80 are needed" in r["refused"] for r in rows)


def test_a_harmed_part_of_any_kind_is_found_and_made_anew(whole: Results, tmp_path: Path) -> None:
    """Of redraws too, whose later attempts rest on earlier ones."""
    shutil.copytree(whole.folder, tmp_path / "out")
    names = sorted(p.name for p in (tmp_path / "out/ranking").glob("part-*.parquet"))
    redraws = [n for n in names if n.startswith("part-2")]
    for name in (names[0], next(n for n in names if n.startswith("part-1")), redraws[0], redraws[1], redraws[-1]):
        path = tmp_path / "out/ranking" / name
        path.write_bytes(path.read_bytes()[:-40])
    assert files(run(tmp_path)) == files(whole)
    (tmp_path / "out/ranking" / redraws[1]).write_bytes((tmp_path / "out/ranking" / redraws[0]).read_bytes())
    (tmp_path / "out/ranking" / redraws[0]).unlink()
    assert files(run(tmp_path)) == files(whole)
