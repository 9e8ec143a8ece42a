"""Set up once, then all checks: style, types, tests with coverage. Further words go to pytest (--long, -k NAME ...)."""

from __future__ import annotations

import os
import sys
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parent))

from setup_env import ROOT, call, ready

COVERED_PERCENT = 93
"""Branch coverage that the whole suite must reach; compiled loops are seen through plain-Python twins only."""


def main(words: list[str]) -> int:
    """Run the checks in order and return the first failure's code."""
    python = str(ready("test"))
    os.chdir(ROOT)
    whole = not [w for w in words if not w.startswith("--long")]
    coverage = ["--cov=cohort", "--cov-branch", "--cov-report=term:skip-covered"] if whole else []
    if coverage:
        coverage.append(f"--cov-fail-under={COVERED_PERCENT}")
    for command in (
        [python, "-m", "ruff", "check", "."],
        [python, "-m", "ruff", "format", "--check", "."],
        [python, "-m", "mypy"],
        [python, "-m", "pytest", "-n", "auto", "--dist", "loadfile", *coverage, *words],
    ):
        code = call(command)
        if code:
            return code
    return 0


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
