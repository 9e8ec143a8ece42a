"""Weights that bring a cohort to published means and SDs, as little as they can."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

FEWEST_EFFECTIVE = 100.0
SMALLEST_SHARE = 0.05
"""Below either, weighted numbers rest on too few people (common practice)."""


@dataclass(frozen=True)
class Balanced:
    """weights float64[n], adding to n; effective: Kish's effective sample size; largest: largest weight over the mean one;
    failed: why there are none, or ""."""

    weights: Array
    effective: float
    largest: float
    failed: str


def kish(weights: Array) -> float:
    """Effective sample size (sum w)^2 / sum w^2 (Kish 1965, from memory)."""
    return float(weights.sum() ** 2 / (weights**2).sum())


def entropy_balance(values: Array, means: Array, sds: Array) -> Balanced:
    """Weights proportional to exp(l' c) that match means and SDs exactly (entropy balancing: Hainmueller, Polit Anal
    2012;20:25, from memory).

    values: float64[n, targets]; means, sds: float64[targets]. The convex dual is solved by damped Newton steps.
    """
    n = len(values)
    nothing = np.full(n, np.nan)
    z = (values - means) / sds
    c = np.concatenate([z, z * z - 1.0], axis=1)
    reach = np.max(np.abs(c), axis=0)
    c = c / np.where(reach > 0.0, reach, 1.0)
    multipliers = np.zeros(c.shape[1])

    def dual(at: Array) -> tuple[float, Array]:
        exponent = c @ at
        top = exponent.max()
        weight = np.exp(exponent - top)
        return float(np.log(weight.mean()) + top), weight / weight.sum()

    height, share = dual(multipliers)
    for _ in range(200):
        slope = share @ c
        if np.abs(slope).max() < 1e-12:
            break
        curve = (c * share[:, None]).T @ c - np.outer(slope, slope)
        step = np.linalg.lstsq(curve, -slope, rcond=None)[0]
        factor, before = 1.0, height
        while factor > 1e-9:
            height, share = dual(multipliers + factor * step)
            if height <= before + 1e-4 * factor * float(slope @ step):
                break
            factor *= 0.5
        multipliers = multipliers + factor * step
        if factor <= 1e-9:
            break
    if np.abs(share @ c).max() > 1e-8:
        return Balanced(nothing, 0.0, np.inf, "no weights bring the cohort to these means and SDs")
    weights = share * n
    effective = kish(weights)
    why = ""
    if effective < FEWEST_EFFECTIVE or effective < SMALLEST_SHARE * n:
        why = f"the effective sample size is {effective:,.0f} of {n:,}; at least 100 and 5 % are needed"
    return Balanced(weights, effective, float(weights.max()), why)


def induced_correlations(values: Array, weights: Array) -> Array:
    """Correlations of inputs on normal scores that weights bring about: weighted minus plain, float64[inputs, inputs]."""

    def correlation(w: Array) -> Array:
        centred = values - np.average(values, axis=0, weights=w)
        covariance = (centred * w[:, None]).T @ centred
        sd = np.sqrt(np.diag(covariance))
        return np.asarray(covariance / np.outer(sd, sd))

    return correlation(weights) - correlation(np.ones(len(values)))
