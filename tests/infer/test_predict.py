"""Predictions, numbers to recruit, corrections and weights against published worked values and simulation."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.stats import betabinom, binom, fisher_exact

from cohort.infer.balance import entropy_balance, induced_correlations, kish
from cohort.infer.counts import share, wilson
from cohort.infer.predict import (
    Belief,
    at_least,
    between_draws,
    central,
    corrected,
    difference,
    from_counts,
    from_moments,
    power_to_tell,
    predicted,
    rogan_gladen,
    to_recruit,
    widened,
)


def test_beta_binomial_worked_example() -> None:
    pmf = predicted(Belief(2.0, 3.0), 10)
    k = np.arange(11)
    assert pmf[4] == pytest.approx(0.139860, abs=1e-6)
    assert (k @ pmf, (k - 4.0) ** 2 @ pmf) == (pytest.approx(4.0), pytest.approx(6.0))
    assert np.allclose(pmf, betabinom.pmf(k, 10, 2.0, 3.0), atol=1e-9)


def test_ninety_percent_intervals_of_twenty_people() -> None:
    assert central(predicted(from_moments(0.6, 0.0), 20)) == (8, 16)
    assert central(predicted(from_moments(0.6, 0.12), 20)) == (7, 17)


def test_numbers_to_recruit_for_twelve_of_share_sixty_percent() -> None:
    assert [to_recruit(from_moments(0.6, sd), 12, 0.9) for sd in (0.0, 0.06, 0.12)] == [25, 26, 29]
    assert at_least(from_moments(0.6, 0.0), 20, 12) < 0.7  # k / p = 20 would be wrong
    assert to_recruit(from_moments(0.0, 0.0), 1, 0.9) is None


@given(st.floats(0.05, 0.95), st.floats(0.0, 0.1), st.integers(1, 60), st.floats(0.3, 1.0))
@settings(max_examples=30)
def test_predictions_thinned_by_dropouts_are_the_mixture(mean: float, sd: float, n: int, evaluable: float) -> None:
    belief = from_moments(mean, sd) if sd > 0.01 else from_moments(mean, 0.0)
    whole = np.zeros(n + 1)
    for finished in range(n + 1):
        inner = (
            binom.pmf(np.arange(n + 1), finished, mean)
            if belief.exact is not None
            else betabinom.pmf(np.arange(n + 1), finished, belief.a, belief.b)
        )
        whole += binom.pmf(finished, n, evaluable) * np.nan_to_num(inner)
    assert np.allclose(predicted(belief, n, evaluable), whole, atol=2e-6)
    want = max(n // 3, 1)
    assert at_least(belief, n, want, evaluable) == pytest.approx(whole[want:].sum(), abs=5e-6)


def test_population_variance_without_its_binomial_noise() -> None:
    """True SD .120, 16 subjects a draw: the naive SD is about .169, the corrected one about .120."""
    rng = np.random.default_rng(4)
    truth = from_moments(0.6, 0.12)
    p = rng.beta(truth.a, truth.b, 40_000)
    shares = rng.binomial(16, p) / 16
    mean, sd = between_draws(shares, np.full(len(p), 16.0))
    assert shares.std() == pytest.approx(0.169, abs=0.003)
    assert (mean, sd) == (pytest.approx(0.6, abs=0.003), pytest.approx(0.12, abs=0.003))


def test_uncertainties_add_as_variances() -> None:
    belief = widened(from_counts(240, 400), 0.1)
    total = belief.a + belief.b
    assert belief.a * belief.b / (total**2 * (total + 1)) == pytest.approx(0.6 * 0.4 / 402 + 0.01, rel=1e-2)


def test_paired_difference_is_the_law_of_a_sum() -> None:
    rng = np.random.default_rng(3)
    steps = rng.choice([1, -1, 0], p=[0.05, 0.2, 0.75], size=(200_000, 24)).sum(axis=1)
    expected, low, high = difference(0.05, 0.2, 24)
    assert expected == pytest.approx(-3.6)
    assert (low, high) == tuple(np.quantile(steps, [0.05, 0.95]))


def test_power_to_tell_two_strata_apart_is_fishers() -> None:
    n, p, q = 15, 0.8, 0.3
    k = np.arange(n + 1)
    chance = np.outer(binom.pmf(k, n, p), binom.pmf(k, n, q))
    reject = np.array([[fisher_exact([[a, n - a], [b, n - b]])[1] <= 0.05 for b in k] for a in k])
    assert power_to_tell(p, q, n) == pytest.approx(chance[reject].sum(), abs=1e-9)
    assert power_to_tell(0.5, 0.5, n) <= 0.05


def test_rogan_gladen_worked_example() -> None:
    assert rogan_gladen(0.55, 0.80, 0.95) == pytest.approx(0.6667, abs=1e-4)
    found = corrected((55, 100), (160, 200), (190, 200), np.random.default_rng(1))
    assert found.share == pytest.approx(0.6667, abs=1e-4) and not found.clipped
    assert (found.high - found.low) / 3.92 == pytest.approx(0.0713, abs=0.004)  # delta-method SE of the same example
    assert corrected((2, 100), (160, 200), (180, 200), np.random.default_rng(1)).clipped
    with pytest.raises(ValueError, match="says nothing"):
        rogan_gladen(0.5, 0.4, 0.6)


@pytest.mark.parametrize(
    ("k", "n", "low", "high"),
    [(81, 263, 0.2553, 0.3662), (15, 148, 0.0624, 0.1605), (0, 20, 0.0, 0.1611), (1, 29, 0.0061, 0.1718)],
)
def test_wilson_of_published_examples(k: int, n: int, low: float, high: float) -> None:
    """The set of Newcombe, Stat Med 1998;17:857."""
    assert wilson(k, n) == (pytest.approx(low, abs=5e-5), pytest.approx(high, abs=5e-5))


def test_kish_of_five_weights() -> None:
    assert kish(np.array([1.0, 1.0, 1.0, 1.0, 4.0])) == pytest.approx(3.2)


def test_entropy_balancing_is_exact_and_says_when_it_rests_on_too_few() -> None:
    rng = np.random.default_rng(2)
    x = rng.normal(103.7, 27.0, (4000, 1))
    found = entropy_balance(x, np.array([92.0]), np.array([9.0]))
    mean = float(np.average(x[:, 0], weights=found.weights))
    assert mean == pytest.approx(92.0, abs=1e-6) and not found.failed
    assert np.sqrt(np.average((x[:, 0] - mean) ** 2, weights=found.weights)) == pytest.approx(9.0, abs=1e-6)
    # the exact density ratio of the two normal laws: E[w^2] = (27/9) exp(11.7^2/(2 27^2 - 9^2)) / sqrt(2 - (9/27)^2)
    exact = 4000 * np.sqrt(2 - 1 / 9) / 3.0 * np.exp(-(11.7**2) / (2 * 27.0**2 - 81.0))
    assert found.effective == pytest.approx(exact, rel=0.05)
    assert found.weights.sum() == pytest.approx(4000)
    few = entropy_balance(x, np.array([20.0]), np.array([5.0]))
    assert few.failed
    assert "no weights" in entropy_balance(x, np.array([500.0]), np.array([1.0])).failed


def test_weights_correlate_inputs_that_were_independent() -> None:
    rng = np.random.default_rng(6)
    z = rng.standard_normal((4000, 2))
    found = entropy_balance((z[:, :1] + z[:, 1:]) * 10.0, np.array([0.0]), np.array([5.0]))
    assert induced_correlations(z, found.weights)[0, 1] < -0.5


@pytest.mark.long
def test_coverage_of_shares_and_predictions() -> None:
    """Shares within a point of nominal on average and never below 90 %; predictions at least nominal minus a point.
    Wald's interval beside them once: 77 % at n = 10."""
    covered, wald = [], []
    for n in (10, 20, 40, 80, 200):
        for p in np.linspace(0.05, 0.95, 19):
            k = np.arange(n + 1)
            chance = binom.pmf(k, n, p)
            bounds = np.array([wilson(int(i), n) for i in k])
            covered.append(chance[(bounds[:, 0] <= p) & (p <= bounds[:, 1])].sum())
            if n == 10:
                half = 1.96 * np.sqrt(k / n * (1 - k / n) / n)
                wald.append(chance[np.abs(k / n - p) <= half].sum())
    assert abs(np.mean(covered) - 0.95) < 0.01 and min(covered) >= 0.9
    assert np.mean(wald) < 0.80
    rng = np.random.default_rng(9)
    hits = []
    for p in (0.1, 0.3, 0.6, 0.9):
        for _ in range(500):
            belief = from_counts(int(rng.binomial(500, p)), 500)
            low, high = central(predicted(belief, 24))
            hits.append(low <= rng.binomial(24, p) <= high)
    assert np.mean(hits) >= 0.89


def test_unresolved_widen_a_share() -> None:
    found = share(40, 100, 10)
    assert found.low == wilson(40, 100)[0] and found.high == wilson(50, 100)[1]
