"""Set up once, then all checks: style, types, tests. Further words go to pytest (--long, -k NAME ...); with --coverage the
tests are run with branch coverage, at twice the time, and a gate."""

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
    coverage = []
    if "--coverage" in words:
        gate = f"--cov-fail-under={COVERED_PERCENT}"
        coverage = ["--cov=cohort", "--cov-branch", "--cov-report=term:skip-covered", gate]
    words = [word for word in words if word != "--coverage"]
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
