"""report.html: one self-contained page, from the answer to the method; figures/ holds each figure and its numbers."""

from __future__ import annotations

import csv
import io
import re
from collections.abc import Iterable, Mapping, Sequence
from html import escape
from importlib.resources import files
from pathlib import Path
from typing import Any

from cohort.model.catalogue import MODELS
from cohort.quantities import ESTIMANDS, GLUCOSE_MG_DL_PER_MMOL_L, INSULIN_PMOL_PER_MU, REGIMES
from cohort.report.answer import answer
from cohort.report.clinic import NO_PROOF, PUBLISHED_FASTING
from cohort.report.counting import APERIODIC, CAPTURED, EVERYONE, LOCKED_1_1, LOCKED_OTHERWISE, OSCILLATES
from cohort.report.figures import Figure
from cohort.report.gallery import gallery
from cohort.report.results import Results
from cohort.tables import write_bytes

MOST_ROWS_SHOWN = 400
SECTIONS = {
    "who": "Who oscillates",
    "forced": "Whom the periodic input captures",
    "cycles": "Period and amplitude",
    "excursions": "Glucose excursions",
    "courses": "Time courses",
    "decides": "What decides it",
    "clinic": "What the clinic would see",
    "recruit": "How many to recruit",
    "map": "Where oscillation lives",
    "refused": "What was refused, and why",
    "fasting": "Fasting values beside published ones",
    "method": "Method, definitions and limits",
}
LOCKINGS = (LOCKED_1_1, LOCKED_OTHERWISE, APERIODIC)
ENTRAINED = (
    "A body that does not oscillate by itself follows any input 1:1, so only those that do can be captured. In seven men an "
    "infusion swinging by 33 % at 0.8 and at 1.2 times each one's own period captured everyone 1:1 (Sturis et al., J Clin "
    "Invest 1991;87:439-445); where fewer are captured here, the model falls short of that or its people are more unlike."
)
REGIME_WORDS = {
    "sustained": "the equilibrium repels, and the orbit it tends to was found and closed",
    "damped": "the equilibrium attracts, and each cycle keeps at least 5 % of the one before: it rings",
    "quiet": "the equilibrium attracts with less ringing than that",
    "bistable": "the equilibrium attracts, and so does an orbit reached from glucose x 1.5 or x 0.6",
    "undecided": "between the two, or no orbit closed within the stated budget",
    "failed": "not computed",
}
QUANTILE_ROWS = (
    ("period_min", "period (oscillators)", "min"),
    ("glucose_amplitude_mg_dl", "glucose swing (oscillators)", "mg/dL"),
    ("insulin_lag_min", "insulin after glucose (oscillators)", "min"),
    ("equilibrium_insulin_mu_l", "insulin at the equilibrium", "mU/L"),
    ("glucose_mean_mg_dl", "mean glucose", "mg/dL"),
    ("glucose_peak_mg_dl", "highest glucose", "mg/dL"),
    ("glucose_nadir_mg_dl", "lowest glucose", "mg/dL"),
    ("time_above_180_min", "time above 180 mg/dL", "min"),
    ("time_below_70_min", "time below 70 mg/dL", "min"),
    ("clamp_rate_mean_mg_per_min", "clamp infusion", "mg/min"),
)


def write_page(results: Results, summary: dict[str, Any]) -> Path:
    """Write report.html and figures/ and return the page's path. Raises OSError where the disk refuses."""
    drawn = list(gallery(results, summary))
    folder = results.folder / "figures"
    for _, figure in drawn:
        write_bytes(folder / f"{_file(figure.name)}.svg", _standing_alone(figure.svg).encode())
        write_bytes(folder / f"{_file(figure.name)}.csv", _csv(figure.columns, figure.rows).encode())
    path = results.folder / "report.html"
    write_bytes(path, _page(results, summary, drawn).encode())
    return path


def _page(results: Results, summary: dict[str, Any], drawn: Sequence[tuple[str, Figure]]) -> str:
    bodies = {
        "who": _regimes(summary), "forced": _forced(summary), "cycles": "", "excursions": _quantiles(summary), "courses": "",
        "decides": _deciding(summary), "clinic": _clinic(summary), "recruit": _recruit(summary),
        "map": "", "refused": _refused(summary), "fasting": _fasting(summary), "method": _method(results, summary),
    }  # fmt: skip
    parts, links = [], []
    for name, title in SECTIONS.items():
        figures = "".join(_figure(f) for section, f in drawn if section == name)
        if figures or bodies[name]:
            links.append(f'<li><a href="#{name}">{escape(title)}</a></li>')
            parts.append(
                f'<section aria-labelledby="{name}"><h2 id="{name}">{escape(title)}</h2>{figures}{bodies[name]}</section>'
            )
    here = files("cohort.report")
    choose = _choices(results, [f for _, f in drawn])
    unfinished = ""
    if summary["shards"] < summary["shards_planned"]:
        unfinished = _note(
            f"Unfinished: counted are {summary['shards']:,} of {summary['shards_planned']:,} shards only."
        )
    return f"""<!DOCTYPE html>
<html lang="en"><head><meta charset="utf-8"><meta name="viewport" content="width=device-width, initial-scale=1">
<title>{escape(summary["title"])}</title><style>{(here / "page.css").read_text()}</style></head>
<body><a class="skip" href="#content">Skip to the answer</a>
<header class="top"><h1>{escape(summary["title"])}</h1></header>
<main id="content">{unfinished}
<p class="answer">{escape(answer(summary))}</p>
<p class="small">{escape(summary["caution"])}</p>
<nav aria-label="Contents"><ul>{"".join(links)}</ul></nav>{choose}
{"".join(parts)}</main>
<footer><p class="small">{escape(_made(results))}</p></footer>
<script>{(here / "page.js").read_text()}</script></body></html>
"""


def _choices(results: Results, figures: Sequence[Figure]) -> str:
    """What of the page is shown, where there is a choice: by arm, ranked outcome and stratum."""
    found = []
    for key, names in (
        ("arm", list(results.arms)),
        ("outcome", list(dict.fromkeys(f.outcome for f in figures if f.outcome))),
        ("stratum", list(dict.fromkeys(f.stratum for f in figures if f.stratum))),
    ):
        if len(names) > 1:
            options = "".join(f'<option value="{escape(name)}">{escape(name)}</option>' for name in names)
            found.append(
                f'<label for="{key}">{key}</label> <select id="{key}"><option value="">every {key}</option>{options}</select>'
            )
    return f'<p class="choose small">Show {" ".join(found)}</p>' if found else ""


# ---- figures -----------------------------------------------------------------------------------------------------


def _file(name: str) -> str:
    return re.sub(r"[^A-Za-z0-9._-]+", "-", name)


def _unique(svg: str, name: str) -> str:
    """Ids made the figure's own, since several figures share one page."""
    mark = _file(name)
    svg = re.sub(r'\bid="([^"]+)"', rf'id="{mark}.\1"', svg)
    svg = re.sub(r'href="#([^"]+)"', rf'href="#{mark}.\1"', svg)
    return re.sub(r"url\(#([^)]+)\)", rf"url(#{mark}.\1)", svg)


def _standing_alone(svg: str) -> str:
    return '<?xml version="1.0" encoding="utf-8"?>\n' + svg.replace("currentColor", "#1f2a36")


def _figure(figure: Figure) -> str:
    svg = _unique(figure.svg, figure.name).replace("<svg ", f'<svg role="img" aria-label="{escape(figure.alt)}" ', 1)
    name = _file(figure.name)
    plane = " data-plane" if figure.name.startswith("plane-") else ""
    table = table_html(figure.columns, figure.rows[: MOST_ROWS_SHOWN if not plane else None], "")
    more = (
        ""
        if plane or len(figure.rows) <= MOST_ROWS_SHOWN
        else f"<p>The first {MOST_ROWS_SHOWN}; all are in the CSV file.</p>"
    )
    first = figure.alt.split(". ")[0].split(": ")[0]
    caption = escape(f"{first[0].upper()}{first[1:]}. {figure.n[0].upper()}{figure.n[1:]}.")
    return (
        f'<figure data-arm="{escape(figure.arm)}" data-outcome="{escape(figure.outcome)}" '
        f'data-stratum="{escape(figure.stratum)}"{plane}><h3>{escape(figure.title)}</h3>{_scrolled(svg, figure.title)}'
        f"<figcaption>{caption} Files: figures/{name}.svg and .csv.</figcaption>"
        f'<details><summary>The numbers behind {escape(figure.title)}</summary>{more}<div class="wide" tabindex="0" '
        f'role="region" aria-label="Numbers behind {escape(figure.title)}">{table}</div></details></figure>'
    )


def _csv(columns: Sequence[str], rows: Iterable[Sequence[Any]]) -> str:
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(columns)
    writer.writerows(["" if v is None else v for v in row] for row in rows)
    return out.getvalue()


def table_html(columns: Sequence[str], rows: Iterable[Sequence[Any]], caption: str) -> str:
    """A table with its head and caption, everything escaped."""
    head = "".join(f'<th scope="col">{escape(c)}</th>' for c in columns)
    body = "".join("<tr>" + "".join(_cell(v) for v in row) + "</tr>" for row in rows)
    title = f"<caption>{escape(caption)}</caption>" if caption else ""
    return f"<table>{title}<thead><tr>{head}</tr></thead><tbody>{body}</tbody></table>"


def _cell(value: Any) -> str:
    if isinstance(value, bool) or value is None or isinstance(value, str):
        return f"<td>{escape('' if value is None else str(value))}</td>"
    return f'<td class="num">{value:,}</td>' if isinstance(value, int) else f'<td class="num">{value:.4g}</td>'


def _scrolled(inner: str, label: str, arm: str = "") -> str:
    """A wide table that scrolls by itself, by keyboard too."""
    of_arm = f' data-arm="{escape(arm)}" data-outcome="" data-stratum=""' if arm else ""
    return f'<div class="wide"{of_arm} tabindex="0" role="region" aria-label="{escape(label)}">{inner}</div>'


def _note(text: str) -> str:
    return f'<p class="note">{escape(text)}</p>'


# ---- words and tables --------------------------------------------------------------------------------------------


def _percent(x: float) -> str:
    return f"{100 * x:.1f} %"


def _regimes(summary: dict[str, Any]) -> str:
    found = []
    for arm, facts in summary["arms"].items():
        if "heading" in facts:
            found.append(_note(f"{arm}: {facts['heading']}."))
        if not facts["strata"]:
            found.append(f"<p>{escape(arm)}: no steady input, so what a subject tends to is not defined there.</p>")
            continue
        rows = []
        for stratum, counts in facts["strata"].items():
            yes = counts[OSCILLATES]
            rows.append((stratum, f"{_percent(yes['share'])} ({_percent(yes['low'])} to {_percent(yes['high'])})",
                         *(counts[r]["n"] for r in REGIMES), yes["of"]))  # fmt: skip
        table = table_html(("who", "oscillate (95 %)", *REGIMES, "of"), rows, f"{arm}: subjects by regime")
        found.append(_scrolled(table, f"Regimes in {arm}", arm))
        found += [_note(f"{arm}: {n:,} failed: {word}.") for word, n in facts["failures"].items()]
    words = "; ".join(f"{name}: {REGIME_WORDS[name]}" for name in REGIMES)
    return "".join(found) + (f'<p class="small">{escape(words)}.</p>' if found else "")


def _forced(summary: dict[str, Any]) -> str:
    """Locking by arm and stratum; empty without a periodic input."""
    rows = []
    for arm, facts in summary["arms"].items():
        for stratum, counts in facts["strata"].items():
            if CAPTURED in counts:
                captured, words = counts[CAPTURED], "nobody oscillates"
                if captured["of"]:
                    interval = f"{_percent(captured['low'])} to {_percent(captured['high'])}"
                    words = f"{_percent(captured['share'])} ({interval}) of {captured['of']:,}"
                rows.append((arm, stratum, words, *(counts[k]["n"] for k in LOCKINGS), counts[CAPTURED]["unresolved"]))
    if not rows:
        return ""
    head = ("arm", "who", "of those that oscillate by themselves, locked 1:1 (95 %)", *LOCKINGS, "unresolved of those")
    return _scrolled(table_html(head, rows, "Locking to the periodic input"), "Locking", "") + _note(ENTRAINED)


def _both(unit: str, x: float) -> str:
    """A value in its unit and in the other one that people use."""
    if unit == "mg/dL":
        return f"{x:.0f} mg/dL ({x / GLUCOSE_MG_DL_PER_MMOL_L:.1f} mmol/L)"
    if unit == "mU/L":
        return f"{x:.1f} mU/L ({x * INSULIN_PMOL_PER_MU:.0f} pmol/L)"
    return f"{x:.1f} {unit}"


def _quantiles(summary: dict[str, Any]) -> str:
    found = []
    for arm, facts in summary["arms"].items():
        rows = [
            (
                label,
                *(_both(unit, facts["quantiles"][name][q]) for q in ("q05", "q50", "q95")),
                facts["quantiles"][name]["n"],
            )
            for name, label, unit in QUANTILE_ROWS
            if name in facts["quantiles"]
        ]
        hours = f"{arm}: the last {facts['window_hours']:g} of {facts['hours']:g} h measured"
        table = table_html(("what", "5 %", "median", "95 %", "n"), rows, hours)
        found.append(_scrolled(table, f"Values in {arm}", arm))
    return "".join(found)


def _deciding(summary: dict[str, Any]) -> str:
    ranking = summary.get("ranking")
    if not ranking:
        return ""
    found = []
    for name, facts in ranking["strata"].items():
        if facts["points"]:
            who = "" if len(ranking["strata"]) == 1 else f"{name}: "
            found.append(f"<p>{escape(who)}{facts['points']:,} points of each of {facts['replicates']} scrambles; "
                         f"{escape(facts['stopped'] or '')}.</p>")  # fmt: skip
    used = {e["estimand"] for e in ranking["lists"] if "factors" in e}
    words = "".join(f"<li><strong>{escape(e)}</strong>: {escape(ESTIMANDS[e])}</li>" for e in ESTIMANDS if e in used)
    return "".join(found) + f'<ul class="small">{words}</ul>'


def _clinic(summary: dict[str, Any]) -> str:
    sampling = summary.get("sampling")
    if not sampling:
        return ""
    rule = sampling["rule"]
    low, high = rule["band_min"]
    found = [f"<p>Detected: in {escape(rule['detect_in'])}, periods {low:g} to {high:g} min, false alarms "
             f"{100 * rule['false_alarm']:g} % of the whole rule. {escape(NO_PROOF)}</p>"]  # fmt: skip
    found += [_note(f"{name}: {why}") for name, why in sampling["unseen"].items() if why]
    if sampling["optimistic"]:
        found.append(_note("Optimistic: the body's own irregularity is left out of some analyte."))
    rows = [(name, rate) for name, rate in sampling["false_pulses_per_h"].items()]
    found.append(table_html(("schedule", "false pulses an hour"), rows,
                        f"The nadir-to-peak rule of {rule['swing_sds']:g} assay SDs where nothing pulses"))  # fmt: skip
    return "".join(found)


def _recruit(summary: dict[str, Any]) -> str:
    recruitment = summary.get("recruitment")
    if not recruitment:
        return ""
    rows, refused = [], []
    for r in recruitment["rows"]:
        what = " ".join(str(x) for x in (r["arm"], f"sampled {r['schedule']}" if r.get("schedule") else "") if x)
        if r.get("refused"):
            refused.append(f"{what}, {r['counted']}: {r['refused']}")
        elif r.get("recruited") is not None and r.get("expected") is not None:
            rows.append((what, r["stratum"], r["counted"], r["recruited"], r["expected"],
                         f"{r['low']:.0f} to {r['high']:.0f}", r.get("at_least_wanted")))  # fmt: skip
    head = ("where", "who", "counted", "recruits", "expected", "90 %", f"P(at least {recruitment['want']})")
    needed = [
        (" ".join(str(x) for x in (r["arm"], f"sampled {r['schedule']}" if r.get("schedule") else "") if x), r["stratum"],
         r["counted"], r["to_recruit"], r["share"], r["share_sd"])
        for r in recruitment["rows"] if r.get("to_recruit")
    ]  # fmt: skip
    found = ""
    if needed:
        words = f"Fewest recruits for at least {recruitment['want']} with probability {recruitment['assurance']:g}"
        found += table_html(("where", "who", "counted", "recruit", "share", "its SD"), needed, words)
    found += table_html(head, rows, "Predictions for real people, if people are as in this model")
    population = summary.get("population")
    if population:
        draws = f"{population['outer']:,} draws of {population['inner']:,} people"
        found += f"<p>Intervals hold the uncertainty of the population: {draws}.</p>"
    notes = "".join(_note(text) for text in dict.fromkeys(refused))
    return notes + _scrolled(found, "Predictions")


def _refused(summary: dict[str, Any]) -> str:
    lists = (summary.get("ranking") or {}).get("lists", [])
    rows = [(e["outcome"], e["arm"], e["stratum"], e["estimand"], e["refused"]) for e in lists if "refused" in e]
    if not rows:
        return ""
    table = table_html(("outcome", "arm", "stratum", "what was asked", "why not"), rows, "Rankings that cannot be had")
    return _scrolled(table, "Refused rankings")


def _fasting(summary: dict[str, Any]) -> str:
    rows = []
    for stratum, facts in (summary.get("fasting") or {}).items():
        for name, unit, word in (("glucose_mg_dl", "mg/dL", "glucose"), ("insulin_mu_l", "mU/L", "insulin")):
            marks = ["" if x is None else _both(unit, x) for x in facts[name]]
            rows.append((EVERYONE if stratum == "all" else stratum, word, *marks, facts["n"]))
    if not rows:
        return ""
    table = table_html(("who", "what", "5 %", "median", "95 %", "n"), rows, "All virtual people with nothing given")
    return _scrolled(table, "Fasting values") + f'<p class="small">{escape(PUBLISHED_FASTING)}</p>'


def _model(record: Mapping[str, Any]) -> Mapping[str, Any]:
    """Title, source and limits of the run's model; folders of an earlier version hold none, and their models ship."""
    card = MODELS.get(record["model"])
    shipped = {} if card is None else {"title": card.title, "source": card.source, "limits": card.limits}
    return record.get("model_facts") or shipped or {"title": "", "source": "", "limits": ()}


def _method(results: Results, summary: dict[str, Any]) -> str:
    record, model = results.record, _model(results.record)
    limits = "".join(f"<li>{escape(limit)}</li>" for limit in model["limits"])
    people = summary.get("people")
    counted = ""
    if people:
        counted = f"<p>{people['eligible']:,} of {people['subjects']:,} subjects are counted"
        counted += f"; effective sample size {people['effective']:,.0f}" if "effective" in people else ""
        counted += ".</p>"
    named = f"Model {escape(record['model'])}: {escape(model['title'])} {escape(model['source'])}."
    return f"""<p>{named} {summary["subjects"]:,} virtual people, drawn by {escape(record["draw"])}, seed {record["seed"]:d}.
Plasma glucose is within 1e-6 relative of a high-order reference; a subject's regime comes from the eigenvalues of its
equilibrium under the arm's steady input and from a converged limit cycle, never from counting peaks. Intervals of
shares are Monte Carlo error: what more virtual people would change. They do not say how far the model is from people.
Unresolved subjects (undecided, failed) count once as no and once as yes. Cycle outcomes are those of the limit cycle
itself; window outcomes are what happens in the measured window, transients and all. Every column's meaning and unit
stand in the files.</p>{counted}<p>Known limits of this model:</p><ul>{limits}</ul>"""


def _made(results: Results) -> str:
    versions = ", ".join(f"{k} {v}" for k, v in results.record["versions"].items())
    overrides = results.record["overrides"]
    changed = f" Overrides: {', '.join(overrides)}." if overrides else ""
    return f"Made by {versions}. Study and settings: study.toml and run.json beside this page.{changed}"
