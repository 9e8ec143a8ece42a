"""Draws of the population itself: for each, its own people, and how many of them oscillate and would be detected."""

from __future__ import annotations

from collections.abc import Mapping
from functools import partial
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from cohort.execute.identity import population_identity
from cohort.execute.progress import Progress
from cohort.execute.stages import observed, sample_times
from cohort.execute.tasks import Hands, Job, Piece
from cohort.measure.outcomes import outcomes
from cohort.model.protocol import Arm
from cohort.population import draw
from cohort.population.laws import Law, Lognormal, Normal
from cohort.population.recipe import WEIGHT, Recipe, Stratum, Subjects, population_draw
from cohort.study import Study
from cohort.study.arms import has_steady_input
from cohort.tables import Schema, Stamp, population_schema, verify_part, write_part

Values = dict[str, Any]
Mask = NDArray[np.bool_]

EVERYONE = "everyone"
SUBJECTS_A_PART = 16_384


def run_population(
    study: Study, out: Path, hands: Hands, progress: Progress | None, slots: Mapping[str, int]
) -> tuple[int, int]:
    """Make what is missing of population/; returns (runs made, runs that were there)."""
    outer = study.recipe.population
    assert outer is not None
    each = max(SUBJECTS_A_PART // outer.inner, 1)
    schema = population_schema(uncertain_names(study.recipe))
    jobs: list[Job] = []
    kept = 0
    for chunk, first in enumerate(range(0, outer.outer + 1, each)):
        last = min(first + each, outer.outer + 1)
        for arm in study.arms:
            path = out / "population" / f"part-{chunk:06d}-{slots[arm.name]:03d}.parquet"
            stamp = Stamp(population_identity(study, arm), first, last)
            if verify_part(path, schema, stamp):
                kept += (last - first) * outer.inner
                continue
            pieces = tuple(Piece(outer.inner, partial(_draw_rows, study, arm, k)) for k in range(first, last))
            jobs.append(Job(f"population {path.stem}", pieces, partial(_write, path, schema, stamp)))
    made = sum(piece.runs for job in jobs for piece in job.pieces)
    if progress:
        progress.more(made)
    hands.do(jobs, progress)
    return made, kept


def uncertain_names(recipe: Recipe) -> tuple[str, ...]:
    """Parameters (and weight) that some draw moves."""
    moved = {name for s in recipe.strata for name, law in _laws(s).items() if _uncertain(law)}
    return tuple(n for n in (*recipe.names, WEIGHT) if n in moved)


def _laws(stratum: Stratum) -> dict[str, Law]:
    return {**stratum.laws, **({WEIGHT: stratum.weight} if stratum.weight is not None else {})}


def _uncertain(law: Law) -> bool:
    if isinstance(law, Lognormal):
        return bool(law.median_rse or law.cv_rse)
    return isinstance(law, Normal) and bool(law.mean_rse or law.cv_rse)


def _write(path: Path, schema: Schema, stamp: Stamp, pieces: Any) -> None:
    rows = [row for piece in pieces for row in piece]
    write_part(path, schema, {c.name: _column(c.kind, [row[c.name] for row in rows]) for c in schema.columns}, stamp)


def _column(kind: str, values: list[Any]) -> Any:
    if kind == "float64":
        return np.array([np.nan if v is None else v for v in values], dtype=float)
    return np.array([-1 if v is None else v for v in values], dtype=np.int64) if kind == "int64" else values


def _draw_rows(study: Study, arm: Arm, k: int) -> list[Values]:
    """Rows of one draw and arm: everyone and each stratum, without a schedule and through each."""
    recipe = population_draw(study.recipe, k)
    people = draw(recipe, 0, recipe.count)
    eligible = _eligible(study, people)
    found = outcomes(study.model, people.values, people.body_weight_kg, arm, sample_times(study, arm), responses=False)
    truly = found.outcomes["oscillates"]
    seen = observed(study, arm, found.sampled, 0, recipe.count, np.full(recipe.count, np.nan))  # detected or not is all
    groups: list[tuple[str, Stratum | None, Mask]] = [
        (EVERYONE, recipe.strata[0] if len(recipe.strata) == 1 else None, eligible)
    ]
    if len(recipe.strata) > 1:
        groups += [(s.name, s, eligible & (people.stratum == i)) for i, s in enumerate(recipe.strata)]
    rows = []
    for name, stratum, among in groups:
        row = {
            "draw": k, "arm": arm.name, "schedule": None, "stratum": name, "n": int(among.sum()),
            "oscillating": int((truly[among] == 1).sum()) if has_steady_input(arm) else None,
            "unresolved": int((truly[among] == -1).sum()) if has_steady_input(arm) else 0,
            "detected": None, "detected_oscillating": None, **_moments(recipe, stratum),
        }  # fmt: skip
        rows.append(row)
        for schedule in study.sampling.schedules if study.sampling else ():
            columns = seen[f"observations/{arm.name}/{schedule.name}"]
            detected = columns["detected"][columns["analyte"] == 0] == 1
            both = int((detected & (truly == 1))[among].sum()) if has_steady_input(arm) else None
            counts = {"detected": int(detected[among].sum()), "detected_oscillating": both}
            rows.append({**row, "schedule": schedule.name, **counts})
    return rows


def _eligible(study: Study, people: Subjects) -> Mask:
    kept = np.ones(len(people.subject), dtype=bool)
    for arm in study.arms:
        bounds = [b for b in study.selection.eligible if b.arm == arm.name]
        if bounds:
            found = outcomes(study.model, people.values, people.body_weight_kg, arm, responses=False).outcomes
            for bound in bounds:
                value = np.asarray(found[bound.outcome], dtype=float)
                kept &= (value >= bound.low) & (value <= bound.high)
    return kept


def _moments(recipe: Recipe, stratum: Stratum | None) -> Values:
    """Medians (means) and CVs of the uncertain laws in this draw; none where strata differ."""
    found: Values = {}
    laws = {} if stratum is None else _laws(stratum)
    for name in uncertain_names(recipe):
        law = laws.get(name)
        median = law.median if isinstance(law, Lognormal) else law.mean if isinstance(law, Normal) else None
        cv = law.cv if isinstance(law, Lognormal) else law.sd / law.mean if isinstance(law, Normal) else None
        found |= {f"{name}_median": median, f"{name}_cv": cv}
    return found
