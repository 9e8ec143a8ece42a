"""Lomb-Scargle against SciPy, Baluev's p-value and the nadir-to-peak rule against worked and simulated values."""

import numpy as np
import pytest
import scipy.signal

from cohort.observe.design import alias_min, make_design, searched_band
from cohort.observe.sampling import Reading, every
from cohort.observe.scan import scan_series
from cohort.observe.white import baluev_p, baluev_width, false_pulses_per_h, lomb_scargle, single_p

TEN = np.arange(0.0, 721.0, 10.0)


@pytest.mark.parametrize("seed", range(5))
def test_lomb_scargle_equals_scipys(seed: int) -> None:
    rng = np.random.default_rng(seed)
    times = np.sort(rng.uniform(0.0, 900.0, 60))
    values = 100.0 + 3.0 * rng.normal(size=60) + 2.0 * np.cos(times / 17.0)
    frequencies = np.linspace(1 / 240, 1 / 60, 37)
    theirs = scipy.signal.lombscargle(times, values, 2 * np.pi * frequencies, normalize=True, floating_mean=True)
    np.testing.assert_allclose(lomb_scargle(times, values, frequencies, degree=0), theirs, rtol=0, atol=1e-10)


@pytest.mark.parametrize("missing", [0, 9])
def test_the_scans_white_power_is_the_periodogram_about_a_quadratic(missing: int) -> None:
    rng = np.random.default_rng(7)
    values = 100.0 + rng.normal(size=(4, len(TEN)))
    values[:, rng.permutation(len(TEN))[:missing]] = np.nan
    design = make_design(TEN)
    scan = scan_series(design, values)
    for row, power, place in zip(values, scan.white_power, scan.white_frequency, strict=True):
        there = ~np.isnan(row)
        spectrum = lomb_scargle(TEN[there], row[there], design.frequencies)
        assert power == pytest.approx(spectrum.max(), abs=1e-10)
        assert place == spectrum.argmax()


def test_baluevs_worked_values() -> None:
    """N 73 every 10 min, constant only, 60 to 240 min; formula of MNRAS 2008;385:1279."""
    width = baluev_width(TEN.var(), 60.0, 240.0)
    assert width == pytest.approx(9.3370, abs=5e-5)
    np.testing.assert_allclose(baluev_p(np.array([0.2, 0.3]), 73, width, 1), [0.011582, 1.413e-4], rtol=5e-4)
    assert single_p(np.array(0.2), 73, 1) == pytest.approx(0.000406, abs=5e-7)


@pytest.mark.parametrize(
    ("step", "sds", "rate"), [(10, 2, 0.65), (10, 3, 0.26), (10, 4, 0.06), (10, 5, 0.006), (5, 3, 0.56)]
)
def test_false_pulses_of_the_nadir_to_peak_rule(step: float, sds: float, rate: float) -> None:
    """Simulated false pulses an hour in pure assay noise; a true 2 h rhythm gives 0.5."""
    found = false_pulses_per_h(every("x", step, 720.0), Reading(0.02), sds)
    assert found == pytest.approx(rate, abs=max(0.01, 0.1 * rate) if rate > 0.01 else 0.002)


def test_duplicates_leave_few_false_pulses() -> None:
    """Means of duplicates, threshold still three SDs of a single assay: 0.036 an hour, simulated."""
    found = false_pulses_per_h(every("x", 10.0, 720.0), Reading(0.02 / np.sqrt(2)), 3.0 * np.sqrt(2))
    assert found == pytest.approx(0.036, abs=0.008)


@pytest.mark.parametrize(
    ("step", "period", "seen"), [(60, 80, 240), (60, 100, 150), (60, 110, 132), (70, 120, 168), (10, 120, 120)]
)
def test_aliases(step: float, period: float, seen: float) -> None:
    """1/abs(1/P - 1/dt), exact."""
    assert alias_min(period, step) == pytest.approx(seen, rel=1e-12)


def test_an_aliased_sinusoid_has_the_samples_of_its_alias() -> None:
    times = np.arange(0.0, 1441.0, 60.0)
    one, other = (np.cos(2 * np.pi * times / p) for p in (110.0, alias_min(110.0, 60.0)))
    np.testing.assert_allclose(one, other, atol=1e-12)


def test_a_sparse_schedule_is_cut_and_says_so() -> None:
    band, said = searched_band(np.arange(0.0, 1441.0, 60.0))
    assert band == pytest.approx((123.0, 240.0), rel=1e-12)
    assert said.startswith("sampled every 60 min, 110 min appears as 132 min; periods below 123 min are not searched")
    assert searched_band(TEN) == ((60.0, 240.0), "")
    assert "fewer than three samples" in searched_band(np.arange(0.0, 1441.0, 25.0))[1]
    assert searched_band(np.arange(0.0, 1441.0, 40.0))[1].startswith("sampled every 40 min, 60 min appears as 120 min")
    band, said = searched_band(np.arange(0.0, 181.0, 10.0))
    assert band == (60.0, 180.0) and "above the record's 180 min" in said


@pytest.mark.parametrize(("step", "length"), [(120.0, 2880.0), (5.0, 55.0)])
def test_a_schedule_that_sees_no_period_is_refused(step: float, length: float) -> None:
    with pytest.raises(ValueError, match="no period from 60 to 240 min can be seen"):
        searched_band(np.arange(0.0, length + 1.0, step))


@pytest.mark.parametrize("seed", range(3))
def test_lomb_scargle_equals_astropys(seed: int) -> None:
    from astropy.timeseries import LombScargle

    rng = np.random.default_rng(100 + seed)
    times = np.sort(rng.uniform(0.0, 900.0, 60))
    values = 100.0 + 3.0 * rng.normal(size=60) + 2.0 * np.cos(times / 17.0)
    frequencies = np.linspace(1 / 240, 1 / 60, 37)
    theirs = LombScargle(times, values).power(frequencies, method="slow", normalization="standard")
    np.testing.assert_allclose(lomb_scargle(times, values, frequencies, degree=0), theirs, rtol=0, atol=1e-10)
