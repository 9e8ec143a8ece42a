"""From TOML text to checked values: spelling, types, units and ranges of every key, all problems at once."""

from __future__ import annotations

import re
import tomllib
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

from cohort.errors import Problem, StudyError, nearest, unprintable
from cohort.quantities import INPUT_PARAMETERS, PARAMETERS
from cohort.study.keys import KEYS, Key, children, parameter_unit
from cohort.study.lines import Path, locate
from cohort.study.units import UnitError, parse

LARGEST_TEXT = 1_000_000
LONGEST_TEXT = 1000
DEEPEST = 40
MOST_PROBLEMS = 100
_WHOLE = 2**63
_DOTTED = re.compile(  # possessive, and never begun within a word: linear in the text
    r"""(?<![\w-])(?:(?:[\w-]++|"[^"\n]*+"|'[^'\n]*+')[ \t]*+\.[ \t]*+){40}"""
)
_ANY = "*"
_TOO_DEEP = f"is nested too deeply; at most {DEEPEST} names or lists within each other are allowed"


@dataclass(frozen=True)
class Quantity:
    """A converted quantity: number in the kept unit."""

    number: float
    unit: str


@dataclass
class Tree:
    """A study's values by path, converted, and every problem found on the way.

    values: the TOML tree with each good leaf converted (quantities to Quantity) and each bad one left out;
    elsewhere: parameters that other models of a list have.
    """

    file: str
    lines: Mapping[Path, int]
    overridden: frozenset[Path]
    values: dict[str, Any]
    problems: list[Problem] = field(default_factory=list)
    warnings: list[Problem] = field(default_factory=list)
    elsewhere: frozenset[str] = frozenset()

    def problem(self, path: Sequence[str | int], message: str) -> None:
        """Note a problem at a path. Raises StudyError where there are too many to go on."""
        self.problems.append(self.place(path, message))
        if len(self.problems) >= MOST_PROBLEMS:
            more = f"has more problems than these {MOST_PROBLEMS}; it was read no further"
            raise StudyError([*self.problems, Problem("", more, self.file)])

    def place(self, path: Sequence[str | int], message: str) -> Problem:
        """A problem at a path, with the line of the nearest key above it that stands in the file."""
        at = tuple(path)
        if any(at[: i + 1] in self.overridden for i in range(len(at))):
            return Problem(dotted(at), message, "--set")
        for length in range(len(at), 0, -1):
            if at[:length] in self.lines:
                return Problem(dotted(at), message, self.file, self.lines[at[:length]])
        return Problem(dotted(at), message, self.file)


def dotted(path: Sequence[str | int]) -> str:
    """A path as a user writes it: arms[0].duration, numbered from 1."""
    out = ""
    for part in path:
        out += f"[{part + 1}]" if isinstance(part, int) else f".{part}" if out else part
    return out


def read_toml(data: bytes, file: str) -> tuple[dict[str, Any], str]:
    """Return (tree, text). Raises StudyError where the bytes are no TOML, too many, nested too deeply, or hold a number
    beyond TOML's."""
    if len(data) > LARGEST_TEXT:
        raise StudyError(
            [Problem("", f"is larger than a study file may be: {len(data):,} bytes, at most {LARGEST_TEXT:,}", file)]
        )
    try:
        text = data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = data[: error.start].count(b"\n") + 1
        raise StudyError([Problem("", "is not UTF-8 text", file, line)]) from None
    dots = _DOTTED.search(text)
    if dots:
        raise StudyError([Problem("", _TOO_DEEP, file, text.count("\n", 0, dots.start()) + 1)])
    try:
        tree = tomllib.loads(text.replace("\r\n", "\n"))
    except tomllib.TOMLDecodeError as error:
        message, _, place = str(error).partition(" (at ")
        found = place.removeprefix("line ").split(",")[0]
        number = int(found) if found.isdigit() else text.count("\n") + 1
        raise StudyError([Problem("", f"is not TOML: {message[0].lower()}{message[1:]}", file, number)]) from None
    except (RecursionError, ValueError) as error:
        why = "is nested too deeply" if isinstance(error, RecursionError) else f"is not TOML: {error}"
        raise StudyError([Problem("", why, file)]) from None
    wrong = fault(tree)
    if wrong:
        path, why = wrong
        raise StudyError([Problem(dotted(path), why, file, locate(text).get(path))])
    return tree, text


def parse_value(text: str) -> Any:
    """A value as TOML writes it; anything else is a text as it stands. Raises ValueError for what no study may hold."""
    if unprintable(text):
        raise ValueError(f"its value holds the character {unprintable(text)!a}, which is no printable text")
    if _DOTTED.search(text):
        raise ValueError(_TOO_DEEP)
    try:
        found = tomllib.loads(f"x = {text}")
    except (tomllib.TOMLDecodeError, RecursionError, ValueError):
        return text
    if list(found) != ["x"]:
        return text
    wrong = fault(found)
    if wrong:
        raise ValueError(wrong[1])
    return found["x"]


def fault(tree: dict[str, Any]) -> tuple[Path, str] | None:
    """The first place of a TOML tree that is too deep or a whole number of more than 64 bits, and what is wrong."""
    left: list[tuple[Any, Path]] = [(tree, ())]
    while left:
        node, path = left.pop()
        if len(path) > DEEPEST:
            return path[:DEEPEST], _TOO_DEEP
        entries: Iterable[tuple[str | int, Any]] = node.items() if isinstance(node, dict) else enumerate(node)
        for name, value in entries:
            if isinstance(value, dict | list):
                left.append((value, (*path, name)))
            elif isinstance(value, int) and not -_WHOLE <= value < _WHOLE:
                return (*path, name), "a whole number of more than 64 bits is not allowed"
    return None


def check(tree: dict[str, Any], text: str, file: str, overridden: frozenset[Path]) -> Tree:
    """Convert and check every key of a TOML tree against the table of keys."""
    out = Tree(file, locate(text), overridden, {})
    out.values = _table(out, tree, (), "")
    return out


def _pattern_of(pattern: str, name: str) -> str | None:
    base = f"{pattern}." if pattern else ""
    if base + name in KEYS:
        return base + name
    return f"{base}{_ANY}" if f"{base}{_ANY}" in KEYS else None


def _table(out: Tree, table: dict[str, Any], path: Path, pattern: str) -> dict[str, Any]:
    converted: dict[str, Any] = {}
    for name, value in table.items():
        here = (*path, name)
        found = _pattern_of(pattern, name)
        if found is None:
            allowed = children(pattern)
            near = nearest(name, allowed)
            listed = "" if near else f"; allowed here: {', '.join(allowed)}" if allowed else ""
            out.problem(here, f"no such key{near}{listed}")
            continue
        key = KEYS[found]
        if found.endswith(_ANY) and (unprintable(name) or len(name) > LONGEST_TEXT):
            out.problem(
                here,
                f"{_shown(name)} cannot be a name; printable text of at most {LONGEST_TEXT:,} characters is wanted",
            )
            continue
        good = _value(out, value, here, key)
        if good is not None:
            converted[name] = good
    return converted


def _value(out: Tree, value: Any, path: Path, key: Key) -> Any:
    if key.kind == "tables":
        return _tables(out, value, path, key)
    if isinstance(value, dict):
        if key.kind != "table" and not children(key.path):
            out.problem(path, f"a table is not allowed; {key.meaning}")
            return None
        return _table(out, value, path, key.path)
    if key.kind == "table":
        out.problem(path, f"{_shown(value)} is not allowed; a table is wanted: {key.meaning}")
        return None
    if key.kind in ("texts", "quantities", "numbers", "outcomes"):
        return _list(out, value, path, key)
    return _leaf(out, value, path, key)


def _tables(out: Tree, value: Any, path: Path, key: Key) -> Any:
    if not isinstance(value, list) or not all(isinstance(item, dict) for item in value):
        out.problem(path, f"{_shown(value)} is not allowed; a list of tables is wanted: {key.meaning}")
        return None
    if len(value) > 1000:
        out.problem(path, f"{len(value):,} entries; at most 1,000 are allowed")
        return None
    return [_table(out, item, (*path, i), f"{key.path}[]") for i, item in enumerate(value)]


def _list(out: Tree, value: Any, path: Path, key: Key) -> Any:
    if not isinstance(value, list):
        out.problem(path, f"{_shown(value)} is not allowed; a list is wanted: {key.meaning}")
        return None
    if len(value) > 100_000:
        out.problem(path, f"{len(value):,} entries; at most 100,000 are allowed")
        return None
    found = [_leaf(out, item, (*path, i), key) for i, item in enumerate(value)]
    return None if any(item is None for item in found) else found


def _leaf(out: Tree, value: Any, path: Path, key: Key) -> Any:
    kind = {"texts": "text", "quantities": "quantity", "numbers": "number", "outcomes": "outcome"}.get(
        key.kind, key.kind
    )
    if kind == "outcome":  # its unit is the outcome's, which the reader of the block knows
        good = isinstance(value, str | int | float) and not isinstance(value, bool)
    elif kind == "quantity":
        return _quantity(out, value, path, key)
    elif kind == "yes/no":
        good = isinstance(value, bool)
    elif kind in ("text", "word"):
        good = isinstance(value, str)
    else:
        good = isinstance(value, int if kind == "whole" else int | float) and not isinstance(value, bool)
    if not good:
        wanted = {"whole": "a whole number", "number": "a number", "yes/no": "true or false"}.get(kind, "a text")
        out.problem(path, f"{_shown(value)} is not allowed; {wanted} is wanted: {key.meaning}")
        return None
    if kind in ("text", "word") and not _is_text(out, value, path):
        return None
    if kind == "word" and key.words and value not in key.words:
        near = nearest(value, key.words)
        out.problem(path, f"{value[:60]!r} is not allowed{near}; one of {', '.join(key.words)}")
        return None
    if kind in ("whole", "number") and not _in_range(out, float(value), value, path, key, ""):
        return None
    return value


def _is_text(out: Tree, value: str, path: Path) -> bool:
    """Whether it can stand in a line of a terminal, a page and a figure."""
    odd = unprintable(value)
    if odd:
        out.problem(path, f"{_shown(value)} holds the character {odd!a}, which is no printable text")
    elif len(value) > LONGEST_TEXT:
        out.problem(path, f"{len(value):,} characters; at most {LONGEST_TEXT:,} are allowed")
        return False
    return not odd


def _quantity(out: Tree, value: Any, path: Path, key: Key) -> Quantity | str | None:
    if key.path.endswith("clamp.glucose") and value == "own fasting":
        return str(value)
    units = key.units
    if units == ("parameter",):
        symbol = next((str(p) for p in path if p in PARAMETERS or p in INPUT_PARAMETERS), None)
        if symbol is None and "infusion" in path:
            units = ("mg/min",)
        elif symbol is None:
            return Quantity(float("nan"), "")  # the symbol itself is unknown, which has its own problem
        else:
            units = (parameter_unit(symbol),)
    try:
        number, unit = parse(value, *units)
    except UnitError as error:
        out.problem(path, str(error))
        return None
    return Quantity(number, unit) if _in_range(out, number, value, path, key, f" {unit}") else None


def _in_range(out: Tree, number: float, shown: Any, path: Path, key: Key, unit: str) -> bool:
    if number != number or number in (float("inf"), float("-inf")):
        out.problem(path, f"{shown} is not a finite number")
        return False
    unit = "" if unit == " 1" else unit
    name = key.path.rsplit(".", 1)[-1]
    what = {"cv": "a coefficient of variation"}.get(name, f"{key.meaning}")
    if number < key.low or (key.above and number == key.low):
        sign = ">" if key.above else ">="
        out.problem(path, f"{_shown(shown)} is not allowed; {what} must be {sign} {_plain(key.low)}{unit}.")
        return False
    if number > key.high:
        out.problem(path, f"{_shown(shown)} is not allowed; {what} must be <= {_plain(key.high)}{unit}.")
        return False
    return True


def _plain(x: float) -> str:
    return f"{x:,.0f}" if x == int(x) and abs(x) < 1e16 else f"{x:g}"


def _shown(value: Any) -> str:
    if isinstance(value, dict):
        return "a table"
    if isinstance(value, list):
        return "a list"
    text = str(value).lower() if isinstance(value, bool) else repr(value) if isinstance(value, str) else f"{value}"
    return text if len(text) <= 60 else f"{text[:57]}..."
