"""Several models side by side: comparison.parquet, summary.json and a page that leads to each model's own."""

from __future__ import annotations

import json
import os
from html import escape
from importlib.resources import files
from pathlib import Path
from typing import Any

import numpy as np

from cohort.errors import Problem, StudyError
from cohort.reading import misfit, read_json
from cohort.report.counting import EVERYONE, OSCILLATES
from cohort.report.page import table_html
from cohort.report.record import is_name, is_text
from cohort.report.summary import CAUTION, rebuild
from cohort.stores import is_remote
from cohort.tables import COMPARISON, write_bytes, write_table

SHOWN = {
    "period_min": "period, min",
    "glucose_amplitude_mg_dl": "glucose amplitude, mg/dL",
    "glucose_mean_mg_dl": "mean glucose, mg/dL",
}


def is_several(folder: Path) -> bool:
    """Whether a folder holds one study in several models."""
    if is_remote(folder):
        return (folder / "models.json").exists()
    return os.path.isfile(folder / "models.json")  # noqa: PTH113 -- Path.is_file raises for names too long


def compare(folder: Path, verify: bool = True) -> dict[str, Any]:
    """Rebuild each model's folder and what compares them; returns the summary. Raises StudyError, RunError as `rebuild`."""
    record = _record(folder / "models.json")
    names = record["models"]
    each = {name: rebuild(folder / name, verify=verify)[1] for name in names}
    rows = [row for name, summary in each.items() for row in _rows(name, summary)]
    write_table(folder / "comparison.parquet", COMPARISON, {
        c.name: np.array([np.nan if r[j] is None else r[j] for r in rows], float) if c.kind == "float64" else [r[j] for r in rows]
        for j, c in enumerate(COMPARISON.columns)
    })  # fmt: skip
    summary = {"title": record["title"], "caution": CAUTION, "lacks": record["lacks"], "models": each}
    write_bytes(folder / "summary.json", (json.dumps(summary, indent=2) + "\n").encode())
    write_bytes(folder / "report.html", _page(record, names, rows).encode())
    return summary


def _record(path: Path) -> dict[str, Any]:
    try:
        found = read_json(path)
        wrong = misfit(found, {"title": is_text, "models": [is_name], "lacks": {None: [is_text]}})
    except (OSError, ValueError):
        wrong = "it"
    if wrong or not set(found["models"]) == set(found["lacks"]):
        raise StudyError(
            [Problem("", f"is no list of models: {wrong or 'lacks'} is not as a run writes it", str(path))]
        )
    record: dict[str, Any] = found
    return record


def _rows(name: str, summary: dict[str, Any]) -> list[tuple[Any, ...]]:
    rows = []
    for arm, facts in summary["arms"].items():
        for stratum, counts in facts["strata"].items():
            share = counts[OSCILLATES]
            medians = [facts["quantiles"].get(key, {}).get("q50") if stratum == EVERYONE else None for key in SHOWN]
            rows.append((arm, stratum, name, share["share"], share["low"], share["high"], *medians))
    return sorted(rows, key=lambda r: (r[0], r[1]))


def words(summary: dict[str, Any]) -> str:
    """The comparison for a terminal."""
    lines = [summary["title"], ""]
    lines += [
        f"{arm}, {name}: {100 * share:.1f} % oscillate ({100 * low:.1f} % to {100 * high:.1f} %)"
        for name, one in summary["models"].items()
        for arm, who, _, share, low, high, *_ in _rows(name, one)
        if who == EVERYONE
    ]
    for name, lacking in summary["lacks"].items():
        if lacking:
            lines.append(f"{name} has no {', '.join(lacking)}: its people do not differ in that")
    return "\n".join([*lines, "", summary["caution"]])


def _page(record: dict[str, Any], names: list[str], rows: list[tuple[Any, ...]]) -> str:
    shown = [
        (r[0], r[1], r[2], f"{100 * r[3]:.1f} % ({100 * r[4]:.1f} % to {100 * r[5]:.1f} %)",
         *("" if v is None else f"{v:.1f}" for v in r[6:]))
        for r in sorted(rows, key=lambda r: (r[0], r[1]))
    ]  # fmt: skip
    head = ("arm", "who", "model", "oscillate (95 %)", *(f"median {w}" for w in SHOWN.values()))
    lacks = "".join(
        f'<p class="note">{escape(name)} has no {escape(", ".join(p))}: its people do not differ in that.</p>'
        for name, p in record["lacks"].items()
        if p
    )
    links = "".join(f'<li><a href="{escape(name)}/report.html">{escape(name)}</a></li>' for name in names)
    css = (files("cohort.report") / "page.css").read_text()
    return f"""<!DOCTYPE html>
<html lang="en"><head><meta charset="utf-8"><meta name="viewport" content="width=device-width, initial-scale=1">
<title>{escape(record["title"])}</title><style>{css}</style></head>
<body><header class="top"><h1>{escape(record["title"])}</h1></header><main id="content">
<p>The same virtual people in {len(names)} models; what they share has the same values. Numbers stand side by side and are not
pooled: models are not a sample of bodies.</p><p class="small">{escape(CAUTION)}</p>
<div class="wide" tabindex="0" role="region" aria-label="Comparison">{table_html(head, shown, "What each model says")}</div>
{lacks}<h2>Each model by itself</h2><ul>{links}</ul></main></body></html>
"""
