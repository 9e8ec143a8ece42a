"""Which figures a run has, each from result tables and the summary: aggregates, and a few subjects, never all rows."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

import numpy as np
from numpy.typing import NDArray

from cohort.infer.predict import Belief, at_least
from cohort.quantities import CYCLE_OUTCOMES, ESTIMANDS, PARAMETERS, REGIMES, WINDOW_OUTCOMES
from cohort.report.counting import DETECTED, DETECTED_AT_PERIOD, DETECTED_FALSE, DETECTED_TRUE, EVERYONE, OSCILLATES
from cohort.report.figures import Figure, courses, distributions, intervals, lines, plane, whiskers
from cohort.report.maps import map_figures
from cohort.report.results import Results
from cohort.tables import numbers, read_part, read_parts, read_table

Array = NDArray[np.float64]

IN_PLANE = 800
MOST_BINS = 40
EXCURSIONS = ("glucose_nadir_mg_dl", "glucose_mean_mg_dl", "glucose_peak_mg_dl")
SHOWN_FACTORS = 10
MOST_RANKED = 12
UNITS = {c.name: c.unit for c in (*CYCLE_OUTCOMES, *WINDOW_OUTCOMES)}


def gallery(results: Results, summary: dict[str, Any]) -> Iterator[tuple[str, Figure]]:
    """(section, figure) of everything there is to show, in the page's order."""
    yield from _who(summary)
    yield from _cycles(results, summary)
    yield from _excursions(summary)
    yield from _courses(results, summary)
    yield from _ranked(summary)
    yield from _plane(results, summary)
    yield from _convergence(results, summary)
    yield from _seen(summary)
    yield from _recruitment(summary)
    yield from map_figures(results)


def _who(summary: dict[str, Any]) -> Iterator[tuple[str, Figure]]:
    rows = [
        (arm, stratum, counts[OSCILLATES])
        for arm, facts in summary["arms"].items()
        for stratum, counts in facts["strata"].items()
    ]
    if not rows:
        return
    labels = [arm if stratum == EVERYONE else f"{arm}: {stratum}" for arm, stratum, _ in rows]
    value, low, high = (np.array([100.0 * s[k] for _, _, s in rows]) for k in ("share", "low", "high"))
    arms = list(summary["arms"])
    alt = "; ".join(
        f"{a} {v:.0f} % ({lo:.0f} to {h:.0f})" for a, v, lo, h in zip(labels, value, low, high, strict=True)
    )
    yield "who", Figure(
        "who-oscillates", "Share that oscillates", f"Share that oscillates by arm and stratum, with 95 % intervals: {alt}",
        intervals(labels, value, low, high, "% that oscillate", [arms.index(a) for a, _, _ in rows], (0.0, 100.0)),
        ("arm", "stratum", "oscillating", "of", "share", "low", "high", "method"),
        tuple((a, s, c["n"], c["of"], c["share"], c["low"], c["high"], c["method"]) for a, s, c in rows),
        f"n {rows[0][2]['of']:,} virtual people in each arm",
    )  # fmt: skip


def _column(results: Results, arm: str, name: str) -> Array:
    """One outcome of everyone in an arm; NaN where missing."""
    parts = [read_part(results.folder / "outcomes" / arm, k, [name]) for k in results.whole_shards]
    return np.concatenate([numbers(p, name) for p in parts])


def _weights(results: Results) -> Array | None:
    """The weight of everyone in counts, 0 for who is not eligible; None where all count alike."""
    path = results.folder / "weights.parquet"
    asked = results.record.get("selection") or {}
    if not (asked.get("eligible") or asked.get("match") or results.record.get("persons")) or not path.exists():
        return None
    return numbers(read_table(path), "weight")


def _cycles(results: Results, summary: dict[str, Any]) -> Iterator[tuple[str, Figure]]:
    arms = [arm for arm, facts in summary["arms"].items() if "period_min" in facts["quantiles"]]
    counted = _weights(results)
    for name, title, axis in (
        ("period_min", "Period of those who oscillate", "period, min"),
        ("glucose_amplitude_mg_dl", "Glucose swing of those who oscillate", "peak to trough, mg/dL"),
    ):
        values: dict[str, Array] = {}
        weights: dict[str, Array] = {}
        for arm in arms:
            column = _column(results, arm, name)
            weight = np.ones(len(column)) if counted is None else counted
            keep = np.isfinite(column) & (weight > 0.0) & ((column > 0.0) | (name == "period_min"))
            if keep.sum() > 1:
                values[arm], weights[arm] = column[keep], weight[keep]
        if not values:
            continue
        together = np.concatenate(list(values.values()))
        low, high = np.quantile(together, [0.002, 0.998])
        bins = int(np.clip(np.sqrt(min(len(v) for v in values.values())), 8, MOST_BINS))
        edges = np.linspace(low, high if high > low else low + 1.0, bins + 1)
        shares = np.array([np.histogram(v, edges, weights=weights[a])[0] / weights[a].sum() for a, v in values.items()])
        alt = "; ".join(f"{arm}: median {summary['arms'][arm]['quantiles'][name]['q50']:.0f}" for arm in values)
        yield "cycles", Figure(
            name.split("_")[0] + "-distribution", title, f"{title}, by arm. {alt}",
            distributions(list(values), edges, shares, axis), ("arm", "from", "to", "share"),
            tuple((arm, float(a), float(b), float(s)) for arm, row in zip(values, shares, strict=True)
                  for a, b, s in zip(edges[:-1], edges[1:], row, strict=True)),
            "; ".join(f"{arm}: n {len(v):,}" for arm, v in values.items()),
        )  # fmt: skip


def _excursions(summary: dict[str, Any]) -> Iterator[tuple[str, Figure]]:
    labels, marks, rows = [], [], []
    for arm, facts in summary["arms"].items():
        for name in EXCURSIONS:
            q = facts["quantiles"].get(name)
            if q:
                word = {"nadir": "lowest", "mean": "mean", "peak": "highest"}[name.split("_")[1]]
                labels.append(f"{arm}: {word}")
                marks.append([q[k] for k in ("q05", "q25", "q50", "q75", "q95")])
                rows.append((arm, name, q["n"], *marks[-1]))
    if not labels:
        return
    alt = "; ".join(f"{label} median {m[2]:.0f}" for label, m in zip(labels, marks, strict=True))
    yield "excursions", Figure(
        "glucose-excursions", "Glucose in the measured window",
        f"Lowest, mean and highest glucose in mg/dL: 5, 25, 50, 75 and 95 % of people. {alt}",
        whiskers(labels, np.array(marks), "glucose, mg/dL: 5 to 95 % thin, 25 to 75 % thick, median a bar"),
        ("arm", "outcome", "n", "q05", "q25", "q50", "q75", "q95"), tuple(rows), f"n {rows[0][2]:,} people in each arm",
    )  # fmt: skip


def _courses(results: Results, summary: dict[str, Any]) -> Iterator[tuple[str, Figure]]:
    for arm, facts in summary["arms"].items():
        folder = results.folder / "time_courses" / arm
        if not any(folder.glob("part-*.parquet")):
            continue
        table = read_parts(folder, ["subject", "why", "time_min", "glucose_mg_dl"])
        subject, why = np.asarray(table.column("subject")), table.column("why").to_pylist()
        hours, glucose = numbers(table, "time_min") / 60.0, numbers(table, "glucose_mg_dl")
        first = {int(s): i for i, s in reversed(list(enumerate(subject)))}
        chosen = _some(first, why)
        if not chosen:
            continue
        panels = [(f"subject {s}, {why[first[s]]}", hours[subject == s], glucose[subject == s]) for s in chosen]
        settle = facts["hours"] - facts["window_hours"]
        rows = tuple(
            (s, float(h), float(g))
            for s in chosen
            for h, g in zip(hours[subject == s], glucose[subject == s], strict=True)
        )
        yield "courses", Figure(
            f"courses-{arm}", f"Time courses: {arm}",
            f"Glucose of {len(chosen)} kept subjects against hours from the arm's beginning; settling is shaded. "
            + "; ".join(f"{t}: {np.nanmin(g):.0f} to {np.nanmax(g):.0f} mg/dL" for t, _, g in panels),
            courses(panels, settle, None), ("subject", "hours", "glucose_mg_dl"), rows,
            f"n {len(chosen)} of {summary['subjects']:,}: typical, next to the border, extreme", arm,
        )  # fmt: skip


def _some(first: dict[int, int], why: list[str]) -> list[int]:
    """Up to nine kept subjects: typical ones, then borderline, then extreme."""
    found: list[int] = []
    for word in ("typical", "borderline", "extreme"):
        found += [s for s in sorted(first) if why[first[s]] == word][:3]
    return found


# ---- what decides ------------------------------------------------------------------------------------------------


def _ranked(summary: dict[str, Any]) -> Iterator[tuple[str, Figure]]:
    ranking = summary.get("ranking")
    if not ranking:
        return
    lists = [
        e for e in ranking["lists"] if "factors" in e and "minus" not in e["arm"] and "unresolved" not in e["estimand"]
    ]
    for k, entry in enumerate(lists[:MOST_RANKED]):
        factors = entry["factors"][:SHOWN_FACTORS]
        value, low, high = (np.array([f[key] for f in factors]) for key in ("value", "low", "high"))
        where = entry["arm"] if entry["stratum"] == "all" else f"{entry['arm']}, {entry['stratum']}"
        alt = "; ".join(f"{f['name']} {f['value']:.2g} ({f['verdict'] or 'no verdict'})" for f in factors)
        yield "decides", Figure(
            f"ranked-{k + 1:02d}", f"{entry['outcome']} in {where}: {entry['estimand']}",
            f"{ESTIMANDS[entry['estimand']]}; {entry['index']} with 95 % intervals: {alt}",
            intervals([str(f["name"]) for f in factors], value, low, high, f"{entry['index']}: {ESTIMANDS[entry['estimand']]}"),
            ("parameter", "index", "value", "low", "high", "verdict"),
            tuple((f["name"], entry["index"], f["value"], f["low"], f["high"], f["verdict"]) for f in factors),
            f"n {entry['n']:,} runs{_verdicts(entry['factors'])}", entry["arm"], entry["outcome"], entry["stratum"],
        )  # fmt: skip


def _verdicts(factors: list[dict[str, Any]]) -> str:
    """Factors by verdict, in words."""
    words: dict[str, list[str]] = {}
    for factor in factors:
        if factor["verdict"]:
            words.setdefault(factor["verdict"], []).append(str(factor["name"]))
    return "".join(f"; {verdict}: {', '.join(names)}" for verdict, names in words.items())


def _plane(results: Results, summary: dict[str, Any]) -> Iterator[tuple[str, Figure]]:
    """Subjects in the plane of the two parameters that decide most, or of the first two varied ones."""
    units = results.record.get("units") or {p: q.unit for p, q in PARAMETERS.items()}
    varied = [p for p in results.record["varied"] if p in units]
    arms = [arm for arm, facts in summary["arms"].items() if facts["strata"]]
    if len(varied) < 2 or not arms:
        return
    for arm in arms[:4]:
        x_name, y_name, how = _deciding(summary, arm, varied)
        people = read_part(results.folder / "subjects", results.whole_shards[0], ["subject", x_name, y_name])
        regime = read_part(results.folder / "outcomes" / arm, results.whole_shards[0], ["regime"]).column("regime")
        weight = _weights(results)
        there = np.arange(people.num_rows) if weight is None else np.flatnonzero(weight[: people.num_rows] > 0.0)
        shown = there[:IN_PLANE]
        every = regime.to_pylist()
        words = [str(every[i]) for i in shown]
        x, y = (numbers(people, name)[shown] for name in (x_name, y_name))
        counts = ", ".join(f"{words.count(r):,} {r}" for r in REGIMES if r in words)
        yield "decides", Figure(
            f"plane-{arm}", f"Where they oscillate: {arm}",
            f"The first {len(words):,} subjects by {x_name} and {y_name} ({how}), marked by regime: {counts}",
            plane(x, y, words, (f"{x_name}, {_unit(units[x_name])}", f"{y_name}, {_unit(units[y_name])}")),
            ("subject", x_name, y_name, "regime"),
            tuple((int(i), float(a), float(b), w) for i, a, b, w in zip(shown, x, y, words, strict=True)),
            f"n {len(words):,}, the first who count", arm,
        )  # fmt: skip


def _unit(unit: str) -> str:
    return "no unit" if unit == "1" else unit


def _deciding(summary: dict[str, Any], arm: str, varied: list[str]) -> tuple[str, str, str]:
    for entry in (summary.get("ranking") or {}).get("lists", []):
        if entry["arm"] == arm and entry["outcome"] in (OSCILLATES, "growth_per_min") and "factors" in entry:
            names = [f["name"] for f in entry["factors"] if f["name"] in varied]
            if len(names) >= 2:
                return names[0], names[1], "the two that decide most"
    return varied[0], varied[1], "the first two that vary"


def _convergence(results: Results, summary: dict[str, Any]) -> Iterator[tuple[str, Figure]]:
    if not summary.get("ranking") or summary["ranking"]["method"] != "sobol":
        return
    table = read_table(results.folder / "convergence.parquet")
    if not table.num_rows:
        return
    frame = {name: table.column(name).to_pylist() for name in table.column_names}
    groups: dict[tuple[str, str], dict[int, float]] = {}
    for i in range(table.num_rows):
        if frame["index"][i] in ("S1", "ST"):
            at = groups.setdefault((frame["arm"][i], frame["outcome"][i]), {})
            half = 0.5 * (frame["high"][i] - frame["low"][i])
            at[frame["doubling"][i]] = max(at.get(frame["doubling"][i], 0.0), half)
    many = len({arm for arm, _ in groups}) > 1
    series = [
        (
            f"{outcome} ({arm})" if many else outcome,
            16.0 * 2.0 ** np.array(sorted(at)),
            np.array([at[k] for k in sorted(at)]),
        )
        for (arm, outcome), at in list(groups.items())[:8]
    ]
    tolerance = results.record["ranking"]["ranking"]["tolerance"]
    yield "decides", Figure(
        "convergence", "How sure: the widest interval as points were doubled",
        "Widest half-width of any S1 or ST against points a replicate: "
        + "; ".join(f"{name} ends at {y[-1]:.3f}" for name, _, y in series),
        lines(series, ("points of each replicate", "widest half-width"), tolerance, log_x=True),
        ("outcome", "points", "widest_half_width"),
        tuple((name, int(a), float(b)) for name, x, y in series for a, b in zip(x, y, strict=True)),
        f"dotted: the tolerance asked for, {tolerance:g}",
    )  # fmt: skip


# ---- the clinic --------------------------------------------------------------------------------------------------


def _seen(summary: dict[str, Any]) -> Iterator[tuple[str, Figure]]:
    rows = []
    for arm, facts in summary["arms"].items():
        truth = facts["strata"].get(EVERYONE, {}).get(OSCILLATES)
        if facts["schedules"] and truth:
            rows.append((f"{arm}: truly oscillate", truth))
        for schedule, strata in facts["schedules"].items():
            seen = strata[EVERYONE]
            words = {DETECTED: "detected", DETECTED_TRUE: "detected, truly", DETECTED_FALSE: "detected, falsely",
                     DETECTED_AT_PERIOD: "detected, at the true period"}  # fmt: skip
            rows += [(f"{schedule}: {word}", seen[key]) for key, word in words.items() if key in seen]
    if not rows:
        return
    value, low, high = (np.array([100.0 * s[k] for _, s in rows]) for k in ("share", "low", "high"))
    groups = [0 if "truly oscillate" in label else 1 + [label.split(":")[0] for label, _ in rows].index(label.split(":")[0])
              for label, _ in rows]  # fmt: skip
    alt = "; ".join(f"{label} {v:.0f} %" for (label, _), v in zip(rows, value, strict=True))
    yield "clinic", Figure(
        "what-is-seen", "What is there and what is seen", f"Shares of people with 95 % intervals: {alt}",
        intervals([label for label, _ in rows], value, low, high, "% of people", groups, (0.0, 100.0)),
        ("what", "n", "of", "share", "low", "high"),
        tuple((label, s["n"], s["of"], s["share"], s["low"], s["high"]) for label, s in rows),
        f"n {rows[0][1]['of']:,} virtual people",
    )  # fmt: skip


def _recruitment(summary: dict[str, Any]) -> Iterator[tuple[str, Figure]]:
    recruitment = summary.get("recruitment")
    if not recruitment or not recruitment["want"]:
        return
    series = []
    for row in recruitment["rows"]:
        if row.get("to_recruit") and row["stratum"] == EVERYONE and row["counted"] in (OSCILLATES, DETECTED_TRUE):
            name = row["arm"] if row.get("schedule") is None else f"{row['arm']}, {row['schedule']}"
            belief = _belief(row["share"], row["share_sd"])
            n = np.unique(np.linspace(recruitment["want"], 2 * row["to_recruit"], 40).astype(int))
            chance = np.array([at_least(belief, int(k), recruitment["want"], recruitment["evaluable"]) for k in n])
            series.append((name, n.astype(float), chance))
    if not series:
        return
    want, assurance = recruitment["want"], recruitment["assurance"]
    alt = "; ".join(f"{name}: {int(x[np.argmax(y >= assurance)])}" for name, x, y in series)
    yield "recruit", Figure(
        "recruitment", f"How many to recruit for at least {want}",
        f"Probability of at least {want} against recruits; {assurance:g} is reached at about: {alt}",
        lines(series[:8], ("people recruited", f"probability of at least {want}"), assurance), ("what", "recruited", "chance"),
        tuple((name, int(a), float(b)) for name, x, y in series for a, b in zip(x, y, strict=True)),
        f"dotted: the assurance asked for, {assurance:g}",
    )  # fmt: skip


def _belief(share: float, sd: float) -> Belief:
    from cohort.infer.predict import from_moments

    return from_moments(share, min(sd, 0.98 * float(np.sqrt(share * (1.0 - share)))))
