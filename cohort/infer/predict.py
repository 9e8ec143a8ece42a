"""From a share that is not exactly known to how many of n real people, and how many to recruit for enough of them."""

from __future__ import annotations

import functools
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

NODES = 400
MOST_RECRUITED = 100_000
CENTRAL = 0.9
"""Predictions are given as central 90 % intervals."""


@dataclass(frozen=True)
class Belief:
    """What is known of a share: a beta law with these shapes. A share known exactly has `exact` instead."""

    a: float
    b: float
    exact: float | None = None

    @property
    def mean(self) -> float:
        """The expected share."""
        return self.exact if self.exact is not None else self.a / (self.a + self.b)


def from_counts(k: float, n: float) -> Belief:
    """After k of n virtual people (Jeffreys' prior; Brown, Cai & DasGupta, Stat Sci 2001;16:101): Monte Carlo error only."""
    return Belief(k + 0.5, n - k + 0.5)


def from_moments(mean: float, sd: float) -> Belief:
    """The beta law of this mean and SD; a share as sure as its SD of 0. Raises ValueError where no beta law has them."""
    if not 0.0 <= mean <= 1.0 or sd < 0.0:
        raise ValueError(f"a share of {mean:g} with SD {sd:g}")
    if sd == 0.0 or mean in (0.0, 1.0):
        return Belief(np.nan, np.nan, mean)
    nu = mean * (1.0 - mean) / (sd * sd) - 1.0
    if not nu > 0.0:
        raise ValueError(f"a share of {mean:g} cannot have an SD of {sd:g}")
    return Belief(mean * nu, (1.0 - mean) * nu)


def between_draws(shares: Array, inner: Array) -> tuple[float, float]:
    """(mean, SD) of the true share between draws of a population, from observed shares of `inner` subjects each.

    The observed variance holds binomial noise as well; what it adds, mean p (1 - p) / (inner - 1), is taken off (ANOVA).
    """
    noise = float((shares * (1.0 - shares) / (inner - 1.0)).mean())
    return float(shares.mean()), float(np.sqrt(max(shares.var(ddof=1) - noise, 0.0)))


def widened(belief: Belief, sd: float) -> Belief:
    """The same mean with another independent uncertainty of this SD on top."""
    if belief.exact is not None:
        return from_moments(belief.exact, sd)
    total = belief.a + belief.b
    own = belief.a * belief.b / (total * total * (total + 1.0))
    mean = belief.mean
    most = 0.999 * mean * (1.0 - mean)
    return from_moments(mean, float(np.sqrt(min(own + sd * sd, most))))


@functools.cache
def _legendre() -> tuple[Array, Array]:
    """Gauss-Legendre nodes and weights on 0..1."""
    from scipy.special import roots_legendre

    x, w = roots_legendre(NODES)
    return 0.5 * (x + 1.0), 0.5 * w


def _nodes(belief: Belief, factor: float) -> tuple[Array, Array]:
    """Values of factor x share and their weights: midpoints in probability, refined towards both ends."""
    if belief.exact is not None:
        return np.array([belief.exact * factor]), np.ones(1)
    from scipy.special import betaincinv

    u, w = _legendre()
    smooth = u * u * u * (u * (6.0 * u - 15.0) + 10.0)  # more nodes where quantiles move fast
    slope = 30.0 * u * u * (u - 1.0) * (u - 1.0)
    return betaincinv(belief.a, belief.b, smooth) * factor, w * slope


def predicted(belief: Belief, n: int, evaluable: float = 1.0) -> Array:
    """P(k of n recruits are evaluable and do it), k = 0..n: float64[n + 1]; beta-binomial, thinned by `evaluable`."""
    from scipy.stats import binom

    p, w = _nodes(belief, evaluable)
    found: Array = w @ binom.pmf(np.arange(n + 1)[None, :], n, np.clip(p, 0.0, 1.0)[:, None])
    return np.asarray(found / found.sum())


def central(pmf: Array, level: float = CENTRAL) -> tuple[int, int]:
    """The shortest-tailed central interval: at most (1 - level)/2 lies below its lower end, and above its upper."""
    tail = 0.5 * (1.0 - level)
    below = np.cumsum(pmf)
    above = np.cumsum(pmf[::-1])[::-1]
    low = int(np.argmax(below > tail + 1e-12))
    high = len(pmf) - 1 - int(np.argmax(above[::-1] > tail + 1e-12))
    return low, high


def at_least(belief: Belief, n: int, want: int, evaluable: float = 1.0) -> float:
    """P(at least `want` of n recruits are evaluable and do it)."""
    from scipy.stats import binom

    p, w = _nodes(belief, evaluable)
    return float(w @ binom.sf(want - 1, n, np.clip(p, 0.0, 1.0)) / w.sum())


def to_recruit(belief: Belief, want: int, assurance: float, evaluable: float = 1.0) -> int | None:
    """The fewest recruits of whom at least `want` do it with probability `assurance`; None above 100,000."""
    low, high = want - 1, want
    while at_least(belief, high, want, evaluable) < assurance:
        if high >= MOST_RECRUITED:
            return None
        low, high = high, min(2 * high, MOST_RECRUITED)
    while high - low > 1:
        middle = (low + high) // 2
        low, high = (low, middle) if at_least(belief, middle, want, evaluable) >= assurance else (middle, high)
    return high


def difference(gained: float, lost: float, n: int, evaluable: float = 1.0) -> tuple[float, int, int]:
    """Of n people seen both ways: (expected, lowest, highest) number by which the second way finds more than the first.

    gained, lost: shares found the second way only, and the first way only. Exact law of the sum of n steps of +1, -1, 0.
    """
    up, down = gained * evaluable, lost * evaluable
    angle = 2.0 * np.pi * np.arange(2 * n + 1) / (2 * n + 1)
    step = up * np.exp(-1j * angle) + down * np.exp(1j * angle) + (1.0 - up - down)
    pmf = np.clip(np.fft.ifft(step**n).real, 0.0, None)
    ordered = np.roll(pmf, n) / pmf.sum()  # places of -n..n
    low, high = central(ordered)
    return n * (up - down), low - n, high - n


def power_to_tell(p: float, q: float, n: int, level: float = 0.05) -> float:
    """P(Fisher's exact test, two-sided, finds a difference) between n people of each of two strata with these shares."""
    from scipy.stats import binom, hypergeom

    k = np.arange(n + 1)
    one, two = binom.pmf(k, n, p), binom.pmf(k, n, q)
    found = 0.0
    for together in range(2 * n + 1):
        first = np.arange(max(0, together - n), min(n, together) + 1)
        chance = hypergeom.pmf(first, 2 * n, n, together)
        order = np.argsort(chance, kind="stable")
        tail = np.cumsum(chance[order])
        # every table as unlikely as this one, ties within rounding included
        reach = np.searchsorted(chance[order], chance * (1.0 + 1e-7), side="right")
        found += float((one[first] * two[together - first])[tail[reach - 1] <= level].sum())
    return found


# ---- imperfect detectors -----------------------------------------------------------------------------------------


@dataclass(frozen=True)
class Corrected:
    """A share corrected for the detector, its 95 % interval, and whether the plain correction fell outside 0..1."""

    share: float
    low: float
    high: float
    clipped: bool


def rogan_gladen(q: float, sensitivity: float, specificity: float) -> float:
    """The share that is real where a share q is detected: (q + Sp - 1)/(Se + Sp - 1) (Rogan & Gladen, Am J Epidemiol
    1978;107:71). Raises ValueError where the detector tells nothing."""
    if not sensitivity + specificity > 1.0:
        raise ValueError("the detector finds as many where there is nothing: its result says nothing of the share")
    return (q + specificity - 1.0) / (sensitivity + specificity - 1.0)


def corrected(
    detected: tuple[int, int], sensitive: tuple[int, int], specific: tuple[int, int], rng: np.random.Generator,
    draws: int = 20_000,
) -> Corrected:  # fmt: skip
    """The corrected share with an interval from beta laws of all three shares, each given as (k, n)."""

    def shares(k: int, n: int) -> Array:
        return rng.beta(k + 0.5, n - k + 0.5, draws)

    q, se, sp = shares(*detected), shares(*sensitive), shares(*specific)
    plain = rogan_gladen(detected[0] / detected[1], sensitive[0] / sensitive[1], specific[0] / specific[1])
    useful = se + sp > 1.0
    many = np.clip((q[useful] + sp[useful] - 1.0) / (se[useful] + sp[useful] - 1.0), 0.0, 1.0)
    low, high = np.quantile(many, [0.025, 0.975])
    return Corrected(min(max(plain, 0.0), 1.0), float(low), float(high), not 0.0 <= plain <= 1.0)
