"""What concerns the clinic, in lines of at most 80 characters: who is counted, what is detected, how many to recruit."""

from __future__ import annotations

import textwrap
from typing import Any

from cohort.report.counting import DETECTED, DETECTED_AT_PERIOD, DETECTED_FALSE, DETECTED_TRUE, EVERYONE, OSCILLATES

PUBLISHED_FASTING = (
    "published: glucose 90 mg/dL, SD 7.1 (normal tolerance, n 2,205; South Asian screening, PMC11043225); insulin median "
    "9.3 mU/L, quartiles 6.7 to 13.3 (n 6,511; NHANES III, J Clin Epidemiol 2004;57:1214)"
)
NO_PROOF = "Detection is a statement about a sampled, noisy series; it is no proof of a limit cycle."


def fasting_lines(fasting: dict[str, Any] | None) -> list[str]:
    """Fasting values of all virtual people beside published ones."""
    if not fasting:
        return []
    lines = ["", "fasting, with nothing given (all virtual people; 5 %, median, 95 %)"]
    for stratum, facts in fasting.items():
        who = "" if len(fasting) == 1 else f"{stratum}: "
        glucose, insulin = (
            " / ".join("?" if x is None else f"{x:.{d}f}" for x in facts[name])
            for name, d in (("glucose_mg_dl", 0), ("insulin_mu_l", 1))
        )
        lines += wrapped(f"{who}glucose {glucose} mg/dL, insulin {insulin} mU/L (n {facts['n']:,})", "  ")
    return lines + wrapped(PUBLISHED_FASTING, "  ")


def people_lines(people: dict[str, Any]) -> list[str]:
    """Who counts, and what weighting did."""
    lines = ["", "who is counted"]
    if people["eligible"] < people["subjects"]:
        lines.append(
            f"  {people['eligible']:,} of {people['subjects']:,} subjects are eligible; the others leave every count"
        )
    if "persons" in people:
        lines.append(f"  {people['persons']:,} persons, each with all its draws counting as one")
    for target in people.get("matched", []):
        lines += wrapped(
            f"matched {target['arm']}.{target['outcome']}: mean {target['unweighted_mean']:.4g} (SD "
            f"{target['unweighted_sd']:.4g}) weighted to {target['mean']:.4g} ({target['sd']:.4g})", "  ",
        )  # fmt: skip
    if "effective" in people:
        lines += wrapped(f"effective sample size {people['effective']:,.0f} of {people['eligible']:,}; largest weight "
                         f"{people['largest_weight']:.1f} times the mean", "  ")  # fmt: skip
        pairs = ", ".join(
            f"{p['pair'][0]}-{p['pair'][1]} {p['correlation']:+.2f}" for p in people["induced_correlations"][:4]
        )
        if pairs:
            lines += wrapped(f"weighting ties parameters together that were not: {pairs}", "  ")
    return lines


def detection_lines(schedule: str, stratum: str, seen: dict[str, Any]) -> list[str]:
    """What one schedule would find."""
    found = seen[DETECTED]
    who = "" if stratum == EVERYONE else f"{stratum}, "
    head = f"{who}sampled {schedule}: {_percent(found['share'])} detected ({_percent(found['low'])} to "
    head += f"{_percent(found['high'])})"
    if DETECTED_TRUE in seen:
        head += (
            f"; of {found['of']:,}: {seen[DETECTED_TRUE]['n']:,} truly oscillate, {seen[DETECTED_FALSE]['n']:,} do not"
        )
        if DETECTED_AT_PERIOD in seen:
            head += f"; {seen[DETECTED_AT_PERIOD]['n']:,} at their true period (within 10 %)"
        else:
            head += "; the input is periodic itself, so a rhythm there may be its echo"
    return wrapped(head, "  ")


def sampling_lines(sampling: dict[str, Any]) -> list[str]:
    """The rule, what schedules cannot see, and what leaves out the body's irregularity."""
    rule = sampling["rule"]
    low, high = rule["band_min"]
    lines = ["", *wrapped(f"detected: in {rule['detect_in']}, periods {low:g} to {high:g} min, false alarms "
                          f"{100 * rule['false_alarm']:g} % of the whole rule. {NO_PROOF}", "")]  # fmt: skip
    for name, why in sampling["unseen"].items():
        if why:
            lines += wrapped(f"NOTE: {name}: {why}", "  ")
    rates = "; ".join(f"{name} {rate:.2f}" for name, rate in sampling["false_pulses_per_h"].items())
    lines += wrapped(f"beside it, the nadir-to-peak rule of {rule['swing_sds']:g} assay SDs (column pulses): where nothing "
                     f"pulses it finds an hour: {rates}", "  ")  # fmt: skip
    if sampling["optimistic"]:
        lines += wrapped("NOTE: optimistic: the body's own irregularity is left out of some analyte", "  ")
    return lines


def recruitment_lines(recruitment: dict[str, Any], population: dict[str, Any] | None) -> list[str]:
    """Predictions for real people and numbers to recruit; strata, differences and power are in the table."""
    finish = "" if recruitment["evaluable"] == 1.0 else f"; {100 * recruitment['evaluable']:g} % of recruits finish"
    lines = ["", f"how many real people (in this model{finish}; 90 % intervals)"]
    rows = [
        r
        for r in recruitment["rows"]
        if r["stratum"] == EVERYONE and " minus " not in f"{r['arm']} {r.get('schedule')}"
    ]
    for (arm, schedule), members in _grouped(rows):
        where = arm if schedule is None else f"{arm}, sampled {schedule}"
        refused = next((r["refused"] for r in members if r.get("refused") and r.get("to_recruit") is None
                        and r.get("recruited") is None and r.get("share") is None), None)  # fmt: skip
        if refused:
            lines += wrapped(f"{where}: {refused}", "  ")
            continue
        lines += wrapped(f"{where}:", "  ")
        main = OSCILLATES if schedule is None else DETECTED
        for row in (r for r in members if r["counted"] == main and r.get("recruited") is not None):
            verb = "oscillate" if schedule is None else "be detected"
            split = _split(members, row["recruited"])
            lines += wrapped(f"of {row['recruited']:,} expect {row['expected']:.1f} to {verb} ({row['low']:.0f} to "
                             f"{row['high']:.0f}){split}", "    ")  # fmt: skip
        for row in (r for r in members if r["counted"] in (main, DETECTED_TRUE) and "to_recruit" in r):
            lines += _needed(row, recruitment)
    lines += _paired_lines(recruitment["rows"])
    if population:
        lines += wrapped(f"intervals hold the uncertainty of the population ({population['outer']:,} draws of "
                         f"{population['inner']:,} people)", "  ")  # fmt: skip
    return lines


def _grouped(rows: list[dict[str, Any]]) -> list[tuple[tuple[str, str | None], list[dict[str, Any]]]]:
    groups: dict[tuple[str, str | None], list[dict[str, Any]]] = {}
    for row in rows:
        groups.setdefault((row["arm"], row.get("schedule")), []).append(row)
    return list(groups.items())


def _split(members: list[dict[str, Any]], n: int) -> str:
    parts = [
        f"{next(r['expected'] for r in members if r['counted'] == c and r.get('recruited') == n):.1f} {word}"
        for c, word in ((DETECTED_TRUE, "truly"), (DETECTED_FALSE, "falsely"))
        if any(r["counted"] == c and r.get("recruited") == n for r in members)
    ]
    return f", {' and '.join(parts)}" if parts else ""


def _needed(row: dict[str, Any], recruitment: dict[str, Any]) -> list[str]:
    what = {OSCILLATES: "oscillators", DETECTED: "detected", DETECTED_TRUE: "detected oscillators"}[row["counted"]]
    if row["to_recruit"] is None:
        return wrapped(f"for {recruitment['want']} {what}: {row['refused']}", "    ")
    return wrapped(f"recruit {row['to_recruit']:,} for at least {recruitment['want']} {what} with probability "
                   f"{recruitment['assurance']:g}", "    ")  # fmt: skip


def _paired_lines(rows: list[dict[str, Any]]) -> list[str]:
    """Every schedule beside the first of its arm; the table holds all pairs."""
    largest = max((r["recruited"] for r in rows if r.get("recruited")), default=None)
    lines: list[str] = []
    firsts: dict[str, str] = {}
    for row in rows:
        two, minus, one = (row.get("schedule") or "").partition(" minus ")
        if not minus or row["recruited"] != largest or firsts.setdefault(row["arm"], one) != one:
            continue
        less = "loses" if row["expected"] < 0 else "gains"
        lines += wrapped(f"{row['arm']}: {two} instead of {one} {less} {abs(row['expected']):.1f} of {largest} ("
                         f"{row['low']:+.0f} to {row['high']:+.0f})", "  ")  # fmt: skip
    return lines


def _percent(x: float) -> str:
    return f"{100 * x:.1f} %"


def wrapped(text: str, indent: str) -> list[str]:
    """Text in lines of at most 78 characters."""
    return textwrap.wrap(text, 78, initial_indent=indent, subsequent_indent=indent + "  ")
