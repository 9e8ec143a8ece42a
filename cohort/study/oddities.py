"""Warnings: what is legal in a study but odd."""

from __future__ import annotations

import functools
import math

import numpy as np

from cohort.errors import Problem
from cohort.model.body import body
from cohort.model.catalogue import MODELS
from cohort.model.inputs import People, steady_input
from cohort.model.protocol import Arm
from cohort.population.laws import Fixed
from cohort.program import run
from cohort.quantities import REFERENCE_WEIGHT_KG
from cohort.study.spec import Study
from cohort.study.tree import Tree

DAY_MIN = 1440.0


def oddities(study: Study, tree: Tree) -> list[Problem]:
    """Every oddity of a checked study, as problems that do not stop it."""
    found: list[Problem] = []
    for symbol, law in study.recipe.strata[0].laws.items():
        if isinstance(law, Fixed) and law.value == study.recipe.nominal.get(symbol):
            path = ("subjects", "parameters", symbol)
            found.append(tree.place(path, f"fixed at {law.value:g}, which is its published value anyway"))
    for i, arm in enumerate(study.arms):
        found += _of_arm(study, arm, tree, i)
    return found


def _of_arm(study: Study, arm: Arm, tree: Tree, i: int) -> list[Problem]:
    found: list[Problem] = []
    per_kg = any(s.per_kg for s in (*arm.glucose, *arm.insulin))
    if per_kg and study.recipe.scaling != "per-kg":
        how = study.recipe.scaling
        found.append(tree.place(("arms", i), f'rates per kg while parameters are scaled "{how}": heavy subjects get more '
                                'for what they can use (scaling = "per-kg" treats both alike)'))  # fmt: skip
    window = arm.duration_min - arm.settle_min
    if window > DAY_MIN and window % DAY_MIN:
        whole = int(window // DAY_MIN)
        found.append(tree.place(("arms", i), f"the measured window is {window / 60:g} h, no whole days; daily quantities "
                                f"(glucose_mage_mg_dl) use its first {whole} day{'s' * (whole > 1)}"))  # fmt: skip
    folding = e_folding_min(study.model, arm)
    if arm.settle_min > 0.0 and folding is not None and arm.settle_min < folding:
        found.append(tree.place(("arms", i, "settle"), f"{arm.settle_min / 60:g} h is shorter than the published body's "
                                f"slowest transient here (e-folding {folding / 60:.1f} h): the window still holds some of "
                                "it; cycle outcomes do not"))  # fmt: skip
    return found


def e_folding_min(model: str, arm: Arm) -> float | None:
    """How long the published body's slowest transient takes to change by a factor e under the arm's steady input (min).

    None where the arm has no steady input or the body no equilibrium.
    """
    growth = published_growth(model, arm)
    return None if growth is None else 1.0 / max(abs(growth), 1e-9)


def published_growth(model: str, arm: Arm) -> float | None:
    """Largest real part of the published body's eigenvalues under the arm's steady input, per min.

    None where the arm has no steady input or the body no equilibrium. Plain Python: no compiler is started for it.
    """
    nobody = np.array([REFERENCE_WEIGHT_KG]), *(np.array([math.nan]) for _ in range(3))
    steady = steady_input(arm, People(*nobody))
    return None if steady is None else _growth(model, float(steady[0][0]), float(steady[1][0]), arm.secretion)


@functools.lru_cache(maxsize=256)
def _growth(model: str, Gin: float, Iin: float, secretion: float) -> float | None:
    card, found = MODELS[model], body(model)
    if not found.traced.rest:  # no scalar balance to bisect
        return None
    inputs = [Gin, Iin, *card.nominal.values(), secretion]
    low, high = 0.0, 100.0 * card.typical[found.traced.rest_of]
    if not run(found.balance, [high, *inputs])[0] < 0.0:
        return None
    for _ in range(40):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if run(found.balance, [middle, *inputs])[0] > 0.0 else (low, middle)
    states = run(found.balance, [low, *inputs])[2:]
    states[card.states.index(found.traced.rest_of)] = low
    slopes = np.array(run(found.jacobian, [*states, *inputs])).reshape(len(states), -1)
    if not np.isfinite(slopes).all():
        return None
    return float(np.linalg.eigvals(slopes).real.max())
