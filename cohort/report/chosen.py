"""Who of the virtual people is counted, and with what weight: eligibility, matching to published summaries, persons."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from cohort.errors import RunError
from cohort.infer.balance import entropy_balance, induced_correlations, kish
from cohort.population.functions import normal_quantile
from cohort.report.results import Results
from cohort.tables import WEIGHTS, numbers, read_part, write_table

Array = NDArray[np.float64]

SMALLEST_ELIGIBLE = 0.01
SHOWN_CORRELATION = 0.1


@dataclass(frozen=True)
class Chosen:
    """counted bool[n] and weight float64[n] of every subject; person int64[n] where the table names persons; `how` is
    plain, matched or persons; facts for summary.json."""

    counted: NDArray[np.bool_]
    weight: Array
    person: NDArray[np.int64] | None
    how: str
    facts: dict[str, Any]

    def effective(self, among: NDArray[np.bool_]) -> float:
        """How many independent people the counted among these are worth."""
        here = among & self.counted
        if self.how == "persons":
            assert self.person is not None
            return float(len(np.unique(self.person[here])))
        weights = self.weight[here]
        return kish(weights) if len(weights) else 0.0


def chosen(results: Results) -> Chosen | None:
    """Read who counts, write weights.parquet where that is not everyone alike, and return it; None where it is.

    Raises RunError where too few are eligible or weights would rest on too few.
    """
    asked = results.record.get("selection") or {}
    bounds, targets = asked.get("eligible", []), asked.get("match", [])
    with_person = bool(results.record.get("persons"))
    if not bounds and not targets and not with_person:
        return None
    subjects = _column(results, "subjects", "subject").astype(np.int64)
    counted = np.ones(len(subjects), dtype=bool)
    for bound in bounds:
        value = _column(results, f"outcomes/{bound['arm']}", bound["outcome"])
        counted &= (value >= bound["low"]) & (value <= bound["high"])
    n = int(counted.sum())
    facts: dict[str, Any] = {"subjects": len(subjects), "eligible": n}
    if n < SMALLEST_ELIGIBLE * len(subjects) or not n:
        raise RunError(f"{results.folder}: {n:,} of {len(subjects):,} subjects are eligible ({n / len(subjects):.2%}); below "
                       "1 % nothing is counted. Widen subjects.eligible, or bring the laws nearer to it")  # fmt: skip
    weight = counted.astype(float)
    person = _column(results, "subjects", "person").astype(np.int64) if with_person else None
    how = "plain"
    if targets:
        how = "matched"
        weight[counted] = _matched(results, targets, counted, facts)
    elif person is not None:
        how = "persons"
        draws = np.bincount(person[counted], minlength=int(person.max()) + 1)
        weight[counted] = 1.0 / draws[person[counted]]
        facts["persons"] = int((draws > 0).sum())
    write_table(
        results.folder / "weights.parquet",
        WEIGHTS,
        {"subject": subjects, "eligible": counted.astype(np.int8), "weight": weight},
    )
    return Chosen(counted, weight, person, how, facts)


def _matched(results: Results, targets: list[Any], counted: NDArray[np.bool_], facts: dict[str, Any]) -> Array:
    values = np.column_stack([_column(results, f"outcomes/{t['arm']}", t["outcome"])[counted] for t in targets])
    lacking = int((~np.isfinite(values)).any(axis=1).sum())
    if lacking:
        raise RunError(f"{results.folder}: {lacking:,} eligible subjects have no value of an outcome to match; match another "
                       "outcome, or exclude them by subjects.eligible")  # fmt: skip
    found = entropy_balance(values, np.array([t["mean"] for t in targets]), np.array([t["sd"] for t in targets]))
    if found.failed:
        raise RunError(
            f"{results.folder}: cannot match: {found.failed}. Bring the laws nearer to the published summaries"
        )
    facts |= {"effective": found.effective, "largest_weight": found.largest}
    facts["matched"] = [
        {"arm": t["arm"], "outcome": t["outcome"], "mean": t["mean"], "sd": t["sd"],
         "unweighted_mean": float(v.mean()), "unweighted_sd": float(v.std())}
        for t, v in zip(targets, values.T, strict=True)
    ]  # fmt: skip
    facts["induced_correlations"] = _induced(results, counted, found.weights)
    return found.weights


def _induced(results: Results, counted: NDArray[np.bool_], weights: Array) -> list[dict[str, Any]]:
    """Pairs of parameters that weighting ties together, the strongest first."""
    names = list(results.record["varied"])
    if len(names) < 2:
        return []
    scores = []
    for name in names:
        value = _column(results, "subjects", name)[counted]
        rank = np.empty(len(value))
        rank[np.argsort(value, kind="stable")] = np.arange(len(value))
        scores.append(normal_quantile((rank + 0.5) / len(value)))
    change = induced_correlations(np.column_stack(scores), weights)
    pairs = [
        {"pair": [names[i], names[j]], "correlation": float(change[i, j])}
        for i in range(len(names))
        for j in range(i + 1, len(names))
        if abs(change[i, j]) >= SHOWN_CORRELATION
    ]
    return sorted(pairs, key=lambda p: -abs(p["correlation"]))


def _column(results: Results, table: str, name: str) -> Array:
    parts = [numbers(read_part(results.folder / table, k, [name]), name) for k in results.whole_shards]
    return np.concatenate(parts)
