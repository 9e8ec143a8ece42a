"""From a range of subjects to the rows of their tables: draw, simulate, measure."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from cohort.compiled import cache_folder
from cohort.measure.outcomes import outcomes
from cohort.model.inputs import is_forced
from cohort.model.protocol import Arm, Meal
from cohort.observe.design import make_design
from cohort.observe.detector import observations
from cohort.observe.null import null_table, tables_needed
from cohort.observe.sampling import Schedule
from cohort.population import draw
from cohort.population.recipe import Subjects
from cohort.quantities import ANALYTES, FAILURES, REGIMES
from cohort.study import Study
from cohort.tables import MEALS, OBSERVATIONS, Schema, outcomes_schema, subjects_schema

Array = NDArray[np.float64]
Values = dict[str, Any]


KEPT_OF_THE_LOST = ("subject", "meal", "meal_time_min", "analyte", "forced", "cycle_note")
"""Columns that say who and what is meant, not what came out."""


@dataclass(frozen=True)
class Table:
    """One stored table of a study: its name as a folder (`outcomes/fasting`), its arm and schedule if any, its schema."""

    folder: str
    arm: Arm | None
    schema: Schema
    schedule: Schedule | None = None


def tables(study: Study) -> tuple[Table, ...]:
    """Every table of a study in the order its parts are written: outcomes come last, and make a shard count."""
    given = study.recipe.table
    with_id = given is not None and given.id is not None
    with_person = given is not None and given.person is not None
    first = Table("subjects", None, subjects_schema(study.recipe.varied, with_id, with_person))
    meals = tuple(Table(f"meals/{arm.name}", arm, MEALS) for arm in study.arms if has_meals(arm))
    seen = tuple(
        Table(f"observations/{arm.name}/{schedule.name}", arm, OBSERVATIONS, schedule)
        for arm in study.arms
        for schedule in (study.sampling.schedules if study.sampling else ())
    )
    last = tuple(
        Table(f"outcomes/{arm.name}", arm, outcomes_schema(arm.clamp is not None, is_forced(arm))) for arm in study.arms
    )
    return (first, *meals, *seen, *last)


def has_meals(arm: Arm) -> bool:
    """Whether an arm has a meals table."""
    return any(isinstance(shape, Meal) for shape in arm.glucose)


def rows(study: Study, start: int, stop: int, arms: Sequence[str]) -> dict[str, Values]:
    """Rows of subjects start..stop-1, by table folder: subjects/ and the tables of the named arms."""
    people = draw(study.recipe, start, stop)
    return _rows(study, people, people.values, arms)


def lost_rows(study: Study, arms: Sequence[str], subject: int) -> dict[str, Values]:
    """Rows of a subject with whom every process died: who it is, and nothing else; regime failed, process died."""
    recipe, people = study.recipe, draw(study.recipe, subject, subject + 1)
    nobody = np.array([[recipe.nominal.get(name, np.nan) for name in recipe.names]])
    found = _rows(study, people, nobody, arms)
    for folder, values in found.items():
        if folder == "subjects":
            continue
        for name, column in values.items():
            if name not in KEPT_OF_THE_LOST:
                nothing = {"f": np.nan, "O": None}.get(column.dtype.kind, -1)
                values[name] = np.full(column.shape, nothing, column.dtype)
        if folder.startswith("outcomes/"):
            values["regime"][:] = REGIMES.index("failed")
            values["failure"][:] = FAILURES.index("process died")
    return found


def _rows(study: Study, people: Subjects, integrated: Array, arms: Sequence[str]) -> dict[str, Values]:
    recipe, start = study.recipe, int(people.subject[0])
    stop = start + len(people.subject)
    subject = {
        "subject": people.subject,
        "stratum": np.array(recipe.stratum_names, dtype=object)[people.stratum],
        "body_weight_kg": people.body_weight_kg,
        **{p: people.values[:, recipe.names.index(p)] for p in recipe.varied},
    }
    if recipe.table is not None and recipe.table.id is not None:
        subject["id"] = np.array(recipe.table.id[start:stop], dtype=object)
    if recipe.table is not None and recipe.table.person is not None:
        subject["person"] = recipe.table.person[start:stop]
    found: dict[str, Values] = {"subjects": subject}
    for arm in study.arms:
        if arm.name not in arms:
            continue
        measured = outcomes(study.model, integrated, people.body_weight_kg, arm, sample_times(study, arm))
        forcing = measured.outcomes.get("forcing_period_min", np.full(stop - start, np.nan))
        found |= observed(study, arm, measured.sampled, start, stop, forcing)
        found[f"outcomes/{arm.name}"] = {"subject": people.subject, **measured.outcomes}
        if has_meals(arm):
            meals = dict(measured.meals)
            found[f"meals/{arm.name}"] = {"subject": people.subject[meals.pop("row")], **meals}
    return found


def sample_times(study: Study, arm: Arm) -> Array | None:
    """Every minute of the arm at which some schedule takes a sample, rising; None without schedules."""
    if study.sampling is None:
        return None
    return np.unique([arm.settle_min + t for s in study.sampling.schedules for t in s.times_min])


def observed(study: Study, arm: Arm, sampled: Array, start: int, stop: int, forcing: Array) -> dict[str, Values]:
    """Rows of observations/ of subjects start..stop-1, by table folder; sampled: float64[n, 2, times of sample_times];
    forcing: the period of each one's periodic input (min), NaN without."""
    found: dict[str, Values] = {}
    if study.sampling is None:
        return found
    plan = study.sampling
    times = np.asarray(sample_times(study, arm))
    for schedule in plan.schedules:
        at = np.searchsorted(times, [arm.settle_min + t for t in schedule.times_min])
        true = {analyte: np.ascontiguousarray(sampled[:, i, at]) for i, analyte in enumerate(ANALYTES)}
        found[f"observations/{arm.name}/{schedule.name}"] = observations(
            true, schedule, plan.readings, plan.rule, study.seed, arm.name, (start, stop), forcing, null_folder()
        )
    return found


def null_folder() -> Path | None:
    """Where null tables are kept between runs; None where nothing can be."""
    folder = cache_folder()
    return None if folder is None else folder / "null-tables"


def warm(study: Study) -> None:
    """Make what the detector needs once, before there are threads."""
    for schedule in study.sampling.schedules if study.sampling else ():
        assert study.sampling is not None
        design = make_design(np.array(schedule.times_min), study.sampling.rule.band_min)
        for missing in tables_needed(design, schedule.missed):
            null_table(design, missing, null_folder())


def joined_tables(pieces: Sequence[dict[str, Values]]) -> dict[str, Values]:
    """The rows of every table of several ranges as one, in their order."""
    return {folder: joined([piece[folder] for piece in pieces]) for folder in pieces[0]}


def joined(pieces: Sequence[Values]) -> Values:
    """The rows of several sub-batches as one, in their order."""
    return {name: np.concatenate([piece[name] for piece in pieces]) for name in pieces[0]}


def constants(study: Study, table: Table) -> Mapping[str, str]:
    """Columns that hold one word throughout."""
    schedule = {} if table.schedule is None else {"schedule": table.schedule.name}
    return {} if table.arm is None else {"arm": table.arm.name, "model": study.model, **schedule}


def times(duration_min: float, every_min: float) -> NDArray[np.float64]:
    """Points of a kept time course, from the arm's beginning to its end."""
    count = int(np.floor(duration_min / every_min + 1e-9))
    return np.asarray(np.arange(count + 1) * every_min, dtype=np.float64)
