"""How well the detector works on a study's virtual people, sampled as a real study was; and the share it corrects."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from cohort.errors import Problem, StudyError, nearest
from cohort.execute.stages import null_folder
from cohort.infer.predict import Corrected, corrected
from cohort.measure.outcomes import outcomes
from cohort.model.protocol import Arm
from cohort.observe.detector import Rule, observations
from cohort.observe.sampling import Schedule
from cohort.population import draw
from cohort.population.uniforms import generator
from cohort.quantities import ANALYTES
from cohort.study import Study
from cohort.study.arms import has_steady_input

Array = NDArray[np.float64]

MOST_PEOPLE = 4096
FEWEST = 20


@dataclass(frozen=True)
class Validation:
    """The detector on virtual people: (detected, of) those who oscillate and (not detected, of) those who do not."""

    arm: str
    sensitive: tuple[int, int]
    specific: tuple[int, int]


def validate(study: Study, arm_name: str | None, times_min: Array, missed: float, rule: Rule) -> Validation:
    """Sample a study's people at a real study's times (min from its first sample), and see whom the rule finds.

    Raises StudyError where the study cannot say: no [sampling], no such arm, a window that is too short, or too few
    people on one of the two sides.
    """
    arm = _arm(study, arm_name)
    where = str(study.path)
    if study.sampling is None:
        raise StudyError([Problem("sampling", "is missing: how the clinic's assay errs", where)])
    window = arm.duration_min - arm.settle_min
    if times_min[-1] > window:
        raise StudyError([Problem(f"arms.{arm.name}", f"has {window / 60:g} h after settling, and the series last "
                                  f"{times_min[-1] / 60:g} h; try --set \"arms.{arm.name}.duration='"
                                  f"{(arm.settle_min + times_min[-1]) / 60:g} h'\"", where)])  # fmt: skip
    people = draw(study.recipe, 0, min(study.recipe.count, MOST_PEOPLE))
    when = arm.settle_min + times_min
    found = outcomes(study.model, people.values, people.body_weight_kg, arm, when, responses=False)
    schedule = Schedule("as sampled", tuple(float(t) for t in times_min), missed)
    true = {analyte: np.ascontiguousarray(found.sampled[:, i]) for i, analyte in enumerate(ANALYTES)}
    seen = observations(true, schedule, study.sampling.readings, rule, study.seed, arm.name, (0, len(people.subject)),
                        folder=null_folder())  # fmt: skip
    detected = seen["detected"][seen["analyte"] == 0]
    truly = found.outcomes["oscillates"]
    yes, no = (truly == 1) & (detected >= 0), (truly == 0) & (detected >= 0)
    for mask, what in ((yes, "oscillate"), (no, "do not oscillate")):
        if mask.sum() < FEWEST:
            raise StudyError([Problem(f"arms.{arm.name}", f"{int(mask.sum())} of {len(truly):,} virtual people {what}; at least "
                                      f"{FEWEST} are needed to judge the detector", where)])  # fmt: skip
    return Validation(
        arm.name, (int((detected[yes] == 1).sum()), int(yes.sum())), (int((detected[no] == 0).sum()), int(no.sum()))
    )


def correct(study: Study, detected: int, of: int, found: Validation) -> Corrected:
    """The share that truly oscillates, corrected by the detector's sensitivity and specificity on virtual people."""
    try:
        return corrected((detected, of), found.sensitive, found.specific, generator(study.seed, "corrected share"))
    except ValueError as error:
        raise StudyError([Problem(f"arms.{found.arm}", str(error), str(study.path))]) from None


def _arm(study: Study, name: str | None) -> Arm:
    steady = [arm for arm in study.arms if has_steady_input(arm)]
    names = [arm.name for arm in steady]
    if name is None and len(steady) == 1:
        return steady[0]
    listed = ", ".join(names) or "none has a steady input"
    if name is None:
        raise StudyError(
            [Problem("arms", f"which arm were the people in? Name it with --arm: {listed}", str(study.path))]
        )
    if name not in names:
        raise StudyError([Problem("arms", f"{name!r} is no arm with a steady input{nearest(name, names)}; {listed}",
                                  str(study.path))])  # fmt: skip
    return next(arm for arm in steady if arm.name == name)
