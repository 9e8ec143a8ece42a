"""A checked study: plain data, ready to plan and run."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from cohort.errors import Problem
from cohort.infer.ranking import Ranking
from cohort.model.protocol import Arm
from cohort.population.recipe import Recipe
from cohort.study.maps import Maps
from cohort.study.sampling import Recruitment, Sampling
from cohort.study.selection import Selection


@dataclass(frozen=True)
class Output:
    """How many subjects keep their time courses, and how far apart (min) their points are."""

    time_courses: int = 20
    every_min: float = 5.0


@dataclass(frozen=True)
class Study:
    """A study file, read and checked.

    path and text: the file and its bytes; overrides: `--set` words as given; recipe: how subjects are made; arms in
    file order; ranking, sampling, recruitment, maps: None where the study has none; selection: who is counted; files:
    SHA-256 of every data file by the name the study gives it; settings: every key as it counts (overrides applied, arms
    and strata by name), for telling what changed; warnings: legal but odd; code: the
    text of a user's own model, "" for a shipped one; others: the same study in the other models of a list.
    """

    path: Path
    text: bytes
    overrides: tuple[str, ...]
    title: str
    model: str
    seed: int
    recipe: Recipe
    arms: tuple[Arm, ...]
    output: Output
    ranking: Ranking | None = None
    sampling: Sampling | None = None
    recruitment: Recruitment | None = None
    selection: Selection = field(default_factory=Selection)
    maps: Maps | None = None
    files: Mapping[str, str] = field(default_factory=dict)
    settings: Mapping[str, str] = field(default_factory=dict)
    warnings: tuple[Problem, ...] = ()
    code: str = ""
    others: tuple[Study, ...] = ()

    def __setstate__(self, state: dict[str, Any]) -> None:
        """A worker that is sent a study knows its model, too."""
        self.__dict__.update(state)
        if self.code:
            from cohort.model.own import register

            register(self.code, self.model.partition("@")[0])

    @property
    def selected(self) -> bool:
        """Whether people are chosen or weighted by their outcomes."""
        return bool(self.selection.eligible or self.selection.match)
