"""Floors below which an index says nothing, and what an index comes to in words."""

from __future__ import annotations

import numpy as np

from cohort.infer.intervals import Estimate
from cohort.quantities import VERDICTS

DECIDES, INTERACTS, LITTLE, NOTHING = VERDICTS
SMALL = 0.05
"""Share of the variance below which a factor matters little (common practice)."""
SMALL_EFFECT = 0.1
"""The same for mu_star, as a share of the largest (common practice)."""

GROWTH_ERROR = 1e-8
RELATIVE_ERROR = 1e-6
AMPLITUDE_ERROR = 1e-5


SIZES = (("_mg_dl_min", 1e4), ("_mg_dl", 100.0), ("_mu_l", 10.0), ("_mg_per_min", 100.0), ("_mu_per_min", 100.0),
         ("_mg_per_kg_min", 1.0), ("_min", 1.0))  # fmt: skip
"""What errors are relative to where an outcome is itself small, a difference say: the size of its kind, by its unit."""


def engine_error(outcome: str, typical: float) -> float:
    """The promised accuracy of an outcome as an absolute error; typical: its usual size. Words have none; of periods the
    logarithm is analysed."""
    if outcome == "oscillates":
        return 0.0
    if outcome == "growth_per_min":
        return GROWTH_ERROR
    if outcome.endswith("period_min"):
        return RELATIVE_ERROR
    if "amplitude" in outcome:
        return max(AMPLITUDE_ERROR * abs(typical), 1e-6)
    usual = next((size for ending, size in SIZES if outcome.endswith(ending)), 1.0)
    return RELATIVE_ERROR * max(abs(typical), usual)


def variance_floor(outcome: str, typical: float, variance: float) -> float:
    """The largest total index that the engine's error alone can make: two errors of opposite sign in every difference."""
    return 2.0 * engine_error(outcome, typical) ** 2 / variance


def effect_floor(outcome: str, typical: float, step: float) -> float:
    """The largest elementary effect that the engine's error alone can make over a step of the trimmed range."""
    return 2.0 * engine_error(outcome, typical) / step


def verdict(first: Estimate, total: Estimate, floor: float) -> str:
    """First and total index in words."""
    if not total.low > floor:
        return NOTHING
    if total.value < SMALL:
        return LITTLE
    return DECIDES if first.value >= 0.5 * total.value else INTERACTS


def verdict_of_share(share: Estimate, floor: float) -> str:
    """A single index in words."""
    if not share.low > floor:
        return NOTHING
    return DECIDES if share.value >= SMALL else LITTLE


def verdict_of_effect(mu_star: Estimate, sigma: Estimate | None, largest: float, floor: float) -> str:
    """Elementary effects in words: sigma above mu_star means that the effect depends on where the others stand."""
    if not mu_star.low > floor or not np.isfinite(mu_star.value):
        return NOTHING
    if mu_star.value < SMALL_EFFECT * largest:
        return LITTLE
    return INTERACTS if sigma is not None and sigma.value > mu_star.value else DECIDES
