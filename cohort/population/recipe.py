"""How virtual people are made: from seed and laws to every subject's parameters, the same for any range of subjects."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from cohort.population.copula import latent, latent_factor
from cohort.population.designs import sobol_uniforms, stratified_uniforms
from cohort.population.functions import exp, log, normal_cdf, normal_quantile, power
from cohort.population.laws import Cut, Fixed, Law, Lognormal, Normal, cut
from cohort.population.uniforms import generator, uniforms
from cohort.quantities import INPUT_PARAMETERS, PARAMETERS, REFERENCE_WEIGHT_KG

Array = NDArray[np.float64]

WEIGHT = "weight"
STRATUM = "stratum"
WEIGHT_RANGE_KG = (2.0, 400.0)

EXPONENTS: dict[str, dict[str, float]] = {
    "none": {},
    "per-kg": dict.fromkeys(("Vp", "Vi", "Vg", "E", "Rm", "Ub", "U0", "Um", "Rg"), 1.0),
    "allometric": dict.fromkeys(("Vp", "Vi", "Vg"), 1.0)
    | dict.fromkeys(("E", "Rm", "Ub", "U0", "Um", "Rg"), 0.75)
    | dict.fromkeys(("tp", "ti", "td"), 0.25),
}
"""Powers of weight / 70 kg by scaling rule. Flows 0.75, volumes 1, times 0.25: Anderson & Holford, from memory."""


@dataclass(frozen=True)
class Correlation:
    """Spearman's rank correlation of two varied parameters."""

    pair: tuple[str, str]
    spearman: float


@dataclass(frozen=True)
class Stratum:
    """A subgroup: its share of the people, its laws by parameter (Fixed ones too), weight (kg) and correlations."""

    name: str
    share: float
    laws: Mapping[str, Law]
    weight: Law | None = None
    correlations: tuple[Correlation, ...] = ()


@dataclass(frozen=True)
class Table:
    """Subjects as given: columns by name, float64[n]; what a column lacks comes from the first stratum's laws."""

    columns: Mapping[str, Array]
    stratum: NDArray[np.int16]
    body_weight_kg: Array
    person: NDArray[np.int64] | None = None
    id: tuple[str, ...] | None = None


@dataclass(frozen=True)
class Outer:
    """Draws of the population itself: `outer` of them, `inner` subjects in each."""

    outer: int
    inner: int


@dataclass(frozen=True)
class Recipe:
    """Everything subjects depend on.

    parameters: the model's, in canonical order; nominal: their published values; strata: at least one, shares adding
    to 1; scaling: a key of EXPONENTS; draw: random, latin-hypercube or sobol.
    """

    seed: int
    count: int
    draw: str
    parameters: tuple[str, ...]
    nominal: Mapping[str, float]
    strata: tuple[Stratum, ...]
    scaling: str = "none"
    table: Table | None = None
    population: Outer | None = None
    ranges: Mapping[str, tuple[float, float]] = field(default_factory=dict)

    @property
    def stratum_names(self) -> tuple[str, ...]:
        return tuple(s.name for s in self.strata)

    @property
    def names(self) -> tuple[str, ...]:
        """Columns of `Subjects.values`: the model's parameters, then the inputs' own."""
        return (*self.parameters, *INPUT_PARAMETERS)

    @cached_property
    def drawn(self) -> tuple[str, ...]:
        """Parameters (and `weight`) that follow a law in some stratum, in canonical order: a design's dimensions."""
        spread = {p for s in self.strata for p, law in s.laws.items() if not isinstance(law, Fixed)}
        weighed = any(s.weight is not None and not isinstance(s.weight, Fixed) for s in self.strata)
        return (*(p for p in self.names if p in spread), *((WEIGHT,) if weighed else ()))

    @cached_property
    def varied(self) -> tuple[str, ...]:
        """Parameters whose value is not the same for everyone, in canonical order: the columns of subjects/."""
        if self.table is not None:
            return tuple(p for p in self.names if p in self.table.columns)
        sized = any(s.weight is not None for s in self.strata) and self.scaling != "none"
        scaled = set(EXPONENTS[self.scaling]) if sized else set()
        fixed = [{p: law.value for p, law in s.laws.items() if isinstance(law, Fixed)} for s in self.strata]
        unequal = {p for values in fixed for p in values if any(other.get(p) != values[p] for other in fixed)}
        return tuple(p for p in self.names if p in scaled or p in unequal or p in self.drawn)

    def range_of(self, name: str) -> tuple[float, float]:
        """The physical range of a parameter or of weight."""
        if name in self.ranges:
            return self.ranges[name]
        if name == WEIGHT:
            return WEIGHT_RANGE_KG
        quantity = PARAMETERS.get(name) or INPUT_PARAMETERS[name]
        return quantity.low, quantity.high

    def cut_law(self, stratum: Stratum, name: str) -> tuple[Cut, float]:
        """A stratum's law of a parameter within its physical range, and the mass that cuts off."""
        law = stratum.weight if name == WEIGHT else stratum.laws.get(name)
        assert law is not None
        low, high = self.range_of(name)
        if name == "U0" and "Um" in self.names:
            high = min(high, float(np.nextafter(self._within_range(stratum, "Um").high, 0.0)))
        return cut(law, low, high)

    def order_cut(self, stratum: Stratum) -> float:
        """The share of a stratum's people with Um <= U0, were the two drawn within their physical ranges alone.

        It is what keeping Um > U0 cuts off: U0's law at the highest Um, then Um's law at the subject's U0.
        """
        if not {"U0", "Um"} <= set(self.names):
            return 0.0
        least, most = self._within_range(stratum, "U0"), self._within_range(stratum, "Um")
        score = np.arange(-8.25, 8.25, 1.0 / 512.0)
        weight = exp(-0.5 * score * score)
        share = most.share(least.quantile(normal_cdf(score)))
        r = next((latent(c.spearman) for c in stratum.correlations if set(c.pair) == {"U0", "Um"}), 0.0)
        if r:
            inner = normal_quantile(np.clip(share, 2.0**-60, 1.0 - 2.0**-53))
            share = normal_cdf((inner - r * score) / np.sqrt(max(1.0 - r * r, 1e-12)))
        return float(np.sum(weight * share) / np.sum(weight))

    def _within_range(self, stratum: Stratum, name: str) -> Cut:
        return cut(stratum.laws.get(name, Fixed(self.nominal[name])), *self.range_of(name))[0]


@dataclass(frozen=True)
class Subjects:
    """n subjects: subject int64[n]; stratum int16[n], codes into recipe.stratum_names; body_weight_kg float64[n], NaN
    without sizes; values float64[n, len(recipe.names)], as integrated, NaN where a meal parameter is the arm's."""

    subject: NDArray[np.int64]
    stratum: NDArray[np.int16]
    body_weight_kg: Array
    values: Array


def draw(recipe: Recipe, start: int, stop: int) -> Subjects:
    """Make subjects start..stop-1."""
    subject = np.arange(start, stop, dtype=np.int64)
    if recipe.table is not None:
        return _from_table(recipe, recipe.table, subject)
    wanted = (*recipe.drawn, *((STRATUM,) if len(recipe.strata) > 1 else ()))
    u = _uniforms(recipe, wanted, start, stop)
    stratum = np.zeros(len(subject), np.int16)
    if len(recipe.strata) > 1:
        edges = np.cumsum([s.share for s in recipe.strata])[:-1]
        stratum = np.searchsorted(edges, u[STRATUM], side="right").astype(np.int16)
    weight, values = np.full(len(subject), np.nan), np.empty((len(subject), len(recipe.names)))
    for code in range(len(recipe.strata)):
        rows = stratum == code
        some = {name: column[rows] for name, column in u.items()}
        values[rows], weight[rows] = from_uniforms(recipe, code, some, int(rows.sum()))
    return Subjects(subject, stratum, weight, values)


def _uniforms(recipe: Recipe, names: tuple[str, ...], start: int, stop: int) -> dict[str, Array]:
    if recipe.draw == "sobol":
        return sobol_uniforms(recipe.seed, names, start, stop)
    if recipe.draw == "latin-hypercube":
        return {name: stratified_uniforms(recipe.seed, name, recipe.count, start, stop) for name in names}
    return {
        name: uniforms(recipe.seed, *((STRATUM, "") if name == STRATUM else ("parameter", name)), start, stop)
        for name in names
    }


def from_uniforms(recipe: Recipe, code: int, u: Mapping[str, Array], n: int) -> tuple[Array, Array]:
    """Turn uniforms of one stratum's people into (values float64[n, names], body_weight_kg float64[n]).

    `u` holds a column for each of recipe.drawn; correlations of the stratum are laid over them.
    """
    stratum = recipe.strata[code]
    u = _correlated(recipe, stratum, u)
    weight = np.full(n, np.nan)
    if stratum.weight is not None:
        law, _ = recipe.cut_law(stratum, WEIGHT)
        weight = law.quantile(u[WEIGHT] if WEIGHT in u else np.full(n, 0.5))
    values = np.empty((n, len(recipe.names)))
    for i, name in enumerate(recipe.names):
        if name not in stratum.laws:
            values[:, i] = recipe.nominal.get(name, np.nan)
            continue
        law, _ = recipe.cut_law(stratum, name)
        least = values[:, recipe.names.index("U0")] if name == "Um" and "U0" in recipe.names else None
        least = None if least is None else np.nextafter(least, np.inf)
        values[:, i] = law.quantile(u[name] if name in u else np.full(n, 0.5), least)
    return _scaled(recipe, values, weight), weight


def _correlated(recipe: Recipe, stratum: Stratum, u: Mapping[str, Array]) -> dict[str, Array]:
    """Gaussian copula: uniforms whose normal scores have the stratum's latent correlations."""
    mixed = dict(u)
    if not stratum.correlations:
        return mixed
    tied = {name for c in stratum.correlations for name in c.pair}
    names = [name for name in recipe.drawn if name in tied]
    factor = latent_factor(names, [(c.pair, c.spearman) for c in stratum.correlations])
    scores = [normal_quantile(u[name]) for name in names]
    for i, name in enumerate(names):
        total = factor[i, 0] * scores[0]
        for j in range(1, i + 1):
            total = total + factor[i, j] * scores[j]
        mixed[name] = np.clip(normal_cdf(total), 2.0**-60, 1.0 - 2.0**-53)
    return mixed


def _scaled(recipe: Recipe, values: Array, weight: Array) -> Array:
    """Values at 70 kg times (W / 70)^b; fixed and published ones too."""
    if np.isnan(weight).all():
        return values
    size = weight / REFERENCE_WEIGHT_KG
    factors = {b: power(size, b) for b in set(EXPONENTS[recipe.scaling].values())}
    for name, b in EXPONENTS[recipe.scaling].items():
        if name in recipe.names:
            values[:, recipe.names.index(name)] *= factors[b]
    return values


def _from_table(recipe: Recipe, table: Table, subject: NDArray[np.int64]) -> Subjects:
    laws = recipe.strata[0].laws
    values = np.empty((len(subject), len(recipe.names)))
    for i, name in enumerate(recipe.names):
        if name in table.columns:
            values[:, i] = table.columns[name][subject]
        else:
            law = laws.get(name)
            values[:, i] = law.value if isinstance(law, Fixed) else recipe.nominal.get(name, np.nan)
    return Subjects(subject, table.stratum[subject], table.body_weight_kg[subject], values)


# ---- draws of the population -------------------------------------------------------------------------------------


def population_draw(recipe: Recipe, k: int) -> Recipe:
    """Return draw k of the population: medians (or means) and CVs times lognormals of their relative standard errors.

    Draw 0 is the stated population. The draw reuses the main cohort's uniforms; its count is `inner`. Strata with the
    same law of a parameter (most often one they all take from [subjects.parameters]) share its draw: it is one law.
    """
    assert recipe.population is not None
    strata = tuple(_drawn_stratum(recipe, k, s) for s in recipe.strata)
    return replace(recipe, strata=strata if k else recipe.strata, count=recipe.population.inner, population=None)


def _drawn_stratum(recipe: Recipe, k: int, stratum: Stratum) -> Stratum:
    laws = {}
    for name, law in stratum.laws.items():
        owner = next(s.name for s in recipe.strata if s.laws.get(name) == law)
        laws[name] = _drawn_law(recipe.seed, k, owner, name, law)
    if stratum.weight is None:
        return replace(stratum, laws=laws)
    owner = next(s.name for s in recipe.strata if s.weight == stratum.weight)
    return replace(stratum, laws=laws, weight=_drawn_law(recipe.seed, k, owner, WEIGHT, stratum.weight))


def _drawn_law(seed: int, k: int, stratum: str, name: str, law: Law) -> Law:
    if not isinstance(law, Lognormal | Normal):
        return law
    scores = normal_quantile(generator(seed, "population", stratum, name, str(k)).random(2) * (1 - 2.0**-50) + 2.0**-53)
    if isinstance(law, Lognormal):
        return replace(
            law, median=law.median * _factor(law.median_rse, scores[0]), cv=law.cv * _factor(law.cv_rse, scores[1])
        )
    mean = law.mean * _factor(law.mean_rse, scores[0])
    return replace(law, mean=mean, sd=law.sd * (mean / law.mean) * _factor(law.cv_rse, scores[1]))


def _factor(rse: float, score: float) -> float:
    return float(exp(np.sqrt(log(1.0 + rse * rse)) * score)) if rse else 1.0
