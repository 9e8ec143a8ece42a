"""[ranking] as it is checked: every mistake gets a line that says what is allowed."""

from pathlib import Path

import pytest

from cohort.errors import StudyError
from cohort.study import load_study, plan
from tests.execute.test_ranking import STUDY


def problems(folder: Path, text: str) -> str:
    path = folder / "s.toml"
    path.write_text(text)
    with pytest.raises(StudyError) as error:
        load_study(path)
    return str(error.value)


def changed(old: str, new: str) -> str:
    assert old in STUDY
    return STUDY.replace(old, new)


@pytest.mark.parametrize(
    ("text", "said"),
    [
        (changed("base = 64", "base = 1000"), "ranking.base: 1000 is not allowed; a power of two from 16 on is wanted"),
        (changed("base = 64", "base = 1000"), "(nearest: 1024)"),
        (changed("base = 64", "base = 8"), "(nearest: 16)"),
        (changed('"growth_per_min"', '"growth_per_mn"'), "did you mean 'growth_per_min'"),
        (changed('"growth_per_min"', '"regime"'), "'regime' is not an outcome that can be ranked"),
        (changed('"growth_per_min"', '"oscillates"'), "'oscillates' is named twice"),
        (changed("meal_1.peak_mg_dl", "meal_2.peak_mg_dl"), "no arm has a meal 2 (at most 1)"),
        (changed("base = 64", "base = 64\nmax_runs = 100"), "max_runs = 100 is too small: base 64 x 4 replicates and 2,048 "),
        (changed('method = "sobol"', 'method = "sobl"'), "did you mean 'sobol'"),
        (changed('method = "sobol"\n', ""), "method is missing; sobol or morris"),
        (changed('method = "sobol"', 'method = "morris"\nlevels = 5'), "5 is not allowed; an even number is wanted"),
        (changed("replicates = 4", "replicates = 1"), "must be >= 2"),
        (changed("tolerance = 0.9", "tolerance = 0"), "must be >= 1e-06"),
        (changed("tolerance = 0.9", "groups = { x = ['td', 'Rm_'] }"), "'Rm_' is not a varied parameter (did you mean"),
        (changed("tolerance = 0.9", "groups = { td = ['Rm', 'C4'] }"), "has the name of a parameter"),
        (changed("tolerance = 0.9", "groups = { a = ['Rm', 'C4'], b = ['Rm'] }"), "'Rm' is in 'a' already"),
        (changed("tolerance = 0.9", "groups = { a = ['Rm', 'C4', 'td'] }"), "they are all in one group"),
        (changed('outcomes = ["oscillates"', 'outcomes = []\n# ["'), "outcomes is missing"),
    ],
)  # fmt: skip
def test_mistakes_are_named(tmp_path: Path, text: str, said: str) -> None:
    assert said in problems(tmp_path, text)


def test_one_parameter_or_none_is_no_ranking(tmp_path: Path) -> None:
    text = STUDY.replace('Rm.lognormal = { median = "210 mU/min", cv = 0.3 }\n', "")
    text = text.replace('C4.lognormal = { median = "80 mU/L", cv = 0.3 }\n', "")
    assert "only td varies between subjects" in problems(tmp_path, text)
    assert "nothing varies" in problems(
        tmp_path, text.replace('.lognormal = { median = "36 min", cv = 0.2 }', ' = "36 min"')
    )


def test_what_will_be_refused_is_said_by_check(tmp_path: Path) -> None:
    path = tmp_path / "s.toml"
    path.write_text(
        STUDY.replace("[[arms]]", '[[subjects.correlations]]\npair = ["Rm", "C4"]\nspearman = 0.6\n[[arms]]', 1)
    )
    study = load_study(path)
    assert any("Rm and C4 are correlated" in w.message for w in study.warnings)
    assert plan(study).ranking == 2048 * 2


def test_keys_of_the_other_method_are_pointed_out(tmp_path: Path) -> None:
    path = tmp_path / "s.toml"
    path.write_text(STUDY.replace("base = 64", "base = 64\nlevels = 6"))
    assert any("has no part in method = 'sobol'" in w.message for w in load_study(path).warnings)


def test_the_plan_counts_the_rankings_runs(tmp_path: Path) -> None:
    path = tmp_path / "s.toml"
    path.write_text(STUDY)
    assert plan(load_study(path)).ranking == (64 * 4 * 5 + 2048) * 2


def test_a_group_member_that_does_not_vary_is_pointed_out(tmp_path: Path) -> None:
    path = tmp_path / "s.toml"
    path.write_text(changed("tolerance = 0.9", "groups = { secretion = ['Rm', 'C1'] }"))
    study = load_study(path)
    assert any("'C1' does not vary between subjects" in w.message for w in study.warnings)
    assert study.ranking is not None and study.ranking.groups == {"secretion": ("Rm", "C1")}
