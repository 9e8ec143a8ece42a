"""Elementary effects of a Morris design: mu, mu_star and sigma with intervals."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from cohort.infer.intervals import Estimate, t_quantile
from cohort.infer.ranking import TRIM, Design

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Effects:
    """Of one factor, in the outcome's unit per move across the middle 95 % of its law; mu and sigma are None for groups,
    whose members may pull opposite ways."""

    mu: Estimate | None
    mu_star: Estimate
    sigma: Estimate | None


def elementary_effects(design: Design, u: Array, y: Array) -> Array:
    """float64[trajectories, factors]: change of the outcome over the step that moved the factor, by the step's length in
    units of the trimmed range, signed by its direction (Morris, Technometrics 1991;33:161).

    u: float64[trajectories, factors + 1, names] in the unit cube; y: float64[trajectories, factors + 1].
    Raises ValueError where an output is missing or a row is no step of the design.
    """
    if not np.isfinite(y).all():
        raise ValueError("an output is missing")
    if u.shape[1] != len(design.factors) + 1 or y.shape != u.shape[:2]:
        raise ValueError("rows do not match the design: a trajectory has a row more than there are factors")
    steps, changes = np.diff(u, axis=1) / (1.0 - 2.0 * TRIM), np.diff(y, axis=1)
    lead = steps[:, :, [factor.columns[0] for factor in design.factors]]
    moved = np.abs(lead) > 1e-9
    if not (moved.sum(axis=1) == 1).all() or not (moved.sum(axis=2) == 1).all():
        raise ValueError("rows do not match the design: every step moves one factor, and each is moved once")
    return np.asarray(np.where(moved, changes[:, :, None] / np.where(moved, lead, 1.0), 0.0).sum(axis=1))


def effects(found: Array, grouped: tuple[bool, ...]) -> list[Effects]:
    """Indices of every factor from its elementary effects, float64[trajectories, factors]; t intervals over trajectories,
    sigma's by the jackknife."""
    n = len(found)
    out = []
    for column, group in zip(found.T, grouped, strict=True):
        mu, mu_star = Estimate.of_replicates(column, n), Estimate.of_replicates(np.abs(column), n)
        out.append(Effects(None, mu_star, None) if group else Effects(mu, mu_star, _sigma(column)))
    return out


def _sigma(column: Array) -> Estimate:
    n = len(column)
    value = float(column.std(ddof=1))
    without = np.array([np.delete(column, i).std(ddof=1) for i in range(n)]) if n > 2 else np.full(n, value)
    half = t_quantile(n - 1) * float(np.sqrt((n - 1) / n * ((without - without.mean()) ** 2).sum()))
    return Estimate(value, max(value - half, 0.0), value + half, n)
