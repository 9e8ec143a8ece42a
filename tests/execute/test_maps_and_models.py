"""Whole runs of maps, periodic inputs, several models and a user's own model, as a user makes them."""

import json
from pathlib import Path

import numpy as np
import pyarrow.parquet as pq
import pytest

from cohort.cli import main
from cohort.errors import StudyError
from cohort.model.own import OwnModelError, register
from cohort.study import load_study

SUBJECTS = """
title = "small"
seed = 5
[subjects]
count = 40
[subjects.parameters]
td.lognormal = { median = "36 min", cv = 0.2 }
C4.lognormal = { median = "80 mU/L", cv = 0.2 }
"""
STEADY = """
[[arms]]
name = "steady"
duration = "6 h"
glucose = [ { shape = "constant", rate = "216 mg/min" } ]
[output]
time_courses = 2
"""
MAP = """
[map]
points = 12
windows = ["td", "infusion"]
[map.region]
td = { low = "10 min", high = "100 min" }
infusion = { low = "50 mg/min", high = "300 mg/min" }
[map.forcing]
period = { low = "90 min", high = "130 min" }
relative_amplitude = { low = 0.05, high = 0.5 }
"""
FORCED = """
[[arms]]
name = "fast"
duration = "6 h"
glucose = [ { shape = "sine", mean = "180 mg/min", relative_amplitude = 0.33, period = { natural = 0.8 } } ]
[output]
time_courses = 2
"""
OWN = """
title = "a loop of glucose, insulin and a lag"
source = "invented for this test"
parameters = {
    "Vg": (10.0, "L", 1.0, 100.0, "glucose space"),
    "kI": (0.06, "1/min", 0.005, 1.0, "insulin clearance"),
    "T": (40.0, "min", 1.0, 500.0, "lag"),
}
typical = {"G": 12000.0, "I": 60.0, "X": 20.0}

def equations(G, I, X, Gin, Iin, secretion, Vg, kI, T):
    secreted = secretion * 60 / (1 + exp(8 * (1 - G / (Vg * 1300))))
    rates = {"G": Gin + 60 - (0.004 + 0.002 * X) * G, "I": secreted + Iin - kI * I, "X": (I / 3 - X) / T}
    return rates, {"glucose_mg_dl": G / (10 * Vg), "insulin_mu_l": I / 3, "secretion_mu_per_min": secreted,
                   "release_mg_per_min": 60 + 0 * G}
"""


def written(folder: Path, text: str, name: str = "study.toml") -> Path:
    path = folder / name
    path.write_text(text)
    return path


# ---- maps -----------------------------------------------------------------------------------------------------------


def test_a_map_is_made_once_kept_and_shown(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    study = written(tmp_path, SUBJECTS + STEADY + MAP)
    out = tmp_path / "out"
    assert main(["run", str(study), "--out", str(out)]) == 0
    names = sorted(p.stem for p in (out / "map").iterdir())
    assert names == ["borders", "locking", "region", "tongues", "windows"]
    windows = pq.read_table(out / "map" / "windows.parquet").to_pylist()
    found = {(r["variable"], r["oscillates_side"]): r["border"] for r in windows}
    # computed with two independent methods: 23.542166 - 69.927050 min, 98.963057 - 253.939820 mg/min
    assert found[("td", "above")] == pytest.approx(23.542166, rel=1e-7)
    assert found[("infusion", "below")] == pytest.approx(253.939820, rel=1e-7)
    assert all(r["born"] == "small, attracting" for r in windows)
    assert windows[0]["distance"] == pytest.approx(windows[0]["border"] / 36.0 - 1.0)
    region = pq.read_table(out / "map" / "region.parquet").to_pandas()
    assert len(region) == 144
    assert ((region["growth_per_min"] > 1e-7) == (region["oscillates"] == True)).all()  # noqa: E712
    assert "1:1" in set(pq.read_table(out / "map" / "locking.parquet").column("locking").to_pylist())
    page = (out / "report.html").read_text()
    assert "Where oscillation lives" in page
    before = {p: p.stat().st_mtime_ns for p in (out / "map").iterdir()}
    assert main(["run", str(study), "--out", str(out)]) == 0
    assert {p: p.stat().st_mtime_ns for p in (out / "map").iterdir()} == before
    wider = ["--set", "map.points=14"]
    assert main(["run", str(study), "--out", str(out), *wider]) == 0
    assert pq.read_table(out / "map" / "region.parquet").num_rows == 196
    capsys.readouterr()


def test_what_is_wrong_with_a_map_is_said_all_at_once(tmp_path: Path) -> None:
    text = (
        SUBJECTS
        + STEADY
        + (
            '[map]\nwindows = ["td", "tdd"]\n[map.region]\ntd = { low = "50 min", high = "20 min" }\ninfusion = { low = 50 }\n'
            "[map.forcing]\nperiod = { low = 100, high = 90 }\n"
        )
    )
    with pytest.raises(StudyError) as caught:
        load_study(written(tmp_path, text))
    said = str(caught.value)
    assert "'tdd' is no parameter of this model (did you mean 'td'?)" in said
    assert "map.region.td: 50 to 20 is not allowed; rising, within 0.5 to 1000" in said
    assert "map.region.infusion: high is missing" in said
    assert "map.forcing.period: 100 to 90 is not allowed; it must rise" in said
    with pytest.raises(StudyError, match="asks for nothing"):
        load_study(written(tmp_path, SUBJECTS + STEADY + "[map]\npoints = 20\n"))
    with pytest.raises(StudyError, match="3 axes; two are wanted"):
        load_study(written(tmp_path, SUBJECTS + STEADY + "[map.region]\ntd = {}\ntp = {}\nRm = {}\n"))


# ---- periodic inputs ------------------------------------------------------------------------------------------------


def test_a_period_of_ones_own_and_who_is_captured(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    study, out = written(tmp_path, SUBJECTS + FORCED), tmp_path / "out"
    assert main(["run", str(study), "--out", str(out)]) == 0
    capsys.readouterr()
    rows = pq.read_table(out / "outcomes" / "fast").to_pandas()
    own = rows["period_min"].fillna(rows["linear_period_min"])
    np.testing.assert_allclose(rows["forcing_period_min"], 0.8 * own, rtol=1e-9)
    locked = rows["locking"].str.contains(":", na=False)
    one = rows["locking"] == "1:1"
    assert one.any()
    np.testing.assert_allclose(rows["response_period_min"][one], rows["forcing_period_min"][one])
    assert rows["response_lag_min"][~locked].isna().all()
    assert (rows["response_multiplier"][locked] < 1).all()
    strata = json.loads((out / "summary.json").read_text())["arms"]["fast"]["strata"]["everyone"]
    assert strata["locked 1:1"]["n"] == one.sum()
    captured = strata["oscillating and locked 1:1"]
    assert captured["of"] == (rows["oscillates"] == True).sum()  # noqa: E712
    assert captured["n"] == (one & (rows["oscillates"] == True)).sum()  # noqa: E712
    assert "Whom the periodic input captures" in (out / "report.html").read_text()


# ---- several models -------------------------------------------------------------------------------------------------


def test_several_models_have_the_same_people_and_are_not_pooled(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    study = written(tmp_path, 'model = ["hepatic-lag", "prompt-liver"]\n' + SUBJECTS + STEADY)
    out = tmp_path / "out"
    assert main(["run", str(study), "--out", str(out)]) == 0
    said = capsys.readouterr()
    assert "prompt-liver has no td; it is left out there" in said.err
    assert "prompt-liver has no td: its people do not differ in that" in said.out
    first, second = (pq.read_table(out / m / "subjects").to_pandas() for m in ("hepatic-lag", "prompt-liver"))
    np.testing.assert_array_equal(first["C4"], second["C4"])
    assert "td" not in second
    rows = pq.read_table(out / "comparison.parquet").to_pylist()
    assert {r["model"] for r in rows} == {"hepatic-lag", "prompt-liver"}
    assert main(["report", str(out), "--json"]) == 0
    assert json.loads(capsys.readouterr().out)["lacks"] == {"hepatic-lag": [], "prompt-liver": ["td"]}
    assert main(["run", str(study), "--out", str(out), "--set", 'model=["hepatic-lag", "steady-liver"]']) == 2
    assert "another list of models is in this folder" in capsys.readouterr().err
    with pytest.raises(StudyError, match="a list of 2 to 12 different models"):
        load_study(written(tmp_path, 'model = ["hepatic-lag", "hepatic-lag"]\n' + SUBJECTS + STEADY))
    with pytest.raises(StudyError, match="not a parameter of the model"):
        load_study(written(tmp_path, 'model = ["prompt-liver", "steady-liver"]\n' + SUBJECTS + STEADY))


# ---- a model of one's own -------------------------------------------------------------------------------------------


def own_study(tmp_path: Path, code: str = OWN) -> Path:
    (tmp_path / "loop.py").write_text(code)
    text = 'model = "loop.py"\ntitle = "own"\nseed = 1\n[subjects]\ncount = 30\n[subjects.parameters]\n'
    return written(tmp_path, text + 'kI.lognormal = { median = "0.06 /min", cv = 0.2 }\n' + STEADY)


def test_a_users_own_model_runs_only_where_it_is_allowed(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    study, out = own_study(tmp_path), tmp_path / "out"
    assert main(["check", str(study)]) == 2
    said = capsys.readouterr().err
    assert "--allow-model-code accepts it" in said
    assert "1 problem found" in said
    assert main(["run", str(study), "--out", str(out), "--allow-model-code"]) == 0
    rows = pq.read_table(out / "outcomes" / "steady").to_pandas()
    assert rows["model"].str.startswith("loop@").all()
    assert rows["equilibrium_glucose_mg_dl"].between(40, 200).all()
    assert "a loop of glucose, insulin and a lag" in (out / "report.html").read_text()
    assert main(["report", str(out)]) == 0
    (tmp_path / "loop.py").write_text(OWN.replace("0.004", "0.005"))
    assert main(["run", str(study), "--out", str(out), "--allow-model-code"]) == 2  # another model, another folder
    capsys.readouterr()


@pytest.mark.parametrize(
    ("old", "new", "said"),
    [
        ("secretion *", "secretio *", "line 12: NameError: name 'secretio' is not defined"),
        ('"kI": (0.06', '"kI": (6.0', r"parameters\['kI'\]: 6.0 does not lie in 0.005 to 1.0"),
        ('"Vg": (10.0, "L"', '"Vg": (10.0, "mL"', "here Vg is .*glucose.*, in 'L'"),
        ("title =", "titel =", "defines no title"),
        ('"X": (I / 3', '"Y": (I / 3', "the equations give"),
        ('"release_mg_per_min": 60 + 0 * G', "", "equations show no release_mg_per_min"),
        (
            "Gin, Iin, secretion",
            "Gin, Iin, secretion, kX",
            "equations take 'kX', which is no state, input or parameter",
        ),
        ("(0.004 +", "(log(G - 1e9) +", "rates or their slopes are not finite"),
        ("def equations", "def equations(", "line 11: SyntaxError"),
    ],
)
def test_what_is_wrong_with_a_model_is_said_with_its_line(old: str, new: str, said: str) -> None:
    assert old in OWN
    with pytest.raises(OwnModelError, match=said):
        register(OWN.replace(old, new, 1), "loop")


def test_an_own_model_is_as_fast_per_operation_as_a_shipped_one() -> None:
    """It is traced and compiled alike: the same loop, a program of its own."""
    from cohort.model.body import body

    found = body(register(OWN, "loop"))
    step = found.stepper(("glucose_mg_dl", "insulin_mu_l"), True).step
    assert step.flops < body("hepatic-lag").stepper(("glucose_mg_dl", "insulin_mu_l"), True).step.flops
