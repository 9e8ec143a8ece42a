"""The sentence that answers a study's question, with its uncertainty."""

from __future__ import annotations

from typing import Any

from cohort.quantities import GLUCOSE_MG_DL_PER_MMOL_L
from cohort.report.counting import DETECTED, EVERYONE, OSCILLATES

WORDS = {
    "oscillates": "whether one oscillates", "growth_per_min": "how far one is from the border", "period_min": "the period",
    "glucose_amplitude_mg_dl": "the glucose swing", "glucose_peak_mg_dl": "the highest glucose",
    "glucose_mean_mg_dl": "mean glucose", "glucose_nadir_mg_dl": "the lowest glucose",
}  # fmt: skip


def answer(summary: dict[str, Any]) -> str:
    """One or two sentences, beginning "In this model", or with the contradiction where every arm contradicts people."""
    arms = summary["arms"]
    steady = [a for a, facts in arms.items() if facts["strata"] and not facts["disagrees"]]
    if steady:
        arm = max(steady, key=lambda a: arms[a]["strata"][EVERYONE][OSCILLATES]["share"])
        return " ".join(
            part for part in (_oscillation(summary, arm), _rhythm(arms[arm]), _deciding(summary, arm)) if part
        )
    if any(facts["strata"] for facts in arms.values()):
        return ("The model disagrees with published people here: at the inputs of this study people are known to oscillate and "
                "the model mostly does not, so its counts are no forecast.")  # fmt: skip
    arm = next(iter(arms))
    return " ".join(part for part in (_glucose(arm, arms[arm]), _deciding(summary, arm)) if part)


def _oscillation(summary: dict[str, Any], arm: str) -> str:
    recruitment = summary.get("recruitment")
    rows = [] if not recruitment else [
        r for r in recruitment["rows"]
        if r["arm"] == arm and r["stratum"] == EVERYONE and r.get("recruited") is not None and r.get("expected") is not None
    ]  # fmt: skip
    truly = [r for r in rows if r["counted"] == OSCILLATES]
    if not truly:
        share = summary["arms"][arm]["strata"][EVERYONE][OSCILLATES]
        return (f"In this model {_percent(share['share'])} of these people oscillate under {arm} (95 %: {_percent(share['low'])} "
                f"to {_percent(share['high'])}).")  # fmt: skip
    row = truly[-1]
    text = (f"In this model, of {row['recruited']:,} recruits expect {row['expected']:.0f} to oscillate under {arm} (90 %: "
            f"{row['low']:.0f} to {row['high']:.0f})")  # fmt: skip
    seen = [r for r in rows if r["counted"] == DETECTED and r["recruited"] == row["recruited"]]
    if seen:
        parts = [
            f"sampled {r['schedule']} you would see {r['expected']:.0f} ({r['low']:.0f} to {r['high']:.0f})"
            for r in seen[:2]
        ]
        text += "; " + ", ".join(parts)
    return text + "."


def _rhythm(facts: dict[str, Any]) -> str:
    q = facts["quantiles"]
    if "period_min" not in q or "glucose_amplitude_mg_dl" not in q:
        return "Nobody oscillates, so there is no period."
    swing = q["glucose_amplitude_mg_dl"]["q50"]
    return (f"Their period is about {q['period_min']['q50']:.0f} min (90 % of them {q['period_min']['q05']:.0f} to "
            f"{q['period_min']['q95']:.0f}) and their glucose swings by {swing:.0f} mg/dL "
            f"({swing / GLUCOSE_MG_DL_PER_MMOL_L:.1f} mmol/L) at the median.")  # fmt: skip


def _glucose(arm: str, facts: dict[str, Any]) -> str:
    q = facts["quantiles"]["glucose_peak_mg_dl"]
    high = q["q50"]
    return (f"In this model glucose rises to {high:.0f} mg/dL ({high / GLUCOSE_MG_DL_PER_MMOL_L:.1f} mmol/L) at the median under "
            f"{arm} (90 % of people {q['q05']:.0f} to {q['q95']:.0f} mg/dL).")  # fmt: skip


def _deciding(summary: dict[str, Any], arm: str) -> str:
    for entry in (summary.get("ranking") or {}).get("lists", []):
        if entry["arm"] == arm and "factors" in entry:
            names = [
                f["name"] for f in entry["factors"] if f["verdict"] in ("decides", "matters through interactions")
            ][:3]
            if names:
                return f"What matters most for {WORDS.get(entry['outcome'], entry['outcome'])}: {', '.join(names)}."
    return ""


def _percent(x: float) -> str:
    return f"{100 * x:.0f} %"
