"""A real study's table through the detector, good and bad."""

from pathlib import Path

import numpy as np
import pytest

from cohort.errors import StudyError
from cohort.observe.detector import Rule
from cohort.observe.series import Found, detect_series, lines
from cohort.observe.table import read_series

CV = {"glucose": 0.02, "insulin": 0.06}
HEADER = "subject,time (min),glucose (mg/dL)\n"


def course(times: np.ndarray, amplitude: float, seed: int, period: float = 120.0) -> np.ndarray:
    noise = 1.0 + 0.02 * np.random.default_rng(seed).normal(size=len(times))
    return 100.0 * (1.0 + amplitude * np.cos(2.0 * np.pi * times / period)) * noise


def write(path: Path, text: str) -> Path:
    path.write_text(text)
    return path


def detect(path: Path, rule: Rule | None = None, **units: str) -> Found:
    return detect_series(read_series(path, units), rule or Rule(), CV)


def problems(path: Path, **units: str) -> list[str]:
    with pytest.raises(StudyError) as caught:
        read_series(path, units)
    return [str(problem).removeprefix(f"{path}") for problem in caught.value.problems]


def long_table(times: dict[str, np.ndarray], amplitude: dict[str, float]) -> str:
    rows = [
        f"{who},{t:g},{g:.3f}"
        for k, (who, at) in enumerate(times.items())
        for t, g in zip(at, course(at, amplitude[who], k), strict=True)
    ]
    return HEADER + "\n".join(rows) + "\n"


def test_a_long_table_gives_a_line_a_subject(tmp_path: Path) -> None:
    ten = np.arange(0.0, 601.0, 20.0)
    times = {"A": ten, "B": ten, "C": np.delete(ten, 11) + 7.0}
    found = detect(write(tmp_path / "x.csv", long_table(times, {"A": 0.08, "B": 0.0, "C": 0.08})))
    assert list(found.columns["detected"]) == [1, 0, 1]
    assert list(found.columns["samples"]) == [31, 31, 30]
    np.testing.assert_allclose(found.columns["period_min"][[0, 2]], 120.0, atol=4.0)
    said = lines(found, Rule())
    assert said[0].startswith("A, glucose: rhythm detected, 1") and "B, glucose: no rhythm detected" in said[1]


def test_long_and_wide_and_any_unit_or_decimal_mark_give_the_same(tmp_path: Path) -> None:
    times = np.arange(0.0, 601.0, 20.0)
    a, b = np.round(course(times, 0.08, 1), 3), np.round(course(times, 0.0, 2), 3)
    long = HEADER + "".join(f"{w},{t},{g}\n" for w, y in (("a", a), ("b", b)) for t, g in zip(times, y, strict=True))
    wide = "time [h],a (mmol/L),b (mmol/L)\n" + "".join(
        f"{t / 60.0!r},{x / 18.016!r},{y / 18.016!r}\n"
        for t, x, y in zip(times.tolist(), a.tolist(), b.tolist(), strict=True)
    )
    semicolon = long.replace(",", ";").replace(".", ",")
    bare = long.replace(" (min)", "").replace(" (mg/dL)", "")
    found = [
        detect(write(tmp_path / "1.csv", long)),
        detect(write(tmp_path / "2.csv", wide)),
        detect(write(tmp_path / "3.csv", semicolon)),
        detect(write(tmp_path / "4.csv", bare), time="min", glucose="mg/dL"),
        detect(write(tmp_path / "5.csv", "\ufeff" + long.replace("time (min)", "time_min").replace("\n", "\r\n"))),
    ]
    for other in found[1:]:
        assert other.subject == found[0].subject
        for name, column in found[0].columns.items():
            np.testing.assert_allclose(other.columns[name], column, rtol=1e-6, atol=1e-9, err_msg=name)


def test_a_subject_sampled_more_rarely_has_its_own_aliases(tmp_path: Path) -> None:
    times = {"close": np.arange(0.0, 961.0, 20.0), "rare": np.arange(0.0, 961.0, 60.0)}
    found = detect(write(tmp_path / "x.csv", long_table(times, {"close": 0.08, "rare": 0.08})))
    assert len(found.warnings) == 1
    assert found.warnings[0].startswith("rare: sampled every 60 min, 110 min appears as 132 min")


def test_both_analytes_and_a_rule_that_needs_both(tmp_path: Path) -> None:
    times = np.arange(0.0, 601.0, 20.0)
    glucose, insulin = course(times, 0.08, 1), 0.4 * course(times, 0.2, 2)
    rows = [f"a,{t},{g},{i}" for t, g, i in zip(times, glucose, insulin, strict=True)]
    rows += [f"b,{t},{g}," for t, g in zip(times, glucose, strict=True)]
    path = write(tmp_path / "x.csv", "id,time (min),glucose (mg/dL),insulin (mU/L)\n" + "\n".join(rows))
    rule = Rule(detect_in="both")
    found = detect(path, rule)
    assert found.subject == ("a", "a", "b", "b") and found.analyte == ("glucose", "insulin") * 2
    assert list(found.columns["detected"]) == [1, 1, -1, -1]
    assert "the rule needs both" in lines(found, rule)[2]
    assert "0 samples" in lines(found, rule)[3]


def test_bad_cells_are_all_named_with_their_lines(tmp_path: Path) -> None:
    rows = ["a,0,90", "a,0,91", "a,-5,90", "a,10,low", "a,20,-4", "a,30,5.1", "a,40,<70", ",50,90", "a,60", "a,,90"]
    said = problems(write(tmp_path / "x.csv", HEADER + "\n".join(rows)))
    for part in (
        ":3: time: subject a: 0 min is there twice",
        ":4: time: subject a: -5 min comes after 0 min; sort each subject by time",
        ":5: glucose: 'low' is not a number",
        ":6: glucose: subject a: -4 mg/dL; a concentration is never negative",
        ":7: glucose: subject a: 5.1 mg/dL, outside 10 to 2000: another unit?",
        ":8: glucose: '<70' is not a number",
        ":9: subject: is missing",
        ":10: 2 cells where the header has 3",
        ":11: time: is missing",
    ):
        assert any(problem.startswith(part) for problem in said), part
    assert len(said) == 9


@pytest.mark.parametrize(
    ("text", "part"),
    [
        ("", "is empty"),
        (HEADER, "is empty"),
        ("subject,time,glucose (mg/dL)\na,0,90\n", "the unit of time is not declared"),
        ("subject,time (min),glucose\na,0,90\n", "the unit of glucose is not declared"),
        ("subject,time (min),glucose (mg/dl/h)\na,0,90\n", "'mg/dl/h' is no unit of glucose (did you mean 'mg/dL'?)"),
        ("subject,clock (min),glucose (mg/dL)\na,0,90\n", "no column of times"),
        ("subject,time (min),glucose (mg/dL),glucose (mmol/L)\na,0,90,5\n", "is there more than once"),
        ("time (min)\n0\n", "no column of readings"),
        (HEADER + "a,0,nan\na,inf,90\n", "'inf' is not a number"),
    ],
)
def test_bad_headers(tmp_path: Path, text: str, part: str) -> None:
    assert any(part in problem for problem in problems(write(tmp_path / "x.csv", text)))


def test_many_problems_are_counted_not_listed(tmp_path: Path) -> None:
    said = problems(write(tmp_path / "x.csv", HEADER + "".join(f"a,{t},x\n" for t in range(5000))))
    assert len(said) == 21 and said[-1].endswith("and 4,980 more like these")


def test_a_missing_file_and_one_that_is_no_text(tmp_path: Path) -> None:
    assert "cannot be read" in problems(tmp_path / "none.csv")[0]
    path = tmp_path / "x.csv"
    path.write_bytes(b"\xff\xfe\x00time")
    assert "is not UTF-8 text" in problems(path)[0]


def test_series_too_short_flat_or_sparse_get_a_line(tmp_path: Path) -> None:
    times = np.arange(0.0, 481.0, 20.0)
    rows = ["one,0,90", *(f"flat,{t},90" for t in times), *(f"sparse,{t},{90 + t % 7}" for t in 150.0 * times / 20.0)]
    said = lines(detect(write(tmp_path / "x.csv", HEADER + "\n".join(rows))), Rule())
    assert said[0] == "one, glucose: not searched; 1 sample, at least 8 are needed"
    assert said[1] == "flat, glucose: not searched; every sample has the same value"
    assert "sparse, glucose: not searched; sampled every 150 min" in said[2]


@pytest.mark.long
def test_a_million_rows(tmp_path: Path) -> None:
    one = "".join(f"a,{t},{90 + t % 7}\n" for t in range(10**6))
    said = lines(detect(write(tmp_path / "one.csv", HEADER + one)), Rule())
    assert "1000000 samples; the detector takes 8 to 1000" in said[0]
    times = np.arange(0.0, 1441.0, 10.0)
    many = "".join(
        f"s{k},{t:g},{g:.2f}\n" for k in range(6897) for t, g in zip(times, course(times, 0.05, k), strict=True)
    )
    found = detect(write(tmp_path / "many.csv", HEADER + many))
    assert len(found.subject) == 6897 and found.columns["detected"].mean() > 0.99
