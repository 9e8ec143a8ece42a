"""A result folder, opened for reading."""

from __future__ import annotations

import json
from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING, Any

from cohort.errors import Problem, StudyError

if TYPE_CHECKING:
    import pyarrow as pa

    from cohort.report.figures import Figure


@dataclass(frozen=True)
class Results:
    """The tables of one run, as Arrow tables; every method reads from disk.

    Raises StudyError where the folder is no result folder.
    """

    folder: Path

    @cached_property
    def record(self) -> dict[str, Any]:
        """run.json: identities, overrides, versions, plan, state."""
        path = self.folder / "run.json"
        try:
            found: dict[str, Any] = json.loads(path.read_text())
            found["arms"], found["strata"], found["arm_facts"], found["shards"]
        except (OSError, ValueError, KeyError, TypeError):
            raise StudyError([Problem("", "is not a result folder (no readable run.json)", str(self.folder))]) from None
        return found

    @property
    def arms(self) -> tuple[str, ...]:
        """Names of the arms."""
        return tuple(self.record["arms"])

    @property
    def schedules(self) -> tuple[str, ...]:
        """Names of the sampling schedules."""
        return tuple((self.record.get("sampling") or {}).get("schedules", ()))

    @cached_property
    def whole_shards(self) -> tuple[int, ...]:
        """Numbers of the shards of which every table has its part, outcomes last."""
        seen = [f"observations/{arm}/{schedule}" for arm in self.arms for schedule in self.schedules]
        tables = ["subjects", *seen, *(f"outcomes/{arm}" for arm in self.arms)]
        names = [{path.name for path in (self.folder / table).glob("part-*.parquet")} for table in tables]
        return tuple(int(name[5:11]) for name in sorted(set.intersection(*names)))

    def subjects(self, columns: Sequence[str] | None = None) -> pa.Table:
        """subjects/: a row a subject."""
        return self._parts("subjects", columns)

    def outcomes(self, arm: str, columns: Sequence[str] | None = None) -> pa.Table:
        """outcomes/<arm>/: a row a subject."""
        return self._parts(f"outcomes/{arm}", columns)

    def meals(self, arm: str) -> pa.Table:
        """meals/<arm>/: a row a subject and meal."""
        return self._parts(f"meals/{arm}", None)

    def observations(self, arm: str, schedule: str) -> pa.Table:
        """observations/<arm>/<schedule>/: a row a subject and analyte."""
        return self._parts(f"observations/{arm}/{schedule}", None)

    def recruitment(self) -> pa.Table:
        """recruitment.parquet: predictions for real people."""
        from cohort.tables import read_table

        return read_table(self.folder / "recruitment.parquet")

    def time_courses(self, arm: str) -> pa.Table:
        """time_courses/<arm>/: kept courses, a row a point."""
        return self._parts(f"time_courses/{arm}", None)

    def incidence(self) -> pa.Table:
        """incidence.parquet: how many are in each regime, by arm and stratum."""
        from cohort.tables import read_table

        return read_table(self.folder / "incidence.parquet")

    def sensitivity(self) -> pa.Table:
        """sensitivity.parquet: what decides, a row an index."""
        from cohort.tables import read_table

        return read_table(self.folder / "sensitivity.parquet")

    def convergence(self) -> pa.Table:
        """convergence.parquet: the same indices at each doubling."""
        from cohort.tables import read_table

        return read_table(self.folder / "convergence.parquet")

    def ranking(self) -> pa.Table:
        """ranking/: a row a run of the ranking."""
        return self._parts("ranking", None)

    def map(self, name: str) -> pa.Table:
        """map/<name>.parquet: windows, region, borders, locking or tongues."""
        from cohort.tables import read_table

        return read_table(self.folder / "map" / f"{name}.parquet")

    def figures(self) -> list[Figure]:
        """The page's figures, each with its SVG text, its numbers and what it says in words."""
        from cohort.report.gallery import gallery

        return [figure for _, figure in gallery(self, self.summary())]

    def summary(self) -> dict[str, Any]:
        """summary.json: the headline numbers."""
        found: dict[str, Any] = json.loads((self.folder / "summary.json").read_text())
        return found

    def _parts(self, table: str, columns: Sequence[str] | None) -> pa.Table:
        from cohort.tables import read_parts

        try:
            return read_parts(self.folder / table, columns)
        except FileNotFoundError:
            raise StudyError([Problem("", f"has no table {table}", str(self.folder))]) from None
