"""How many of n real people: predictions, numbers to recruit, paired differences, power: recruitment.parquet."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from itertools import combinations
from typing import Any

import numpy as np
from numpy.typing import NDArray

from cohort.infer.predict import (
    Belief,
    at_least,
    between_draws,
    central,
    difference,
    from_counts,
    from_moments,
    power_to_tell,
    predicted,
    to_recruit,
    widened,
)
from cohort.quantities import RECRUITMENT_COLUMNS
from cohort.report.chosen import Chosen
from cohort.report.counting import (
    DETECTED,
    DETECTED_FALSE,
    DETECTED_TRUE,
    EVERYONE,
    OSCILLATES,
    YES,
    Count,
    detections,
)
from cohort.report.results import Results
from cohort.tables import RECRUITMENT, numbers, read_part, read_parts, write_table

Array = NDArray[np.float64]
Row = dict[str, Any]

COUNTED = (OSCILLATES, DETECTED, DETECTED_TRUE, DETECTED_FALSE)
OF_POPULATION = {OSCILLATES: "oscillating", DETECTED: "detected", DETECTED_TRUE: "detected_oscillating"}
MONTE_CARLO = "Monte Carlo error and chance of who is recruited"
POPULATION = "uncertainty of the population, Monte Carlo error and chance of who is recruited"
MOST_PAIRED = 6
LARGEST_FOR_POWER = 150


@dataclass(frozen=True)
class Known:
    """A share with all that is uncertain about it: what of it is Monte Carlo error and what the population's."""

    belief: Belief
    mean: float
    monte_carlo_sd: float
    population_sd: float | None

    @property
    def sd(self) -> float:
        """Both together."""
        return float(np.hypot(self.monte_carlo_sd, self.population_sd or 0.0))

    @property
    def words(self) -> str:
        """What a prediction made from it holds."""
        return MONTE_CARLO if self.population_sd is None else POPULATION


def recruit(results: Results, counts: list[Count], who: Chosen | None) -> dict[str, Any] | None:
    """Write recruitment.parquet and return what summary.json says of it; None for a study without [recruitment]."""
    asked = results.record.get("recruitment")
    if not asked:
        return None
    rows: list[Row] = []
    for count in counts:
        if count.regime in COUNTED:
            rows += _rows(results, count, asked)
    rows += _paired(results, asked, who)
    rows += _power(counts, asked)
    blank = {c.name: None for c in RECRUITMENT_COLUMNS}
    write_table(results.folder / "recruitment.parquet", RECRUITMENT, _columns([{**blank, **row} for row in rows]))
    return {**asked, "rows": rows}


def _columns(rows: list[Row]) -> dict[str, Any]:
    columns: dict[str, Any] = {}
    for column in RECRUITMENT_COLUMNS:
        values = [row[column.name] for row in rows]
        if column.kind == "float64":
            columns[column.name] = np.array([np.nan if v is None else v for v in values], dtype=float)
        elif column.kind == "int64":
            columns[column.name] = np.array([-1 if v is None else v for v in values], dtype=np.int64)
        else:
            columns[column.name] = values
    return columns


def _rows(results: Results, count: Count, asked: dict[str, Any]) -> Iterator[Row]:
    head = {"arm": count.arm, "schedule": count.schedule, "stratum": count.stratum, "counted": count.regime}
    if results.record["arm_facts"][count.arm]["disagrees"]:
        yield {**head, "refused": "the model disagrees with published people here, so no count to recruit is given"}
        return
    if not count.share.n:
        yield {**head, "refused": "nobody is counted"}
        return
    known = know(results, count)
    want, evaluable = asked["want"], asked["evaluable"]
    base = {**head, "share": known.mean, "share_sd": known.sd, "uncertainty": known.words}
    for n in asked["sizes"]:
        pmf = predicted(known.belief, n, evaluable)
        low, high = central(pmf)
        chance = at_least(known.belief, n, want, evaluable) if want and count.regime != DETECTED_FALSE else None
        yield {**base, "recruited": n, "expected": float(pmf @ np.arange(n + 1)), "low": float(low), "high": float(high),
               "at_least_wanted": chance}  # fmt: skip
    if want and count.regime != DETECTED_FALSE:
        n_needed = to_recruit(known.belief, want, asked["assurance"], evaluable)
        why = None if n_needed is not None else "more than 100,000 recruits"
        yield {**base, "to_recruit": n_needed, "refused": why}


def know(results: Results, count: Count) -> Known:
    """What is known of a share: from the cohort alone, or from draws of the population where there are any."""
    share = count.share
    drawn = _draws(results, count)
    if drawn is None:
        belief = from_counts(share.share * share.effective, share.effective)
        if share.unresolved:
            belief = widened(belief, share.unresolved / share.n / np.sqrt(12.0))  # anywhere from all no to all yes
        total = belief.a + belief.b
        sd = float(np.sqrt(belief.a * belief.b / (total + 1.0)) / total)
        return Known(belief, share.share, sd, None)
    mean, population_sd = between_draws(*drawn)
    error = float(np.sqrt(max(mean * (1.0 - mean), 1e-12) / drawn[1].sum()))
    most = 0.98 * np.sqrt(mean * (1.0 - mean))
    base = from_moments(mean, float(min(population_sd, most)))
    return Known(widened(base, error), mean, error, population_sd)


def _draws(results: Results, count: Count) -> tuple[Array, Array] | None:
    """Shares by draw of the population and the subjects of each, draw 0 (the stated population) left out."""
    folder = results.folder / "population"
    if not results.record.get("population") or not folder.is_dir():
        return None
    table = read_parts(folder)
    keep = np.asarray(table.column("draw")) > 0
    for name, wanted in (("arm", count.arm), ("stratum", count.stratum), ("schedule", count.schedule)):
        keep &= np.array([word == wanted for word in table.column(name).to_pylist()], dtype=bool)
    n = numbers(table, "n")[keep]
    if count.regime == DETECTED_FALSE:
        k = numbers(table, "detected")[keep] - numbers(table, "detected_oscillating")[keep]
    else:
        k = numbers(table, OF_POPULATION[count.regime])[keep]
    good = np.isfinite(k) & (n > 1)
    return (k[good] / n[good], n[good]) if good.sum() > 1 else None


# ---- the same people seen two ways -------------------------------------------------------------------------------


def _paired(results: Results, asked: dict[str, Any], who: Chosen | None) -> Iterator[Row]:
    """What one schedule finds less than another, and one arm less than another, on the same virtual people."""
    facts = results.record["arm_facts"]
    arms = [a for a in results.arms if not facts[a]["disagrees"]]
    for arm in arms:
        for one, two in combinations(results.schedules[:MOST_PAIRED], 2):
            head: Row = {"arm": arm, "schedule": f"{two} minus {one}", "stratum": EVERYONE, "counted": DETECTED}
            yield from _difference(head, _seen(results, arm, one), _seen(results, arm, two), asked, who)
    steady = [a for a in arms if facts[a]["steady_mg_per_min"] is not None]
    for one, two in combinations(steady[:MOST_PAIRED], 2):
        head = {"arm": f"{two} minus {one}", "schedule": None, "stratum": EVERYONE, "counted": OSCILLATES}
        yield from _difference(head, _truly(results, one), _truly(results, two), asked, who)
    for schedule in results.schedules[:MOST_PAIRED]:
        for one, two in combinations(arms[:MOST_PAIRED], 2):
            head = {"arm": f"{two} minus {one}", "schedule": schedule, "stratum": EVERYONE, "counted": DETECTED}
            yield from _difference(head, _seen(results, one, schedule), _seen(results, two, schedule), asked, who)


def _seen(results: Results, arm: str, schedule: str) -> NDArray[np.bool_]:
    return np.concatenate([detections(results, arm, schedule, k)[0] == YES for k in results.whole_shards])


def _truly(results: Results, arm: str) -> NDArray[np.bool_]:
    folder = results.folder / "outcomes" / arm
    return np.concatenate(
        [numbers(read_part(folder, k, ["oscillates"]), "oscillates") == 1.0 for k in results.whole_shards]
    )


def _difference(
    head: Row, one: NDArray[np.bool_], two: NDArray[np.bool_], asked: dict[str, Any], who: Chosen | None
) -> Iterator[Row]:
    weight = np.ones(len(one)) if who is None else who.weight
    gained, lost = (float(np.average(x, weights=weight)) for x in (two & ~one, one & ~two))
    for n in asked["sizes"]:
        expected, low, high = difference(gained, lost, n, asked["evaluable"])
        yield {**head, "recruited": n, "expected": expected, "low": float(low), "high": float(high),
               "share": gained - lost, "uncertainty": "chance of who is recruited; the same people seen both ways"}  # fmt: skip


def _power(counts: list[Count], asked: dict[str, Any]) -> Iterator[Row]:
    """How surely two strata of n people each would be told apart."""
    groups: dict[tuple[str, str | None, str], list[Count]] = {}
    for count in counts:
        if count.stratum != EVERYONE and count.regime in (OSCILLATES, DETECTED):
            groups.setdefault((count.arm, count.schedule, count.regime), []).append(count)
    for (arm, schedule, regime), members in groups.items():
        for one, two in combinations(members[:MOST_PAIRED], 2):
            for n in asked["sizes"]:
                head = {"arm": arm, "schedule": schedule, "stratum": f"{one.stratum} against {two.stratum}",
                        "counted": f"power: {regime}", "recruited": n}  # fmt: skip
                if n > LARGEST_FOR_POWER:
                    yield {**head, "refused": f"exact power is made for up to {LARGEST_FOR_POWER} people a stratum"}
                    continue
                power = power_to_tell(one.share.share, two.share.share, n)
                yield {
                    **head,
                    "at_least_wanted": power,
                    "uncertainty": "Fisher's exact test at 5 %, n people in each stratum",
                }
