"""Kept time courses: which subjects, by a stated rule, simulated once more after the last shard."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from cohort.execute.identity import courses_identity
from cohort.execute.stages import times
from cohort.measure.outcomes import with_own_periods
from cohort.model.body import body
from cohort.model.inputs import People
from cohort.model.protocol import Arm
from cohort.population import draw
from cohort.simulate.people import simulate_values
from cohort.study import Study
from cohort.tables import TIME_COURSES, Stamp, numbers, part_name, read_parts, verify_part, write_part

SEEN = ("glucose_mg_dl", "insulin_mu_l", "secretion_mu_per_min", "release_mg_per_min")
TYPICAL, BORDERLINE, EXTREME = range(3)


def choose(
    size: NDArray[np.float64], growth: NDArray[np.float64], wanted: int
) -> tuple[NDArray[np.int64], NDArray[np.int8]]:
    """Which subjects keep their courses: (rows, why), ordered by row.

    size: cycle amplitude where there are cycles, else the window's range; growth: NaN where unknown. Half are those
    with a size nearest the median, a quarter those nearest the border of oscillation (least |growth|), the rest the
    largest and smallest sizes in turn; ties go to the first subject. A subject is chosen once.
    """
    taken: dict[int, int] = {}

    def take(order: NDArray[np.int64], number: int, why: int) -> None:
        for row in order:
            if number <= 0:
                return
            if int(row) not in taken:
                taken[int(row)] = why
                number -= 1

    known = np.flatnonzero(np.isfinite(size))
    quarter = wanted // 4 if np.isfinite(growth).any() else 0
    extreme = wanted // 4
    by_distance = (
        known[np.argsort(np.abs(size[known] - np.median(size[known])), kind="stable")] if len(known) else known
    )
    take(by_distance, wanted - quarter - extreme, TYPICAL)
    border = np.flatnonzero(np.isfinite(growth))
    take(border[np.argsort(np.abs(growth[border]), kind="stable")], quarter, BORDERLINE)
    rising = known[np.argsort(size[known], kind="stable")]
    ends = np.column_stack([rising[::-1], rising]).ravel()
    take(ends, extreme, EXTREME)
    rows = np.array(sorted(taken), dtype=np.int64)
    return rows, np.array([taken[int(r)] for r in rows], dtype=np.int8)


def keep_courses(study: Study, out: Path) -> None:
    """Write time_courses/ of every arm, where they are not there; with none wanted, write nothing."""
    if not study.output.time_courses:
        return
    for arm in study.arms:
        table = read_parts(
            out / "outcomes" / arm.name, ["growth_per_min", "glucose_amplitude_mg_dl", "glucose_range_mg_dl"]
        )
        swing, reach = numbers(table, "glucose_amplitude_mg_dl"), numbers(table, "glucose_range_mg_dl")
        size = swing if np.nanmax(swing, initial=0.0) > 0.0 else reach
        rows, why = choose(size, numbers(table, "growth_per_min"), study.output.time_courses)
        _write(study, out, arm, rows, why)


def _write(study: Study, out: Path, arm: Arm, rows: NDArray[np.int64], why: NDArray[np.int8]) -> None:
    if not len(rows):
        return
    grid = times(arm.duration_min, study.output.every_min)
    path = out / "time_courses" / arm.name / part_name(0)
    stamp = Stamp(courses_identity(study, arm, rows, why, grid), 0, study.recipe.count)
    if verify_part(path, TIME_COURSES, stamp):
        return
    sampled = _sampled(study, arm, rows, grid)
    n = len(grid)
    write_part(
        path,
        TIME_COURSES,
        {
            "subject": np.repeat(rows, n), "arm": arm.name, "why": np.repeat(why, n),
            "time_min": np.tile(grid, len(rows)), **{name: sampled[:, i].ravel() for i, name in enumerate(SEEN)},
        },
        stamp,
    )  # fmt: skip


def _sampled(study: Study, arm: Arm, rows: NDArray[np.int64], grid: NDArray[np.float64]) -> NDArray[np.float64]:
    """Courses of the named subjects: float64[subjects, SEEN, grid]."""
    found = body(study.model)
    people = [draw(study.recipe, int(r), int(r) + 1) for r in rows]
    values = np.concatenate([p.values for p in people])
    own = np.ascontiguousarray(values[:, : len(found.card.parameters)])
    weight = np.concatenate([p.body_weight_kg for p in people])
    who = with_own_periods(found, own, People(weight, values[:, -2], values[:, -1], np.full(len(rows), np.nan)), arm)
    return simulate_values(found, own, who, arm, SEEN).sample(grid)
