"""Who oscillates and who would be detected, by arm, schedule and stratum: incidence.parquet."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from cohort.infer.counts import Share, share, share_of_effective, share_of_scrambles
from cohort.population.designs import SCRAMBLES
from cohort.quantities import REGIMES
from cohort.report.chosen import Chosen
from cohort.report.results import Results
from cohort.tables import INCIDENCE, numbers, read_part, write_table

Array = NDArray[np.float64]
Codes = NDArray[np.int64]

EVERYONE = "everyone"
OSCILLATES = "oscillates"
DETECTED, DETECTED_TRUE, DETECTED_FALSE = "detected", "detected and oscillating", "detected and not oscillating"
DETECTED_AT_PERIOD = "detected at the true period"
LOCKED_1_1, LOCKED_OTHERWISE, APERIODIC = "locked 1:1", "locked otherwise", "aperiodic"
CAPTURED = "oscillating and locked 1:1"
PERIOD_WITHIN = 0.1
"""A detected period within 10 % of the limit cycle's counts as the true one; an alias does not."""
_YES = tuple(REGIMES.index(r) for r in ("sustained", "bistable"))
_UNRESOLVED = tuple(REGIMES.index(r) for r in ("undecided", "failed"))
NO, YES, UNKNOWN = range(3)


@dataclass(frozen=True)
class Count:
    """Subjects of one arm and stratum in one regime (or all that oscillate), or detected through one schedule."""

    arm: str
    schedule: str | None
    stratum: str
    regime: str
    share: Share


@dataclass(frozen=True)
class Tally:
    """Weights and numbers of subjects: float64[strata, scrambles, cells]; effective float64[strata + 1], the last of all."""

    weights: Array
    numbers: Array
    effective: Array
    plain: bool


def count_all(results: Results, who: Chosen | None) -> list[Count]:
    """Every count of a run: regimes where an arm has a steady input, then detections, arms in order."""
    found: list[Count] = []
    for arm in results.arms:
        steady = results.record["arm_facts"][arm]["steady_mg_per_min"] is not None
        if steady:
            found += _grouped(results, arm, None, regime_tally(results, arm, who), _regime_shares)
        if results.record["arm_facts"][arm].get("forced"):
            found += _grouped(results, arm, None, locking_tally(results, arm, who), _locking_shares)
        for schedule in results.schedules:
            tally = detection_tally(results, arm, schedule, who)
            shares = _detection_shares if steady else _detected_only
            if steady and results.record["arm_facts"][arm].get("forced"):
                shares = _split_shares  # its own period is that of the body without the forcing
            found += _grouped(results, arm, schedule, tally, shares)
    return found


def regime_tally(results: Results, arm: str, who: Chosen | None) -> Tally:
    """Subjects by regime; the last cell counts those without one (no steady input)."""

    def cells(number: int) -> Codes:
        what = read_part(results.folder / "outcomes" / arm, number, ["regime"])
        regime = _codes(what.column("regime"), REGIMES)
        return np.where(regime < 0, len(REGIMES), regime).astype(np.int64)

    return _tally(results, who, cells, len(REGIMES) + 1)


def locking_tally(results: Results, arm: str, who: Chosen | None) -> Tally:
    """Subjects by how a periodic input captures them (1:1, otherwise, aperiodic, unknown) and whether they oscillate
    without it (no, yes or unknown)."""

    def cells(number: int) -> Codes:
        table = read_part(results.folder / "outcomes" / arm, number, ["locking", "oscillates"])
        truly = numbers(table, "oscillates")
        kind = _codes(table.column("locking"), ("1:1", "", APERIODIC, "undecided"))
        locked = np.array([w is not None and ":" in w for w in table.column("locking").to_pylist()], dtype=bool)
        kind = np.where(kind >= 0, kind, np.where(locked, 1, 3))
        return np.asarray(
            3 * kind + np.where(np.isnan(truly), UNKNOWN, np.where(truly == 1.0, YES, NO)), dtype=np.int64
        )

    return _tally(results, who, cells, 12)


def detection_tally(results: Results, arm: str, schedule: str, who: Chosen | None) -> Tally:
    """Subjects by detected, oscillating (each no, yes or unknown) and whether the detected period is the true one."""

    def cells(number: int) -> Codes:
        detected, period = detections(results, arm, schedule, number)
        table = read_part(results.folder / "outcomes" / arm, number, ["oscillates", "period_min"])
        truly, true_period = numbers(table, "oscillates"), numbers(table, "period_min")
        right = np.abs(period / true_period - 1.0) <= PERIOD_WITHIN
        truth = np.where(np.isnan(truly), UNKNOWN, np.where(truly == 1.0, YES, NO))
        return np.asarray(_cell(detected, truth, right.astype(np.int64)), dtype=np.int64)

    return _tally(results, who, cells, 18)


def _cell(detected: Any, truly: Any, right: Any) -> Any:
    return 6 * detected + 2 * truly + right  # numbers or arrays of them


def detections(results: Results, arm: str, schedule: str, number: int) -> tuple[Codes, Array]:
    """Of each subject of a shard whether it is detected (NO, YES or UNKNOWN), and its best period in glucose, min."""
    part = read_part(results.folder / "observations" / arm / schedule, number, ["analyte", "detected", "period_min"])
    first = np.array([word == "glucose" for word in part.column("analyte").to_pylist()], dtype=bool)
    detected = numbers(part, "detected")[first]
    found = np.where(np.isnan(detected), UNKNOWN, np.where(detected == 1.0, YES, NO)).astype(np.int64)
    return found, numbers(part, "period_min")[first]


def _tally(results: Results, who: Chosen | None, cells: Callable[[int], Codes], width: int) -> Tally:
    strata = results.record["strata"]
    scrambles = SCRAMBLES if results.record["draw"] == "sobol" else 1
    weights = np.zeros((len(strata), scrambles, width))
    counts = np.zeros_like(weights)
    groups, start = [], 0
    for number in results.whole_shards:
        table = read_part(results.folder / "subjects", number, ["subject", "stratum"])
        stratum = _codes(table.column("stratum"), strata)
        if (stratum < 0).any():
            raise ValueError(f"{results.folder}: holds subjects of strata that run.json does not name")
        subject, cell = np.asarray(table.column("subject")), cells(number)
        here = slice(start, start + len(cell))
        counted = np.ones(len(cell), dtype=bool) if who is None else who.counted[here]
        weight = np.ones(len(cell)) if who is None else who.weight[here]
        at = (stratum[counted], subject[counted] % scrambles, cell[counted])
        np.add.at(weights, at, weight[counted])
        np.add.at(counts, at, 1.0)
        if who is not None:
            groups.append(stratum)
        start += len(cell)
    if who is None:
        by_stratum = counts.sum(axis=(1, 2))
        return Tally(weights, counts, np.append(by_stratum, by_stratum.sum()), True)
    stratum = np.concatenate(groups)
    masks = [*(stratum == i for i in range(len(strata))), np.ones(len(stratum), dtype=bool)]
    return Tally(weights, counts, np.array([who.effective(mask) for mask in masks]), who.how == "plain")


def _codes(column: Any, words: Any) -> Codes:
    place = {word: i for i, word in enumerate(words)}
    coded = column.combine_chunks().dictionary_encode()
    known = np.array([place.get(str(w), -1) for w in coded.dictionary.to_pylist()] or [-1])
    indices = np.asarray(coded.indices.fill_null(len(known)))
    return np.asarray(np.append(known, -1)[indices], dtype=np.int64)


@dataclass(frozen=True)
class _Group:
    """One group of a tally: weights and numbers float64[scrambles, cells], and what it is worth in independent people."""

    weights: Array
    numbers: Array
    effective: float
    plain: bool

    def share(self, yes: tuple[int, ...], unresolved: tuple[int, ...]) -> Share:
        """The share in these cells, with those that may belong there."""
        k, u, n = (self.numbers[:, list(c)].sum(axis=1) for c in (yes, unresolved, range(self.numbers.shape[1])))
        if not self.plain:
            w = self.weights.sum(axis=0)
            total = float(w.sum()) or 1.0
            return share_of_effective(
                float(w[list(yes)].sum()) / total, float(w[list(unresolved)].sum()) / total, self.effective,
                int(k.sum()), int(u.sum()), int(n.sum()),
            )  # fmt: skip
        whole = k.astype(np.int64), u.astype(np.int64), n.astype(np.int64)
        if len(n) > 1 and (n > 0).all():
            return share_of_scrambles(*whole)
        return share(*(int(x.sum()) for x in (whole[0], whole[2], whole[1])))

    def among(self, cells: tuple[int, ...]) -> _Group:
        """The subjects of these cells only; weighted ones are worth as many independent people as their part of the weight."""
        total = float(self.weights.sum()) or 1.0
        part = float(self.weights[:, list(cells)].sum()) / total
        return _Group(self.weights[:, list(cells)], self.numbers[:, list(cells)], self.effective * part, self.plain)


def _grouped(
    results: Results,
    arm: str,
    schedule: str | None,
    tally: Tally,
    shares: Callable[[_Group], Iterator[tuple[str, Share]]],
) -> Iterator[Count]:
    strata = results.record["strata"]
    groups = [
        (EVERYONE, _Group(tally.weights.sum(axis=0), tally.numbers.sum(axis=0), tally.effective[-1], tally.plain))
    ]
    if len(strata) > 1:
        groups += [
            (name, _Group(tally.weights[i], tally.numbers[i], tally.effective[i], tally.plain))
            for i, name in enumerate(strata)
        ]
    for name, group in groups:
        for regime, found in shares(group):
            yield Count(arm, schedule, name, regime, found)


def _regime_shares(group: _Group) -> Iterator[tuple[str, Share]]:
    yield OSCILLATES, group.share(_YES, _UNRESOLVED)
    for i, regime in enumerate(REGIMES):
        yield regime, group.share((i,), () if i in _UNRESOLVED else _UNRESOLVED)


def _locking_shares(group: _Group) -> Iterator[tuple[str, Share]]:
    every, unknown = (NO, YES, UNKNOWN), (9, 10, 11)
    for kind, name in enumerate((LOCKED_1_1, LOCKED_OTHERWISE, APERIODIC)):
        yield name, group.share(tuple(3 * kind + t for t in every), unknown)
    yield CAPTURED, group.among((YES, 3 + YES, 6 + YES, 9 + YES)).share((0,), (3,))


def _cells(detected: int, truly: tuple[int, ...], right: tuple[int, ...] = (0, 1)) -> tuple[int, ...]:
    return tuple(_cell(detected, t, r) for t in truly for r in right)


def _detected_only(group: _Group) -> Iterator[tuple[str, Share]]:
    every = (NO, YES, UNKNOWN)
    yield DETECTED, group.share(_cells(YES, every), _cells(UNKNOWN, every))


def _detection_shares(group: _Group) -> Iterator[tuple[str, Share]]:
    yield from _split_shares(group)
    yield DETECTED_AT_PERIOD, group.share(_cells(YES, (YES,), (1,)), _cells(UNKNOWN, (YES, UNKNOWN)))


def _split_shares(group: _Group) -> Iterator[tuple[str, Share]]:
    yield from _detected_only(group)
    for name, truly in ((DETECTED_TRUE, YES), (DETECTED_FALSE, NO)):
        open_ = (*_cells(YES, (UNKNOWN,)), *_cells(UNKNOWN, (truly, UNKNOWN)))
        yield name, group.share(_cells(YES, (truly,)), open_)


def write_incidence(results: Results, counts: list[Count]) -> None:
    """Write incidence.parquet."""
    shares = [c.share for c in counts]
    schedules: list[str | None] = [c.schedule for c in counts]
    write_table(
        results.folder / "incidence.parquet",
        INCIDENCE,
        {
            "arm": [c.arm for c in counts], "schedule": schedules,
            "stratum": [c.stratum for c in counts],
            "regime": [c.regime for c in counts], "n": np.array([s.k for s in shares], np.int64),
            "share": np.array([s.share for s in shares], float), "low": np.array([s.low for s in shares], float),
            "high": np.array([s.high for s in shares], float),
            "denominator": np.array([s.n for s in shares], np.int64),
            "unresolved": np.array([s.unresolved for s in shares], np.int64),
            "method": [s.method for s in shares],
        },
    )  # fmt: skip
