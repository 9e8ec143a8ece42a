"""What plain, independent rows say of which inputs decide: association by bins, fair shares and what is left by nearest
neighbours. None of these needs a design, so they serve outcomes that part of a cohort lacks, correlated inputs and tables.

Never for rows of a low-discrepancy sequence: an input without any influence then comes out at -0.2 to -0.3.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from math import comb

import numpy as np
from numpy.typing import NDArray

from cohort.infer.intervals import Estimate

Array = NDArray[np.float64]
Columns = tuple[int, ...]

NEIGHBOURS = 8
PARTS = 8
"""Disjoint parts of the rows whose estimates' spread gives the interval of the whole."""
FEWEST_ROWS = 100
MOST_PLAYERS = 10
MOST_NEIGHBOUR_ROWS = 2048
"""Rows beyond this many are left out of nearest-neighbour estimates: their cost grows with 2^players."""
DUMMIES = 200


def association(x: Array, y: Array) -> Estimate:
    """First-order index of one input on independent rows: epsilon squared over equally full bins of x, float64[n] each.

    The share of variance that lies between bins, corrected for what noise alone puts there, (M - 1)/(n - M)
    (Kelley, PNAS 1935;21:554, from memory). Where nothing depends on x its mean is 0, and it may be negative.
    """
    return Estimate.of_parts(_epsilon_squared(x, y), [_epsilon_squared(x[p], y[p]) for p in _parts(len(y))], len(y))


def association_floor(y: Array, rng: np.random.Generator) -> float:
    """What an input without influence reaches in 95 of 100 cases: the association of shuffled dummies."""
    return float(np.quantile([_epsilon_squared(rng.random(len(y)), y) for _ in range(DUMMIES)], 0.95))


def group_association(x: Array, y: Array) -> Estimate:
    """Closed first-order index of several inputs together, x float64[n, inputs] on normal scores, by nearest neighbours."""
    x, y = x[:MOST_NEIGHBOUR_ROWS], y[:MOST_NEIGHBOUR_ROWS]
    parts = [1.0 - _left_given(x[p], y[p]) / float(y[p].var()) for p in _parts(len(y))]
    return Estimate.of_parts(1.0 - _left_given(x, y) / float(y.var()), parts, len(y))


def _epsilon_squared(x: Array, y: Array) -> float:
    n = len(y)
    bins = max(4, min(50, round(2.0 * n ** (1.0 / 3.0))))
    edges = np.linspace(0, n, bins + 1).astype(int)
    ordered = y[np.argsort(x, kind="stable")]
    total = float(((ordered - ordered.mean()) ** 2).sum())
    if total == 0.0:
        return 0.0
    counts = np.diff(edges)
    sums = np.add.reduceat(ordered, edges[:-1])
    within = float((ordered**2).sum() - (sums**2 / counts).sum())
    return float(1.0 - (within / (n - bins)) / (total / (n - 1)))


def _parts(n: int) -> list[slice]:
    return [slice(i, n, PARTS) for i in range(PARTS)]


# ---- nearest neighbours ------------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Shares:
    """Per player (an input, or a group), as shares of the outcome's variance: its Shapley effect, and the total index T,
    what is left if all the others are known. dummy: the Shapley effect that an added input without influence gets."""

    shapley: tuple[Estimate, ...]
    total: tuple[Estimate, ...]
    dummy: Estimate

    @property
    def floor(self) -> float:
        """What an input without influence may reach."""
        return max(self.dummy.high, 0.0)


def shares(x: Array, y: Array, players: Sequence[Columns], dummy: Array) -> Shares:
    """Shapley effects (Song, Nelson & Staum 2016) by nearest neighbours (Broto, Bachoc & Depecker 2020) on plain rows.

    x: float64[n, inputs], correlated or not, on scales where neighbours are comparable (normal scores); y: float64[n], a
    function of x without noise; players: columns of each; dummy: float64[n], an independent input without influence.
    """
    most = MOST_NEIGHBOUR_ROWS >> max(len(players) - 8, 0)
    inputs, y = np.column_stack([x, dummy])[:most], y[:most]
    everyone = [*players, (x.shape[1],)]
    whole = _game(inputs, y, everyone)
    parts = [_game(inputs[p], y[p], everyone) for p in _parts(len(y))]
    shapley, total = (
        [Estimate.of_parts(kind[j], [part[k][j] for part in parts], len(y)) for j in range(len(kind))]
        for k, kind in enumerate(whole)
    )
    return Shares(tuple(shapley[:-1]), tuple(total), shapley[-1])


def _game(x: Array, y: Array, players: Sequence[Columns]) -> tuple[Array, Array]:
    """(Shapley effects of every player, total indices of all but the last, the dummy), as shares of the variance of y."""
    d = len(players)
    variance = y.var()
    if variance == 0.0:
        return np.zeros(d), np.zeros(d - 1)
    left = np.empty(1 << d)
    real = (1 << (d - 1)) - 1  # everyone but the dummy: together they fix y
    for subset in range(1 << d):
        if subset & real == real:
            left[subset] = 0.0
        elif subset == 0:
            left[subset] = variance
        else:
            columns = [c for j in range(d) if subset >> j & 1 for c in players[j]]
            left[subset] = _left_given(x[:, columns], y)
    left /= variance
    shapley = np.zeros(d)
    for j in range(d):
        for subset in range(1 << d):
            if not subset >> j & 1:
                weight = 1.0 / (d * comb(d - 1, subset.bit_count()))
                shapley[j] += weight * (left[subset] - left[subset | 1 << j])
    return shapley, np.array([left[real & ~(1 << j)] for j in range(d - 1)])


def _left_given(x: Array, y: Array) -> float:
    """E[Var(y | x)]: half the mean squared difference to the k-th neighbour, extrapolated over k to distance 0.

    A neighbour at distance h differs by the conditional variance and, to first order, by a term in h^2.
    """
    from scipy.spatial import cKDTree

    k = min(NEIGHBOURS, len(y) - 1)
    distance, index = cKDTree(x).query(x, k=k + 1)
    squared = (distance[:, 1:] ** 2).mean(axis=0)
    half = 0.5 * ((y[:, None] - y[index[:, 1:]]) ** 2).mean(axis=0)
    centred = squared - squared.mean()
    spread = float((centred**2).sum())
    slope = float((centred * half).sum()) / spread if spread > 0.0 else 0.0
    return max(float(half.mean() - slope * squared.mean()), 0.0)
