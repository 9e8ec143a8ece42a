"""Print README's table of study keys from the one table of keys in the code: python3 scripts/keys.py"""

from __future__ import annotations

import sys
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parent.parent))

from cohort.study.keys import KEYS, Key

LAW_PARTS = ("lognormal", "normal", "uniform", "loguniform", "triangular", "beta", "empirical")


def shown(key: Key) -> bool:
    """Available keys, the laws' own keys once only (under subjects.parameters.*)."""
    is_law = any(f".{law}" in key.path for law in LAW_PARTS)
    return key.available and (not is_law or key.path.startswith("subjects.parameters.*"))


def table() -> str:
    """The table as Markdown."""
    lines = ["| key | meaning | default |", "|---|---|---|"]
    lines += [f"| `{key.path}` | {key.meaning} | {key.default or '-'} |" for key in KEYS.values() if shown(key)]
    return "\n".join(lines)


if __name__ == "__main__":
    print(table())
