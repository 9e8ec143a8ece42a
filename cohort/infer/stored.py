"""ranking/: where each run of a ranking is stored, and how it is read back, one replicate and a few columns at a time."""

from __future__ import annotations

from collections import OrderedDict
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from cohort.infer.ranking import KINDS, Design, design_keys, row_count
from cohort.population.uniforms import uniforms

if TYPE_CHECKING:
    import pyarrow as pa

Array = NDArray[np.float64]
Ints = NDArray[np.int64]
Columns = dict[str, Array]

SHARD_ROWS = 16_384
PARTS_HELD = 48


@dataclass(frozen=True)
class Place:
    """Parts of one stratum and arm in a result folder; stratum: its index; slot: the arm's own number in this folder."""

    folder: Path
    stratum: int
    slot: int

    def part(self, kind: str, doubling: int, shard: int) -> Path:
        """The file of one part; names sort by kind, doubling, stratum, shard and arm."""
        name = f"part-{KINDS.index(kind)}{doubling:02d}-{self.stratum:03d}-{shard:05d}-{self.slot:03d}.parquet"
        return self.folder / "ranking" / name


def design_shards(design: Design, doubling: int) -> Iterator[tuple[int, int, int]]:
    """(shard, first row, last row + 1) of a doubling's parts."""
    n = row_count(design, doubling)
    for shard, start in enumerate(range(0, n, SHARD_ROWS)):
        yield shard, start, min(start + SHARD_ROWS, n)


@dataclass
class Reader:
    """Reads the runs of one stratum and arm; every row is compared with the design before it counts. Its methods raise
    ValueError where a part is missing, unreadable, or not of the design."""

    place: Place
    design: Design
    _held: OrderedDict[tuple[Path, str], Array] = field(default_factory=OrderedDict)
    _checked: set[Path] = field(default_factory=set)

    def replicate(self, replicate: int, doubling: int, name: str) -> Array:
        """An outcome of one replicate up to and with a doubling: float64[blocks, points], NaN where missing. A
        trajectory of Morris is a replicate with one point."""
        found = []
        for step in range(doubling + 1):
            each = row_count(self.design, step) // self.design.replicates
            start, stop = replicate * each, (replicate + 1) * each
            pieces = [
                self._column(step, shard, first, last, name)[max(start - first, 0) : stop - first]
                for shard, first, last in design_shards(self.design, step)
                if first < stop and last > start
            ]
            found.append(np.concatenate(pieces).reshape(len(self.design.blocks), -1))
        return np.concatenate(found, axis=1)

    def parts(self, doubling: int) -> Iterator[tuple[Path, int]]:
        """(path, doubling) of every part of the design."""
        for step in range(doubling + 1):
            for shard, _, _ in design_shards(self.design, step):
                yield self.place.part("design", step, shard), step

    def plain(self, names: Sequence[str]) -> Columns:
        """Independent rows in order of position: float64[n] by name."""
        path = self.place.part("plain", 0, 0)
        table = _read(path, ("position", *names))
        if not np.array_equal(np.asarray(table.column("position")), np.arange(table.num_rows)):
            raise ValueError(f"{path}: runs are not in order of position")
        return {name: _numbers(table, name) for name in names}

    def redraws(self, names: Sequence[str], before: int | None = None) -> Iterator[tuple[Ints, Ints, Columns]]:
        """Attempt after attempt, all or those before one: (factor int64[n], position int64[n], outcomes by name)."""
        number = {factor.name: j for j, factor in enumerate(self.design.factors)}
        attempt = 1
        while (before is None or attempt < before) and (path := self.place.part("redraw", 0, attempt)).exists():
            table = _read(path, ("block", "position", *names))
            words = table.column("block").to_pylist()
            if not set(words) <= set(number):
                raise ValueError(f"{path}: holds redraws of factors that the design has not")
            factor = np.array([number[word] for word in words], dtype=np.int64)
            yield factor, np.asarray(table.column("position")), {name: _numbers(table, name) for name in names}
            attempt += 1

    def _column(self, doubling: int, shard: int, first: int, last: int, name: str) -> Array:
        path = self.place.part("design", doubling, shard)
        if (path, name) not in self._held:
            if path not in self._checked:
                self._check(path, doubling, first, last)
            self._held[path, name] = _numbers(_read(path, (name,)), name)
            if len(self._held) > PARTS_HELD:
                self._held.popitem(last=False)
        return self._held[path, name]

    def _check(self, path: Path, doubling: int, first: int, last: int) -> None:
        """Rows must be those of the design, one by one."""
        table = _read(path, ("doubling", "replicate", "block", "position"))
        replicate, block, position = design_keys(self.design, doubling, first, last)
        words = np.array(self.design.blocks, dtype=object)[block]
        stored = np.array(table.column("block").to_pylist(), dtype=object)
        if len(stored) != len(words):
            raise ValueError(f"{path}: holds {len(stored):,} runs where the design has {len(words):,}")
        unlike = stored != words
        for name, wanted in (("doubling", doubling), ("replicate", replicate), ("position", position)):
            unlike = unlike | (np.asarray(table.column(name)) != wanted)
        if unlike.any():
            row = int(np.argmax(unlike))
            raise ValueError(f"{path}: run {row:,} is not the one that the design has there ({words[row]!r})")
        self._checked.add(path)


def read_words(path: Path, name: str) -> list[str | None]:
    """A column of words of one part."""
    found: list[str | None] = _read(path, (name,)).column(name).to_pylist()
    return found


def read_numbers(path: Path, names: Sequence[str]) -> Columns:
    """Columns of numbers of one part: float64[n] by name."""
    table = _read(path, tuple(names))
    return {name: _numbers(table, name) for name in names}


def read_cohort(
    folder: Path, arm: str, stratum: str, own: Sequence[str], outcomes: Sequence[str], chosen: str, seed: int
) -> Columns:
    """Rows of the cohort itself, of one stratum: columns of subjects/, outcomes/<arm>/ and meals/<arm>/.

    chosen: "" for everyone; "eligible"; or "accepted": of the eligible each with a chance proportional to its weight, so
    that those accepted are independent people of the weighted population.
    """
    from cohort.tables import numbers, read_file, read_parts

    people = read_parts(folder / "subjects", ["subject", "stratum", *own])
    here = np.array([word == stratum for word in people.column("stratum").to_pylist()], dtype=bool)
    if chosen:
        table = read_file(folder / "weights.parquet", ["eligible", "weight"])
        weight = numbers(table, "weight")
        if len(weight) != len(here):
            raise ValueError(f"{folder}: {len(weight):,} weights for {len(here):,} subjects")
        chance = weight / weight.max() if chosen == "accepted" else (weight > 0.0).astype(float)
        here &= uniforms(seed, "accepted", "", 0, len(weight)) < chance
    found = {name: numbers(people, name)[here] for name in own}
    for name in outcomes:
        head, _, column = name.partition(".")
        if column:
            meals = read_parts(folder / "meals" / arm, ["meal", column])
            values = numbers(meals, column)[numbers(meals, "meal") == int(head.removeprefix("meal_"))]
        else:
            values = numbers(read_parts(folder / "outcomes" / arm, [name]), name)
        if len(values) != len(here):
            raise ValueError(f"{folder}: {len(values):,} values of {name} in {arm} for {len(here):,} subjects")
        found[name] = values[here]
    return found


def _read(path: Path, names: Sequence[str]) -> pa.Table:
    from cohort.tables import read_file

    return read_file(path, names)


def _numbers(table: pa.Table, name: str) -> Array:
    from cohort.tables import numbers

    return numbers(table, name)
