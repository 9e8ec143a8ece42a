"""What a study will do before it does it: subjects, runs, time, memory and disk."""

from __future__ import annotations

import math
import os
from dataclasses import dataclass

import numpy as np

from cohort.infer.ranking import Ranking
from cohort.model.catalogue import MODELS
from cohort.model.protocol import Arm, Meal, OnOff, Sine
from cohort.population.laws import Fixed
from cohort.population.recipe import WEIGHT, Stratum
from cohort.quantities import INPUT_PARAMETERS, PARAMETERS
from cohort.study.arms import has_steady_input, pieces
from cohort.study.oddities import published_growth
from cohort.study.ranking import ranked_runs
from cohort.study.sampling import Sampling
from cohort.study.spec import Study

SHARD = 16_384
"""Consecutive subjects that are simulated, stored and resumed together."""

# Costs on the machine the figures in the README were measured on; `cohort check` says that times are estimates.
US_PER_HOUR = 1.9
US_PER_HOUR_MOVING = 4.0
US_PER_HOUR_CLAMP = 5.0
US_PER_REST = 10.0
US_PER_ORBIT = 80.0
US_PER_SUBJECT_WRITTEN = 8.0
US_PER_SERIES_SAMPLE = 6.0
STATES_TIMED = 6
SECONDS_AT_START = 1.2
BYTES_PER_OUTCOME = 4.4
OUTCOME_COLUMNS = 48
MEAL_COLUMNS = 9
SEEN_COLUMNS = 22
BASE_MEMORY_MB = 230.0
MEMORY_PER_WORKER_MB = 90.0
MB_PER_PIECE = 0.125
"""Of an arm's inputs, for the 1,024 subjects that a worker has at a time."""
MB_PER_SUBJECT_COUNTED, MB_PER_SUBJECT_AND_ARM = 64e-6, 16e-6
"""Columns of everyone that are held at once when results are counted and drawn."""


@dataclass(frozen=True)
class ArmPlan:
    """One arm: its hours, how many stops its inputs make, and seconds of one core it takes."""

    name: str
    hours: float
    stops: int
    core_seconds: float


@dataclass(frozen=True)
class LawRow:
    """The 5th, 50th and 95th percentile of a law, and the share its physical range cuts off."""

    stratum: str
    parameter: str
    unit: str
    p5: float
    p50: float
    p95: float
    cut: float


@dataclass(frozen=True)
class Plan:
    """The whole run. seconds: of the clock, on `workers` workers; ranking: runs of the ranking at its first size;
    drawn: runs of draws of the population."""

    subjects: int
    shards: int
    runs: int
    workers: int
    arms: tuple[ArmPlan, ...]
    seconds: float
    memory_mb: float
    disk_mb: float
    laws: tuple[LawRow, ...]
    ranking: int = 0
    drawn: int = 0


def plan(study: Study, workers: int | None = None) -> Plan:
    """Return what running the study takes; nothing is drawn or simulated."""
    workers = workers or os.cpu_count() or 1
    n = study.recipe.count
    arms = tuple(_arm(study, arm) for arm in study.arms)
    samples = sum(len(s.times_min) for s in study.sampling.schedules) if study.sampling else 0
    seen = 2.0 * n * len(arms) * samples * US_PER_SERIES_SAMPLE * 1e-6
    core = sum(a.core_seconds for a in arms) + seen + n * US_PER_SUBJECT_WRITTEN * 1e-6 * (len(arms) + 1)
    ranked = ranked_runs(study.ranking, study.recipe, len(arms), study.selected) if study.ranking else 0
    outer = study.recipe.population
    drawn = (outer.outer + 1) * outer.inner * len(arms) if outer else 0
    core *= 1.0 + (ranked + drawn) / (n * len(arms))
    subject_columns = len(study.recipe.varied) + 3
    rows_mb = n * (len(arms) * OUTCOME_COLUMNS + subject_columns) * BYTES_PER_OUTCOME / 1e6
    meals = sum(pieces(s, a.duration_min) for a in study.arms for s in a.glucose if isinstance(s, Meal))
    series = 2 * len(study.arms) * len(study.sampling.schedules) if study.sampling else 0
    more_mb = n * (meals * MEAL_COLUMNS + series * SEEN_COLUMNS) * BYTES_PER_OUTCOME / 1e6
    points = sum(a.duration_min / study.output.every_min + 1 for a in study.arms)
    rows_mb *= 1.0 + ranked / (n * len(arms))
    disk = rows_mb + more_mb + points * study.output.time_courses * 6 * BYTES_PER_OUTCOME / 1e6
    return Plan(
        n, -(-n // SHARD), n * len(arms), workers, arms, SECONDS_AT_START + core / max(min(workers, n / 256), 1.0),
        _memory_mb(study, workers), disk, _laws(study), ranked, drawn,
    )  # fmt: skip


def _memory_mb(study: Study, workers: int) -> float:
    most = max((sum(pieces(s, a.duration_min) for s in (*a.glucose, *a.insulin)) for a in study.arms), default=0)
    table = study.recipe.table
    columns = 0 if table is None else len(table.columns) + 3
    each = MB_PER_SUBJECT_COUNTED + MB_PER_SUBJECT_AND_ARM * len(study.arms) + 8e-6 * columns
    counted = study.recipe.count * each
    return BASE_MEMORY_MB + (MEMORY_PER_WORKER_MB + MB_PER_PIECE * most) * workers + counted


def _arm(study: Study, arm: Arm) -> ArmPlan:
    hours = arm.duration_min / 60.0
    stops = 1
    eating = False
    for shape in (*arm.glucose, *arm.insulin):
        if isinstance(shape, OnOff) and isinstance(shape.period_min, float):
            stops += 2 * int(arm.duration_min / shape.period_min)
        eating |= isinstance(shape, Meal | Sine)
    hourly = US_PER_HOUR_CLAMP if arm.clamp else US_PER_HOUR_MOVING if eating else US_PER_HOUR
    per_subject = hours * hourly + 0.15 * stops
    if has_steady_input(arm):
        growth = published_growth(study.model, arm)
        share = 0.0 if growth is None else 1.0 / (1.0 + math.exp(-min(max(growth * 800.0, -30.0), 30.0)))
        per_subject += US_PER_REST + US_PER_ORBIT * share
    size = 0.4 + 0.6 * len(MODELS[study.model].states) / STATES_TIMED
    return ArmPlan(arm.name, hours, stops, per_subject * size * study.recipe.count * 1e-6)


def _laws(study: Study) -> tuple[LawRow, ...]:
    if study.recipe.table is not None:
        return ()
    rows = (_law_row(study, stratum, name) for stratum in study.recipe.strata for name in study.recipe.drawn)
    return tuple(row for row in rows if row is not None)


def _law_row(study: Study, stratum: Stratum, name: str) -> LawRow | None:
    law = stratum.weight if name == WEIGHT else stratum.laws.get(name)
    if law is None or isinstance(law, Fixed):
        return None
    inner, mass = study.recipe.cut_law(stratum, name)
    low, middle, high = inner.quantile(np.array([0.05, 0.5, 0.95]))
    unit = "kg" if name == WEIGHT else (PARAMETERS.get(name) or INPUT_PARAMETERS[name]).unit
    return LawRow(stratum.name, name, unit, float(low), float(middle), float(high), mass)


# ---- in words ----------------------------------------------------------------------------------------------------


def describe(study: Study, found: Plan) -> str:
    """The plan as a colleague would tell it, in lines of at most 80 characters."""
    n_arms = len(found.arms)
    lines = [
        f"{study.title}",
        f"  model {study.model}, seed {study.seed}",
        f"  {found.subjects:,} subjects x {n_arms} arm{'s' * (n_arms > 1)} = {found.runs:,} runs "
        f"in {found.shards:,} shard{'s' * (found.shards > 1)}",
        f"  about {duration(found.seconds)} on {found.workers} worker{'s' * (found.workers > 1)}, "
        f"{found.memory_mb:,.0f} MB of memory, {size(found.disk_mb)} of disk (estimates)",
        "",
        "  arm                               hours   steady input",
    ]
    if study.ranking:
        lines[3:3] = _ranking_lines(study.ranking, found.ranking)
    if study.recipe.population:
        outer = study.recipe.population
        lines.insert(3, f"  {outer.outer:,} draws of the population and the stated one, {outer.inner:,} people each: "
                     f"{found.drawn:,} runs")  # fmt: skip
    if study.sampling:
        lines[3:3] = _sampling_lines(study.sampling)
    for arm, row in zip(study.arms, found.arms, strict=True):
        lines.append(f"  {row.name[:32]:32s}  {row.hours:5g}   {'yes' if has_steady_input(arm) else 'no'}")
    if found.laws:
        lines += ["", "  varied between subjects            5 %       50 %       95 %"]
        many = len({row.stratum for row in found.laws}) > 1
        for law in found.laws:
            label = f"{law.stratum}: {law.parameter}" if many else law.parameter
            lines.append(
                f"  {label[:28]:28s} {law.p5:10.4g} {law.p50:10.4g} {law.p95:10.4g}  {_unit(law.unit)}".rstrip()
            )
    elif study.recipe.table is None:
        lines += ["", "  nothing varies between subjects: every row will be the same body"]
    return "\n".join(lines)


def _ranking_lines(ranking: Ranking, runs: int) -> list[str]:
    if ranking.method == "morris":
        return [f"  ranking by morris: {ranking.trajectories} trajectories, {runs:,} runs and what redraws take"]
    return [
        f"  ranking by sobol: {runs:,} runs (base {ranking.base} x {ranking.replicates}), at most {ranking.max_runs:,},",
        f"  until every half-width is below {ranking.tolerance:g}",
    ]


def _sampling_lines(sampling: Sampling) -> list[str]:
    glucose, rule, many = sampling.readings["glucose"], sampling.rule, len(sampling.schedules) > 1
    return [
        f"  {len(sampling.schedules)} sampling schedule{'s' * many}; glucose assay error {100 * glucose.cv:g} %, own",
        f"  irregularity {100 * glucose.background_sd:g} % over {glucose.background_time_min:g} min; detected in "
        f"{rule.detect_in}, false alarms {100 * rule.false_alarm:g} %",
        "  (the first run with a schedule simulates noise for it: 5 to 60 s more)",
    ]


def _unit(unit: str) -> str:
    return "" if unit == "1" else unit


def duration(seconds: float) -> str:
    """A time as a person says it: 4 s, 12 min, 3.5 h."""
    if seconds < 90:
        return f"{max(seconds, 1):.0f} s"
    return f"{seconds / 60:.0f} min" if seconds < 5400 else f"{seconds / 3600:.1f} h"


def size(megabytes: float) -> str:
    """A size as a person says it: 12 MB, 3.4 GB."""
    return f"{max(megabytes, 1):,.0f} MB" if megabytes < 2000 else f"{megabytes / 1000:,.1f} GB"
