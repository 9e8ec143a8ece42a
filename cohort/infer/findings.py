"""The whole of a ranking: every arm, stratum and outcome, what is refused, and what stands in for it."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, field, replace
from itertools import combinations
from pathlib import Path

from cohort.infer.analysis import (
    Outcome,
    convergence_of,
    design_rows_of,
    differences,
    read_outcome,
    spanning,
    unresolved_refusal,
)
from cohort.infer.facts import Facts, RankedArm, RankedStratum
from cohort.infer.plain import PlainRows, given_rows, mechanism_rows, plain_rows_of
from cohort.infer.rows import Row, Step
from cohort.infer.stored import Place, Reader
from cohort.infer.strata import only_of_cycles

MOST_ARMS_PAIRWISE = 10
AMONG = " among oscillators"
WITH_ONE = " among those with one"


@dataclass
class Findings:
    """Rows of sensitivity.parquet and convergence.parquet."""

    rows: list[Row] = field(default_factory=list)
    steps: list[Step] = field(default_factory=list)


def findings(folder: Path, facts: Facts) -> Findings:
    """Analyse the stored runs of a ranking. Raises ValueError where a part is missing or not of the design."""
    found = Findings()
    for stratum in facts.strata:
        kept: dict[str, list[tuple[str, Outcome]]] = {}
        for arm in facts.arms:
            for outcome, made in _arm(folder, facts, stratum, arm, found):
                kept.setdefault(outcome, []).append((arm.name, made))
        for outcome, arms in kept.items():
            found.rows += _differences(stratum, outcome, arms)
    return found


def _arm(
    folder: Path, facts: Facts, stratum: RankedStratum, arm: RankedArm, found: Findings
) -> Iterator[tuple[str, Outcome]]:
    """All outcomes of one arm and stratum; yields those read from the design."""
    reader = Reader(Place(folder, stratum.index, arm.slot), stratum.design)
    plain = None
    if _has_plain(facts, stratum) and any(name not in arm.absent for name in facts.outcomes):
        plain = plain_rows_of(reader, facts, arm, facts.outcomes)
    for outcome in facts.outcomes:
        blank = Row(arm.name, stratum.design.stratum, outcome, _estimand(stratum))
        if outcome in arm.absent:
            if outcome in facts.ranking.outcomes:
                found.rows.append(blank.refusal(arm.absent[outcome]))
        elif stratum.refused:
            found.rows += _without_design(facts, stratum, blank, plain, reader)
        else:
            made = _by_design(reader, stratum, blank, found)
            yield outcome, made
            if plain is None or not made.refused:
                continue
            if only_of_cycles(outcome):
                found.rows += given_rows(blank, stratum, plain, AMONG)
                found.rows += mechanism_rows(blank, reader, stratum, plain)
            elif outcome == "linear_period_min":
                found.rows += given_rows(blank, stratum, plain, WITH_ONE)


def _has_plain(facts: Facts, stratum: RankedStratum) -> bool:
    return stratum.plain > 0 or (facts.given and len(stratum.design.factors) > 1 and "'sobol'" not in stratum.refused)


def _estimand(stratum: RankedStratum) -> str:
    return "elementary effects" if stratum.design.method == "morris" else "everyone"


def _without_design(
    facts: Facts, stratum: RankedStratum, blank: Row, plain: PlainRows | None, reader: Reader
) -> list[Row]:
    """The refusal, and what independent rows say instead."""
    rows = [blank.refusal(stratum.refused)] if blank.outcome in facts.ranking.outcomes else []
    if plain is None:
        return rows
    if only_of_cycles(blank.outcome):
        more = [] if facts.given else mechanism_rows(blank, reader, stratum, plain)
        return rows + given_rows(blank, stratum, plain, AMONG) + more
    return rows + given_rows(blank, stratum, plain, left=True)


def _by_design(reader: Reader, stratum: RankedStratum, blank: Row, found: Findings) -> Outcome:
    """Indices of one outcome over everyone, written to `found`."""
    if blank.outcome != "oscillates":
        made = read_outcome(reader, stratum, blank.outcome)
        found.rows += design_rows_of(blank, stratum, made)
        found.steps += convergence_of(blank, stratum, made)
        return made
    unresolved, runs, why = unresolved_refusal(reader, stratum)
    if why:
        found.rows.append(blank.refusal(why, runs))
        return Outcome(why)
    made = read_outcome(reader, stratum, blank.outcome, 0.0)
    found.steps += convergence_of(blank, stratum, made)
    if not unresolved:
        found.rows += design_rows_of(blank, stratum, made)
        return made
    other = read_outcome(reader, stratum, blank.outcome, 1.0)
    found.rows += spanning(lambda as_: design_rows_of(blank, stratum, other if as_ else made), blank)
    return made


def _differences(stratum: RankedStratum, outcome: str, arms: list[tuple[str, Outcome]]) -> list[Row]:
    """Every pair of arms; against the first alone where there are many."""
    pairs = list(combinations(arms, 2)) if len(arms) <= MOST_ARMS_PAIRWISE else [(arms[0], other) for other in arms[1:]]
    rows: list[Row] = []
    for (one, a), (two, b) in pairs:
        blank = Row(f"{one} minus {two}", stratum.design.stratum, outcome, "difference between arms")
        rows += differences(blank, stratum, a, b)
    return rows


def unsettled(folder: Path, facts: Facts, stratum: RankedStratum) -> str:
    """Why the indices of a stratum's design are not good enough yet, or "" where they are: a half-width of S1 or ST at or
    above the tolerance, or an order above it that is open, in any arm and outcome that can be ranked at all."""
    from cohort.infer.variance import settled

    for arm in facts.arms:
        reader = Reader(Place(folder, stratum.index, arm.slot), stratum.design)
        for outcome in facts.outcomes:
            if outcome in arm.absent or only_of_cycles(outcome):
                continue
            made = read_outcome(reader, stratum, outcome, 0.0 if outcome == "oscillates" else None)
            if made.refused and "too rare" in made.refused:
                return f"{arm.name}, {outcome}: {made.refused}"
            if made.refused or made.effects is not None:
                continue
            state = settled(made.steps[-1][1], facts.ranking.tolerance)
            names = [f.name for f in stratum.design.factors]
            if state.widest >= state.tolerance:
                return f"{arm.name}, {outcome}: a half-width of {state.widest:.3f}"
            if state.unordered:
                j, k = state.unordered[0]
                return f"{arm.name}, {outcome}: {names[j]} and {names[k]} are not in order yet"
    return ""


def at(stratum: RankedStratum, doubling: int, stopped: str = "") -> RankedStratum:
    """The stratum at another doubling."""
    return replace(stratum, doubling=doubling, stopped=stopped)
