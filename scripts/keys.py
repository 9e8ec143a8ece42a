"""Print README's tables of study keys and of columns from the one place in the code: python3 scripts/keys.py"""

from __future__ import annotations

import sys
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parent.parent))

from cohort.quantities import (
    CLAMP_OUTCOMES,
    COMPARISON_COLUMNS,
    CYCLE_OUTCOMES,
    DETECTION_COLUMNS,
    FORCED_OUTCOMES,
    INCIDENCE_COLUMNS,
    MAP_BORDER_COLUMNS,
    MAP_LOCKING_COLUMNS,
    MAP_REGION_COLUMNS,
    MAP_TONGUE_COLUMNS,
    MAP_WINDOW_COLUMNS,
    MEAL_OUTCOMES,
    POPULATION_COLUMNS,
    RANKING_COLUMNS,
    RECRUITMENT_COLUMNS,
    SENSITIVITY_COLUMNS,
    WINDOW_OUTCOMES,
)
from cohort.study.keys import KEYS, Key

LAW_PARTS = ("lognormal", "normal", "uniform", "loguniform", "triangular", "beta", "empirical")


def shown(key: Key) -> bool:
    """Available keys, the laws' own keys once only (under subjects.parameters.*)."""
    is_law = any(f".{law}" in key.path for law in LAW_PARTS)
    return not is_law or key.path.startswith("subjects.parameters.*")


def table() -> str:
    """The table as Markdown."""
    lines = ["| key | meaning | default |", "|---|---|---|"]
    lines += [f"| `{key.path}` | {key.meaning} | {key.default or '-'} |" for key in KEYS.values() if shown(key)]
    return "\n".join(lines)


COLUMNS = {
    "outcomes/<arm>": (*CYCLE_OUTCOMES, *WINDOW_OUTCOMES),
    "outcomes/<arm> of clamps": CLAMP_OUTCOMES,
    "outcomes/<arm> of periodic inputs": FORCED_OUTCOMES,
    "meals/<arm>": MEAL_OUTCOMES,
    "observations/<arm>/<schedule>": DETECTION_COLUMNS,
    "population": POPULATION_COLUMNS,
    "ranking": RANKING_COLUMNS,
    "incidence.parquet": INCIDENCE_COLUMNS,
    "recruitment.parquet": RECRUITMENT_COLUMNS,
    "sensitivity.parquet": SENSITIVITY_COLUMNS,
    "comparison.parquet": COMPARISON_COLUMNS,
    "map/windows.parquet": MAP_WINDOW_COLUMNS,
    "map/region.parquet": MAP_REGION_COLUMNS,
    "map/borders.parquet": MAP_BORDER_COLUMNS,
    "map/locking.parquet": MAP_LOCKING_COLUMNS,
    "map/tongues.parquet": MAP_TONGUE_COLUMNS,
}


def columns() -> str:
    """The columns of every table as Markdown."""
    lines = ["| table | column | unit | meaning |", "|---|---|---|---|"]
    for name, found in COLUMNS.items():
        lines += [f"| {name} | `{c.name}` | {c.unit} | {c.meaning} |" for c in found]
    return "\n".join(lines)


if __name__ == "__main__":
    print(table())
    print()
    print(columns())
