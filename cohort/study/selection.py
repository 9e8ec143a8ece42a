"""[subjects.eligible] and [subjects.match]: who of the virtual people is counted, and with what weight."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from cohort.errors import nearest
from cohort.model.protocol import Arm
from cohort.population.recipe import Recipe
from cohort.quantities import CLAMP_OUTCOMES, CYCLE_OUTCOMES, WINDOW_OUTCOMES, Column
from cohort.study.tree import Tree
from cohort.study.units import DIMENSIONS, UnitError, parse

_COLUMNS = {c.name: c for c in (*CYCLE_OUTCOMES, *WINDOW_OUTCOMES, *CLAMP_OUTCOMES) if c.kind == "float64"}

Path = tuple[str | int, ...]


@dataclass(frozen=True)
class Bound:
    """Subjects with this arm's outcome from low to high are eligible."""

    arm: str
    outcome: str
    low: float
    high: float


@dataclass(frozen=True)
class Target:
    """A published mean and SD of this arm's outcome."""

    arm: str
    outcome: str
    mean: float
    sd: float


@dataclass(frozen=True)
class Selection:
    """Who is recruited: bounds that all hold, and summaries that weights bring the eligible to."""

    eligible: tuple[Bound, ...] = ()
    match: tuple[Target, ...] = ()

    @property
    def arms(self) -> tuple[str, ...]:
        """Arms whose outcomes it rests on."""
        return tuple(dict.fromkeys([*(b.arm for b in self.eligible), *(t.arm for t in self.match)]))


def selection(tree: Tree, recipe: Recipe, arms: Sequence[Arm]) -> Selection:
    """Build it, noting every problem in `tree`."""
    values = tree.values.get("subjects", {})
    bounds, targets = [], []
    for name, value in values.get("eligible", {}).items():
        path: Path = ("subjects", "eligible", name)
        found = _outcome(tree, path, name, arms)
        numbers = [_number(tree, (*path, i), v, found[1]) for i, v in enumerate(value)] if found else []
        if found and len(value) != 2:
            tree.problem(path, f"{len(value)} values; the least and the greatest are wanted")
        elif found and None not in numbers:
            low, high = (float(x or 0.0) for x in numbers)
            if not low < high:
                tree.problem(path, f"{low:g} to {high:g} holds nobody; the smaller comes first")
            bounds.append(Bound(found[0], found[1].name, low, high))
    for name, value in values.get("match", {}).items():
        path = ("subjects", "match", name)
        found = _outcome(tree, path, name, arms)
        target = _target(tree, path, value, found) if found else None
        targets += [target] if target else []
    if targets and recipe.draw == "sobol" and recipe.table is None:
        tree.problem(("subjects", "match"), "not allowed with draw = 'sobol', whose points are no independent people; use "
                     "draw = 'random'")  # fmt: skip
    if targets and recipe.population is not None:
        tree.problem(("subjects", "match"), "not allowed beside population: each of its draws is a population of its own, "
                     "and weights would take its uncertainty away again")  # fmt: skip
    return Selection(tuple(bounds), tuple(targets))


def _target(tree: Tree, path: Path, value: dict[str, Any], found: tuple[str, Column]) -> Target | None:
    numbers: dict[str, float] = {}
    for key in ("mean", "sd"):
        if key not in value:
            tree.problem(path, f"{key} is missing")
        else:
            number = _number(tree, (*path, key), value[key], found[1])
            if number is not None and not math.isfinite(number):
                tree.problem((*path, key), f"{number:g} is not a finite number")
            elif number is not None:
                numbers[key] = number
    if len(numbers) < 2:
        return None
    if not numbers["sd"] > 0.0:
        tree.problem((*path, "sd"), f"{numbers['sd']:g} is not allowed; an SD above 0 is wanted")
        return None
    return Target(found[0], found[1].name, numbers["mean"], numbers["sd"])


def _outcome(tree: Tree, path: Path, name: str, arms: Sequence[Arm]) -> tuple[str, Column] | None:
    arm, _, outcome = name.rpartition(".")
    names = [a.name for a in arms]
    if arm not in names:
        tree.problem(path, f"{arm!r} is no arm of this study{nearest(arm, names)}; ARM.OUTCOME is wanted")
        return None
    if outcome not in _COLUMNS:
        tree.problem(path, f"{outcome!r} is not an outcome{nearest(outcome, _COLUMNS)}")
        return None
    return arm, _COLUMNS[outcome]


def _number(tree: Tree, path: Path, value: str | float, column: Column) -> float | None:
    if not isinstance(value, str):
        return float(value)
    if column.unit not in DIMENSIONS:
        tree.problem(path, f"{value[:60]!r} is not allowed; a plain number is wanted (in {column.unit})")
        return None
    try:
        return parse(value, column.unit)[0]
    except UnitError as error:
        tree.problem(path, str(error))
        return None
