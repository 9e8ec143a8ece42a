"""Which design each stratum gets, and why it gets none."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from cohort.infer.ranking import Design, Factor, Ranking, doubling_of, points, row_count
from cohort.population.laws import Fixed
from cohort.population.recipe import WEIGHT, Recipe, Stratum

CYCLE_ONLY = ("period_min", "cycle_error", "insulin_lag_min", "cycle_")
"""Outcomes that only subjects with a limit cycle have, by how their names begin."""


SELECTED = "people are selected by an outcome (eligible, match), which ties their parameters together"


@dataclass(frozen=True)
class Ranked:
    """A stratum to rank: inputs and factors in `design`; `refused` says why its design cannot be run, or is empty."""

    design: Design
    refused: str

    @property
    def stratum(self) -> str:
        """The stratum's name."""
        return self.design.stratum


def ranked_strata(recipe: Recipe, ranking: Ranking, selected: bool = False) -> tuple[Ranked, ...]:
    """A ranking in each stratum, never across a mixture of them. selected: people are chosen or weighted by outcomes,
    which ties their parameters together."""
    return tuple(_ranked(recipe, ranking, stratum, selected) for stratum in recipe.strata)


def _ranked(recipe: Recipe, ranking: Ranking, stratum: Stratum, selected: bool) -> Ranked:
    names = _table_names(recipe) if recipe.table is not None else _drawn_names(recipe, stratum)
    design = Design(
        ranking.method, recipe.seed, stratum.name, names, factors(names, ranking),
        ranking.trajectories if ranking.method == "morris" else ranking.replicates,
        ranking.second_order, ranking.levels,
    )  # fmt: skip
    if recipe.table is not None:
        return Ranked(
            design, "subjects come from a table, whose rows are what they are; given-data estimators are used"
        )
    if len(design.factors) < 2:
        return Ranked(design, f"{len(design.factors)} varied input{'s' * (len(design.factors) != 1)}; a ranking compares "
                      "two or more")  # fmt: skip
    if selected:
        sobol = "; their rows are no independent people either (draw = 'sobol')" if recipe.draw == "sobol" else ""
        return Ranked(design, f"{SELECTED}: a design would simulate people who are not counted{sobol}")
    return Ranked(design, _tied(design, stratum))


def _drawn_names(recipe: Recipe, stratum: Stratum) -> tuple[str, ...]:
    laws = {**stratum.laws, **({WEIGHT: stratum.weight} if stratum.weight is not None else {})}
    return tuple(n for n in recipe.drawn if n in laws and not isinstance(laws[n], Fixed))


def _table_names(recipe: Recipe) -> tuple[str, ...]:
    assert recipe.table is not None
    spread = [p for p in recipe.varied if np.ptp(recipe.table.columns[p]) > 0.0]
    weight = recipe.table.body_weight_kg
    return (*spread, *((WEIGHT,) if np.isfinite(weight).all() and np.ptp(weight) > 0.0 else ()))


def factors(names: Sequence[str], ranking: Ranking) -> tuple[Factor, ...]:
    """Groups as named, every other input by itself, in the order of the inputs."""
    group_of = {member: group for group, members in ranking.groups.items() for member in members}
    made: dict[str, list[int]] = {}
    for column, name in enumerate(names):
        made.setdefault(group_of.get(name, name), []).append(column)
    return tuple(Factor(name, tuple(columns)) for name, columns in made.items())


def _tied(design: Design, stratum: Stratum) -> str:
    """Why columns cannot be swapped one at a time: correlated inputs that are not in one group."""
    home = {design.names[c]: f.name for f in design.factors for c in f.columns}
    for pair in (c.pair for c in stratum.correlations if c.spearman):
        if all(name in home for name in pair) and home[pair[0]] != home[pair[1]]:
            return (
                f"{pair[0]} and {pair[1]} are correlated: swapping their columns one at a time would simulate another "
                "population, without the correlation. Put them in one group, or read the fair shares"
            )
    return ""


# ---- what it costs -----------------------------------------------------------------------------------------------


def only_of_cycles(outcome: str) -> bool:
    """Whether only subjects with a limit cycle have the outcome."""
    return outcome.startswith(CYCLE_ONLY)


def design_runs(design: Design, doubling: int) -> int:
    """Runs of one arm up to and with a doubling."""
    return sum(row_count(design, k) for k in range(doubling + 1))


def first_doubling(ranking: Ranking) -> int:
    """The doubling a ranking begins at."""
    return 0 if ranking.method == "morris" else doubling_of(ranking.base)


REDRAWS_PER_ROW = 2.0
"""Runs set aside for a redraw that keeps the subject oscillating; about 1.5 are needed where most do."""
FEWEST_REDRAWN = 128


def plain_wanted(ranked: Ranked, ranking: Ranking) -> bool:
    """Whether independent rows must be simulated beside the design."""
    if "table" in ranked.refused or SELECTED in ranked.refused or len(ranked.design.factors) < 2:
        return False
    return bool(ranked.refused) or any(only_of_cycles(name) for name in ranking.outcomes)


def budget(strata: Sequence[Ranked], ranking: Ranking, arms: int, plain: int) -> tuple[int, int]:
    """(plain rows whose factors may be redrawn, runs left for the design of each stratum and arm).

    max_runs counts all runs of the ranking: designs, plain rows (`plain` a stratum and arm) and redraws.
    """
    running = [r for r in strata if not r.refused]
    if not running or not arms:
        return 0, 0
    each = ranking.max_runs // (arms * len(strata))
    wanted = any(plain_wanted(r, ranking) for r in running)
    widest = max(running, key=lambda r: len(r.design.factors)).design
    left = each - design_runs(widest, first_doubling(ranking)) - (plain if wanted else 0)
    redrawn = 0
    if wanted:
        affordable = left / (REDRAWS_PER_ROW * len(widest.factors))
        redrawn = plain
        while redrawn > affordable:
            redrawn //= 2
        redrawn = redrawn if redrawn >= FEWEST_REDRAWN else 0
    set_aside = int(plain * wanted + REDRAWS_PER_ROW * len(widest.factors) * redrawn)
    return redrawn, each - set_aside


def affordable_doubling(design: Design, ranking: Ranking, runs: int) -> int:
    """The last doubling that fits into so many runs of an arm; at least the first."""
    doubling = first_doubling(ranking)
    while ranking.method == "sobol" and design_runs(design, doubling + 1) <= runs and points(doubling) < 2**30:
        doubling += 1
    return doubling
