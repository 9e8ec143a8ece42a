"""One index as a row of sensitivity.parquet or convergence.parquet."""

from __future__ import annotations

from dataclasses import dataclass, replace

from cohort.infer.intervals import Estimate


@dataclass(frozen=True)
class Row:
    """Columns of sensitivity.parquet (`quantities.SENSITIVITY_COLUMNS`); None is missing."""

    arm: str
    stratum: str
    outcome: str
    estimand: str
    parameter: str | None = None
    other: str | None = None
    index: str | None = None
    value: float | None = None
    low: float | None = None
    high: float | None = None
    n: int | None = None
    method: str = ""
    floor: float | None = None
    verdict: str | None = None
    refused: str | None = None

    def of(self, parameter: str, index: str, found: Estimate, other: str | None = None) -> Row:
        """The same row with an index of one factor."""
        return replace(
            self,
            parameter=parameter,
            other=other,
            index=index,
            value=found.value,
            low=found.low,
            high=found.high,
            n=found.n,
        )

    def judged(self, floor: float | None, verdict: str | None) -> Row:
        """The same row with its floor and verdict."""
        return replace(self, floor=floor, verdict=verdict)

    def refusal(self, why: str, n: int | None = None) -> Row:
        """The same row, refused."""
        return replace(self, refused=why, n=n)


@dataclass(frozen=True)
class Step:
    """A row of convergence.parquet: an index at one doubling."""

    row: Row
    doubling: int
