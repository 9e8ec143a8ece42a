"""A real study's series through the detector: a row a subject and analyte, and a line of words for each."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from cohort.observe.design import FEWEST_SAMPLES, MOST_SAMPLES, Design, make_design
from cohort.observe.detector import Columns, Rule, conclude, search
from cohort.observe.table import Series
from cohort.quantities import ANALYTES, DETECTION_COLUMNS

Array = NDArray[np.float64]

SMALLEST_P = 0.001
"""Null tables hold some thousand series: a smaller p-value is not told apart from the smallest of them."""
_SHARED = 0.8
"""Share of the common sampling times that a subject must have to be searched on them; a subject sampled more rarely
has a schedule of its own, with its own aliases."""


@dataclass(frozen=True, eq=False)
class Found:
    """What was found: names of subjects and analytes, DETECTION_COLUMNS (one number a series), for each series why it
    was not searched (empty if it was), and warnings about schedules."""

    subject: tuple[str, ...]
    analyte: tuple[str, ...]
    columns: Columns
    refused: tuple[str, ...]
    warnings: tuple[str, ...]


def detect_series(
    series: Sequence[Series], rule: Rule, assay_cv: dict[str, float], folder: Path | None = None
) -> Found:
    """Search every series for a rhythm.

    Subjects sampled at (nearly) the same times share one schedule, with samples missing; others have their own.
    Analytes that the rule needs and a subject lacks leave its `detected` null.
    """
    columns = _empty(len(series))
    refused, warnings = [""] * len(series), []
    tables: dict[tuple[float, ...], Design] = {}
    for times, rows in schedules(series):
        try:
            design = make_design(times, rule.band_min)
        except ValueError as error:
            for row in rows:
                refused[row] = str(error)
            continue
        if design.warning:
            named = ", ".join(dict.fromkeys(series[r].subject for r in rows[:5])) + (" …" if len(rows) > 5 else "")
            warnings.append(f"{named}: {design.warning}")
        null_design = tables.setdefault(_alike(design), design)
        for analyte in ANALYTES:
            mine = [r for r in rows if series[r].analyte == analyte]
            if mine:
                found = search(times, _aligned(series, mine, times), rule, assay_cv[analyte], folder=folder,
                               null_design=null_design)  # fmt: skip
                for name, column in found.items():
                    columns[name][mine] = column
    for row, one in enumerate(series):
        columns["samples"][row] = len(one.values)
        if len(one.values) < FEWEST_SAMPLES:
            columns["note"][row] = 0
    _conclude(series, rule, columns)
    return Found(tuple(s.subject for s in series), tuple(s.analyte for s in series), columns, tuple(refused),
                 tuple(warnings))  # fmt: skip


def lines(found: Found, rule: Rule) -> list[str]:
    """One plain line a series: what was found, or why it was not searched."""
    return [_line(found, rule, i) for i in range(len(found.subject))]


def _line(found: Found, rule: Rule, i: int) -> str:
    c = {name: column[i] for name, column in found.columns.items()}
    head = f"{found.subject[i]}, {found.analyte[i]}: "
    if c["note"] == 0:
        few = "1 sample" if c["samples"] == 1 else f"{c['samples']} samples"
        return head + f"not searched; {few}, at least {FEWEST_SAMPLES} are needed"
    if c["note"] == 1:
        return head + "not searched; every sample has the same value"
    if found.refused[i]:
        return head + f"not searched; {found.refused[i]}"
    p, period, error = c["p_value"], c["period_min"], c["period_se_min"]
    best = f"{period:.0f} ± {error:.1f} min, relative amplitude {100 * c['relative_amplitude']:.1f} %, {_p(p)}"
    if c["detected"] < 0:
        return head + f"the rule needs {rule.detect_in}; here the best period is {best}"
    if not c["detected"]:
        return head + f"no rhythm detected (best {best})"
    return head + f"rhythm detected, {best}" + (", decaying" if c["decaying"] == 1 else "")


def _p(p: float) -> str:
    return f"p = {p:.2g}" if p >= SMALLEST_P else f"p < {SMALLEST_P:g}"


def detected_people(found: Found) -> tuple[int, int]:
    """(people detected, people that the rule could judge)."""
    by_person = dict(zip(found.subject, (int(d) for d in found.columns["detected"]), strict=True))
    judged = [d for d in by_person.values() if d >= 0]
    return sum(judged), len(judged)


def _empty(n: int) -> Columns:
    missing = {"float64": np.nan, "int64": -1, "bool": -1, "words": -1}
    kinds = {"float64": np.float64, "int64": np.int64, "bool": np.int8, "words": np.int8}
    return {c.name: np.full(n, missing[c.kind], dtype=kinds[c.kind]) for c in DETECTION_COLUMNS}


def schedules(series: Sequence[Series]) -> list[tuple[Array, list[int]]]:
    """Sampling times (min) from each subject's first, and the series that share them, some with samples missing."""
    rows = [i for i, s in enumerate(series) if len(s.values) >= FEWEST_SAMPLES]
    since = {i: np.round(series[i].times_min - series[i].times_min[0], 6) for i in rows}
    alike: dict[bytes, list[int]] = {}
    for i in rows:
        alike.setdefault(since[i].tobytes(), []).append(i)
    if not alike:
        return []
    union: Array = np.unique(np.concatenate([np.frombuffer(raw) for raw in alike]))
    enough = _SHARED * len(union) if len(union) <= MOST_SAMPLES else np.inf
    shared = [i for i in rows if len(since[i]) >= enough]
    own = [(np.frombuffer(raw), mine) for raw, mine in alike.items() if len(since[mine[0]]) < enough]
    return ([(union, shared)] if shared else []) + own


def _aligned(series: Sequence[Series], rows: list[int], times: Array) -> Array:
    values = np.full((len(rows), len(times)), np.nan)
    for row, i in zip(values, rows, strict=True):
        since = np.round(series[i].times_min - series[i].times_min[0], 6)
        row[np.searchsorted(times, since)] = series[i].values
    return values


def _alike(design: Design) -> tuple[float, ...]:
    """Schedules that share null tables: the statistic's law hardly differs between them. 5 % in number of samples and
    length, 20 % in the longest gap, one grid of backgrounds."""
    steps = np.diff(design.times_min)
    rough = (
        round(20.0 * np.log(len(design.times_min))),
        round(20.0 * np.log(design.times_min[-1])),
        round(5.0 * np.log(steps.max())),
        round(20.0 * np.log(design.band_min[0])),
    )
    return (*rough, *(b.tau_min * b.rho for b in design.backgrounds))


def _conclude(series: Sequence[Series], rule: Rule, columns: Columns) -> None:
    """The whole rule for each subject from its one or two series, in place."""
    place: dict[str, dict[str, int]] = {}
    for i, s in enumerate(series):
        place.setdefault(s.subject, {})[s.analyte] = i
    people = list(place.values())
    parts: dict[str, Columns] = {}
    for analyte in ANALYTES:
        at = np.array([p.get(analyte, -1) for p in people])
        parts[analyte] = {n: np.where(at < 0, np.nan, columns[n][at]) for n in ("p_value", "half_ratio")}
    conclude(parts, rule)
    for analyte in ANALYTES:
        for k, p in enumerate(people):
            if analyte in p:
                for name in ("rule_p_value", "detected", "decaying"):
                    columns[name][p[analyte]] = parts[analyte][name][k]
