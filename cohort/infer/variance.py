"""Variance-based indices from a replicated design: first and total order, pairs, intervals, and when to stop doubling."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import combinations, pairwise

import numpy as np
from numpy.typing import NDArray

from cohort.infer.intervals import Estimate, t_quantile
from cohort.infer.salib import first_and_total, standardised

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Indices:
    """Indices of every replicate: S1 and ST float64[replicates, factors]; S2 float64[replicates, pairs] or None, pairs in
    the order of `combinations(range(factors), 2)`; n: rows they rest on."""

    S1: Array
    ST: Array
    S2: Array | None
    n: int


def indices(y: Array, second_order: bool) -> Indices:
    """Indices of each replicate from its outputs: y float64[replicates, blocks, points], blocks as in Design.blocks.

    Raises ValueError where an output is missing, or a replicate's outputs do not vary.
    """
    made = [_of_replicate(one, second_order) for one in y]
    first, total, pairs = (np.array([m[i] for m in made]) for i in range(3))
    return Indices(first, total, pairs if second_order else None, int(y.size))


def _of_replicate(y: Array, second_order: bool) -> tuple[Array, Array, Array]:
    if not second_order:
        return (*first_and_total(y[0], y[1], y[2:]), np.empty(0))
    factors = (len(y) - 2) // 2
    a, b, *rest = standardised(y[0], y[1], y[2:])
    ab, ba = rest[0][:factors], rest[0][factors:]
    first, total = azzini(a, b, ab, ba)
    return first, total, _pairs(a, b, ab, ba, first)


def azzini(a: Array, b: Array, ab: Array, ba: Array) -> tuple[Array, Array]:
    """First and total order from both swapped matrices (Azzini, Mara & Rosati, Environ Model Softw 2021;144:105167)."""
    q = ((a - b) ** 2 + (ba - ab) ** 2).mean(axis=1)
    first = 2.0 * ((ba - b) * (a - ab)).mean(axis=1) / q
    total = ((b - ba) ** 2 + (a - ab) ** 2).mean(axis=1) / q
    return first, total


def _pairs(a: Array, b: Array, ab: Array, ba: Array, first: Array) -> Array:
    """Second order: A with j from B and B with k from A share just j and k, so their covariance is that of the pair
    (Saltelli, Comput Phys Commun 2002;145:280), here the mean of both ways round."""
    together = (a * b).mean()
    found = []
    for j, k in combinations(range(len(ab)), 2):
        closed = 0.5 * ((ab[j] * ba[k]).mean() + (ab[k] * ba[j]).mean()) - together
        found.append(closed - first[j] - first[k])
    return np.array(found)


def estimates(replicates: Array, n: int) -> list[Estimate]:
    """An estimate of every column of replicates' indices, float64[replicates, columns]."""
    return [Estimate.of_replicates(column, n) for column in replicates.T]


@dataclass(frozen=True)
class Settled:
    """Whether indices are good enough: the widest half-width, and the neighbours in rank that cannot be told apart."""

    widest: float
    unordered: tuple[tuple[int, int], ...]
    tolerance: float

    @property
    def done(self) -> bool:
        """Every half-width is below the tolerance and the order above it is settled."""
        return self.widest < self.tolerance and not self.unordered


def settled(found: Indices, tolerance: float) -> Settled:
    """Judge indices: half-widths of S1 and ST, and the order by ST of factors whose ST is above the tolerance.

    Two neighbours in that order are settled where the interval of their difference (same replicates) leaves out 0, or
    lies within the tolerance on both sides of it: then they are equal as far as was asked.
    """
    widest = max(e.half_width for kind in (found.S1, found.ST) for e in estimates(kind, found.n))
    mean = found.ST.mean(axis=0)
    order = [int(j) for j in np.argsort(-mean, kind="stable") if mean[j] > tolerance]
    apart = t_quantile(len(found.ST) - 1) / np.sqrt(len(found.ST))
    unordered = []
    for j, k in pairwise(order):
        difference = found.ST[:, j] - found.ST[:, k]
        middle, half = float(difference.mean()), apart * float(difference.std(ddof=1))
        if abs(middle) <= half and abs(middle) + half > tolerance:
            unordered.append((j, k))
    return Settled(widest, tuple(unordered), tolerance)
