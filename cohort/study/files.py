"""Data files that a study names: where they may lie, their digests, and columns of numbers from CSV or Parquet."""

from __future__ import annotations

import csv
import hashlib
import io
import os
from collections import Counter
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from cohort.errors import nearest
from cohort.model.catalogue import ModelCard
from cohort.population.recipe import WEIGHT_RANGE_KG, Table
from cohort.quantities import INPUT_PARAMETERS, PARAMETERS
from cohort.reading import UnreadableError, names_in, read_plain, why_unread
from cohort.study.tree import Tree

LARGEST_FILE = 200_000_000
MOST_CELLS = 5_000_000
LONGEST_CELL = 200
_OPTIONAL = ("id", "stratum", "body_weight_kg", "person")
_SHOWN = 8


class FileError(ValueError):
    """A data file that cannot be used; the message says why, with the line where there is one."""


@dataclass
class Files:
    """The data files of one study, read from below its folder; from anywhere with `outside`."""

    folder: Path
    outside: bool = False
    digests: dict[str, str] = field(default_factory=dict)
    held: dict[str, dict[str, list[object]]] = field(default_factory=dict, repr=False)

    def read(self, name: str) -> dict[str, list[object]]:
        """Return a file's columns. Raises FileError."""
        if name not in self.held:
            self.held.clear()  # laws most often name one file several times in a row; two need not be held at once
            self.held[name] = self._read(name)
        return self.held[name]

    def _read(self, name: str) -> dict[str, list[object]]:
        path = self.folder / name
        try:
            inside = Path(os.path.realpath(path)).is_relative_to(os.path.realpath(self.folder))
            if not inside and not self.outside:
                raise FileError(f"{name!r} lies outside the study's folder; data files must lie below it (--allow-outside "
                                "accepts others)")  # fmt: skip
            data = read_plain(path, LARGEST_FILE)
        except FileNotFoundError:
            raise FileError(f"no file {name!r} beside the study{nearest(path.name, names_in(path.parent))}") from None
        except (OSError, UnreadableError) as error:
            raise FileError(f"{name!r} cannot be read: {why_unread(error)}") from None
        self.digests[name] = hashlib.sha256(data).hexdigest()
        return _parquet(path.name, data) if path.suffix == ".parquet" else _csv(data)

    def column(self, tree: Tree, path: tuple[str | int, ...], name: str, column: str) -> tuple[float, ...] | None:
        """Sorted numbers of one column, or None with the problem noted."""
        try:
            table = self.read(name)
            if column not in table:
                raise FileError(f"{name!r} has no column {column!r}{nearest(column, table)}")
            numbers = _numbers(table[column], column, -np.inf, np.inf)
            if len(numbers) < 2:
                raise FileError(f"{name!r} holds {len(numbers)} values in {column!r}; at least 2 are wanted")
            return tuple(np.sort(numbers).tolist())
        except FileError as error:
            tree.problem(path, _named(name, error))
            return None

    def subjects(self, tree: Tree, name: str, card: ModelCard, strata: tuple[str, ...]) -> Table | None:
        """The subjects of a table, or None with every problem noted."""
        path = ("subjects", "table")
        try:
            table = self.read(name)
        except FileError as error:
            tree.problem(path, _named(name, error))
            return None
        before = len(tree.problems)
        allowed = (*card.parameters, *INPUT_PARAMETERS, *_OPTIONAL)
        for column in table:
            if column not in allowed:
                tree.problem(
                    path, f"{name}: column {column!r} is no parameter of {card.name}{nearest(column, allowed)}"
                )
        n = len(next(iter(table.values()), []))
        if not n:
            tree.problem(path, f"{name}: holds no subjects")
            return None
        columns = {}
        for column in (c for c in table if c in PARAMETERS or c in INPUT_PARAMETERS):
            quantity = PARAMETERS.get(column) or INPUT_PARAMETERS[column]
            columns[column] = self._column(tree, name, table[column], column, quantity.low, quantity.high)
        weight = np.full(n, np.nan)
        if "body_weight_kg" in table:
            weight = self._column(tree, name, table["body_weight_kg"], "body_weight_kg", *WEIGHT_RANGE_KG)
        stratum = _codes(tree, name, table, strata, n)
        if len(tree.problems) > before:
            return None
        if not columns and len(table) == len([c for c in table if c in _OPTIONAL]):
            tree.problem(path, f"{name}: has no column of parameters; allowed: {', '.join(card.parameters)}")
            return None
        ids = tuple(str(v) for v in table["id"]) if "id" in table else None
        person = None
        if "person" in table:
            _, person = np.unique([str(v) for v in table["person"]], return_inverse=True)
        return Table(columns, stratum, weight, person, ids)

    def _column(
        self, tree: Tree, name: str, cells: list[object], column: str, low: float, high: float
    ) -> NDArray[np.float64]:
        try:
            return _numbers(cells, column, low, high)
        except FileError as error:
            tree.problem(("subjects", "table"), f"{name}: {error}")
            return np.full(len(cells), np.nan)


def _named(name: str, error: FileError) -> str:
    return str(error) if name in str(error) else f"{name}: {error}"


def _codes(tree: Tree, name: str, table: dict[str, list[object]], strata: tuple[str, ...], n: int) -> NDArray[np.int16]:
    if "stratum" not in table:
        return np.zeros(n, np.int16)
    words = [str(v) for v in table["stratum"]]
    unknown = sorted(set(words) - set(strata))
    for word in unknown[:_SHOWN]:
        tree.problem(("subjects", "table"), f"{name}: {word!r} is no stratum of the study{nearest(word, strata)}; "
                     f"its strata: {', '.join(strata)}")  # fmt: skip
    return np.array([strata.index(w) if w in strata else 0 for w in words], np.int16)


def _csv(data: bytes) -> dict[str, list[object]]:
    try:
        text = data.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        raise FileError(f"is not UTF-8 text (line {data[: error.start].count(10) + 1})") from None
    if "\0" in text:
        raise FileError("is not a text file")
    _check_cells(text.count(",") + text.count("\n") + 1)
    try:
        rows = list(csv.reader(io.StringIO(text)))
    except csv.Error as error:
        raise FileError(f"is not CSV: {error}") from None
    rows = [row for row in rows if row]
    if not rows:
        raise FileError("is empty")
    header = [cell.strip() for cell in rows[0]]
    doubled = sorted(h for h, times in Counter(header).items() if times > 1)
    if doubled:
        raise FileError(f"has the column {doubled[0][:LONGEST_CELL]!r} twice")
    for i, row in enumerate(rows[1:], 2):
        if len(row) != len(header):
            raise FileError(f"row {i} has {len(row)} cells, the header {len(header)}")
    return {h: [row[j].strip() for row in rows[1:]] for j, h in enumerate(header)}


def _check_cells(cells: int) -> None:
    if cells > MOST_CELLS:
        raise FileError(f"holds {cells:,} cells; at most {MOST_CELLS:,} are allowed")


def _parquet(name: str, data: bytes) -> dict[str, list[object]]:
    from cohort.tables import count_cells, read_columns

    try:
        _check_cells(count_cells(data))
        return read_columns(data)
    except FileError:
        raise
    except ValueError as error:
        raise FileError(f"{name!r} is no Parquet file of plain columns: {error}") from None


def _numbers(cells: list[object], column: str, low: float, high: float) -> NDArray[np.float64]:
    """Finite numbers within low..high, or FileError naming the first bad cells."""
    out = np.empty(len(cells))
    bad: list[str] = []
    for i, cell in enumerate(cells):
        try:
            out[i] = float(cell)  # type: ignore[arg-type]
        except (TypeError, ValueError, OverflowError):
            bad.append(f"row {i + 1}: {str(cell)[:30]!r} is not a number")
            continue
        if not np.isfinite(out[i]):
            bad.append(f"row {i + 1}: {str(cell)[:30]} is not a finite number")
        elif not low <= out[i] <= high:
            bad.append(f"row {i + 1}: {out[i]:g} is outside the physical range {low:g} to {high:g}")
    if bad:
        more = f" (and {len(bad) - 3} more)" if len(bad) > 3 else ""
        raise FileError(f"column {column!r}: {'; '.join(bad[:3])}{more}")
    return out
