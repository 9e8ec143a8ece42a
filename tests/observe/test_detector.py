"""The likelihood ratio against dense algebra; periods, errors, amplitudes and null tables."""

from pathlib import Path

import numpy as np
import pytest

from cohort.observe import null
from cohort.observe.design import Design, make_design
from cohort.observe.detector import Rule, conclude, decide, search, whole_rule
from cohort.observe.scan import scan_series
from cohort.quantities import ANALYTES

TEN = np.arange(0.0, 720.0, 10.0)
IRREGULAR = np.sort(np.random.default_rng(5).choice(np.arange(0.0, 721.0, 5.0), 50, replace=False))


def dense_statistic(design: Design, times: np.ndarray, y: np.ndarray) -> float:
    """The same likelihood ratio by covariance matrices and normal equations."""
    x = (times - times.mean()) / 300.0
    X = np.stack([np.ones_like(x), x, x * x], axis=1)
    without, with_one = [], []
    for b in design.backgrounds:
        lag = np.abs(times[:, None] - times)
        V = b.rho * np.exp(-lag / b.tau_min) + (1.0 - b.rho) * np.eye(len(times))
        inverse = np.linalg.inv(V)
        gram = X.T @ inverse @ X
        P = inverse - inverse @ X @ np.linalg.solve(gram, X.T @ inverse)
        constant = -0.5 * (np.linalg.slogdet(V)[1] + np.linalg.slogdet(gram)[1])
        freedom, square = 0.5 * (len(times) - 3), y @ P @ y
        taken = []
        for f in design.frequencies:
            H = np.stack([np.cos(2 * np.pi * f * times), np.sin(2 * np.pi * f * times)], axis=1)
            u = H.T @ P @ y
            taken.append(u @ np.linalg.solve(H.T @ P @ H, u))
        without.append(-freedom * np.log(square) + constant)
        with_one.append(-freedom * np.log(square - max(taken)) + constant)
    return 2.0 * (max(with_one) - max(without))


@pytest.mark.parametrize("times", [TEN, IRREGULAR], ids=["regular", "irregular"])
@pytest.mark.parametrize("missing", [0.0, 0.15])
def test_the_statistic_is_that_of_dense_algebra(times: np.ndarray, missing: float) -> None:
    rng = np.random.default_rng(3)
    values = 100.0 + 3.0 * rng.normal(size=(3, len(times))) + np.cumsum(rng.normal(size=(3, len(times))), axis=1)
    values[rng.random(values.shape) < missing] = np.nan
    design = make_design(times)
    for row, found in zip(values, scan_series(design, values).statistic, strict=True):
        there = ~np.isnan(row)
        assert found == pytest.approx(dense_statistic(design, design.times_min[there], row[there]), rel=1e-7)


def rhythm(
    times: np.ndarray, n: int, period: float, amplitude: float, cv: float, efold: float = np.inf, seed: int = 0
) -> np.ndarray:
    rng = np.random.default_rng(seed)
    wave = amplitude * np.exp(-times / efold) * np.cos(2 * np.pi * times / period + rng.uniform(0, 2 * np.pi, (n, 1)))
    return 100.0 * (1.0 + wave) * (1.0 + cv * rng.normal(size=(n, len(times))))


def test_the_periods_standard_error_is_the_frequency_bound() -> None:
    """sd(f) = sqrt(6/N) s/(pi T A): N 72, T 720, A 0.1, s 0.03 give 3.829e-5, 0.55 min at 120 min (simulated 0.52)."""
    bound = np.sqrt(6 / 72) * 0.03 / (np.pi * 720 * 0.1)
    assert bound == pytest.approx(3.829e-5, abs=5e-9)
    found = search(TEN, rhythm(TEN, 400, 120.0, 0.1, 0.03), Rule(), 0.03)
    assert np.median(found["period_se_min"]) == pytest.approx(bound * 120.0**2, rel=0.12)
    assert found["period_min"].std() == pytest.approx(0.55, rel=0.15)
    assert found["period_min"].mean() == pytest.approx(120.0, abs=4 * 0.55 / 20)
    assert found["relative_amplitude"].mean() == pytest.approx(0.1, rel=0.03)
    assert found["amplitude"].mean() == pytest.approx(20.0, rel=0.03)


@pytest.mark.parametrize(("efold", "low", "high"), [(np.inf, 0.90, 1.12), (480.0, 0.35, 0.59), (240.0, 0.09, 0.39)])
def test_the_second_halfs_amplitude_tells_decay(efold: float, low: float, high: float) -> None:
    """Ranges of simulated 12 h records: sustained, e-fold 480 and 240 min."""
    found = search(TEN, rhythm(TEN, 40, 120.0, 0.15, 0.01, efold), Rule(), 0.02)
    conclude({"glucose": found}, Rule())
    assert np.all((found["half_ratio"] > low) & (found["half_ratio"] < high))
    assert np.all(found["decaying"] == (efold < np.inf))


def test_what_stands_beside_the_likelihood_ratio() -> None:
    found = search(TEN, rhythm(TEN, 6, 100.0, 0.1, 1e-4), Rule(), 0.02, np.full(6, 100.0))
    np.testing.assert_allclose(found["period_min"], 100.0, atol=0.1)
    np.testing.assert_allclose(found["lomb_scargle_period_min"], 100.0, atol=3.0)
    np.testing.assert_allclose(found["power_at_forcing"], 1.0, atol=1e-3)
    assert np.all(np.abs(found["autocorrelation_period_min"] / 100.0 % 1.0 - 0.5) > 0.45)
    assert np.all(found["lomb_scargle_p"] < 1e-12)
    elsewhere = search(TEN, rhythm(TEN, 6, 100.0, 0.1, 1e-4), Rule(), 0.02, np.full(6, 160.0))
    assert np.all(elsewhere["power_at_forcing"] < 0.05)


@pytest.mark.parametrize(("sign", "count"), [(1.0, 6), (-1.0, 7)])
def test_pulses_need_a_rise_and_a_fall(sign: float, count: int) -> None:
    """7.1 cycles: from a peak on, the first has no rise and the last no fall; from a nadir on, seven are whole."""
    wave = 100.0 * (1.0 + 0.1 * sign * np.cos(2.0 * np.pi * TEN / 100.0))
    assert search(TEN, wave[None, :], Rule(), 0.02)["pulses"] == [count]


def test_series_that_cannot_be_searched_say_why() -> None:
    values = rhythm(TEN, 3, 120.0, 0.1, 0.02)
    values[0, 5:] = np.nan
    values[1] = 90.0
    found = search(TEN, values, Rule(), 0.02)
    conclude({"glucose": found}, Rule())
    assert list(found["note"]) == [0, 1, -1]
    assert list(found["samples"]) == [5, 72, 72]
    assert np.isnan(found["p_value"][:2]).all() and list(found["detected"]) == [-1, -1, 1]
    assert list(found["pulses"][:2]) == [-1, -1]


@pytest.mark.parametrize("where", ["glucose", "insulin", "either", "both"])
def test_the_whole_rule_keeps_its_false_alarms(where: str) -> None:
    p = np.random.default_rng(4).random((2, 40000))
    rule = Rule(detect_in=where, false_alarm=0.05)
    detected = decide(whole_rule(dict(zip(ANALYTES, p, strict=True)), rule), rule)
    assert detected.mean() == pytest.approx(0.05, abs=4 * np.sqrt(0.05 * 0.95 / 40000))


def test_a_rule_that_is_none_is_refused() -> None:
    with pytest.raises(ValueError, match="did you mean 'either'"):
        Rule(detect_in="eithr")
    with pytest.raises(ValueError, match="false_alarm"):
        Rule(false_alarm=0.0)


def test_null_tables_are_kept_and_damaged_ones_made_again(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    design = make_design(np.arange(0.0, 481.0, 30.0))
    monkeypatch.setattr(null, "_TABLES", {})
    made = null.null_table(design, 0, tmp_path, simulated=64)
    (path,) = tmp_path.iterdir()
    before = path.read_bytes()
    for damage in (before, before[:100], b"no table"):
        path.write_bytes(damage)
        null._TABLES.clear()
        again = null.null_table(design, 0, tmp_path, simulated=64)
        np.testing.assert_array_equal(again.statistic, made.statistic)
        np.testing.assert_array_equal(again.fitted, made.fitted)
        assert path.read_bytes() == before


def test_p_values_are_ranks_among_series_fitted_alike() -> None:
    fitted = np.repeat([0, 1], 400)
    table = null.NullTable(np.tile(np.arange(400.0), 2) + 1000.0 * fitted, fitted, np.ones(800))
    p = table.p_values(np.array([399.0, 0.0, 500.0, 1200.0]), np.array([0, 0, 0, 1]))
    np.testing.assert_allclose(p, [2 / 401, 1.0, 1 / 401, 201 / 401])
