"""What a reader of the results must know of each arm, kept in run.json."""

from __future__ import annotations

from typing import Any

import numpy as np

from cohort.model.inputs import People, steady_input
from cohort.model.protocol import Arm
from cohort.quantities import REFERENCE_WEIGHT_KG
from cohort.study.arms import has_steady_input

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
    }


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
