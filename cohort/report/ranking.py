"""What decides: sensitivity.parquet and convergence.parquet from the stored runs, and the ranked lists in words."""

from __future__ import annotations

import textwrap
from typing import Any

import numpy as np

from cohort.infer.facts import Facts, from_plain
from cohort.infer.findings import Findings, findings
from cohort.infer.ranking import points
from cohort.infer.rows import Row
from cohort.quantities import (
    CLAMP_OUTCOMES,
    CYCLE_OUTCOMES,
    ESTIMANDS,
    MEAL_OUTCOMES,
    SENSITIVITY_COLUMNS,
    WINDOW_OUTCOMES,
    Column,
)
from cohort.reading import misfit
from cohort.report.record import RANKING
from cohort.report.results import Results
from cohort.tables import CONVERGENCE, SENSITIVITY, write_table

SHOWN = 8
"""Factors of a ranked list on a terminal; the table holds all."""
UNITS = {c.name: c.unit or "1" for c in (*CYCLE_OUTCOMES, *WINDOW_OUTCOMES, *CLAMP_OUTCOMES, *MEAL_OUTCOMES)}
ONLY_IN_TABLE = ("difference between arms", "unresolved as no", "unresolved as yes")
LEADS = ("ST", "mu_star", "shapley", "S1", "T")


def rank(results: Results) -> dict[str, Any] | None:
    """Write both tables and return what summary.json says of the ranking; None for a study without one, or where its
    runs are not all there. Raises ValueError where a part cannot be trusted."""
    record = results.record.get("ranking")
    if not record or "strata" not in record:
        return None
    try:
        if misfit(record, RANKING):
            raise ValueError("of another shape")
        facts = from_plain(record)
    except (KeyError, TypeError, ValueError):
        raise ValueError(f"{results.folder / 'run.json'}: its ranking was recorded by another version") from None
    found = findings(results.folder, facts)
    write_table(results.folder / "sensitivity.parquet", SENSITIVITY, _columns(SENSITIVITY_COLUMNS, found.rows))
    steps = [s.row for s in found.steps]
    columns = _columns([c for c in CONVERGENCE.columns if c.name != "doubling"], steps)
    doubling = np.array([s.doubling for s in found.steps], dtype=np.int64)
    write_table(results.folder / "convergence.parquet", CONVERGENCE, {**columns, "doubling": doubling})
    return _summary(facts, found)


def _columns(columns: Any, rows: list[Row]) -> dict[str, Any]:
    return {column.name: _column(column, [getattr(row, column.name) for row in rows]) for column in columns}


def _column(column: Column, values: list[Any]) -> Any:
    if column.kind == "float64":
        return np.array([np.nan if v is None else v for v in values], dtype=float)
    if column.kind == "int64":
        return np.array([-1 if v is None else v for v in values], dtype=np.int64)
    return values


def _summary(facts: Facts, found: Findings) -> dict[str, Any]:
    return {
        "method": facts.ranking.method,
        "strata": {s.design.stratum: _stratum(s) for s in facts.strata},
        "lists": _lists(found.rows),
    }


def _stratum(stratum: Any) -> dict[str, Any]:
    sobol = stratum.design.method == "sobol"
    return {
        "refused": stratum.refused or None,
        "points": points(stratum.doubling) if sobol and not stratum.refused else None,
        "replicates": stratum.design.replicates,
        "stopped": stratum.stopped or None,
    }


def _lists(rows: list[Row]) -> list[dict[str, Any]]:
    """One entry for every arm, stratum, outcome and estimand: refused, or its factors from the strongest."""
    lists: dict[tuple[str, str, str, str], list[Row]] = {}
    for row in rows:
        lists.setdefault((row.arm, row.stratum, row.outcome, row.estimand), []).append(row)
    made = []
    for (arm, stratum, outcome, estimand), members in lists.items():
        entry: dict[str, Any] = {"arm": arm, "stratum": stratum, "outcome": outcome, "estimand": estimand}
        refused = [r for r in members if r.refused]
        lead = next((i for i in LEADS if any(r.index == i and r.value is not None for r in members)), None)
        if lead is None:
            made.append({**entry, "refused": refused[0].refused if refused else "nothing to rank"})
            continue
        ranked = sorted((r for r in members if r.index == lead and r.value is not None), key=_descending)
        made.append({**entry, "index": lead, "n": ranked[0].n, "factors": [_factor(r) for r in ranked]})
    return made


def _descending(row: Row) -> float:
    assert row.value is not None
    return -row.value


def _factor(row: Row) -> dict[str, Any]:
    return {"name": row.parameter, "value": row.value, "low": row.low, "high": row.high, "verdict": row.verdict}


# ---- in words ----------------------------------------------------------------------------------------------------


def ranking_words(ranking: dict[str, Any]) -> list[str]:
    """The ranked lists in lines of at most 80 characters."""
    lines = ["", "what decides it"]
    for name, facts in ranking["strata"].items():
        who = "" if len(ranking["strata"]) == 1 else f"{name}: "
        if facts["points"]:
            how = f"{who}{facts['points']:,} points x {facts['replicates']} scrambles"
            stopped = facts["stopped"]
            lines += _wrapped(f"{how}; {stopped}", "  ")
    for entry in ranking["lists"]:
        if entry["estimand"] not in ONLY_IN_TABLE:
            lines += _list_lines(entry, len(ranking["strata"]) > 1)
    if any(entry["estimand"] == "difference between arms" for entry in ranking["lists"]):
        lines += ["", "  differences between arms, with intervals, are in sensitivity.parquet"]
    return lines


def _list_lines(entry: dict[str, Any], many: bool) -> list[str]:
    where = f"{entry['arm']}, {entry['stratum']}" if many else entry["arm"]
    unit = f", {UNITS[entry['outcome'].split('.')[-1]]}" if entry.get("index") == "mu_star" else ""
    index = f" ({entry['index']}{unit})" if "index" in entry else ""
    lines = ["", *_wrapped(f"{entry['outcome']} ({where}): {ESTIMANDS[entry['estimand']]}{index}", "  ")]
    if "refused" in entry:
        return lines + _wrapped(f"refused: {entry['refused']}", "    ")
    numbers_of = _effect if entry["index"] == "mu_star" else _share
    for factor in entry["factors"][:SHOWN]:
        numbers = numbers_of(*(factor[k] for k in ("value", "low", "high")))
        word = (factor["verdict"] or "").removesuffix(" at this size")
        lines.append(f"    {str(factor['name'])[:20]:20s} {numbers:23s} {word}".rstrip())
    more = len(entry["factors"]) - SHOWN
    return [*lines, f"    and {more} more below them"] if more > 0 else lines


def _share(value: float, low: float, high: float) -> str:
    return f"{value:.3f} ({low:.3f} to {high:.3f})".replace("-0.000", "0.000")


def _effect(value: float, low: float, high: float) -> str:
    return f"{value:.3g} ({low:.2g} to {high:.2g})"


def _wrapped(text: str, indent: str) -> list[str]:
    return textwrap.wrap(text, 78, initial_indent=indent, subsequent_indent=indent + "  ")
