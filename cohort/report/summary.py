"""The headline numbers of a run: summary.json, and the same in words for a terminal."""

from __future__ import annotations

import json
import textwrap
from pathlib import Path
from typing import Any

import numpy as np

from cohort.errors import Problem, RunError, StudyError
from cohort.quantities import REGIMES
from cohort.report.counting import EVERYONE, OSCILLATES, Count, count_regimes, write_incidence
from cohort.report.ranking import rank, ranking_words
from cohort.report.results import Results
from cohort.tables import numbers, read_part, write_bytes

QUANTILES = (0.05, 0.25, 0.5, 0.75, 0.95)
DESCRIBED = (
    "period_min", "glucose_amplitude_mg_dl", "insulin_lag_min", "equilibrium_glucose_mg_dl", "equilibrium_insulin_mu_l",
    "glucose_mean_mg_dl", "glucose_peak_mg_dl", "glucose_nadir_mg_dl", "glucose_cv", "time_above_180_min",
    "time_below_70_min", "clamp_rate_mean_mg_per_min", "clamp_off_target_min",
)  # fmt: skip
AMONG_OSCILLATORS = ("period_min", "glucose_amplitude_mg_dl", "insulin_lag_min")

DISAGREES = "the model disagrees with published people here"
CAUTION = (
    "For research planning. Virtual subjects are not patients; not for diagnosis, dosing or care. Glucose and insulin "
    "infusion in people is for licensed staff under an approved protocol and local rules."
)


def rebuild(folder: Path) -> tuple[Results, dict[str, Any]]:
    """Make incidence.parquet and summary.json anew from the result files; returns (results, summary).

    Only shards of which every table is there are counted, and the summary says how many of how many. Raises StudyError
    for a folder without results, RunError where a part cannot be read or the disk refuses.
    """
    results = Results(folder)
    if not results.whole_shards:
        raise StudyError([Problem("", "holds no finished shard; run the study again to carry on", str(folder))])
    try:
        return results, _rebuild(folder, results)
    except (OSError, ValueError) as error:
        raise RunError(f"{error}; run the study again to make it anew") from None


def _rebuild(folder: Path, results: Results) -> dict[str, Any]:
    counts = count_regimes(results)
    write_incidence(results, counts)
    summary = {
        "title": results.record["title"],
        "model": results.record["model"],
        "state": results.record["state"],
        "subjects": results.record["count"],
        "shards": len(results.whole_shards),
        "shards_planned": results.record["shards"],
        "caution": CAUTION,
        "arms": {arm: _arm(results, arm, [c for c in counts if c.arm == arm]) for arm in results.arms},
    }
    ranking = rank(results) if len(results.whole_shards) == results.record["shards"] else None
    if ranking is not None:
        summary["ranking"] = ranking
    write_bytes(folder / "summary.json", (json.dumps(summary, indent=2) + "\n").encode())
    return summary


def _arm(results: Results, arm: str, counts: list[Count]) -> dict[str, Any]:
    facts = results.record["arm_facts"][arm]
    found: dict[str, Any] = dict(facts)
    if facts["disagrees"]:
        found["heading"] = DISAGREES
    found["strata"] = {
        name: {c.regime: _numbers(c) for c in counts if c.stratum == name}
        for name in dict.fromkeys(c.stratum for c in counts)
    }
    found["failures"] = _failures(results, arm)
    found["quantiles"] = _quantiles(results, arm)
    return found


def _numbers(count: Count) -> dict[str, Any]:
    s = count.share
    return {
        "n": s.k,
        "of": s.n,
        "share": s.share,
        "low": s.low,
        "high": s.high,
        "unresolved": s.unresolved,
        "method": s.method,
    }


def _failures(results: Results, arm: str) -> dict[str, int]:
    counts: dict[str, int] = {}
    for number in results.whole_shards:
        part = read_part(results.folder / "outcomes" / arm, number, ["failure"])
        for word in part.column("failure").drop_null().to_pylist():
            counts[word] = counts.get(word, 0) + 1
    return counts


def _quantiles(results: Results, arm: str) -> dict[str, dict[str, Any]]:
    """Of each described outcome: how many rows have it, and quantiles over those."""
    found: dict[str, dict[str, Any]] = {}
    for name in DESCRIBED:
        columns = [name, "oscillates"] if name in AMONG_OSCILLATORS else [name]
        pieces = []
        for number in results.whole_shards:
            part = read_part(results.folder / "outcomes" / arm, number, columns)
            if name not in part.column_names:
                break
            values = numbers(part, name)
            if name in AMONG_OSCILLATORS:
                values = values[numbers(part, "oscillates") == 1.0]
            pieces.append(values[np.isfinite(values)])
        values = np.concatenate(pieces) if pieces else np.empty(0)
        if len(values):
            marks = np.quantile(values, QUANTILES)
            found[name] = {
                "n": len(values),
                **{f"q{q * 100:02.0f}": float(v) for q, v in zip(QUANTILES, marks, strict=True)},
            }
    return found


# ---- in words ----------------------------------------------------------------------------------------------------


def closing_words(summary: dict[str, Any]) -> str:
    """The run in lines of at most 80 characters."""
    lines = [summary["title"]]
    if summary["shards"] < summary["shards_planned"]:
        done = f"{summary['shards']:,} of {summary['shards_planned']:,} shards"
        lines.append(f"NOTE: unfinished; counted are {done} only")
    for arm, facts in summary["arms"].items():
        lines += ["", f"{arm}  ({facts['hours']:g} h, last {facts['window_hours']:g} h measured)"]
        if "heading" in facts:
            lines.append(f"  NOTE: {facts['heading']}")
        for stratum, counts in facts["strata"].items():
            lines += _stratum_lines(stratum, counts)
        if not facts["strata"]:
            lines.append("  no steady input: regimes are not defined for this arm")
        for word, n in facts["failures"].items():
            lines.append(f"  {n:,} failed: {word}")
        lines += _quantile_lines(facts["quantiles"], bool(facts["strata"]))
    if "ranking" in summary:
        lines += ranking_words(summary["ranking"])
    return "\n".join([*lines, "", *_wrapped(summary["caution"])])


def _stratum_lines(stratum: str, counts: dict[str, Any]) -> list[str]:
    yes = counts[OSCILLATES]
    who = "" if stratum == EVERYONE else f"{stratum}: "
    between = f"{_percent(yes['low'])} to {_percent(yes['high'])}"
    head = f"  {who}in this model {_percent(yes['share'])} oscillate ({between}; {yes['method']})"
    parts = [f"{counts[r]['n']:,} {r}" for r in REGIMES if counts[r]["n"]]
    return [head, f"    of {yes['of']:,}: {', '.join(parts)}"]


def _percent(x: float) -> str:
    return f"{100 * x:.1f} %"


_ROWS = (
    ("period_min", "period, min (oscillators)"),
    ("glucose_amplitude_mg_dl", "glucose amplitude, mg/dL (oscillators)"),
    ("insulin_lag_min", "insulin after glucose, min (oscillators)"),
    ("glucose_mean_mg_dl", "mean glucose, mg/dL"),
    ("glucose_peak_mg_dl", "highest glucose, mg/dL"),
    ("glucose_nadir_mg_dl", "lowest glucose, mg/dL"),
    ("time_above_180_min", "time above 180 mg/dL, min"),
    ("time_below_70_min", "time below 70 mg/dL, min"),
    ("clamp_rate_mean_mg_per_min", "clamp infusion, mg/min"),
    ("clamp_off_target_min", "clamp off target, min"),
)


def _quantile_lines(quantiles: dict[str, Any], cycles: bool) -> list[str]:
    lines = [f"  {'':42s}{'5 %':>9s}{'median':>9s}{'95 %':>9s}"]
    for name, label in _ROWS:
        if name in quantiles:
            q = quantiles[name]
            lines.append(f"  {label:42s}{q['q05']:9.1f}{q['q50']:9.1f}{q['q95']:9.1f}")
    if cycles and "period_min" not in quantiles:
        lines.append("  nobody oscillates, so there is no period")
    return lines


def _wrapped(text: str) -> list[str]:
    return textwrap.wrap(text, 78)
