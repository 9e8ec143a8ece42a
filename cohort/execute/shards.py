"""Shards: which there are, what of each is on disk and can be trusted, and how one is committed."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

from cohort.execute.identity import arm_identity, seen_identity, subjects_identity
from cohort.execute.stages import Table, Values, constants, joined, tables
from cohort.study import Study
from cohort.study.plan import SHARD
from cohort.tables import Stamp, part_name, part_paths, verify_part, write_part

SUB_BATCH = 1024
"""Subjects of one task on a local run: enough to be worth a task, few enough to spread."""


@dataclass(frozen=True)
class Shard:
    """Subjects first..last-1, the number-th block of them."""

    number: int
    first: int
    last: int

    def sub_batches(self) -> Iterator[tuple[int, int]]:
        """Ranges of subjects that are tasks of their own."""
        for start in range(self.first, self.last, SUB_BATCH):
            yield start, min(start + SUB_BATCH, self.last)


@dataclass(frozen=True)
class Work:
    """What is missing of one shard: the tables to write, and the arms that must be simulated for them."""

    shard: Shard
    tables: tuple[Table, ...]

    @property
    def arms(self) -> tuple[str, ...]:
        return tuple(dict.fromkeys(t.arm.name for t in self.tables if t.arm is not None))


def shards(count: int, size: int = SHARD) -> list[Shard]:
    """All shards of a cohort; only the last may be short."""
    return [Shard(i, first, min(first + size, count)) for i, first in enumerate(range(0, count, size))]


def stamp(study: Study, table: Table, shard: Shard) -> Stamp:
    """What a part of this table and shard must carry."""
    if table.arm is None:
        return Stamp(subjects_identity(study), shard.first, shard.last)
    identity = arm_identity(study, table.arm, table.schema.table)
    if table.schedule is not None:
        identity = seen_identity(study, identity, table.schedule)
    return Stamp(identity, shard.first, shard.last)


def missing(study: Study, out: Path, size: int = SHARD) -> list[Work]:
    """The work that is left, after verifying every part that is there."""
    found = []
    for shard in shards(study.recipe.count, size):
        absent = tuple(
            table
            for table in tables(study)
            if not verify_part(out / table.folder / part_name(shard.number), table.schema, stamp(study, table, shard))
        )
        if absent:
            found.append(Work(shard, absent))
    return found


def commit(study: Study, out: Path, work: Work, pieces: Sequence[dict[str, Values]]) -> int:
    """Write the parts of one shard in their fixed order; returns how many subjects are now done."""
    for table in work.tables:
        values = joined([piece[table.folder] for piece in pieces])
        path = out / table.folder / part_name(work.shard.number)
        write_part(path, table.schema, {**values, **constants(study, table)}, stamp(study, table, work.shard))
    return work.shard.last - work.shard.first


def strays(study: Study, out: Path, size: int = SHARD) -> list[Path]:
    """Parts beyond the study's last shard, and temporaries that a process which died left anywhere in the folder."""
    last = len(shards(study.recipe.count, size))
    found = [p for table in tables(study) for p in part_paths(out / table.folder) if p.name >= part_name(last)]
    return [*found, *out.rglob(".*.tmp")]
