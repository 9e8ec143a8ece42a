"""Among subjects that have an outcome: how much of its variance stays if one factor is redrawn within those that keep it."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from cohort.infer.intervals import Estimate, t_quantile

Array = NDArray[np.float64]


def mechanism(y: Array, again: Array) -> Estimate:
    """Total index among subjects with the outcome, by Jansen's form with redraws (Comput Phys Commun 1999;117:35).

    y: float64[n] of plain rows that have the outcome; again: float64[n], the same rows with one factor drawn anew until
    they had it. Interval: linearised ratio of means over independent rows.
    """
    n = len(y)
    variance = float(y.var())
    if variance == 0.0:
        return Estimate(0.0, 0.0, 0.0, n)
    value = float(((y - again) ** 2).mean()) / (2.0 * variance)
    part = (y - again) ** 2 / 2.0 - value * (y - y.mean()) ** 2
    half = t_quantile(n - 1) * float(part.std(ddof=1)) / (np.sqrt(n) * variance)
    return Estimate(value, value - half, value + half, n)
