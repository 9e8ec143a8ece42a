"""The error types, and how they read.

Every message a user meets has one form: where, what was found, what is allowed, and the nearest valid word.
Nothing else in the package may print a traceback at a user; `cli` turns these types into exit codes.
"""

from __future__ import annotations

import difflib
from collections.abc import Iterable
from dataclasses import dataclass


@dataclass(frozen=True)
class Problem:
    """One thing wrong with a study: `key` is its dotted name, `line` (from 1) its place in `file` where known."""

    key: str
    message: str
    file: str = ""
    line: int | None = None

    def __str__(self) -> str:
        place = self.file if self.line is None else f"{self.file}:{self.line}"
        return ": ".join(part for part in (place, self.key, self.message) if part)


class CohortError(Exception):
    """Base of every error this package raises on purpose."""

    exit_code = 3


class StudyError(CohortError):
    """The study, its data or the call is wrong; carries every problem found. Exit code 2."""

    exit_code = 2

    def __init__(self, problems: Iterable[Problem]) -> None:
        self.problems = tuple(problems)
        super().__init__("\n".join(str(problem) for problem in self.problems))


class RunError(CohortError):
    """The run could not finish; what is on disk is kept. Exit code 3."""


def nearest(word: str, allowed: Iterable[str]) -> str:
    """Return ` (did you mean 'x'?)` for the closest allowed word, or an empty string where none is close."""
    choices = list(allowed)
    lowered = {choice.lower(): choice for choice in choices}
    found = difflib.get_close_matches(word.lower(), lowered, n=1, cutoff=0.6)
    return f" (did you mean {lowered[found[0]]!r}?)" if found else ""
