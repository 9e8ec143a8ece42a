"""Rankings that need no design: from plain independent rows, from redraws among oscillators, from a table of people."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from cohort.infer.analysis import LOGARITHMIC
from cohort.infer.facts import Facts, RankedArm, RankedStratum
from cohort.infer.given import (
    FEWEST_ROWS,
    MOST_PLAYERS,
    association,
    association_floor,
    group_association,
    shares,
)
from cohort.infer.mechanism import mechanism
from cohort.infer.rows import Row
from cohort.infer.stored import Reader, read_cohort
from cohort.infer.verdicts import NOTHING, variance_floor, verdict_of_share
from cohort.population.functions import normal_quantile
from cohort.population.recipe import EXPONENTS, WEIGHT
from cohort.population.uniforms import generator, uniforms
from cohort.quantities import REFERENCE_WEIGHT_KG

Array = NDArray[np.float64]

BINS_METHOD = "bias-corrected bins (epsilon squared) on independent rows; t over 8 parts, 95 %"
GROUP_METHOD = "closed first order by nearest neighbours on independent rows; t over 8 parts, 95 %"
SHARE_METHOD = "Shapley effects by nearest neighbours on independent rows; t over 8 parts, 95 %"
LEFT_METHOD = "by nearest neighbours on independent rows; t over 8 parts, 95 %"
REDRAW_METHOD = "Jansen's form, redrawn until they oscillate; linearised ratio, 95 %"
FEWEST_OF_A_KIND = 80
"""Rows that must have either value of an outcome of two, so that each of the eight parts has some ten."""
MOST_STUCK = 0.01
"""Share of redraws that never oscillated above which the mechanism is refused."""


@dataclass(frozen=True)
class PlainRows:
    """Independent rows of one stratum and arm: factors' inputs on normal scores float64[n, names], and outcomes."""

    x: Array
    outcomes: dict[str, Array]


def plain_rows_of(reader: Reader, facts: Facts, arm: RankedArm, outcomes: tuple[str, ...]) -> PlainRows:
    """Read plain rows, or those of a table of people. Parameters are brought back to 70 kg, where they are independent
    of weight."""
    design = reader.design
    own = tuple("body_weight_kg" if name == WEIGHT else name for name in design.names)
    wanted = tuple(name for name in outcomes if name not in arm.absent)
    if facts.given:
        with_weight = tuple(dict.fromkeys((*own, *(("body_weight_kg",) if facts.scaling != "none" else ()))))
        chosen = "accepted" if facts.matched else "eligible" if facts.selected else ""
        columns = read_cohort(reader.place.folder, arm.name, design.stratum, with_weight, wanted, chosen, design.seed)
    else:
        columns = reader.plain([*dict.fromkeys(("body_weight_kg", *own)), *wanted])
    x = np.empty((len(columns[own[0]]), len(own)))
    for j, name in enumerate(own):
        value = columns[name]
        exponent = EXPONENTS[facts.scaling].get(name)
        if exponent and "body_weight_kg" in columns and np.isfinite(columns["body_weight_kg"]).all():
            value = value / (columns["body_weight_kg"] / REFERENCE_WEIGHT_KG) ** exponent
        x[:, j] = _normal_scores(value)
    return PlainRows(x, {name: columns[name] for name in wanted})


def _normal_scores(value: Array) -> Array:
    rank = np.empty(len(value))
    rank[np.argsort(value, kind="stable")] = np.arange(len(value))
    return normal_quantile((rank + 0.5) / len(value))


def given_rows(blank: Row, stratum: RankedStratum, plain: PlainRows, among: str = "", left: bool = False) -> list[Row]:
    """Association and fair share of every factor (and with `left` what is left unexplained) over the rows that have the
    outcome. blank: arm, stratum and outcome; among: " among oscillators", or "" where everyone has it."""
    y = plain.outcomes[blank.outcome]
    have = np.isfinite(y)
    x, y = plain.x[have], np.log(y[have]) if blank.outcome in LOGARITHMIC else y[have]
    names = (f"association{among}", f"fair share{among}", *(("left unexplained",) if left else ()))
    why = _too_few(y, len(have), among)
    if why:
        return [replace(blank, estimand=name).refusal(why, len(y)) for name in names]
    rows = _association_rows(replace(blank, estimand=names[0]), stratum, x, y)
    return rows + _share_rows(replace(blank, estimand=names[1]), stratum, x, y, left)


def _too_few(y: Array, of: int, among: str) -> str:
    if len(y) < FEWEST_ROWS:
        who = "oscillate" if among else "have the outcome"
        return f"{len(y):,} of {of:,} independent rows {who}; at least {FEWEST_ROWS} are needed"
    few = _rarest(y)
    if few < FEWEST_OF_A_KIND:
        return f"{few:,} of {len(y):,} rows differ from the rest; at least {FEWEST_OF_A_KIND} are needed of either of two values"
    spread = float(np.ptp(y))
    return f"the same in all {len(y):,} rows ({y[0]:.6g})" if spread <= 1e-12 * float(np.abs(y).max()) else ""


def _rarest(y: Array) -> int:
    """Of an outcome with two values, how many rows have the rarer one; of others, all."""
    first = y == y[0]
    count = int(first.sum())
    two = bool((y[~first] == y[~first][:1]).all()) and count < len(y)
    return min(count, len(y) - count) if two else len(y)


def _association_rows(blank: Row, stratum: RankedStratum, x: Array, y: Array) -> list[Row]:
    rng = generator(stratum.design.seed, "dummy", blank.stratum, blank.outcome)
    floor = association_floor(y, rng)
    rows = []
    for factor in stratum.design.factors:
        if len(factor.columns) == 1:
            found, method = association(x[:, factor.columns[0]], y), BINS_METHOD
        else:
            found, method = group_association(x[:, list(factor.columns)], y), GROUP_METHOD
        word = None if found.low > 0.0 and found.value > floor else NOTHING
        rows.append(replace(blank, method=method).of(factor.name, "S1", found).judged(floor, word))
    return rows


def _share_rows(blank: Row, stratum: RankedStratum, x: Array, y: Array, left: bool) -> list[Row]:
    design = stratum.design
    if len(design.factors) > MOST_PLAYERS:
        why = f"{len(design.factors)} factors; shares need every subset of them, at most {MOST_PLAYERS}: name groups"
        return [blank.refusal(why, len(y))]
    dummy = normal_quantile(uniforms(design.seed, "dummy", blank.stratum, 0, len(y)))
    found = shares(x, y, [f.columns for f in design.factors], dummy)
    blank = replace(blank, method=SHARE_METHOD)
    rows = [
        blank.of(factor.name, "shapley", share).judged(found.floor, verdict_of_share(share, found.floor))
        for factor, share in zip(design.factors, found.shapley, strict=True)
    ]
    rows.append(blank.of("(dummy)", "shapley", found.dummy))
    if left:
        blank = replace(blank, estimand="left unexplained", method=LEFT_METHOD)
        rows += [
            blank.of(factor.name, "T", total).judged(found.floor, verdict_of_share(total, found.floor))
            for factor, total in zip(design.factors, found.total, strict=True)
        ]
    return rows


def mechanism_rows(blank: Row, reader: Reader, stratum: RankedStratum, plain: PlainRows) -> list[Row]:
    """Total index among oscillators, from redraws; blank: arm, stratum and outcome."""
    blank = replace(blank, estimand="mechanism among oscillators", method=REDRAW_METHOD)
    if stratum.refused:
        return [blank.refusal(stratum.refused)]
    if not stratum.redrawn:
        return [blank.refusal("max_runs leaves no room for redraws")]
    transform = np.log if blank.outcome in LOGARITHMIC else np.asarray
    y = transform(plain.outcomes[blank.outcome][: stratum.redrawn])
    base = np.flatnonzero(np.isfinite(y))
    why = _too_few(y[base], len(y), " among oscillators")
    if why:
        return [blank.refusal(why, len(base))]
    again = np.full((len(stratum.design.factors), len(y)), np.nan)
    for which, position, outcome in reader.redraws([blank.outcome]):
        again[which, position] = transform(outcome[blank.outcome])
    typical, variance = float(y[base].mean()), float(y[base].var())
    floor, rows = variance_floor(blank.outcome, typical, variance), []
    for j, factor in enumerate(stratum.design.factors):
        done = base[np.isfinite(again[j, base])]
        if len(base) - len(done) > MOST_STUCK * len(base):
            why = (
                f"{len(base) - len(done):,} of {len(base):,} subjects never oscillated again with {factor.name} redrawn"
            )
            rows.append(replace(blank, parameter=factor.name, index="ST").refusal(why, len(base)))
            continue
        found = mechanism(y[done], again[j, done])
        rows.append(blank.of(factor.name, "ST", found).judged(floor, verdict_of_share(found, floor)))
    return rows
