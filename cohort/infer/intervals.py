"""An estimate with its interval, from replicates that are independent of one another."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Estimate:
    """A value, its 95 % interval and the number of rows it rests on."""

    value: float
    low: float
    high: float
    n: int

    @property
    def half_width(self) -> float:
        """Half of the interval's length."""
        return 0.5 * (self.high - self.low)

    @classmethod
    def of_replicates(cls, values: Array | Sequence[float], n: int) -> Estimate:
        """Mean of independent replicates and Student's t interval over them; values float64[replicates]."""
        found = np.asarray(values, dtype=float)
        half = t_quantile(len(found) - 1) * float(found.std(ddof=1)) / np.sqrt(len(found))
        middle = float(found.mean())
        return cls(middle, middle - half, middle + half, n)

    @classmethod
    def of_parts(cls, value: float, parts: Sequence[float], n: int) -> Estimate:
        """A value from all rows, with an interval from what disjoint parts of the rows give by themselves."""
        half = spread_of_parts(parts)
        return cls(float(value), float(value) - half, float(value) + half, n)


def spread_of_parts(parts: Sequence[float]) -> float:
    """Half-width of a 95 % interval of the whole from estimates of its disjoint parts (Student's t)."""
    found = np.asarray(parts, dtype=float)
    return t_quantile(len(found) - 1) * float(found.std(ddof=1)) / float(np.sqrt(len(found)))


def t_quantile(freedom: int, level: float = 0.95) -> float:
    """Two-sided quantile of Student's t."""
    from scipy.special import stdtrit

    return float(stdtrit(freedom, 0.5 + 0.5 * level))
