"""What the reader of a ranking must know of how it was run, as it is kept in run.json."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict, dataclass
from typing import Any

from cohort.infer.ranking import Design, Factor, Ranking
from cohort.infer.strata import only_of_cycles

INSTEAD = ("oscillates", "growth_per_min", "linear_period_min")
"""What is ranked beside an outcome that only oscillators have."""


@dataclass(frozen=True)
class RankedArm:
    """An arm: its own number in the folder, and why it has none of some outcomes."""

    name: str
    slot: int
    absent: Mapping[str, str]


@dataclass(frozen=True)
class RankedStratum:
    """A stratum: design and index; why its design was refused, or ""; the doubling reached and why it went no further;
    plain rows, and how many of them had factors redrawn."""

    design: Design
    index: int
    refused: str
    doubling: int
    stopped: str
    plain: int
    redrawn: int


@dataclass(frozen=True)
class Facts:
    """A ranking that was run. scaling: how parameters follow weight; given: rows of the cohort itself are analysed, since
    they are a table, or selected, or matched to published summaries (then some are accepted at random by weight)."""

    ranking: Ranking
    scaling: str
    given: bool
    selected: bool
    matched: bool
    arms: tuple[RankedArm, ...]
    strata: tuple[RankedStratum, ...]

    @property
    def outcomes(self) -> tuple[str, ...]:
        """Outcomes as named, and those that stand beside the ones that only oscillators have."""
        named = self.ranking.outcomes
        more = INSTEAD if any(only_of_cycles(name) for name in named) else ()
        return (*named, *(name for name in more if name not in named))


def as_plain(facts: Facts) -> dict[str, Any]:
    """Facts as what JSON holds."""
    return asdict(facts)


def from_plain(found: Mapping[str, Any]) -> Facts:
    """Facts from what JSON holds. Raises KeyError, TypeError or ValueError where it is none."""
    asked = found["ranking"]
    groups = {name: tuple(members) for name, members in asked["groups"].items()}
    ranking = Ranking(**{**asked, "outcomes": tuple(asked["outcomes"]), "groups": groups})
    arms = tuple(RankedArm(a["name"], int(a["slot"]), dict(a["absent"])) for a in found["arms"])
    strata = tuple(RankedStratum(**{**s, "design": _design(s["design"])}) for s in found["strata"])
    return Facts(
        ranking, found["scaling"], bool(found["given"]), bool(found["selected"]), bool(found["matched"]), arms, strata
    )


def _design(found: Mapping[str, Any]) -> Design:
    factors = tuple(Factor(f["name"], tuple(f["columns"])) for f in found["factors"])
    return Design(**{**found, "names": tuple(found["names"]), "factors": factors})
