"""Laws, copula, strata, sizes, designs and seeds against SciPy and by hand."""

import math
import time
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import special, stats
from scipy.stats import qmc

from cohort.measure.outcomes import outcomes
from cohort.model.catalogue import MODELS
from cohort.model.protocol import Arm, Constant, Meal
from cohort.population import Recipe, Stratum, draw, population_draw
from cohort.population.copula import is_possible, latent, latent_matrix, nearest_correlation
from cohort.population.designs import sobol_points, sobol_uniforms, stratified_uniforms
from cohort.population.functions import beta_cdf, exp, log, log_gamma, normal_cdf, normal_quantile, power
from cohort.population.laws import (
    Beta,
    Empirical,
    Fixed,
    Lognormal,
    Loguniform,
    Normal,
    Triangular,
    Uniform,
    cut,
)
from cohort.population.recipe import Correlation, Outer, Table
from cohort.population.uniforms import uniforms

CARD = MODELS["hepatic-lag"]
EVEN = (np.arange(4000) + 0.5) / 4000


def recipe(laws: dict, **changes) -> Recipe:  # type: ignore[no-untyped-def,type-arg]
    base = Recipe(41, 4096, "random", CARD.parameters, CARD.nominal, (Stratum("all", 1.0, laws),))
    return replace(base, **changes)


def column(made, name: str, r: Recipe) -> np.ndarray:  # type: ignore[no-untyped-def]
    return made.values[:, r.names.index(name)]


# ---- functions ---------------------------------------------------------------------------------------------------


@given(st.floats(-690, 690))
def test_exp_and_log_are_the_c_librarys_to_two_units(x: float) -> None:
    assert float(exp(x)) == pytest.approx(np.exp(x), rel=5e-16)
    assert float(log(exp(x))) == pytest.approx(x, rel=1e-15, abs=3e-16)


def test_normal_and_beta_laws_against_scipy() -> None:
    u = np.concatenate([EVEN, 10.0 ** -np.arange(2, 17), 1 - 10.0 ** -np.arange(2, 16)])
    np.testing.assert_allclose(normal_quantile(u), special.ndtri(u), rtol=2e-15)
    z = np.linspace(-36, 8, 3001)
    np.testing.assert_allclose(normal_cdf(z), special.ndtr(z), rtol=5e-13)
    x = np.linspace(0, 1, 501)
    for a, b in ((0.5, 0.5), (2, 3), (10, 40), (1, 1), (200, 300)):
        np.testing.assert_allclose(beta_cdf(x, a, b), special.betainc(a, b, x), atol=2e-13)
    assert log_gamma(0.3) == pytest.approx(special.gammaln(0.3), rel=1e-14)


def test_functions_outside_their_domain() -> None:
    assert np.isnan(log(-1.0)) and log(0.0) == -np.inf and log(np.inf) == np.inf
    assert normal_cdf(np.inf) == 1.0 and normal_cdf(-np.inf) < 1e-290
    assert power(3.0, 0.0) == 1.0 and power(3.0, 1.0) == 3.0
    assert float(power(2.0, 0.75)) == pytest.approx(2**0.75, rel=1e-15)


# ---- laws --------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("law", "theirs"),
    [
        (Lognormal(36.0, 0.2), stats.lognorm(np.sqrt(np.log(1.04)), scale=36.0)),
        (Normal(6.0, 1.0), stats.norm(6.0, 1.0)),
        (Uniform(0.15, 0.25), stats.uniform(0.15, 0.1)),
        (Loguniform(2.0, 50.0), stats.loguniform(2.0, 50.0)),
        (Triangular(1.0, 2.0, 5.0), stats.triang(0.25, loc=1.0, scale=4.0)),
        (Beta(10.0, 30.0, 2.0, 3.5), stats.beta(2.0, 3.5, loc=10.0, scale=20.0)),
        (Beta(0.0, 1.0, 0.4, 6.0), stats.beta(0.4, 6.0)),
        (Beta(0.0, 1.0, 150.0, 90.0), stats.beta(150.0, 90.0)),
        (Beta(0.0, 1.0, 1.0, 1.0), stats.uniform()),
        (Beta(0.0, 1.0, 3000.0, 0.5), stats.beta(3000.0, 0.5)),
    ],
)
def test_quantiles_and_distribution_functions_against_scipy(law, theirs) -> None:  # type: ignore[no-untyped-def]
    np.testing.assert_allclose(law.quantile(EVEN), theirs.ppf(EVEN), rtol=2e-11)
    inside = theirs.ppf(EVEN)
    np.testing.assert_allclose(law.cdf(inside), EVEN, atol=5e-12)


def test_lognormal_moments_are_the_stated_ones() -> None:
    made = Lognormal(210.0, 0.3).quantile((np.arange(2_000_00) + 0.5) / 2_000_00)
    assert np.median(made) == pytest.approx(210.0, rel=1e-4)
    assert made.std() / made.mean() == pytest.approx(0.3, rel=2e-3)
    assert made.mean() == pytest.approx(210.0 * np.sqrt(1.09), rel=1e-4)  # mean = median sqrt(1 + cv^2)


@settings(max_examples=15, deadline=None)
@given(st.floats(0.15, 300.0), st.floats(0.15, 300.0))
def test_beta_quantiles_of_any_shape(a: float, b: float) -> None:
    u = np.concatenate([EVEN[::40], 10.0 ** -np.arange(2.0, 12.0), 1.0 - 10.0 ** -np.arange(2.0, 12.0)])
    found = Beta(0.0, 1.0, a, b).quantile(u)
    np.testing.assert_allclose(found, special.betaincinv(a, b, u), atol=2e-12, rtol=1e-10)
    assert (np.diff(found[np.argsort(u)]) >= 0.0).all()


def test_empirical_law_gives_the_values_seen_in_equal_shares() -> None:
    law = Empirical((1.0, 2.0, 2.0, 7.0))
    assert law.quantile(np.array([0.01, 0.25, 0.26, 0.75, 0.76, 0.99])).tolist() == [1, 1, 2, 2, 7, 7]
    assert law.cdf([0.5, 1.0, 2.0, 8.0]).tolist() == [0.0, 0.25, 0.75, 1.0]


@given(st.floats(0.05, 0.9), st.floats(0.02, 0.6), st.floats(0.0, 1.0))
def test_a_cut_law_is_the_conditional_law(low_share: float, width: float, u: float) -> None:
    law = Lognormal(100.0, 0.4)
    theirs = stats.lognorm(law.sigma, scale=100.0)
    low, high = theirs.ppf(low_share), theirs.ppf(min(low_share + width, 0.999))
    inner, mass = cut(law, low, high)
    kept = theirs.cdf(high) - theirs.cdf(low)
    assert mass == pytest.approx(1 - kept, abs=1e-12)
    expected = theirs.ppf(theirs.cdf(low) + u * kept)
    found = float(inner.quantile(np.array([u]))[0])
    assert low <= found <= high
    assert found == pytest.approx(expected, rel=1e-9)


def test_a_users_own_cut_is_not_counted_as_cut_mass() -> None:
    _, mass = cut(Normal(6.0, 1.0, low=2.0), 0.1, 300.0)
    assert mass == 0.0
    _, mass = cut(Normal(6.0, 1.0), 6.0, 300.0)
    assert mass == pytest.approx(0.5)
    assert cut(Fixed(5.0), 6.0, 9.0)[1] == 1.0


# ---- people ------------------------------------------------------------------------------------------------------


LAWS = {
    "td": Lognormal(36.0, 0.2),
    "tp": Normal(6.0, 1.0, low=2.0),
    "E": Uniform(0.15, 0.25),
    "Rm": Lognormal(210.0, 0.3),
    "C4": Lognormal(80.0, 0.3),
    "C2": Beta(100.0, 200.0, 2.0, 3.0),
    "Vg": Fixed(11.0),
}


@settings(max_examples=25)
@given(st.sampled_from(["random", "latin-hypercube", "sobol"]), st.integers(0, 4095), st.integers(1, 1500))
def test_any_range_of_subjects_gives_the_same_people(design: str, start: int, n: int) -> None:
    r = recipe(
        LAWS,
        draw=design,
        strata=(
            Stratum("a", 0.6, LAWS, Lognormal(74.0, 0.18), (Correlation(("Rm", "C4"), 0.4),)),
            Stratum("b", 0.4, LAWS | {"C4": Lognormal(110.0, 0.3)}, Lognormal(90.0, 0.2)),
        ),
        scaling="allometric",
    )
    stop = min(start + n, 4096)
    whole, part = draw(r, 0, 4096), draw(r, start, stop)
    np.testing.assert_array_equal(part.values, whole.values[start:stop])
    np.testing.assert_array_equal(part.stratum, whole.stratum[start:stop])
    np.testing.assert_array_equal(part.body_weight_kg, whole.body_weight_kg[start:stop])
    np.testing.assert_array_equal(part.subject, np.arange(start, stop))


def test_a_subject_of_a_random_draw_knows_nothing_of_the_count_or_of_other_parameters() -> None:
    few, many = recipe(LAWS, count=100), recipe(LAWS | {"alpha": Uniform(0.2, 0.4)}, count=5000)
    a, b = draw(few, 0, 100), draw(many, 0, 5000)
    for name in LAWS:
        np.testing.assert_array_equal(column(a, name, few), column(b, name, many)[:100])


def test_seeds_and_names_give_independent_uniforms() -> None:
    a = uniforms(1, "parameter", "td", 0, 20000)
    for other in (uniforms(2, "parameter", "td", 0, 20000), uniforms(1, "parameter", "tp", 0, 20000)):
        assert abs(np.corrcoef(a, other)[0, 1]) < 4 / np.sqrt(20000)
    assert stats.kstest(a, "uniform").pvalue > 1e-3
    assert a.min() > 0.0 and a.max() < 1.0
    wide = uniforms(1, "noise", "x", 5, 9, width=7)
    np.testing.assert_array_equal(wide, uniforms(1, "noise", "x", 0, 2000, width=7)[5:9])


def test_ranks_correlate_as_asked_and_margins_stay() -> None:
    strata = (Stratum("all", 1.0, LAWS, None, (Correlation(("Rm", "C4"), 0.4), Correlation(("C4", "td"), -0.3))),)
    r = recipe(LAWS, strata=strata, count=40000)
    made = draw(r, 0, 40000)
    ranks = stats.spearmanr(np.column_stack([column(made, p, r) for p in ("Rm", "C4", "td")])).statistic
    np.testing.assert_allclose(ranks[np.triu_indices(3, 1)], [0.4, 0.0, -0.3], atol=0.02)
    assert stats.kstest(column(made, "C4", r), stats.lognorm(LAWS["C4"].sigma, scale=80.0).cdf).pvalue > 1e-3


def test_latent_correlation_values() -> None:
    # exact: 2 sin(pi rho / 6)
    np.testing.assert_allclose([latent(r) for r in (0.3, 0.6, 0.9)], [0.3129, 0.6180, 0.9080], atol=5e-5)
    for rho in np.linspace(-1.0, 1.0, 201):
        assert latent(rho) == pytest.approx(2.0 * math.sin(math.pi * rho / 6.0), abs=4e-16)


def test_an_impossible_matrix_is_known_and_the_nearest_one_found() -> None:
    # Higham, IMA J Numer Anal 2002;22:329-343: off-diagonals .7607 and .1573, distance .5278
    matrix = np.array([[1.0, 1.0, 0.0], [1.0, 1.0, 1.0], [0.0, 1.0, 1.0]])
    assert not is_possible(matrix)
    near, change = nearest_correlation(matrix)
    np.testing.assert_allclose([near[0, 1], near[0, 2]], [0.7607, 0.1573], atol=5e-5)
    assert np.linalg.norm(near - matrix) == pytest.approx(0.5278, abs=5e-5)
    assert change == pytest.approx(0.2393, abs=5e-5)
    assert is_possible(latent_matrix(["a", "b"], [(("a", "b"), 0.5)]))


def test_strata_have_their_shares_and_their_own_laws() -> None:
    strata = (Stratum("usual", 0.75, LAWS), Stratum("reduced", 0.25, LAWS | {"C4": Lognormal(110.0, 0.3)}))
    r = recipe(LAWS, strata=strata, count=20000)
    made = draw(r, 0, 20000)
    assert (made.stratum == 1).mean() == pytest.approx(0.25, abs=4 * np.sqrt(0.25 * 0.75 / 20000))
    for code, median in ((0, 80.0), (1, 110.0)):
        assert np.median(column(made, "C4", r)[made.stratum == code]) == pytest.approx(median, rel=0.02)


@pytest.mark.parametrize(
    ("scaling", "expected"),
    [
        # by hand at 105 kg: (105/70)^b
        ("none", {"Vg": 10.0, "E": 0.2, "td": 36.0}),
        ("per-kg", {"Vg": 15.0, "E": 0.2 * 1.5, "td": 36.0}),
        ("allometric", {"Vg": 15.0, "E": 0.2 * 1.5**0.75, "td": 36.0 * 1.5**0.25}),
    ],
)
def test_body_size(scaling: str, expected: dict[str, float]) -> None:
    r = recipe({}, strata=(Stratum("all", 1.0, {}, Fixed(105.0)),), scaling=scaling)
    made = draw(r, 0, 5)
    assert (made.body_weight_kg == 105.0).all()
    for name, number in expected.items():
        np.testing.assert_allclose(column(made, name, r), number, rtol=1e-14)
    assert ("Vg" in r.varied) == (scaling != "none")


def test_most_use_stays_above_least_use() -> None:
    laws = {"U0": Lognormal(40.0, 0.5), "Um": Lognormal(60.0, 0.5)}
    r = recipe(laws, count=20000)
    made = draw(r, 0, 20000)
    assert (column(made, "Um", r) > column(made, "U0", r)).all()


@settings(max_examples=40, deadline=None)
@given(st.sampled_from([None, Fixed(300.0), Uniform(50.0, 60.0), Beta(45.0, 90.0, 0.5, 2.0), Empirical((50.0, 70.0))]),
       st.sampled_from([Lognormal(40.0, 0.5), Uniform(30.0, 80.0), Empirical((30.0, 50.0, 69.0))]),
       st.sampled_from([0.0, 0.9, -0.9]))  # fmt: skip
def test_most_use_stays_above_least_use_whatever_the_laws(most, least, rho: float) -> None:  # type: ignore[no-untyped-def]
    laws = {"U0": least} | ({"Um": most} if most else {})
    tied = (Correlation(("U0", "Um"), rho),) if rho and most and not isinstance(most, Fixed) else ()
    r = recipe(laws, strata=(Stratum("all", 1.0, laws, None, tied),), count=3000)
    made = draw(r, 0, 3000)
    assert (column(made, "Um", r) > column(made, "U0", r)).all()
    if most and not isinstance(most, Fixed):
        assert most.low <= column(made, "Um", r).min() and column(made, "Um", r).max() <= most.high


@pytest.mark.parametrize("rho", [0.0, 0.5, -0.5])
def test_the_share_that_order_cuts_off(rho: float) -> None:
    # exact: ln Um - ln U0 is normal with variance 2 s^2 (1 - r), r the latent correlation
    laws = {"U0": Lognormal(40.0, 0.5), "Um": Lognormal(60.0, 0.5)}
    tied = (Correlation(("Um", "U0"), rho),) if rho else ()
    r = recipe(laws, strata=(Stratum("all", 1.0, laws, None, tied),))
    spread = laws["U0"].sigma * np.sqrt(2.0 - 2.0 * latent(rho))
    assert r.order_cut(r.strata[0]) == pytest.approx(stats.norm.cdf(np.log(40.0 / 60.0) / spread), rel=2e-6)


def test_the_share_that_order_cuts_off_beside_fixed_values() -> None:
    def share(laws) -> float:  # type: ignore[no-untyped-def]
        r = recipe(laws)
        return r.order_cut(r.strata[0])

    assert share({}) == 0.0 and share({"U0": Fixed(940.0)}) == 1.0
    assert share({"Um": Uniform(10.0, 110.0)}) == pytest.approx(0.3)  # below the published U0, 40
    assert share({"U0": Uniform(840.0, 1040.0)}) == pytest.approx(0.5, abs=1e-3)  # above the published Um, 940
    steady = MODELS["steady-liver"]
    r = Recipe(
        1, 8, "random", tuple(p for p in steady.parameters if p != "Um"), steady.nominal, (Stratum("a", 1.0, {}),)
    )
    assert r.order_cut(r.strata[0]) == 0.0


def test_latin_hypercube_has_one_subject_in_every_cell() -> None:
    u = stratified_uniforms(3, "td", 512, 0, 512)
    assert sorted((u * 512).astype(int)) == list(range(512))
    both = np.column_stack([u, stratified_uniforms(3, "tp", 512, 0, 512)])
    assert qmc.discrepancy(both) < 0.2 * qmc.discrepancy(np.random.default_rng(0).random((512, 2)))


def test_sobol_people_are_eight_scrambles_of_scipys_sequence() -> None:
    names = ("td", "tp", "E")
    u = sobol_uniforms(3, names, 0, 1024)
    table = np.column_stack([u[n] for n in names])
    for scramble in range(8):
        mine = table[scramble::8]
        np.testing.assert_array_equal(mine, sobol_points(3, names, scramble, 0, 128))
        assert sorted((mine[:, 0] * 128).astype(int)) == list(range(128))  # a net: one point in each interval
    assert qmc.discrepancy(table) < 0.1 * qmc.discrepancy(np.random.default_rng(0).random((1024, 3)))


def test_a_table_is_used_as_given() -> None:
    columns = {"td": np.array([20.0, 30.0]), "meal_absorption": np.array([40.0, 50.0])}
    table = Table(columns, np.zeros(2, np.int16), np.array([80.0, 60.0]))
    r = recipe({"Vg": Fixed(12.0)}, table=table, count=2, scaling="per-kg")
    made = draw(r, 0, 2)
    assert column(made, "td", r).tolist() == [20.0, 30.0]
    assert column(made, "meal_absorption", r).tolist() == [40.0, 50.0]
    assert column(made, "Vg", r).tolist() == [12.0, 12.0]
    assert column(made, "Rm", r).tolist() == [210.0, 210.0]
    assert r.varied == ("td", "meal_absorption")


def test_population_draws_move_medians_and_spreads_and_keep_the_uniforms() -> None:
    law = Lognormal(210.0, 0.3, median_rse=0.05, cv_rse=0.2)
    r = recipe({"Rm": law}, population=Outer(400, 256))
    assert population_draw(r, 0).strata == r.strata
    assert population_draw(r, 0).count == 256
    drawn = [population_draw(r, k).strata[0].laws["Rm"] for k in range(1, 401)]
    medians, cvs = np.array([d.median for d in drawn]), np.array([d.cv for d in drawn])
    assert np.median(medians) == pytest.approx(210.0, rel=0.01)
    assert np.log(medians).std() == pytest.approx(0.05, rel=0.12)
    assert np.log(cvs).std() == pytest.approx(np.sqrt(np.log(1.04)), rel=0.12)
    normal = population_draw(recipe({"tp": Normal(6.0, 1.0, mean_rse=0.1, cv_rse=0.1)}, population=Outer(2, 8)), 1)
    assert normal.strata[0].laws["tp"] != Normal(6.0, 1.0)
    u = normal_cdf(np.log(column(draw(population_draw(r, 1), 0, 256), "Rm", r) / medians[0]) / drawn[0].sigma)
    np.testing.assert_allclose(u, uniforms(41, "parameter", "Rm", 0, 256), atol=1e-9)


def test_strata_that_share_a_law_share_its_draw_and_weights_are_drawn_too() -> None:
    shared, own = Lognormal(210.0, 0.3, median_rse=0.05), Lognormal(80.0, 0.3, median_rse=0.05)
    heavy = Lognormal(74.0, 0.2, median_rse=0.05)
    strata = (
        Stratum("usual", 0.75, {"Rm": shared, "C4": own}, heavy),
        Stratum("reduced", 0.25, {"Rm": shared, "C4": replace(own, median=110.0)}, heavy),
    )
    r = recipe({}, strata=strata, population=Outer(50, 16))
    drawn = [population_draw(r, k).strata for k in range(1, 51)]
    assert all(a.laws["Rm"] == b.laws["Rm"] and a.weight == b.weight for a, b in drawn)
    moved = np.log(
        [[a.laws["C4"].median / 80.0, b.laws["C4"].median / 110.0, a.weight.median / 74.0] for a, b in drawn]
    )
    np.testing.assert_allclose(moved.std(axis=0), 0.05, rtol=0.35)
    assert np.abs(np.corrcoef(moved.T)[np.triu_indices(3, 1)]).max() < 4 / np.sqrt(50)


def test_twenty_parameters_of_a_subject_take_less_than_a_microsecond_each() -> None:
    kinds = (lambda v: Lognormal(v, 0.15), lambda v: Normal(v, 0.1 * v), lambda v: Beta(0.5 * v, 2.0 * v, 2.0, 3.5))
    laws = {p: kinds[i % 3](v) for i, (p, v) in enumerate(CARD.nominal.items())}
    for design in ("random", "latin-hypercube", "sobol"):
        r = recipe(laws, draw=design, count=1 << 17)
        draw(r, 0, 16384)
        took = []
        for start in range(0, 5 * 16384, 16384):
            begun = time.perf_counter()
            draw(r, start, start + 16384)
            took.append(time.perf_counter() - begun)
        assert min(took) < 1e-6 * 16384 * len(laws)


def test_size_scaling_and_infusion_per_kg_leave_concentrations_alone() -> None:
    """Under per-kg scaling and rates per kg a heavy body is the light one with every amount larger (exact)."""
    arm = Arm("i", 1440.0, glucose=(Constant(3.0, per_kg=True), Meal(300.0, 800.0, 40.0, per_kg=True)), steady=3.0,
              steady_per_kg=True)  # fmt: skip
    found = []
    for kg in (70.0, 105.0):
        r = recipe({}, strata=(Stratum("all", 1.0, {}, Fixed(kg)),), scaling="per-kg", count=1)
        made = draw(r, 0, 1)
        found.append(outcomes("hepatic-lag", made.values, made.body_weight_kg, arm).outcomes)
    for name in ("period_min", "glucose_amplitude_mg_dl", "glucose_peak_mg_dl", "insulin_mean_mu_l", "iauc_mg_dl_min"):
        np.testing.assert_allclose(found[0][name], found[1][name], rtol=2e-7)
