"""Indices against published and exact values, SALib's own samplers and analyses, and SciPy's estimators."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from cohort.infer.analysis import Outcome
from cohort.infer.effects import effects, elementary_effects
from cohort.infer.given import association, association_floor, shares
from cohort.infer.intervals import Estimate, t_quantile
from cohort.infer.mechanism import mechanism
from cohort.infer.ranking import (
    TRIM,
    Design,
    Factor,
    design_keys,
    design_rows,
    doubling_of,
    first_point,
    plain_rows,
    points,
    redrawn_rows,
    row_count,
)
from cohort.infer.variance import estimates, indices, settled
from tests.infer import toys

CASES = [
    (toys.ishigami, 3, 6, toys.ISHIGAMI_S1, toys.ISHIGAMI_ST),
    (toys.sobol_g, 8, 6, toys.G_S1, toys.G_ST),
    (toys.indicator, 3, 6, toys.INDICATOR_S1, toys.INDICATOR_ST),
    (toys.same_sign, 3, 6, (0.0, 0.0, 0.0), (1.0, 1.0, 0.0)),
]


@pytest.mark.parametrize(("function", "d", "doubling", "first", "total"), CASES)
def test_published_indices_lie_in_the_intervals(function, d, doubling, first, total) -> None:  # type: ignore[no-untyped-def]
    found = indices(toys.run(toys.design(d, 8), function, doubling), False)
    for kind, truth in ((found.S1, first), (found.ST, total)):
        for estimate, exact in zip(estimates(kind, found.n), truth, strict=True):
            slack = 0.4 * estimate.half_width  # one set of intervals of many, each of 95 %
            assert estimate.low - slack <= exact <= estimate.high + slack
            assert abs(estimate.value - exact) < 0.03


def test_an_input_without_influence_has_indices_of_exactly_zero() -> None:
    found = indices(toys.run(toys.design(3, 2), toys.same_sign, 4), False)
    assert (found.S1[:, 2] == 0.0).all() and (found.ST[:, 2] == 0.0).all()
    # the points fill the four quadrants evenly, so the others are exact too: no interval to judge the coverage of
    assert np.allclose(found.ST[:, :2], 1.0, atol=1e-12) and np.allclose(found.S1[:, :2], 0.0, atol=1e-12)


def test_pairs_by_both_swapped_matrices() -> None:
    found = indices(toys.run(toys.design(3, 5, second_order=True), toys.ishigami, 6), True)
    assert found.S2 is not None
    for estimate, exact in zip(estimates(found.S2, found.n), toys.ISHIGAMI_S2, strict=True):
        assert abs(estimate.value - exact) < 0.03
    for kind, truth in ((found.S1, toys.ISHIGAMI_S1), (found.ST, toys.ISHIGAMI_ST)):
        assert np.allclose(kind.mean(axis=0), truth, atol=0.02)


def test_a_group_has_the_index_of_its_members_together() -> None:
    grouped = Design("sobol", 3, "all", ("x0", "x1", "x2"), (Factor("both", (0, 2)), Factor("x1", (1,))), 8)
    found = indices(toys.run(grouped, toys.ishigami, 6), False)
    # nothing but x1 is left: the group's first and total index are 1 - 0.442411 (exact)
    assert np.allclose(found.S1.mean(axis=0), (0.557589, 0.442411), atol=0.02)
    assert np.allclose(found.ST.mean(axis=0), (0.557589, 0.442411), atol=0.02)


def test_salibs_own_analysis_agrees_on_the_same_rows() -> None:
    from SALib.analyze import sobol as salib

    one = toys.design(3, 6, replicates=1)
    ours = [design_rows(one, k, 0, row_count(one, k)).u.reshape(5, -1, 3) for k in range(5)]
    a, b, *swapped = np.concatenate(ours, axis=1)
    for j in range(3):
        mixed = a.copy()
        mixed[:, j] = b[:, j]
        assert np.array_equal(swapped[j], mixed)
    in_salibs_order = np.stack([a, *swapped, b], axis=1).reshape(-1, 3)
    problem = {"num_vars": 3, "names": list("abc"), "bounds": [[0, 1]] * 3}
    y = toys.ishigami(in_salibs_order)
    theirs = salib.analyze(problem, y, calc_second_order=False, num_resamples=2, seed=1)
    mine = indices(toys.run(one, toys.ishigami, 4), False)
    # SALib centres on all runs of the design, we on A and B alone: the same up to that for S1, exactly for ST
    assert np.allclose(mine.S1[0], theirs["S1"], atol=2e-3)
    assert np.allclose(mine.ST[0], theirs["ST"], atol=1e-12)


def test_scipys_sobol_indices_agree_on_the_same_rows() -> None:
    from scipy.stats import sobol_indices

    one = toys.design(3, 4, replicates=2)
    y = toys.run(one, toys.ishigami, 7)
    ours = indices(y, False)
    for r in range(2):
        made = {"f_A": y[r, :1], "f_B": y[r, 1:2], "f_AB": y[r, 2:][:, None, :]}
        theirs = sobol_indices(func=made, n=y.shape[2])
        assert np.allclose(ours.ST[r], theirs.total_order, atol=1e-12)
        # SciPy centres on the mean of A and B together, as the estimator here does
        assert np.allclose(ours.S1[r], theirs.first_order, atol=1e-12)


def test_elementary_effects_equal_salibs_and_morris_own_test_function() -> None:
    from SALib.analyze import morris as analyze

    d = Design("morris", 4, "all", tuple("abc"), tuple(Factor(n, (j,)) for j, n in enumerate("abc")), 60, levels=6)
    u = design_rows(d, 0, 0, row_count(d, 0)).u
    y = toys.ishigami(u)
    ours = effects(elementary_effects(d, u.reshape(60, 4, 3), y.reshape(60, 4)), (False,) * 3)
    problem = {"num_vars": 3, "names": list("abc"), "bounds": [[TRIM, 1 - TRIM]] * 3}
    theirs = analyze.analyze(problem, u, y, num_levels=6, num_resamples=2, seed=1)
    for e, mu, mu_star, sigma in zip(ours, theirs["mu"], theirs["mu_star"], theirs["sigma"], strict=True):
        assert e.mu is not None and e.sigma is not None
        assert np.allclose((e.mu.value, e.mu_star.value, e.sigma.value), (mu, mu_star, sigma), rtol=1e-12)
    assert u.min() >= TRIM - 1e-12 and u.max() <= 1.0 - TRIM + 1e-12


def test_effects_of_a_linear_function_are_its_slopes_over_the_trimmed_range() -> None:
    d = Design("morris", 9, "all", ("a", "b", "c"), (Factor("ab", (0, 1)), Factor("c", (2,))), 12)
    u = design_rows(d, 0, 0, row_count(d, 0)).u.reshape(12, 3, 3)
    y = 3.0 * u[..., 2]
    group, single = effects(elementary_effects(d, u, y), (True, False))
    assert group.mu is None and group.sigma is None and group.mu_star.value == 0.0
    assert single.mu is not None and single.mu.value == pytest.approx(3.0 * (1.0 - 2.0 * TRIM))


def test_morris_refuses_rows_of_another_design() -> None:
    d = Design("morris", 9, "all", ("a", "b"), (Factor("a", (0,)), Factor("b", (1,))), 6)
    u = design_rows(d, 0, 0, row_count(d, 0)).u.reshape(6, 3, 2)
    with pytest.raises(ValueError, match="do not match"):
        elementary_effects(d, u[:, ::2], np.zeros((6, 2)))
    u = u.copy()
    u[2, 1] = u[2, 0]
    with pytest.raises(ValueError, match="every step moves one factor"):
        elementary_effects(d, u, np.zeros((6, 3)))


# ---- outcomes that part of a cohort lacks --------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("period", "associated", "mechanic"),
    [
        (toys.toy_1, toys.TOY_1_ASSOCIATION, toys.TOY_1_MECHANISM),
        (toys.toy_2, toys.TOY_2_ASSOCIATION, toys.TOY_2_MECHANISM),
    ],
)
def test_association_and_mechanism_among_those_that_oscillate(period, associated, mechanic) -> None:  # type: ignore[no-untyped-def]
    rng = np.random.default_rng(21)
    x = toys.toy_rows(200_000, rng)
    x = x[toys.toy_has(x)]
    y = period(x)
    for j in range(5):
        assert association(x[:, j], y).value == pytest.approx(associated[j], abs=0.01)
        assert mechanism(y, period(toys.redrawn(x, j, rng))).value == pytest.approx(mechanic[j], abs=0.012)


def test_what_imputation_would_say_is_wrong_and_what_we_say_is_not() -> None:
    """The toy's first input decides whether there is a period, never how long it is; filling gaps with the mean or with 0
    makes it look decisive."""
    rng = np.random.default_rng(3)
    x = toys.toy_rows(4000, rng)
    has = toys.toy_has(x)
    gaps = np.where(has, toys.toy_1(x), 0.0)
    assert association(x[:, 0], gaps).value > 0.3
    inside = x[has]
    assert mechanism(toys.toy_1(inside), toys.toy_1(toys.redrawn(inside, 0, rng))).value == 0.0


def test_fair_shares_of_the_toy_and_their_floor() -> None:
    rng = np.random.default_rng(5)
    x = toys.toy_rows(2600, rng)
    x = x[toys.toy_has(x)]
    found = shares(x, toys.toy_1(x), [(j,) for j in range(5)], rng.standard_normal(len(x)))
    for share, truth in zip(found.shapley, toys.TOY_1_FAIR, strict=True):
        assert share.value == pytest.approx(truth, abs=0.025)
    assert sum(s.value for s in found.shapley) + found.dummy.value == pytest.approx(1.0, abs=1e-9)
    assert abs(found.dummy.value) < 0.02


def test_shapley_effects_and_total_indices_of_correlated_inputs() -> None:
    rng = np.random.default_rng(8)
    z, y = toys.linear_gaussian(2048, rng)
    found = shares(z, y, [(0,), (1,), (2,)], rng.standard_normal(len(z)))
    for share, truth in zip(found.shapley, toys.GAUSSIAN_SHAPLEY, strict=True):
        assert share.value == pytest.approx(truth, abs=0.02)
    for total, truth in zip(found.total, toys.GAUSSIAN_T, strict=True):
        assert total.value == pytest.approx(truth, abs=0.02)
    for j, truth in enumerate(toys.GAUSSIAN_S1):
        assert association(z[:, j], y).value == pytest.approx(truth, abs=0.03)
    both = shares(z, y, [(0,), (1, 2)], rng.standard_normal(len(z)))
    assert both.shapley[1].value == pytest.approx(0.896, abs=0.02)  # Owen & Prieur 2017: {x2, x3} together


def test_the_floor_is_what_a_shuffled_dummy_reaches() -> None:
    rng = np.random.default_rng(4)
    y = rng.standard_normal(800)
    floor = association_floor(y, rng)
    reached = [association(rng.random(800), y).value for _ in range(400)]
    assert 0.01 <= np.mean(np.array(reached) > floor) <= 0.11


# ---- designs and stopping ------------------------------------------------------------------------------------------


@given(st.integers(1, 5), st.integers(0, 4), st.integers(2, 4), st.booleans(), st.data())
@settings(max_examples=40)
def test_any_range_of_rows_is_the_same_rows(d: int, doubling: int, replicates: int, second: bool, data) -> None:  # type: ignore[no-untyped-def]
    found = toys.design(d, 1, replicates, second)
    n = row_count(found, doubling)
    whole = design_rows(found, doubling, 0, n)
    start = data.draw(st.integers(0, n))
    stop = data.draw(st.integers(start, n))
    part = design_rows(found, doubling, start, stop)
    assert np.array_equal(part.u, whole.u[start:stop]) and np.array_equal(part.position, whole.position[start:stop])
    replicate, block, position = design_keys(found, doubling, 0, n)
    assert np.array_equal(block, whole.block) and np.array_equal(replicate, whole.replicate)
    assert position.min() == first_point(doubling) and position.max() == points(doubling) - 1
    assert ((whole.u > 0.0) & (whole.u < 1.0)).all()


def test_a_base_is_a_power_of_two() -> None:
    assert [doubling_of(16), doubling_of(256), doubling_of(1024)] == [0, 4, 6]
    with pytest.raises(ValueError, match="power of two"):
        doubling_of(1000)


def test_redraws_change_one_factor_alone_and_anew_each_time() -> None:
    d = toys.design(3, 2)
    positions = np.array([3, 40, 1999])
    base = plain_rows(d, 0, 2048)[positions]
    first, second = (redrawn_rows(d, d.factors[1], k, positions) for k in (1, 2))
    assert np.array_equal(first[:, [0, 2]], base[:, [0, 2]])
    assert (first[:, 1] != base[:, 1]).all() and (first[:, 1] != second[:, 1]).all()


def test_stopping_asks_for_widths_and_for_the_order_above_the_tolerance() -> None:
    y = toys.run(toys.design(8, 3), toys.sobol_g, 5)
    few, many = indices(y[:, :, :16], False), indices(y, False)
    assert not settled(few, 0.05).done and settled(many, 0.05).done
    assert settled(many, 1e-4).widest > 1e-4


def test_equal_factors_do_not_keep_a_ranking_from_ending() -> None:
    y = toys.run(toys.design(2, 3), lambda u: u[..., 0] + u[..., 1], 6)
    state = settled(indices(y, False), 0.05)
    assert state.done  # equal within the tolerance, though never in order


def test_student_quantile_and_replicate_interval() -> None:
    assert t_quantile(7) == pytest.approx(2.364624251592785)  # tables of Student's t
    found = Estimate.of_replicates([1.0, 2.0, 3.0], 30)
    assert found.value == 2.0 and found.half_width == pytest.approx(4.302652729911275 / np.sqrt(3.0))


def test_a_missing_output_never_becomes_an_index_of_zero() -> None:
    y = toys.run(toys.design(3, 1), toys.ishigami, 4)
    y[0, 3, 7] = np.nan
    with pytest.raises(ValueError, match="missing"):
        indices(y, False)
    assert Outcome("why").effects is None


def test_a_constant_output_is_no_ranking() -> None:
    y = np.full((2, 5, 32), 4.2)
    with pytest.raises(ValueError, match="vary"):
        indices(y, False)
