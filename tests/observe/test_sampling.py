"""What the clinic reads: the same numbers for any range of subjects, with the stated errors."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from cohort.observe.detector import Rule, observations
from cohort.observe.sampling import Reading, Schedule, autoregression, every, observe
from cohort.quantities import ANALYTES

HOURLY = every("hourly", 60.0, 1440.0, missed=0.1)
READING = Reading(0.02, 0.03, 30.0, drift_sd_per_day=0.05)


def readings(schedule: Schedule, reading: Reading, n: int, level: float = 100.0, seed: int = 3) -> np.ndarray:
    true = np.full((n, len(schedule.times_min)), level)
    return observe(true, schedule, reading, seed, "steady", "glucose", (0, n))


@settings(max_examples=15)
@given(st.integers(0, 2100), st.integers(1, 60))
def test_a_subjects_readings_depend_on_the_subject_alone(start: int, n: int) -> None:
    true = 100.0 + np.arange(2200)[:, None] % 7 + np.zeros(len(HOURLY.times_min))
    whole = observe(true, HOURLY, READING, 5, "arm", "glucose", (0, 2200))
    part = observe(true[start : start + n], HOURLY, READING, 5, "arm", "glucose", (start, min(start + n, 2200)))
    np.testing.assert_array_equal(part, whole[start : start + n])


def test_observations_do_not_depend_on_company() -> None:
    schedule = every("every 30 min", 30.0, 480.0, missed=0.05)
    rng = np.random.default_rng(1)
    true = {a: 100.0 + rng.normal(size=(300, len(schedule.times_min))) for a in ANALYTES}
    args = (schedule, dict.fromkeys(ANALYTES, READING), Rule(detect_in="either"), 5, "arm")
    whole = observations(true, *args, (0, 300), np.full(300, 150.0))
    part = observations({a: v[290:297] for a, v in true.items()}, *args, (290, 297), np.full(7, 150.0))
    for name, column in part.items():
        np.testing.assert_array_equal(column, whole[name][580:594], err_msg=name)


def test_a_missed_sample_is_missed_for_both_analytes_at_the_stated_rate() -> None:
    true = np.full((4000, 25), 50.0)
    seen = [observe(true, HOURLY, READING, 5, "arm", a, (0, 4000)) for a in ANALYTES]
    np.testing.assert_array_equal(np.isnan(seen[0]), np.isnan(seen[1]))
    assert np.isnan(seen[0]).mean() == pytest.approx(0.1, abs=4 * np.sqrt(0.09 / 1e5))
    assert not np.allclose(seen[0], seen[1], equal_nan=True)


def test_errors_have_the_stated_size() -> None:
    schedule = every("every 10 min", 10.0, 720.0)
    assay = readings(schedule, Reading(0.04), 2000) / 100.0 - 1.0
    assert assay.std() == pytest.approx(0.04, rel=0.01)
    assert abs(np.mean(assay[:, 1:] * assay[:, :-1])) / 0.04**2 < 0.015
    body = readings(schedule, Reading(0.0, 0.05, 40.0), 4000) / 100.0 - 1.0
    assert body.std() == pytest.approx(0.05, rel=0.02)
    for lag in (1, 4):  # AR(1): correlation exp(-lag/time)
        found = np.mean(body[:, lag:] * body[:, :-lag]) / np.mean(body**2)
        assert found == pytest.approx(np.exp(-lag * 10.0 / 40.0), abs=0.02)
    drift = readings(schedule, Reading(0.0, drift_sd_per_day=0.1), 4000) / 100.0 - 1.0
    assert drift[:, 0].std() == 0.0
    assert drift[:, -1].std() == pytest.approx(0.05, rel=0.05)
    limit = readings(schedule, Reading(0.1, detection_limit=95.0), 100)
    assert limit.min() == 95.0


def test_irregular_steps_keep_the_correlation() -> None:
    times = (0.0, 5.0, 35.0, 40.0, 100.0)
    course = autoregression(np.random.default_rng(2).normal(size=(40000, 5)), times, 30.0)
    lags = np.abs(np.subtract.outer(times, times))
    np.testing.assert_allclose(np.corrcoef(course.T), np.exp(-lags / 30.0), atol=0.02)


def test_seed_arm_schedule_and_analyte_each_change_the_numbers() -> None:
    true, schedule = np.full((3, 25), 80.0), every("a", 60.0, 1440.0)
    first = observe(true, schedule, READING, 1, "x", "glucose", (0, 3))
    for seed, arm, name, analyte in ((2, "x", "a", "glucose"), (1, "y", "a", "glucose"), (1, "x", "b", "glucose"),
                                     (1, "x", "a", "insulin")):  # fmt: skip
        other = observe(true, Schedule(name, schedule.times_min), READING, seed, arm, analyte, (0, 3))
        assert not np.any(other == first)


@pytest.mark.parametrize("times", [(0.0, 0.0, 10.0), (0.0, 20.0, 10.0), (0.0, float("nan"))])
def test_times_that_do_not_rise_are_refused(times: tuple[float, ...]) -> None:
    with pytest.raises(ValueError, match="must be finite and rise"):
        Schedule("bad", times)
