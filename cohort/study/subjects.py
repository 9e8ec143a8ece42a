"""[subjects]: from checked values to a population recipe."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from typing import Any

import numpy as np

from cohort.errors import StudyError, nearest
from cohort.model.catalogue import ModelCard
from cohort.population.copula import is_possible, latent_matrix, nearest_correlation
from cohort.population.laws import (
    Beta,
    Empirical,
    Fixed,
    Law,
    Lognormal,
    Loguniform,
    Normal,
    Triangular,
    Uniform,
    cut,
)
from cohort.population.recipe import WEIGHT, WEIGHT_RANGE_KG, Correlation, Outer, Recipe, Stratum
from cohort.quantities import INPUT_PARAMETERS, PARAMETERS
from cohort.study.files import Files
from cohort.study.tree import Quantity, Tree, dotted

CUT_SHOWN = 1e-6
CUT_REFUSED = 0.01
LAWS = ("lognormal", "normal", "uniform", "loguniform", "triangular", "beta", "empirical")
LARGEST_HYPERCUBE = 2**22
MOST_STRATA = 100
LONGEST_STRATUM = 60
MOST_BETA = 30
MOST_BETA_WORK = 200.0
"""Of all beta laws, sqrt(alpha + beta) added up: solving one takes up to 0.01 s times that."""
_MARKS = np.array([2.0**-40, 0.05, 0.5, 0.95, 1.0 - 2.0**-40])

_NEEDED = {
    "lognormal": ("median", "cv"),
    "normal": ("mean", "sd"),
    "uniform": ("low", "high"),
    "loguniform": ("low", "high"),
    "triangular": ("low", "mode", "high"),
    "beta": ("low", "high", "alpha", "beta"),
    "empirical": ("file", "column"),
}

Path = tuple[str | int, ...]


def recipe(tree: Tree, card: ModelCard, seed: int, files: Files) -> Recipe:
    """Build the recipe, noting every problem in `tree`; what is wrong is left out of it."""
    values = tree.values.get("subjects", {})
    _check_amount(tree, values)
    laws = _laws(tree, values.get("parameters", {}), ("subjects", "parameters"), card, files)
    size = values.get("size", {})
    weight = _weight(tree, size, ("subjects", "size"), files)
    pairs = _correlations(tree, values.get("correlations", []), ("subjects", "correlations"), card)
    strata = _strata(tree, values.get("strata", []), card, files, (laws, weight, pairs))
    scaling = size.get("scaling", "none")
    count, draw = _count(tree, values)
    table = None
    if "table" in values:
        table = files.subjects(tree, values["table"], card, tuple(s.name for s in strata))
        count = len(table.body_weight_kg) if table is not None else 1
    outer = _population(tree, values, strata, table)
    made = Recipe(seed, count, draw, card.parameters, card.nominal, strata, scaling, table, outer)
    _check_correlations(tree, made)
    _check_order(tree, made)
    if table is not None and (made.drawn or size):
        _table_alone(tree, values, made)
    return made


def _check_amount(tree: Tree, values: Mapping[str, Any]) -> None:
    """Raise StudyError where strata or laws are more than can be looked at in a second or two."""
    n = len(values.get("strata", []))
    shapes = set(_beta_shapes(values))
    work = sum(math.sqrt(a + b) for a, b in shapes)
    message = ""
    if n > MOST_STRATA:
        message = f"{n} strata; at most {MOST_STRATA} are allowed"
    elif len(shapes) > MOST_BETA or (work > MOST_BETA_WORK and len(shapes) > 1):
        message = (f"{len(shapes)} beta laws whose sqrt(alpha + beta) add to {work:.0f} take too long to solve; at most "
                   f"{MOST_BETA} laws and {MOST_BETA_WORK:g} are allowed")  # fmt: skip
    if message:
        raise StudyError([*tree.problems, tree.place(("subjects",), message)])


def _beta_shapes(values: Mapping[str, Any]) -> Iterator[tuple[float, float]]:
    blocks = [values, values.get("size", {}), *values.get("strata", [])]
    for law in (law for block in blocks for law in (*block.get("parameters", {}).values(), block.get("weight"))):
        shape = law.get("beta") if isinstance(law, dict) else None
        if isinstance(shape, dict) and "alpha" in shape and "beta" in shape:
            yield float(shape["alpha"]), float(shape["beta"])


def _count(tree: Tree, values: Mapping[str, Any]) -> tuple[int, str]:
    draw = values.get("draw", "random")
    if "table" in values:
        for key in ("count", "draw"):
            if key in values:
                tree.problem(("subjects", key), "not allowed beside table, which brings its own subjects")
        return 1, "random"
    if "count" not in values:
        if not any(p.key == "subjects.count" for p in tree.problems):
            tree.problem(("subjects",), "count is missing: how many subjects (or table, a file of them)")
        return 1, draw
    count = values["count"]
    if draw == "sobol" and (count < 16 or count & (count - 1)):
        lower = 1 << max(count.bit_length() - 1, 4)
        near = lower if count - lower < 2 * lower - count else 2 * lower
        tree.problem(("subjects", "count"), f"{count} is not allowed with draw = 'sobol'; a power of two from 16 on is "
                     f"wanted (nearest: {near})")  # fmt: skip
    if draw == "latin-hypercube" and count > LARGEST_HYPERCUBE:
        tree.problem(("subjects", "count"), f"{count:,} is not allowed with draw = 'latin-hypercube', which holds the "
                     f"whole design; at most {LARGEST_HYPERCUBE:,}, or draw = 'random'")  # fmt: skip
    return count, draw


def _population(tree: Tree, values: Mapping[str, Any], strata: tuple[Stratum, ...], table: object) -> Outer | None:
    if "population" not in values:
        return None
    path: Path = ("subjects", "population")
    if table is not None:
        tree.problem(path, "not allowed beside table, whose people are what they are")
        return None
    laws = [law for s in strata for law in (*s.laws.values(), s.weight)]
    if not any(isinstance(law, Lognormal | Normal) and _uncertain(law) for law in laws):
        tree.warnings.append(tree.place(path, "no law says how well it is known (median_rse, mean_rse, cv_rse): every draw "
                                        "is the same population"))  # fmt: skip
    found = values["population"]
    return Outer(found.get("outer", 200), found.get("inner", 256))


def _uncertain(law: Lognormal | Normal) -> bool:
    return bool(law.cv_rse or (law.median_rse if isinstance(law, Lognormal) else law.mean_rse))


def _table_alone(tree: Tree, values: Mapping[str, Any], made: Recipe) -> None:
    for name in made.drawn:
        if name != WEIGHT:
            tree.problem(("subjects", "parameters", name), "a law is not allowed beside table; give a fixed value")
    if "size" in values:
        tree.problem(("subjects", "size"), "not allowed beside table; its column body_weight_kg holds weights")


def _laws(tree: Tree, values: Mapping[str, Any], path: Path, card: ModelCard, files: Files) -> dict[str, Law]:
    allowed = (*card.parameters, *INPUT_PARAMETERS)
    found: dict[str, Law] = {}
    for name, value in values.items():
        if name not in allowed and name in tree.elsewhere:
            tree.warnings.append(tree.place((*path, name), f"{card.name} has no {name}; it is left out there"))
            continue
        if name not in allowed:
            known = "" if name not in PARAMETERS else f" (model {card.name} has no {name})"
            tree.problem((*path, name), f"not a parameter of the model{nearest(name, allowed)}{known}")
            continue
        quantity = PARAMETERS.get(name) or INPUT_PARAMETERS[name]
        law = _law(tree, value, (*path, name), files)
        if law is not None and _within(tree, (*path, name), law, quantity.low, quantity.high, quantity.unit):
            found[name] = law
    return found


def _weight(tree: Tree, values: Mapping[str, Any], path: Path, files: Files) -> Law | None:
    if "weight" not in values:
        if "scaling" in values:
            tree.problem((*path, "scaling"), "needs a weight beside it")
        return None
    law = _law(tree, values["weight"], (*path, "weight"), files)
    if law is None or not _within(tree, (*path, "weight"), law, *WEIGHT_RANGE_KG, "kg"):
        return None
    return law


def _within(tree: Tree, path: Path, law: Law, low: float, high: float, unit: str) -> bool:
    shown = "" if unit == "1" else f" {unit}"
    try:
        with np.errstate(all="raise", under="ignore"):
            inside, mass = cut(law, low, high)
            if mass <= CUT_REFUSED and not isinstance(law, Beta):  # solving a beta law takes its time
                inside.quantile(_MARKS)
    except (FloatingPointError, OverflowError, ZeroDivisionError):
        tree.problem(path, "the numbers of this law are too large or too small to compute with")
        return False
    if isinstance(law, Fixed):
        if mass:
            tree.problem(
                path, f"{law.value:g}{shown} is not allowed; physical values lie in {low:g} to {high:g}{shown}"
            )
        return not mass
    if mass > CUT_REFUSED:
        tree.problem(path, f"{mass:.1%} of this law lies outside the physical range {low:g} to {high:g}{shown}; at most "
                     "1 % may be cut off")  # fmt: skip
        return False
    if mass > CUT_SHOWN:
        tree.warnings.append(tree.place(path, f"{mass:.2g} of this law lies outside the physical range {low:g} to "
                                        f"{high:g}{shown} and is cut off"))  # fmt: skip
    return True


def _law(tree: Tree, value: Any, path: Path, files: Files) -> Law | None:
    if isinstance(value, Quantity):
        return Fixed(value.number)
    if not isinstance(value, dict):
        return None
    named = [name for name in value if name in LAWS]
    if len(named) != 1:
        if len(named) > 1:
            tree.problem(path, f"one law is wanted, found {' and '.join(named)}")
        elif not any(p.key.startswith(dotted(path)) for p in tree.problems):
            tree.problem(path, f"a value or a law is wanted: one of {', '.join(LAWS)}")
        return None
    kind, here = named[0], (*path, named[0])
    numbers = {k: v.number if isinstance(v, Quantity) else v for k, v in value[kind].items()}
    missing = [k for k in _NEEDED[kind] if k not in numbers]
    if missing:
        unread = [k for k in missing if not any(p.key == dotted((*here, k)) for p in tree.problems)]
        for k in unread:
            tree.problem(here, f"{k} is missing; {kind} takes {', '.join(_NEEDED[kind])}")
        return None
    return _make(tree, kind, numbers, here, files)


def _make(tree: Tree, kind: str, n: dict[str, Any], path: Path, files: Files) -> Law | None:
    if kind == "empirical":
        found = files.column(tree, (*path, "file"), n["file"], n["column"])
        return None if found is None else Empirical(found, f"{n['file']}:{n['column']}")
    low, high = n.get("low", -np.inf), n.get("high", np.inf)
    if not low < high:
        tree.problem((*path, "low"), f"{low:g} is not allowed; low must be below high ({high:g})")
        return None
    for key in ("median", "sd"):
        if key in n and not n[key] > 0.0:
            tree.problem((*path, key), f"{n[key]:g} is not allowed; it must be > 0")
            return None
    if kind == "loguniform" and not low > 0.0:
        tree.problem((*path, "low"), f"{low:g} is not allowed; it must be > 0")
        return None
    if kind == "triangular" and not low <= n["mode"] <= high:
        tree.problem((*path, "mode"), f"{n['mode']:g} is not allowed; it must lie between low and high")
        return None
    if kind == "normal" and (n.get("mean_rse") or n.get("cv_rse")) and not n["mean"] > 0.0:
        tree.problem((*path, "mean"), "must be > 0 where mean_rse or cv_rse is given")
        return None
    return _law_of(kind, n, low, high)


def _law_of(kind: str, n: dict[str, Any], low: float, high: float) -> Law:
    if kind == "lognormal":
        return Lognormal(n["median"], n["cv"], max(low, 0.0), high, n.get("median_rse", 0.0), n.get("cv_rse", 0.0))
    if kind == "normal":
        return Normal(n["mean"], n["sd"], low, high, n.get("mean_rse", 0.0), n.get("cv_rse", 0.0))
    if kind == "triangular":
        return Triangular(low, n["mode"], high)
    if kind == "beta":
        return Beta(low, high, n["alpha"], n["beta"])
    return Uniform(low, high) if kind == "uniform" else Loguniform(low, high)


def _strata(
    tree: Tree, values: list[dict[str, Any]], card: ModelCard, files: Files,
    everyone: tuple[dict[str, Law], Law | None, tuple[Correlation, ...]],
) -> tuple[Stratum, ...]:  # fmt: skip
    laws, weight, pairs = everyone
    if not values:
        return (Stratum("all", 1.0, laws, weight, pairs),)
    strata: list[Stratum] = []
    for i, value in enumerate(values):
        path: Path = ("subjects", "strata", i)
        name = value.get("name")
        if name is None or not isinstance(name, str) or not name.strip():
            tree.problem(path, "name is missing")
            name = f"stratum {i + 1}"
        if len(name) > LONGEST_STRATUM:
            tree.problem((*path, "name"), f"{len(name):,} characters; at most {LONGEST_STRATUM} are allowed")
        if name in [s.name for s in strata]:
            tree.problem((*path, "name"), f"{name!r} is the name of another stratum")
        if "share" not in value:
            tree.problem(path, "share is missing")
        own = _laws(tree, value.get("parameters", {}), (*path, "parameters"), card, files)
        heavy = _weight(tree, value, path, files) if "weight" in value else weight
        tied = pairs
        if "correlations" in value:
            tied = _correlations(tree, value["correlations"], (*path, "correlations"), card)
        strata.append(Stratum(name, value.get("share", 0.0), {**laws, **own}, heavy, tied))
    total = sum(s.share for s in strata)
    if all("share" in v for v in values) and abs(total - 1.0) > 1e-6:
        tree.problem(("subjects", "strata"), f"shares add to {total:g}; strata cover everyone, so they must add to 1")
    return tuple(strata)


def _correlations(tree: Tree, values: list[dict[str, Any]], path: Path, card: ModelCard) -> tuple[Correlation, ...]:
    found: dict[frozenset[str], Correlation] = {}
    for i, value in enumerate(values):
        pair, here = value.get("pair"), (*path, i)
        if pair is None or "spearman" not in value:
            tree.problem(here, "pair and spearman are needed")
        elif len(pair) != 2 or pair[0] == pair[1]:
            tree.problem((*here, "pair"), "two different parameters are wanted")
        elif frozenset(pair) in found:
            tree.problem((*here, "pair"), f"{pair[0]} and {pair[1]} are paired twice")
        elif not any(p in tree.elsewhere and p not in card.parameters for p in pair):
            found[frozenset(pair)] = Correlation((pair[0], pair[1]), value["spearman"])
    return tuple(found.values())


def _check_correlations(tree: Tree, made: Recipe) -> None:
    seen: set[tuple[Correlation, ...]] = set()
    for i, stratum in enumerate(made.strata):
        if not stratum.correlations or stratum.correlations in seen:
            continue
        seen.add(stratum.correlations)
        path: Path = ("subjects", "correlations")
        if ("subjects", "strata", i, "correlations") in tree.lines:
            path = ("subjects", "strata", i, "correlations")
        names = sorted({name for c in stratum.correlations for name in c.pair})
        strange = [n for n in names if n not in made.drawn]
        for n in strange:
            tree.problem(
                path, f"{n!r} does not vary between subjects, so it has no correlation{nearest(n, made.drawn)}"
            )
        if strange:
            continue
        matrix = latent_matrix(names, [(c.pair, c.spearman) for c in stratum.correlations])
        if not is_possible(matrix):
            near, change = nearest_correlation(matrix)
            ranks = 6.0 / np.pi * np.arcsin(np.clip(near, -1, 1) / 2.0)
            pairs = "; ".join(
                f"{c.pair[0]}-{c.pair[1]} {ranks[names.index(c.pair[0]), names.index(c.pair[1])]:.3f}"
                for c in stratum.correlations
            )
            tree.problem(path, "these correlations cannot hold together (their matrix is not positive semidefinite); the "
                         f"nearest that can: {pairs} (largest change {change:.3f})")  # fmt: skip


def _check_order(tree: Tree, made: Recipe) -> None:
    """Um > U0 by the rule of every cut: mass above 1e-6 is said, above 1 % refused. Once, for the first stratum."""
    if not {"U0", "Um"} <= set(made.names):
        return
    for stratum in made.strata:
        most, least = (stratum.laws.get(p, Fixed(made.nominal.get(p, np.nan))) for p in ("Um", "U0"))
        if isinstance(most, Fixed) and isinstance(least, Fixed):
            if not most.value > least.value:
                tree.problem(("subjects", "parameters"), f"Um ({most.value:g}) must be above U0 ({least.value:g})")
                return
            continue
        mass = made.order_cut(stratum)
        path = ("subjects", "parameters", "U0" if isinstance(most, Fixed) else "Um")
        if mass > CUT_REFUSED:
            tree.problem(path, f"in {mass:.1%} of people Um would not be above U0; at most 1 % may be cut off. Keep the two "
                         "laws further apart")  # fmt: skip
            return
        if mass > CUT_SHOWN:
            tree.warnings.append(tree.place(path, f"in {mass:.2g} of people Um would not be above U0; that is cut off"))
            return
