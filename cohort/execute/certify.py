"""Some subjects of a study once more, at high order and tight tolerance: how far off are the usual numbers?"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from cohort.errors import Problem, StudyError
from cohort.measure.outcomes import with_own_periods
from cohort.model.body import Body, body
from cohort.model.inputs import People, inputs
from cohort.model.protocol import Arm
from cohort.model.taylor import ORDER, TOLERANCE
from cohort.population import draw
from cohort.simulate.engine import DONE
from cohort.simulate.run import assemble, courses, fades, start_states, typical, with_secretion
from cohort.study import Study

Array = NDArray[np.float64]

CERTIFIED_ORDER = 20
CERTIFIED_TOLERANCE = 1e-13
PROMISED = 1e-6
"""Relative error of plasma glucose that is promised."""

EVERY_MIN = 1.0
SHOWN = 5
SEEN = ("glucose_mg_dl",)


@dataclass(frozen=True)
class ArmErrors:
    """Largest relative error of glucose of each subject in one arm: float64[n], NaN where either course failed."""

    arm: str
    subject: NDArray[np.int64]
    error: Array


@dataclass(frozen=True)
class Certificate:
    """The errors of all arms; `kept` says whether every one is within what is promised."""

    arms: tuple[ArmErrors, ...]

    @property
    def kept(self) -> bool:
        return all(np.nanmax(a.error, initial=0.0) <= PROMISED for a in self.arms)

    def words(self) -> str:
        """A line an arm, and its worst subjects."""
        lines = [
            f"largest relative error of glucose, every {EVERY_MIN:g} min, against order {CERTIFIED_ORDER} at "
            f"{CERTIFIED_TOLERANCE:g}"
        ]
        for a in self.arms:
            known = np.isfinite(a.error)
            worst = np.argsort(np.where(known, -a.error, np.inf))[: min(SHOWN, int(known.sum()))]
            lines.append(f"{a.arm}: {known.sum()} subjects, median {np.nanmedian(a.error):.1e}; worst")
            lines += [f"  subject {a.subject[i]}: {a.error[i]:.1e}" for i in worst]
            if not known.all():
                lines.append(f"  {int((~known).sum())} not compared: their courses failed")
        return "\n".join([*lines, f"promised: {PROMISED:g}; {'kept' if self.kept else 'NOT KEPT'}"])


def certify_study(study: Study, n: int) -> Certificate:
    """Integrate n subjects, spread evenly over the cohort, both ways in every arm without a clamp.

    Raises StudyError where every arm has one: a clamp's course has no single field to integrate more tightly.
    """
    arms = [arm for arm in study.arms if arm.clamp is None]
    if not arms:
        raise StudyError([Problem("arms", "every arm has a clamp; certify needs one without", str(study.path))])
    subject = np.unique(np.linspace(0, study.recipe.count - 1, min(n, study.recipe.count)).astype(np.int64))
    people = [draw(study.recipe, int(s), int(s) + 1) for s in subject]
    values = np.concatenate([p.values for p in people])
    weight = np.concatenate([p.body_weight_kg for p in people])
    found = body(study.model)
    own = np.ascontiguousarray(values[:, : len(found.card.parameters)])
    them = People(weight, values[:, -2], values[:, -1], np.full(len(subject), np.nan))
    errors = (_errors(found, own, with_own_periods(found, own, them, arm), arm) for arm in arms)
    return Certificate(tuple(ArmErrors(arm.name, subject, e) for arm, e in zip(arms, errors, strict=True)))


def _errors(found: Body, own: Array, people: People, arm: Arm) -> Array:
    usual = _glucose(found, own, people, arm, ())
    tight = _glucose(found, own, people, arm, (CERTIFIED_ORDER, CERTIFIED_TOLERANCE))
    return np.asarray(np.abs(usual / tight - 1.0).max(axis=1), dtype=np.float64)


def _glucose(found: Body, own: Array, people: People, arm: Arm, accuracy: tuple[int, float] | tuple[()]) -> Array:
    pieces = inputs(arm, people)
    stepper = found.stepper(
        SEEN, pieces.steady, *(accuracy or (ORDER, TOLERANCE)), summarised=False, relative=fades(arm)
    )
    x0 = start_states(found, own, people, arm)
    prepared = assemble(stepper, with_secretion(own, arm.secretion), x0, typical(found), pieces, found.enters)
    grid = np.arange(0.0, arm.duration_min + 0.5 * EVERY_MIN, EVERY_MIN)
    grid = grid[grid <= arm.duration_min]
    out = np.full((len(own), len(grid)), np.nan)
    for rows, course in courses(prepared, arm.duration_min):
        whole = course.status == DONE
        out[rows[whole]] = course.sample(grid)[whole, 0]
    return out
