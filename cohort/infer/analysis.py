"""From the stored runs of a design to its indices: what every outcome's ranking is, or why it is refused."""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace
from itertools import combinations

import numpy as np
from numpy.typing import NDArray

from cohort.infer.effects import Effects, effects, elementary_effects
from cohort.infer.facts import RankedStratum
from cohort.infer.intervals import Estimate
from cohort.infer.ranking import design_rows, points
from cohort.infer.rows import Row, Step
from cohort.infer.stored import Reader, read_numbers, read_words
from cohort.infer.strata import only_of_cycles
from cohort.infer.variance import Indices, estimates, indices
from cohort.infer.verdicts import effect_floor, engine_error, variance_floor, verdict, verdict_of_effect

Array = NDArray[np.float64]

LOGARITHMIC = ("period_min", "linear_period_min")
"""Outcomes whose logarithm is analysed."""
MOST_UNRESOLVED = 0.001
SHOWN_FAILURES = 3
SOBOL_METHOD = "S1 Saltelli 2010, ST Jansen 1999; t over {} scrambles, 95 %"
AZZINI_METHOD = "S1 and ST Azzini 2021, S2 Saltelli 2002; t over {} scrambles, 95 %"
MORRIS_METHOD = "{} levels, steps across the middle 95 %; t over {} trajectories, 95 %"


@dataclass(frozen=True)
class Outcome:
    """One outcome's design runs, read and judged. refused: why there are no indices, or "". steps: indices by doubling
    (Sobol); effects: elementary effects float64[trajectories, factors] (Morris); typical, variance: of the outcome over
    everyone; runs: how many it rests on."""

    refused: str
    steps: tuple[tuple[int, Indices], ...] = ()
    effects: Array | None = None
    typical: float = 0.0
    variance: float = 0.0
    runs: int = 0


def read_outcome(reader: Reader, stratum: RankedStratum, name: str, unresolved: float | None = None) -> Outcome:
    """Read one outcome of the design and make its indices at every doubling. unresolved: what missing outputs count as.

    Raises ValueError where the stored runs cannot be trusted.
    """
    design, steps, moved = stratum.design, [], []
    missing, runs, total, squares = 0, 0, 0.0, 0.0
    by_doubling: list[list[Indices]] = [[] for _ in range(stratum.doubling + 1)]
    for replicate in range(design.replicates):
        y = reader.replicate(replicate, stratum.doubling, name)
        runs += y.size
        y = np.log(y) if name in LOGARITHMIC else y
        y = y if unresolved is None else np.where(np.isnan(y), unresolved, y)
        gone = int(np.isnan(y).sum())
        missing += gone
        if gone or missing:
            continue
        base = y if design.method == "morris" else y[:2]
        total += float(base.sum())
        squares += float((base**2).sum())
        if design.method == "morris":
            moved.append(y[:, 0])
        else:
            for doubling, found in enumerate(by_doubling):
                found += _at_doubling(y, doubling, design.second_order)
    if missing:
        return Outcome(_undefined(reader, stratum, name, missing, runs), runs=runs)
    count = runs if design.method == "morris" else 2 * runs // len(design.blocks)
    typical = total / count
    variance = max(squares / count - typical * typical, 0.0)
    if variance <= engine_error(name, typical) ** 2:
        return Outcome(f"the same in all {runs:,} runs as far as they are accurate ({typical:.6g})", runs=runs)
    if design.method == "morris":
        rows = design_rows(design, 0, 0, runs).u.reshape(design.replicates, len(design.blocks), -1)
        return Outcome("", (), elementary_effects(design, rows, np.array(moved)), typical, variance, runs)
    steps = [(k, _together(found)) for k, found in enumerate(by_doubling) if len(found) == design.replicates]
    if not steps or steps[-1][0] != stratum.doubling:
        return Outcome(f"the same in all runs of a replicate: too rare for {runs:,} runs", runs=runs)
    return Outcome("", tuple(steps), None, typical, variance, runs)


def _at_doubling(y: Array, doubling: int, second_order: bool) -> list[Indices]:
    """The indices of one replicate at a doubling; none where it does not vary there."""
    try:
        return [indices(y[None, :, : points(doubling)], second_order)]
    except ValueError:
        return []


def _together(found: list[Indices]) -> Indices:
    pairs = [f.S2 for f in found if f.S2 is not None]
    return Indices(
        np.concatenate([f.S1 for f in found]), np.concatenate([f.ST for f in found]),
        np.concatenate(pairs) if pairs else None, sum(f.n for f in found),
    )  # fmt: skip


def _undefined(reader: Reader, stratum: RankedStratum, name: str, missing: int, runs: int) -> str:
    """Why outputs are missing, with numbers; failed runs are named with where they lie."""
    why: Counter[str] = Counter()
    failed: list[str] = []
    for path, _ in reader.parts(stratum.doubling):
        gone = np.flatnonzero(np.isnan(read_numbers(path, [name])[name]))
        regime = read_words(path, "regime")
        for row in gone:
            word = regime[row] or ""
            why[word if word in ("failed", "undecided") else _lacking(name)] += 1
            if word == "failed" and len(failed) < SHOWN_FAILURES:
                failed.append(_where(reader, path, int(row)))
    said = ", ".join(f"{n:,} {word}" for word, n in why.most_common())
    head = f"undefined for all {runs:,} runs" if missing == runs else f"undefined for {missing:,} of {runs:,} runs"
    places = f"; failed: {'; '.join(failed)}" if failed else ""
    return f"{head} ({said}){places}"


def _lacking(name: str) -> str:
    if only_of_cycles(name):
        return "not oscillating"
    return "with a real leading eigenvalue" if name == "linear_period_min" else "without a value"


def _where(reader: Reader, path: object, row: int) -> str:
    from pathlib import Path

    file = Path(str(path))
    block = read_words(file, "block")[row]
    names = [n if n != "weight" else "body_weight_kg" for n in reader.design.names]
    numbers = read_numbers(file, ["replicate", "position", *names])
    at = ", ".join(f"{n} {numbers[n][row]:.4g}" for n in names)
    return f"replicate {numbers['replicate'][row]:.0f}, {block}, position {numbers['position'][row]:.0f} at {at}"


# ---- indices as rows ---------------------------------------------------------------------------------------------


def design_rows_of(blank: Row, stratum: RankedStratum, found: Outcome) -> list[Row]:
    """Rows of sensitivity.parquet of one outcome; blank holds arm, stratum, outcome and estimand."""
    if found.refused:
        return [replace(blank, method=_method(stratum)).refusal(found.refused, found.runs)]
    blank = replace(blank, method=_method(stratum))
    if found.effects is not None:
        return _effect_rows(blank, stratum, found)
    return _index_rows(blank, stratum, found.steps[-1][1], variance_floor(blank.outcome, found.typical, found.variance))


def _method(stratum: RankedStratum) -> str:
    design = stratum.design
    if design.method == "morris":
        return MORRIS_METHOD.format(design.levels, design.replicates)
    return (AZZINI_METHOD if design.second_order else SOBOL_METHOD).format(design.replicates)


def _index_rows(blank: Row, stratum: RankedStratum, found: Indices, floor: float | None) -> list[Row]:
    names = [f.name for f in stratum.design.factors]
    first, total = estimates(found.S1, found.n), estimates(found.ST, found.n)
    rows = []
    for name, s, t in zip(names, first, total, strict=True):
        word = None if floor is None else verdict(s, t, floor)
        rows += [blank.of(name, "S1", s).judged(floor, word), blank.of(name, "ST", t).judged(floor, word)]
    if found.S2 is not None:
        for (j, k), pair in zip(combinations(range(len(names)), 2), estimates(found.S2, found.n), strict=True):
            rows.append(blank.of(names[j], "S2", pair, names[k]).judged(floor, None))
    return rows


def _effect_rows(blank: Row, stratum: RankedStratum, found: Outcome) -> list[Row]:
    assert found.effects is not None
    design = stratum.design
    made = [replace_n(e, found.runs) for e in effects(found.effects, tuple(len(f.columns) > 1 for f in design.factors))]
    step = design.levels / (2.0 * (design.levels - 1.0))
    floor = effect_floor(blank.outcome, found.typical, step)
    largest = max(e.mu_star.value for e in made)
    rows = []
    for factor, e in zip(design.factors, made, strict=True):
        word = verdict_of_effect(e.mu_star, e.sigma, largest, floor)
        for index, estimate in (("mu", e.mu), ("mu_star", e.mu_star), ("sigma", e.sigma)):
            if estimate is not None:
                rows.append(blank.of(factor.name, index, estimate).judged(floor, word))
    return rows


def replace_n(found: Effects, n: int) -> Effects:
    """Effects that say how many runs they rest on, not how many trajectories."""
    kinds = (None if e is None else replace(e, n=n) for e in (found.mu, found.mu_star, found.sigma))
    mu, mu_star, sigma = kinds
    assert mu_star is not None
    return Effects(mu, mu_star, sigma)


def convergence_of(blank: Row, stratum: RankedStratum, found: Outcome) -> Iterator[Step]:
    """The same indices at every doubling from the first."""
    if found.effects is not None:
        yield from (Step(row, 0) for row in _effect_rows(blank, stratum, found))
    for doubling, at in found.steps:
        yield from (Step(row, doubling) for row in _index_rows(blank, stratum, at, None))


def differences(blank: Row, stratum: RankedStratum, one: Outcome, two: Outcome) -> list[Row]:
    """Indices of one arm minus another's; both arms ran the same design, so their errors are paired."""
    if one.refused or two.refused:
        return []
    names = [f.name for f in stratum.design.factors]
    blank = replace(blank, method=_method(stratum))
    if one.effects is not None and two.effects is not None:
        paired = np.abs(one.effects) - np.abs(two.effects)
        return [blank.of(n, "mu_star", e) for n, e in zip(names, _paired(paired, one.runs + two.runs), strict=True)]
    a, b = one.steps[-1][1], two.steps[-1][1]
    rows = []
    for index, kind in (("S1", a.S1 - b.S1), ("ST", a.ST - b.ST)):
        rows += [blank.of(n, index, e) for n, e in zip(names, _paired(kind, a.n + b.n), strict=True)]
    return rows


def _paired(replicates: Array, n: int) -> list[Estimate]:
    return [Estimate.of_replicates(column, n) for column in replicates.T]


def unresolved_refusal(reader: Reader, stratum: RankedStratum) -> tuple[int, int, str]:
    """(unresolved runs, all runs, why `oscillates` is refused or "")."""
    missing = runs = 0
    for path, _ in reader.parts(stratum.doubling):
        y = read_numbers(path, ["oscillates"])["oscillates"]
        missing, runs = missing + int(np.isnan(y).sum()), runs + len(y)
    if missing <= MOST_UNRESOLVED * runs:
        return missing, runs, ""
    return missing, runs, f"{missing:,} of {runs:,} runs are unresolved (undecided or failed), above 0.1 %"


def spanning(rows: Callable[[float], list[Row]], blank: Row) -> list[Row]:
    """Rows whose intervals span both countings of unresolved runs, and the two countings after them."""
    no, yes = rows(0.0), rows(1.0)
    if any(r.refused for r in (*no, *yes)):
        return [r for r in (*no, *yes) if r.refused][:1]
    both = [_spanning(a, b) for a, b in zip(no, yes, strict=True)]
    named = [replace(r, estimand="unresolved as no") for r in no] + [
        replace(r, estimand="unresolved as yes") for r in yes
    ]
    return [replace(r, estimand=blank.estimand) for r in both] + named


def _spanning(no: Row, yes: Row) -> Row:
    values, lows, highs = (np.array([getattr(r, name) for r in (no, yes)], float) for name in ("value", "low", "high"))
    word = no.verdict if no.verdict == yes.verdict else None
    return replace(no, value=float(values.mean()), low=float(lows.min()), high=float(highs.max()), verdict=word)
