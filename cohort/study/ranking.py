"""[ranking]: from checked values to what is ranked and how."""

from __future__ import annotations

import re
from collections.abc import Sequence
from typing import Any

from cohort.errors import nearest
from cohort.infer.ranking import FIRST, PLAIN_DOUBLING, Ranking, points
from cohort.infer.strata import design_runs, first_doubling, plain_wanted, ranked_strata
from cohort.model.inputs import meal_times
from cohort.model.protocol import Arm, Meal
from cohort.population.recipe import Recipe
from cohort.quantities import CLAMP_OUTCOMES, CYCLE_OUTCOMES, MEAL_OUTCOMES, WINDOW_OUTCOMES
from cohort.study.tree import Tree

_OF_SOBOL = ("base", "replicates", "tolerance", "max_runs", "second_order")
_OF_MORRIS = ("trajectories", "levels")
_MEAL = re.compile(r"meal_([1-9][0-9]{0,5})\.(\w+)")

MOST_OUTCOMES = 100
RANKABLE = (
    "oscillates",
    *(c.name for c in (*CYCLE_OUTCOMES, *WINDOW_OUTCOMES, *CLAMP_OUTCOMES) if c.kind == "float64"),
)
MEAL_RANKABLE = tuple(c.name for c in MEAL_OUTCOMES if c.kind == "float64" and c.name != "meal_time_min")


def ranking(tree: Tree, recipe: Recipe, arms: Sequence[Arm], selected: bool) -> Ranking | None:
    """Build [ranking], or None where there is none; every problem is noted in `tree`."""
    if "ranking" not in tree.values:
        return None
    values = tree.values["ranking"]
    before = len(tree.problems)
    method = values.get("method", "sobol")
    if "method" not in values and not any(p.key == "ranking.method" for p in tree.problems):
        tree.problem(("ranking",), "method is missing; sobol or morris")
    for key in _OF_MORRIS if method == "sobol" else _OF_SOBOL:
        # plain rows beside a Morris design rest on max_runs too
        if key in values and key != "max_runs":
            tree.warnings.append(tree.place(("ranking", key), f"has no part in method = '{method}'"))
    _check_numbers(tree, values)
    made = Ranking(
        method, _outcomes(tree, values, arms), values.get("base", 256), values.get("replicates", 8),
        float(values.get("tolerance", 0.05)), values.get("max_runs", 200_000), values.get("second_order", False),
        values.get("trajectories", 20), values.get("levels", 4), _groups(tree, values.get("groups", {}), recipe),
    )  # fmt: skip
    if len(tree.problems) == before:
        _check_size(tree, made, recipe, len(arms), selected)
    return made


def _check_numbers(tree: Tree, values: dict[str, Any]) -> None:
    base, levels = values.get("base", 256), values.get("levels", 4)
    if base < FIRST or base & (base - 1):
        lower = 1 << max(base.bit_length() - 1, FIRST.bit_length() - 1)
        near = lower if base - lower <= 2 * lower - base else 2 * lower
        tree.problem(("ranking", "base"), f"{base} is not allowed; a power of two from {FIRST} on is wanted, since other "
                     f"numbers of Sobol' points are less even (nearest: {near})")  # fmt: skip
    if levels % 2:
        tree.problem(
            ("ranking", "levels"), f"{levels} is not allowed; an even number is wanted (nearest: {levels + 1})"
        )


def _outcomes(tree: Tree, values: dict[str, Any], arms: Sequence[Arm]) -> tuple[str, ...]:
    names = values.get("outcomes", [])
    if len(names) > MOST_OUTCOMES:
        tree.problem(("ranking", "outcomes"), f"{len(names):,} outcomes; at most {MOST_OUTCOMES} are allowed")
        return ()
    if not names and not any(p.key.startswith("ranking.outcomes") for p in tree.problems):
        tree.problem(("ranking",), "outcomes is missing: which outcomes to rank for")
    for i, name in enumerate(names):
        if name in names[:i]:
            tree.problem(("ranking", "outcomes", i), f"{name!r} is named twice")
        elif name not in RANKABLE:
            _check_other(tree, ("ranking", "outcomes", i), name, arms)
    return tuple(names)


def _check_other(tree: Tree, path: tuple[str | int, ...], name: str, arms: Sequence[Arm]) -> None:
    meal = _MEAL.fullmatch(name)
    if meal and meal[2] in MEAL_RANKABLE:
        most = max((meals_of(arm) for arm in arms), default=0)
        if int(meal[1]) > most:
            tree.problem(path, f"{name!r}: no arm has a meal {meal[1]} (at most {most})")
        return
    allowed = (*RANKABLE, *(f"meal_1.{c}" for c in MEAL_RANKABLE))
    near = nearest(name, allowed) or "; the numeric outcomes of README, or meal_1.peak_mg_dl"
    tree.problem(path, f"{name[:60]!r} is not an outcome that can be ranked{near}")


def meals_of(arm: Arm) -> int:
    """How many meals an arm has; meals at the same minute count once."""
    return len({t for s in arm.glucose if isinstance(s, Meal) for t in meal_times(s, arm.duration_min)})


def _groups(tree: Tree, values: dict[str, Any], recipe: Recipe) -> dict[str, tuple[str, ...]]:
    known = recipe.varied if recipe.table is not None else recipe.drawn
    home: dict[str, str] = {}
    for group, members in values.items():
        path = ("ranking", "groups", group)
        if group in known:
            tree.problem(path, "has the name of a parameter; another name is wanted")
        if not members:
            tree.problem(path, "is empty; it names the parameters moved together")
        for i, member in enumerate(members):
            if member in recipe.names and member not in known:
                tree.warnings.append(tree.place((*path, i), f"{member!r} does not vary between subjects, so the group moves "
                                                "without it"))  # fmt: skip
            elif member not in known:
                tree.problem((*path, i), f"{member[:60]!r} is not a varied parameter{nearest(member, known)}")
            elif member in home:
                tree.problem((*path, i), f"{member!r} is in {home[member]!r} already")
            home.setdefault(member, group)
    return {group: tuple(members) for group, members in values.items()}


def _check_size(tree: Tree, made: Ranking, recipe: Recipe, arms: int, selected: bool) -> None:
    strata = ranked_strata(recipe, made, selected)
    if all(len(r.design.factors) < 2 for r in strata):
        names = strata[0].design.names
        has = (
            f"only {names[0]} varies" if len(names) == 1 else "they are all in one group" if names else "nothing varies"
        )
        tree.problem(("ranking",), f"a ranking compares two or more varied parameters; {has} between subjects")
        return
    plain = points(PLAIN_DOUBLING)
    for ranked in strata:
        if ranked.refused and recipe.table is None:
            tree.warnings.append(tree.place(("ranking",), f"{ranked.stratum}: refused: {ranked.refused}"))
    needed = sum(
        (0 if r.refused else design_runs(r.design, first_doubling(made))) + plain * plain_wanted(r, made)
        for r in strata
    )
    if needed * arms > made.max_runs:
        what = "trajectories" if made.method == "morris" else f"base {made.base} x {made.replicates} replicates"
        extra = f" and {plain:,} plain rows" * any(plain_wanted(r, made) for r in strata)
        key = ("ranking", "max_runs") if "max_runs" in tree.values["ranking"] else ("ranking",)
        tree.problem(key, f"max_runs = {made.max_runs:,} is too small: {what}{extra} in {arms} arm{'s' * (arms > 1)} and "
                     f"{len(strata)} strat{'a' if len(strata) > 1 else 'um'} take {needed * arms:,} runs")  # fmt: skip


def ranked_runs(made: Ranking, recipe: Recipe, arms: int, selected: bool) -> int:
    """Runs of a ranking at its first size, redraws of oscillators not counted."""
    plain = points(PLAIN_DOUBLING)
    return arms * sum(
        (0 if r.refused else design_runs(r.design, first_doubling(made))) + plain * plain_wanted(r, made)
        for r in ranked_strata(recipe, made, selected)
    )
