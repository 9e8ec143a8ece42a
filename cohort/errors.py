"""The error types, and how they read.

Every message a user meets has one form: where, what was found, what is allowed, and the nearest valid word.
Nothing else in the package may print a traceback at a user; `cli` turns these types into exit codes.
"""

from __future__ import annotations

import difflib
import re
from collections.abc import Iterable
from dataclasses import dataclass

LONGEST_SHOWN = 1000
"""Characters of a key or a message that are shown; what a user wrote may be a megabyte."""
LONGEST_WORD = 80
_NO_TEXT = re.compile("[\x00-\x1f\x7f-\x9f\u2028\u2029\ud800-\udfff\ufffe\uffff]")


def unprintable(text: str) -> str:
    """The first character of a text that ends a line, steers a terminal or is no character, or an empty text."""
    found = _NO_TEXT.search(text)
    return found[0] if found else ""


def one_line(text: str, longest: int = LONGEST_SHOWN) -> str:
    """A text as one line: such characters as escapes, and what is too long cut in its middle."""
    whole = text if len(text) <= longest else f"{text[: longest // 2]} ... {text[-longest // 2 :]}"
    return _NO_TEXT.sub(lambda c: ascii(c[0])[1:-1], whole)


@dataclass(frozen=True)
class Problem:
    """One thing wrong with a study: `key` is its dotted name, `line` (from 1) its place in `file` where known."""

    key: str
    message: str
    file: str = ""
    line: int | None = None

    def __str__(self) -> str:
        place = self.file if self.line is None else f"{self.file}:{self.line}"
        return ": ".join(one_line(part) for part in (place, self.key, self.message) if part)


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

    def __init__(self, message: str) -> None:
        super().__init__(one_line(message))


def nearest(word: str, allowed: Iterable[str]) -> str:
    """Return ` (did you mean 'x'?)` for the closest allowed word, or an empty string where none is close."""
    if len(word) > LONGEST_WORD:
        return ""
    choices = list(allowed)
    lowered = {choice.lower(): choice for choice in choices}
    found = difflib.get_close_matches(word.lower(), lowered, n=1, cutoff=0.6)
    return f" (did you mean {lowered[found[0]]!r}?)" if found else ""
