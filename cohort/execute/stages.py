"""From a range of subjects to the rows of their tables: draw, simulate, measure."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from cohort.measure.outcomes import outcomes
from cohort.model.protocol import Arm, Meal
from cohort.population import draw
from cohort.study import Study
from cohort.tables import MEALS, Schema, outcomes_schema, subjects_schema

Values = dict[str, Any]


@dataclass(frozen=True)
class Table:
    """One stored table of a study: its name as a folder (`outcomes/fasting`), its arm if any, and its schema."""

    folder: str
    arm: Arm | None
    schema: Schema


def tables(study: Study) -> tuple[Table, ...]:
    """Every table of a study in the order its parts are written: outcomes come last, and make a shard count."""
    with_id = study.recipe.table is not None and study.recipe.table.id is not None
    first = Table("subjects", None, subjects_schema(study.recipe.varied, with_id))
    meals = tuple(Table(f"meals/{arm.name}", arm, MEALS) for arm in study.arms if has_meals(arm))
    last = tuple(Table(f"outcomes/{arm.name}", arm, outcomes_schema(arm.clamp is not None)) for arm in study.arms)
    return (first, *meals, *last)


def has_meals(arm: Arm) -> bool:
    """Whether an arm has a meals table."""
    return any(isinstance(shape, Meal) for shape in arm.glucose)


def rows(study: Study, start: int, stop: int, arms: Sequence[str]) -> dict[str, Values]:
    """Rows of subjects start..stop-1, by table folder: subjects/ and the tables of the named arms."""
    people = draw(study.recipe, start, stop)
    recipe = study.recipe
    subject = {
        "subject": people.subject,
        "stratum": np.array(recipe.stratum_names, dtype=object)[people.stratum],
        "body_weight_kg": people.body_weight_kg,
        **{p: people.values[:, recipe.names.index(p)] for p in recipe.varied},
    }
    if recipe.table is not None and recipe.table.id is not None:
        subject["id"] = np.array(recipe.table.id[start:stop], dtype=object)
    found: dict[str, Values] = {"subjects": subject}
    for arm in study.arms:
        if arm.name not in arms:
            continue
        measured = outcomes(study.model, people.values, people.body_weight_kg, arm)
        found[f"outcomes/{arm.name}"] = {"subject": people.subject, **measured.outcomes}
        if has_meals(arm):
            meals = dict(measured.meals)
            found[f"meals/{arm.name}"] = {"subject": people.subject[meals.pop("row")], **meals}
    return found


def joined(pieces: Sequence[Values]) -> Values:
    """The rows of several sub-batches as one, in their order."""
    return {name: np.concatenate([piece[name] for piece in pieces]) for name in pieces[0]}


def constants(study: Study, table: Table) -> Mapping[str, str]:
    """Columns that hold one word throughout."""
    return {} if table.arm is None else {"arm": table.arm.name, "model": study.model}


def times(duration_min: float, every_min: float) -> NDArray[np.float64]:
    """Points of a kept time course, from the arm's beginning to its end."""
    count = int(np.floor(duration_min / every_min + 1e-9))
    return np.asarray(np.arange(count + 1) * every_min, dtype=np.float64)
