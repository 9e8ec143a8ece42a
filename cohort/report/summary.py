"""The headline numbers of a run: summary.json, and the same in words for a terminal."""

from __future__ import annotations

import json
import textwrap
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from cohort.errors import Problem, RunError, StudyError, one_line
from cohort.quantities import REGIMES
from cohort.report.chosen import Chosen, chosen
from cohort.report.clinic import detection_lines, fasting_lines, people_lines, recruitment_lines, sampling_lines
from cohort.report.counting import EVERYONE, OSCILLATES, Count, count_all, write_incidence
from cohort.report.page import write_page
from cohort.report.ranking import rank, ranking_words
from cohort.report.recruitment import recruit
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


def rebuild(folder: Path, page: bool = True, verify: bool = True) -> tuple[Results, dict[str, Any]]:
    """Make every table but the parts, summary.json and (with `page`) report.html anew from the result files; returns
    (results, summary).

    With `verify` the values of every part are compared with its digest first (a run has just done so). Only shards of which
    every table is there are counted, and the summary says how many of how many. Raises StudyError
    for a folder without results, RunError where a part cannot be read or the disk refuses.
    """
    results = Results(folder)
    if not results.whole_shards:
        raise StudyError([Problem("", "holds no finished shard; run the study again to carry on", str(folder))])
    try:
        if verify:
            results.verify()
        return results, _rebuild(folder, results, page)
    except (OSError, ValueError) as error:
        raise RunError(f"{error}; run the study again to make it anew") from None


def _rebuild(folder: Path, results: Results, page: bool) -> dict[str, Any]:
    who = chosen(results)
    counts = count_all(results, who)
    write_incidence(results, counts)
    recruitment = recruit(results, counts, who)
    summary = {
        "title": results.record["title"],
        "model": results.record["model"],
        "state": results.record["state"],
        "subjects": results.record["count"],
        "shards": len(results.whole_shards),
        "shards_planned": results.record["shards"],
        "caution": CAUTION,
        "arms": {arm: _arm(results, arm, [c for c in counts if c.arm == arm], who) for arm in results.arms},
        "fasting": results.record.get("fasting"),
    }
    more = {
        "people": who.facts if who else None,
        "sampling": results.record.get("sampling"),
        "recruitment": recruitment,
        "population": results.record.get("population"),
    }
    summary |= {name: facts for name, facts in more.items() if facts}
    ranking = rank(results) if len(results.whole_shards) == results.record["shards"] else None
    if ranking is not None:
        summary["ranking"] = ranking
    write_bytes(folder / "summary.json", (json.dumps(summary, indent=2) + "\n").encode())
    if page:
        write_page(results, summary)
    return summary


def _arm(results: Results, arm: str, counts: list[Count], who: Chosen | None) -> dict[str, Any]:
    facts = results.record["arm_facts"][arm]
    found: dict[str, Any] = dict(facts)
    if facts["disagrees"]:
        found["heading"] = DISAGREES
    regimes = [c for c in counts if c.schedule is None]
    found["strata"] = _by_stratum(regimes)
    schedules = dict.fromkeys(c.schedule for c in counts if c.schedule is not None)
    found["schedules"] = {name: _by_stratum([c for c in counts if c.schedule == name]) for name in schedules}
    found["failures"] = _failures(results, arm)
    found["quantiles"] = _quantiles(results, arm, who)
    return found


def _by_stratum(counts: list[Count]) -> dict[str, dict[str, Any]]:
    names = dict.fromkeys(c.stratum for c in counts)
    return {name: {c.regime: _numbers(c) for c in counts if c.stratum == name} for name in names}


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
        for word in map(one_line, part.column("failure").drop_null().to_pylist()):
            counts[word] = counts.get(word, 0) + 1
    return counts


def _quantiles(results: Results, arm: str, who: Chosen | None) -> dict[str, dict[str, Any]]:
    """Of each described outcome: how many of the counted have it, and quantiles over those, weighted as they count."""
    found: dict[str, dict[str, Any]] = {}
    for name in DESCRIBED:
        columns = [name, "oscillates"] if name in AMONG_OSCILLATORS else [name]
        pieces, start = [], 0
        weights = []
        for number in results.whole_shards:
            part = read_part(results.folder / "outcomes" / arm, number, columns)
            if name not in part.column_names:
                break
            values = numbers(part, name)
            weight = np.ones(len(values)) if who is None else who.weight[start : start + len(values)]
            start += len(values)
            keep = np.isfinite(values) & (weight > 0.0)
            if name in AMONG_OSCILLATORS:
                keep &= numbers(part, "oscillates") == 1.0
            pieces.append(values[keep])
            weights.append(weight[keep])
        values = np.concatenate(pieces) if pieces else np.empty(0)
        if len(values):
            marks = (
                np.quantile(values, QUANTILES) if who is None else weighted_quantiles(values, np.concatenate(weights))
            )
            found[name] = {
                "n": len(values),
                **{f"q{q * 100:02.0f}": float(v) for q, v in zip(QUANTILES, marks, strict=True)},
            }
    return found


def weighted_quantiles(values: NDArray[np.float64], weights: NDArray[np.float64]) -> NDArray[np.float64]:
    """Quantiles of weighted values, interpolated between the middles of their weights; equal weights give numpy's."""
    order = np.argsort(values, kind="stable")
    values, weights = values[order], weights[order]
    if len(values) == 1:
        return np.full(len(QUANTILES), values[0])
    before = np.concatenate([[0.0], np.cumsum(0.5 * (weights[:-1] + weights[1:]))])
    return np.asarray(np.interp(np.array(QUANTILES) * before[-1], before, values))


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
        for schedule, strata in facts["schedules"].items():
            for stratum, seen in strata.items():
                lines += detection_lines(schedule, stratum, seen)
        for word, n in facts["failures"].items():
            lines.append(f"  {n:,} failed: {word}")
        lines += _quantile_lines(facts["quantiles"], bool(facts["strata"]))
    lines += fasting_lines(summary["fasting"])
    if "people" in summary:
        lines += people_lines(summary["people"])
    if "sampling" in summary:
        lines += sampling_lines(summary["sampling"])
    if "recruitment" in summary:
        lines += recruitment_lines(summary["recruitment"], summary.get("population"))
    if "ranking" in summary:
        lines += ranking_words(summary["ranking"])
    return "\n".join([*lines, "", *_wrapped(summary["caution"])])


def _stratum_lines(stratum: str, counts: dict[str, Any]) -> list[str]:
    yes = counts[OSCILLATES]
    who = "" if stratum == EVERYONE else f"{stratum}: "
    between = f"{_percent(yes['low'])} to {_percent(yes['high'])}"
    head = f"{who}in this model {_percent(yes['share'])} oscillate ({between}; {yes['method']})"
    parts = [f"{counts[r]['n']:,} {r}" for r in REGIMES if counts[r]["n"]]
    return [
        *textwrap.wrap(head, 78, initial_indent="  ", subsequent_indent="    "),
        f"    of {yes['of']:,}: {', '.join(parts)}",
    ]


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
