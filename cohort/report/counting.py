"""Who oscillates, by arm and stratum: incidence.parquet from the outcomes."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from cohort.infer.counts import Share, share, share_of_scrambles
from cohort.population.designs import SCRAMBLES
from cohort.quantities import REGIMES
from cohort.report.results import Results
from cohort.tables import INCIDENCE, read_part, write_table

EVERYONE = "everyone"
OSCILLATES = "oscillates"
_YES = tuple(REGIMES.index(r) for r in ("sustained", "bistable"))
_UNRESOLVED = tuple(REGIMES.index(r) for r in ("undecided", "failed"))


@dataclass(frozen=True)
class Count:
    """Subjects of one arm and stratum in one regime (or all that oscillate)."""

    arm: str
    stratum: str
    regime: str
    share: Share


def regime_counts(results: Results, arm: str) -> NDArray[np.int64]:
    """Subjects by stratum, scramble of the draw and regime: int64[strata, scrambles, regimes]; the last regime entry
    counts those without one (no steady input)."""
    strata, scrambles = results.record["strata"], SCRAMBLES if results.record["draw"] == "sobol" else 1
    counts = np.zeros((len(strata), scrambles, len(REGIMES) + 1), np.int64)
    for number in results.whole_shards:
        who = read_part(results.folder / "subjects", number, ["subject", "stratum"])
        what = read_part(results.folder / "outcomes" / arm, number, ["subject", "regime"])
        subject = np.asarray(who.column("subject"))
        stratum = _codes(who.column("stratum"), strata)
        regime = _codes(what.column("regime"), REGIMES)
        regime[regime < 0] = len(REGIMES)
        np.add.at(counts, (stratum, subject % scrambles, regime), 1)
    return counts


def _codes(column: Any, words: Any) -> NDArray[np.int64]:
    place = {word: i for i, word in enumerate(words)}
    coded = column.combine_chunks().dictionary_encode()
    known = np.array([place.get(str(w), -1) for w in coded.dictionary.to_pylist()] or [-1])
    indices = np.asarray(coded.indices.fill_null(len(known)))
    return np.asarray(np.append(known, -1)[indices], dtype=np.int64)


def count_regimes(results: Results) -> list[Count]:
    """Every count of a run, arms in order, everyone before each stratum; arms without a steady input have none."""
    found: list[Count] = []
    strata = results.record["strata"]
    for arm in results.arms:
        if results.record["arm_facts"][arm]["steady_mg_per_min"] is None:
            continue
        counts = regime_counts(results, arm)
        groups = [(EVERYONE, counts.sum(axis=0))]
        if len(strata) > 1:
            groups += [(name, counts[i]) for i, name in enumerate(strata)]
        for name, group in groups:
            found += [Count(arm, name, regime, made) for regime, made in _shares(group)]
    return found


def _shares(group: NDArray[np.int64]) -> Iterator[tuple[str, Share]]:
    """Shares of one group: int64[scrambles, regimes + 1]."""
    n = group.sum(axis=1)
    unresolved = group[:, _UNRESOLVED].sum(axis=1)
    none = np.zeros_like(unresolved)
    yield OSCILLATES, _share(group[:, _YES].sum(axis=1), unresolved, n)
    for i, regime in enumerate(REGIMES):
        yield regime, _share(group[:, i], none if i in _UNRESOLVED else unresolved, n)


def _share(yes: NDArray[np.int64], unresolved: NDArray[np.int64], n: NDArray[np.int64]) -> Share:
    if len(n) > 1 and (n > 0).all():
        return share_of_scrambles(yes, unresolved, n)
    return share(int(yes.sum()), int(n.sum()), int(unresolved.sum()))


def write_incidence(results: Results, counts: list[Count]) -> None:
    """Write incidence.parquet."""
    shares = [c.share for c in counts]
    write_table(
        results.folder / "incidence.parquet",
        INCIDENCE,
        {
            "arm": [c.arm for c in counts], "stratum": [c.stratum for c in counts],
            "regime": [c.regime for c in counts], "n": np.array([s.k for s in shares], np.int64),
            "share": np.array([s.share for s in shares], float), "low": np.array([s.low for s in shares], float),
            "high": np.array([s.high for s in shares], float),
            "denominator": np.array([s.n for s in shares], np.int64),
            "unresolved": np.array([s.unresolved for s in shares], np.int64),
            "method": [s.method for s in shares],
        },
    )  # fmt: skip
