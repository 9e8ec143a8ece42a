"""Shares and their intervals: how many subjects do something, and how sure that number is."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Z_95 = 1.959963984540054
T_95_7 = 2.364624251592785
"""Student's t at 0.975 with 7 degrees of freedom: eight scrambles."""


@dataclass(frozen=True)
class Share:
    """k of n subjects, u of them unresolved: share (unresolved counted half) and a 95 % interval of Monte Carlo error
    that counts them once as no and once as yes; effective: how many independent people the share is worth."""

    k: int
    n: int
    unresolved: int
    share: float
    low: float
    high: float
    method: str
    effective: float


def wilson(k: float, n: float, z: float = Z_95) -> tuple[float, float]:
    """Wilson's score interval of a share (J Am Stat Assoc 1927;22:209-212); (0, 1) for n = 0."""
    if n == 0:
        return 0.0, 1.0
    p, z2 = k / n, z * z
    centre = (p + z2 / (2 * n)) / (1 + z2 / n)
    half = z / (1 + z2 / n) * np.sqrt(p * (1 - p) / n + z2 / (4 * n * n))
    low, high = max(centre - half, 0.0), min(centre + half, 1.0)
    return (0.0 if k == 0 else float(low)), (1.0 if k == n else float(high))


def share(k: int, n: int, unresolved: int = 0) -> Share:
    """The share of independent subjects, by Wilson."""
    low, _ = wilson(k, n)
    _, high = wilson(k + unresolved, n)
    return Share(k, n, unresolved, (k + 0.5 * unresolved) / n if n else np.nan, low, high, "Wilson 95 %", float(n))


def share_of_effective(p: float, open_: float, effective: float, k: int, unresolved: int, n: int) -> Share:
    """A weighted share p, with a share `open_` unresolved, worth `effective` independent people; k, unresolved and n are
    plain numbers of subjects. Wilson's interval at the effective number."""
    low, _ = wilson(p * effective, effective)
    _, high = wilson((p + open_) * effective, effective)
    low, high = (0.0 if k == 0 else low), (1.0 if k + unresolved == n else high)
    return Share(k, n, unresolved, p + 0.5 * open_, low, high, f"Wilson 95 %, effective n {effective:,.0f}", effective)


def share_of_scrambles(yes: NDArray[np.int64], unresolved: NDArray[np.int64], n: NDArray[np.int64]) -> Share:
    """The share of a Sobol' cohort from its independent scrambles (one entry each), by Student's t over them.

    A binomial interval would be too wide: the points of a scramble are more even than independent ones.
    """
    total = int(n.sum())
    if yes.sum() == 0 or (yes + unresolved).sum() == total:  # no spread to judge by
        return share(int(yes.sum()), total, int(unresolved.sum()))
    low_shares, high_shares = yes / n, (yes + unresolved) / n
    low = low_shares.mean() - _half_width(low_shares)
    high = high_shares.mean() + _half_width(high_shares)
    k, u = int(yes.sum()), int(unresolved.sum())
    middle = (k + 0.5 * u) / total
    error = float(((low_shares + high_shares) / 2.0).std(ddof=1) / np.sqrt(len(n)))
    worth = max(middle * (1.0 - middle) / (error * error), float(total)) if error > 0.0 else float(total)
    return Share(k, total, u, middle, max(low, 0.0), min(high, 1.0), f"t over {len(n)} scrambles, 95 %", worth)


def _half_width(shares: NDArray[np.float64]) -> float:
    return float(T_95_7 * shares.std(ddof=1) / np.sqrt(len(shares)))
