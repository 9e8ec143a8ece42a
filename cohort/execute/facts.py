"""What a reader of the results must know of each arm, kept in run.json."""

from __future__ import annotations

from dataclasses import asdict
from typing import Any

import numpy as np

from cohort.model.body import body
from cohort.model.inputs import People, is_forced, steady_input
from cohort.model.protocol import Arm
from cohort.model.rest import at_rest
from cohort.observe.white import false_pulses_per_h
from cohort.population import draw
from cohort.quantities import REFERENCE_WEIGHT_KG
from cohort.simulate.run import observe_states, with_secretion
from cohort.study import Study
from cohort.study.arms import has_steady_input

FASTING_PEOPLE = 4096
FASTING_QUANTILES = (0.05, 0.5, 0.95)

DISAGREES_NONE_BELOW = 1e-9
DISAGREES_AROUND_MG_PER_MIN = 6.0 * REFERENCE_WEIGHT_KG
DISAGREES_WITHIN = 0.15
"""Published people oscillate with no infusion and at 6 mg/kg/min (420 mg/min at 70 kg), where the models do not."""


def arm_facts(arm: Arm) -> dict[str, Any]:
    """Hours, window, whether there is a steady input and which (mg/min at 70 kg), and whether people are known to
    oscillate where the model does not."""
    steady = steady_at_reference(arm)
    return {
        "hours": arm.duration_min / 60.0,
        "window_hours": (arm.duration_min - arm.settle_min) / 60.0,
        "steady_mg_per_min": steady,
        "disagrees": steady is not None and disagrees(steady),
        "clamped": arm.clamp is not None,
        "forcing_period_min": None if np.isnan(forcing_period_min(arm)) else forcing_period_min(arm),
        "forced": is_forced(arm) and steady is not None,
    }


def forcing_period_min(arm: Arm) -> float:
    """The period of the arm's first periodic input; NaN without one."""
    periods = (getattr(shape, "period_min", None) for shape in (*arm.glucose, *arm.insulin))
    return next((float(p) for p in periods if isinstance(p, float)), np.nan)


def sampling_facts(study: Study) -> dict[str, Any] | None:
    """Schedules, what each cannot see, and whether the body's own irregularity is left out (then detection is optimistic)."""
    plan = study.sampling
    if plan is None:
        return None
    return {
        "schedules": [s.name for s in plan.schedules],
        "unseen": dict(plan.unseen),
        "rule": asdict(plan.rule),
        "readings": {analyte: asdict(reading) for analyte, reading in plan.readings.items()},
        "false_pulses_per_h": {
            s.name: false_pulses_per_h(s, plan.readings["glucose"], plan.rule.swing_sds) for s in plan.schedules
        },
        "optimistic": any(not reading.background_sd for reading in plan.readings.values()),
    }


def fasting_facts(study: Study) -> dict[str, Any]:
    """Glucose (mg/dL) and insulin (mU/L) of the first 4,096 people at rest with nothing given, by stratum: quantiles."""
    found = body(study.model)
    people = draw(study.recipe, 0, min(study.recipe.count, FASTING_PEOPLE))
    own = np.ascontiguousarray(people.values[:, : len(found.card.parameters)])
    nothing = np.zeros(len(own))
    parameters = with_secretion(own, 1.0)
    rest = at_rest(found, parameters, nothing, nothing)
    seen = observe_states(found, rest.states, nothing, nothing, parameters)
    columns = list(found.traced.observed)
    facts: dict[str, Any] = {}
    for code, name in enumerate(study.recipe.stratum_names):
        here = (people.stratum == code) & np.isfinite(rest.states).all(axis=1)
        facts[name] = {"n": int(here.sum())}
        for column in ("glucose_mg_dl", "insulin_mu_l"):
            values = seen[here, columns.index(column)]
            marks = np.quantile(values, FASTING_QUANTILES) if len(values) else [np.nan] * 3
            facts[name][column] = [None if m != m else float(m) for m in marks]
    return facts


def steady_at_reference(arm: Arm) -> float | None:
    """The arm's steady glucose input for a 70 kg person, mg/min; None where it has none."""
    if not has_steady_input(arm):
        return None
    found = steady_input(arm, People(np.array([REFERENCE_WEIGHT_KG]), *(np.array([np.nan]) for _ in range(3))))
    return None if found is None else float(found[0][0])


def disagrees(steady_mg_per_min: float) -> bool:
    """Whether published people oscillate at this input and the models do not (Sturis et al. 1991 and 1993)."""
    near_six = abs(steady_mg_per_min / DISAGREES_AROUND_MG_PER_MIN - 1.0) <= DISAGREES_WITHIN
    return steady_mg_per_min <= DISAGREES_NONE_BELOW or near_six
