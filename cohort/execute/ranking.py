"""Run a ranking: the designs, doubled until their indices are good enough, the plain rows beside them, the redraws."""

from __future__ import annotations

import functools
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from cohort.execute.identity import ranking_identity
from cohort.execute.progress import Progress
from cohort.execute.stages import joined
from cohort.execute.tasks import Hands, Job, Piece
from cohort.infer.facts import INSTEAD, Facts, RankedArm, RankedStratum
from cohort.infer.findings import at, unsettled
from cohort.infer.ranking import PLAIN_DOUBLING, Ranking, design_rows, plain_rows, points, redrawn_rows, row_count
from cohort.infer.stored import Place, Reader, design_shards
from cohort.infer.strata import (
    affordable_doubling,
    budget,
    first_doubling,
    only_of_cycles,
    plain_wanted,
    ranked_strata,
)
from cohort.measure.outcomes import outcomes
from cohort.model.protocol import Arm
from cohort.population.recipe import from_uniforms
from cohort.study import Study
from cohort.study.arms import has_steady_input
from cohort.study.ranking import meals_of
from cohort.tables import Schema, Stamp, ranking_schema, verify_part, write_part

Array = NDArray[np.float64]
Ints = NDArray[np.int64]
Values = dict[str, Any]

SUB_BATCH = 1024
MOST_ATTEMPTS = 40
"""Redraws of one factor of one subject before it is given up and counted."""


@dataclass(frozen=True)
class Ranked:
    """What a ranking did: facts for run.json, runs made and runs found."""

    facts: Facts
    made: int
    kept: int


def run_ranking(study: Study, out: Path, hands: Hands, progress: Progress | None, slots: Mapping[str, int]) -> Ranked:
    """Make every run that the ranking lacks, doubling its designs as far as it takes. Raises what jobs raise."""
    assert study.ranking is not None
    work = _Work(study, study.ranking, out, hands, progress, _facts(study, study.ranking, slots))
    strata = [work.design(stratum) for stratum in work.facts.strata]
    work.facts = replace(work.facts, strata=tuple(strata))
    for stratum in strata:
        work.plain(stratum)
        work.redraws(stratum)
    return Ranked(work.facts, work.made, work.kept)


def slots_of(study: Study, before: Mapping[str, Any]) -> dict[str, int]:
    """A number for every arm that stays its own when arms are added: those of a folder's record first."""
    known = {str(name): int(slot) for name, slot in (before.get("slots") or {}).items()}
    free = (i for i in range(len(study.arms) + len(known)) if i not in known.values())
    return {arm.name: known[arm.name] if arm.name in known else next(free) for arm in study.arms}


def _facts(study: Study, ranking: Ranking, slots: Mapping[str, int]) -> Facts:
    recipe = study.recipe
    found = ranked_strata(recipe, ranking, study.selected)
    named = (*ranking.outcomes, *(INSTEAD if any(only_of_cycles(n) for n in ranking.outcomes) else ()))
    arms = tuple(
        RankedArm(arm.name, slots[arm.name], {n: why for n in named if (why := _absent(n, arm))}) for arm in study.arms
    )
    plain = points(PLAIN_DOUBLING)
    redrawn, _ = budget(found, ranking, len(arms), plain)
    strata = tuple(
        RankedStratum(
            r.design, i, r.refused, first_doubling(ranking), "", plain * plain_wanted(r, ranking),
            redrawn * plain_wanted(r, ranking) * (not r.refused),
        )
        for i, r in enumerate(found)
    )  # fmt: skip
    given = recipe.table is not None or study.selected
    return Facts(ranking, recipe.scaling, given, study.selected, bool(study.selection.match), arms, strata)


def _absent(outcome: str, arm: Arm) -> str:
    """Why an arm has no such outcome, or ""."""
    head, _, column = outcome.partition(".")
    if column:
        return "" if int(head.removeprefix("meal_")) <= meals_of(arm) else f"the arm has {meals_of(arm)} meals"
    if outcome.startswith("clamp_"):
        return "" if arm.clamp is not None else "the arm has no clamp"
    cycle = (
        outcome in INSTEAD or only_of_cycles(outcome) or outcome.startswith("equilibrium_") or "amplitude" in outcome
    )
    return "the arm has no steady input" if cycle and not has_steady_input(arm) else ""


@dataclass
class _Work:
    """The state of a ranking under way."""

    study: Study
    ranking: Ranking
    out: Path
    hands: Hands
    progress: Progress | None
    facts: Facts
    made: int = 0
    kept: int = 0

    def __getstate__(self) -> dict[str, Any]:
        """What goes to a worker with a job: not who does the work, nor who watches."""
        return {**self.__dict__, "hands": None, "progress": None}

    @functools.cached_property
    def schema(self) -> Schema:
        study = self.study
        clamped = any(arm.clamp is not None for arm in study.arms)
        return ranking_schema(study.recipe.varied, clamped, max(meals_of(arm) for arm in study.arms))

    @functools.cached_property
    def arms(self) -> tuple[tuple[Arm, RankedArm], ...]:
        """Arms that have any outcome that is asked for."""
        some = [a for a in self.facts.arms if any(n not in a.absent for n in self.facts.outcomes)]
        by_name = {arm.name: arm for arm in self.study.arms}
        return tuple((by_name[a.name], a) for a in some)

    def design(self, stratum: RankedStratum) -> RankedStratum:
        """Run a stratum's design, doubling until it is settled or max_runs is reached."""
        if stratum.refused:
            return stratum
        plain = points(PLAIN_DOUBLING)
        _, runs = budget(
            ranked_strata(self.study.recipe, self.ranking, self.study.selected),
            self.ranking,
            len(self.facts.arms),
            plain,
        )
        last = affordable_doubling(stratum.design, self.ranking, runs)
        doubling = stratum.doubling
        for step in range(doubling + 1):
            self._run(self._design_jobs(stratum, step))
        while True:
            stratum = at(stratum, doubling)
            why = unsettled(self.out, self.facts, stratum) if self.ranking.method == "sobol" else ""
            if not why:
                return at(stratum, doubling, "settled" if self.ranking.method == "sobol" else "")
            if doubling == last:
                return at(stratum, doubling, f"max_runs = {self.ranking.max_runs:,} is reached; {why}")
            doubling += 1
            self._run(self._design_jobs(stratum, doubling))

    def plain(self, stratum: RankedStratum) -> None:
        """Run a stratum's independent rows, where any are wanted."""
        if stratum.plain:
            self._run(self._plain_jobs(stratum))

    def redraws(self, stratum: RankedStratum) -> None:
        """Redraw each factor of every plain row that oscillates until it does so again."""
        for arm, ranked in self.arms:
            if stratum.redrawn and "oscillates" not in ranked.absent:
                for attempt in range(1, MOST_ATTEMPTS + 1):
                    factor, position = self._pending(stratum, ranked, attempt)
                    if not len(factor):
                        break
                    self._run([self._redraw_job(stratum, arm, ranked, attempt, factor, position)])

    def _run(self, jobs: Sequence[Job | int]) -> None:
        """Jobs are done; numbers are runs that were there."""
        left = [job for job in jobs if isinstance(job, Job)]
        runs = sum(piece.runs for job in left for piece in job.pieces)
        self.made += runs
        self.kept += sum(job for job in jobs if isinstance(job, int))
        if self.progress:
            self.progress.more(runs)
        self.hands.do(left, self.progress)

    def _design_jobs(self, stratum: RankedStratum, doubling: int) -> list[Job | int]:
        design = stratum.design
        if not row_count(design, doubling):
            return []
        design_rows(design, doubling, 0, 1)  # base points are made once, before there are threads
        jobs: list[Job | int] = []
        for shard, first, last in design_shards(design, doubling):
            for arm, ranked in self.arms:
                path = Place(self.out, stratum.index, ranked.slot).part("design", doubling, shard)
                rows = functools.partial(self._design_values, stratum, doubling)
                jobs.append(self._job(path, stratum, arm, (first, last), rows))
        return jobs

    def _plain_jobs(self, stratum: RankedStratum) -> list[Job | int]:
        jobs: list[Job | int] = []
        for arm, ranked in self.arms:
            path = Place(self.out, stratum.index, ranked.slot).part("plain", 0, 0)
            jobs.append(
                self._job(path, stratum, arm, (0, stratum.plain), functools.partial(self._plain_values, stratum))
            )
        return jobs

    def _redraw_job(
        self, stratum: RankedStratum, arm: Arm, ranked: RankedArm, attempt: int, factor: Ints, position: Ints
    ) -> Job | int:
        path = Place(self.out, stratum.index, ranked.slot).part("redraw", 0, attempt)
        u = np.empty((len(factor), len(stratum.design.names)))
        for j, one in enumerate(stratum.design.factors):
            u[factor == j] = redrawn_rows(stratum.design, one, attempt, position[factor == j])
        words = np.array([f.name for f in stratum.design.factors], dtype=object)[factor]

        def rows(start: int, stop: int) -> tuple[Values, Array]:
            here = slice(start, stop)
            keys = _keys(stratum, "redraw", 0, np.full(stop - start, attempt), words[here], position[here])
            return keys, u[here]

        return self._job(path, stratum, arm, (0, len(factor)), rows)

    def _design_values(self, stratum: RankedStratum, doubling: int, start: int, stop: int) -> tuple[Values, Array]:
        rows = design_rows(stratum.design, doubling, start, stop)
        words = np.array(stratum.design.blocks, dtype=object)[rows.block]
        return _keys(stratum, "design", doubling, rows.replicate, words, rows.position), rows.u

    def _plain_values(self, stratum: RankedStratum, start: int, stop: int) -> tuple[Values, Array]:
        position = np.arange(start, stop)
        words = np.full(stop - start, "plain", dtype=object)
        return _keys(stratum, "plain", 0, np.zeros(stop - start, np.int64), words, position), plain_rows(
            stratum.design, start, stop
        )

    def _job(self, path: Path, stratum: RankedStratum, arm: Arm, span: tuple[int, int], rows: Any) -> Job | int:
        """A job that writes one part, or the number of its runs where it is there and can be trusted."""
        first, last = span
        stamp = Stamp(ranking_identity(self.study, stratum.design, arm), first, last)
        if verify_part(path, self.schema, stamp) and self._same_people(path, stratum, span, rows):
            return last - first

        def make(start: int, stop: int) -> Values:
            keys, people, weight = self._people(stratum, *rows(start, stop))
            return {**keys, **self._outcomes(people, weight, arm)}

        pieces = tuple(
            Piece(min(start + SUB_BATCH, last) - start, functools.partial(make, start, min(start + SUB_BATCH, last)))
            for start in range(first, last, SUB_BATCH)
        )
        return Job(
            path.stem, pieces, lambda made: write_part(path, self.schema, self._complete(joined(made), arm), stamp)
        )

    def _people(self, stratum: RankedStratum, keys: Values, u: Array) -> tuple[Values, Array, Array]:
        recipe = self.study.recipe
        columns = {name: u[:, j] for j, name in enumerate(stratum.design.names)}
        values, weight = from_uniforms(recipe, stratum.index, columns, len(u))
        varied = {p: values[:, recipe.names.index(p)].copy() for p in recipe.varied}
        return {**keys, "body_weight_kg": weight, **varied}, values, weight

    def _same_people(self, path: Path, stratum: RankedStratum, span: tuple[int, int], rows: Any) -> bool:
        """Whether a part's parameters are, row by row, those the design has now (libraries that make designs change)."""
        from cohort.infer.stored import read_numbers

        wanted, _, _ = self._people(stratum, *rows(*span))
        names = ["position", "replicate", *self.study.recipe.varied]
        stored = read_numbers(path, names)
        return all(np.array_equal(stored[name], wanted[name], equal_nan=True) for name in names)

    def _outcomes(self, values: Array, weight: Array, arm: Arm) -> Values:
        found = outcomes(self.study.model, values, weight, arm, responses=False)
        columns: Values = dict(found.outcomes)
        if len(found.meals["row"]):
            for name, column in found.meals.items():
                if name not in ("row", "meal", "meal_time_min"):
                    for k, of_meal in enumerate(column.reshape(len(values), -1).T):
                        columns[f"meal_{k + 1}.{name}"] = of_meal.copy()
        return columns

    def _complete(self, values: Values, arm: Arm) -> Values:
        """Columns that other arms have are missing here."""
        n = len(values["position"])
        lacking = {c.name: np.full(n, np.nan) for c in self.schema.columns if c.name not in values and c.name != "arm"}
        return {**values, **lacking, "arm": arm.name}

    def _pending(self, stratum: RankedStratum, arm: RankedArm, attempt: int) -> tuple[Ints, Ints]:
        """(factor, position) of redraws that no attempt before this one kept oscillating."""
        reader = Reader(Place(self.out, stratum.index, arm.slot), stratum.design)
        yes = reader.plain(["oscillates"])["oscillates"][: stratum.redrawn] == 1.0
        left = np.repeat(yes[None, :], len(stratum.design.factors), axis=0)
        for factor, position, found in reader.redraws(["oscillates"], attempt):
            kept = found["oscillates"] == 1.0
            left[factor[kept], position[kept]] = False
        factor, position = np.nonzero(left)
        return factor, position


def _keys(stratum: RankedStratum, kind: str, doubling: int, replicate: Ints, block: Any, position: Ints) -> Values:
    n = len(position)
    return {
        "stratum": np.full(n, stratum.design.stratum, dtype=object), "kind": np.full(n, kind, dtype=object),
        "doubling": np.full(n, doubling, np.int64), "replicate": replicate, "block": block, "position": position,
    }  # fmt: skip
