"""The laws a parameter may follow between people: quantile and distribution function of each, uncut."""

from __future__ import annotations

import functools
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from cohort.population.beta import beta_quantile
from cohort.population.functions import beta_cdf, exp, log, normal_cdf, normal_quantile

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Fixed:
    """The same value for everyone."""

    value: float

    def quantile(self, u: Array) -> Array:
        """`value` for every u."""
        return np.full(np.shape(u), self.value)

    def cdf(self, x: Any) -> Array:
        """0 below the value, 1 from it on."""
        return np.where(np.asarray(x) >= self.value, 1.0, 0.0)


@dataclass(frozen=True)
class Lognormal:
    """Lognormal by its median and coefficient of variation: sigma^2 = ln(1 + cv^2). Cut at low..high.

    median_rse, cv_rse: relative standard errors of the two, for draws of the population.
    """

    median: float
    cv: float
    low: float = 0.0
    high: float = np.inf
    median_rse: float = 0.0
    cv_rse: float = 0.0

    @property
    def sigma(self) -> float:
        return float(np.sqrt(log(1.0 + self.cv * self.cv)))

    def quantile(self, u: Array) -> Array:
        """The uncut law's quantile."""
        return self.median * exp(self.sigma * normal_quantile(u))

    def cdf(self, x: Any) -> Array:
        """The uncut law's distribution function."""
        return normal_cdf(log(np.maximum(x, 0.0) / self.median) / self.sigma)


@dataclass(frozen=True)
class Normal:
    """Normal by mean and standard deviation of the uncut law. Cut at low..high."""

    mean: float
    sd: float
    low: float = -np.inf
    high: float = np.inf
    mean_rse: float = 0.0
    cv_rse: float = 0.0

    def quantile(self, u: Array) -> Array:
        """The uncut law's quantile."""
        return self.mean + self.sd * normal_quantile(u)

    def cdf(self, x: Any) -> Array:
        """The uncut law's distribution function."""
        return normal_cdf((np.asarray(x, dtype=np.float64) - self.mean) / self.sd)


@dataclass(frozen=True)
class Uniform:
    """Even between low and high."""

    low: float
    high: float

    def quantile(self, u: Array) -> Array:
        """low + u (high - low)."""
        return self.low + np.asarray(u) * (self.high - self.low)

    def cdf(self, x: Any) -> Array:
        """The distribution function."""
        return np.clip((np.asarray(x, dtype=np.float64) - self.low) / (self.high - self.low), 0.0, 1.0)


@dataclass(frozen=True)
class Loguniform:
    """Its logarithm is even between ln low and ln high."""

    low: float
    high: float

    def quantile(self, u: Array) -> Array:
        """low (high / low)^u."""
        return self.low * exp(np.asarray(u) * log(self.high / self.low))

    def cdf(self, x: Any) -> Array:
        """The distribution function."""
        inside = np.clip(np.asarray(x, dtype=np.float64), self.low, self.high)
        return log(inside / self.low) / log(self.high / self.low)


@dataclass(frozen=True)
class Triangular:
    """Density rising from low to mode and falling to high."""

    low: float
    mode: float
    high: float

    def quantile(self, u: Array) -> Array:
        """The quantile, by its two square roots."""
        u = np.asarray(u, dtype=np.float64)
        width, rise, fall = self.high - self.low, self.mode - self.low, self.high - self.mode
        left, right = self.low + np.sqrt(u * width * rise), self.high - np.sqrt((1.0 - u) * width * fall)
        return np.where(u * width < rise, left, right)

    def cdf(self, x: Any) -> Array:
        """The distribution function."""
        x = np.clip(np.asarray(x, dtype=np.float64), self.low, self.high)
        width, rise, fall = self.high - self.low, self.mode - self.low, self.high - self.mode
        with np.errstate(divide="ignore", invalid="ignore"):
            left, right = (x - self.low) ** 2 / (width * rise), 1.0 - (self.high - x) ** 2 / (width * fall)
        return np.where(x < self.mode, left, np.where(x >= self.high, 1.0, right))


@dataclass(frozen=True)
class Beta:
    """Beta law with shapes alpha and beta, stretched over low..high."""

    low: float
    high: float
    alpha: float
    beta: float

    def quantile(self, u: Array) -> Array:
        """low + (high - low) times the inverse of I_x(alpha, beta)."""
        return self.low + beta_quantile(u, self.alpha, self.beta) * (self.high - self.low)

    def cdf(self, x: Any) -> Array:
        """The distribution function."""
        share = (np.asarray(x, dtype=np.float64) - self.low) / (self.high - self.low)
        return beta_cdf(np.clip(share, 0.0, 1.0), self.alpha, self.beta)


@dataclass(frozen=True)
class Empirical:
    """Values seen: step quantiles of the sorted `values`. `source` names the file and column they came from."""

    values: tuple[float, ...]
    source: str = ""

    @property
    def low(self) -> float:
        return self.values[0]

    @property
    def high(self) -> float:
        return self.values[-1]

    def __hash__(self) -> int:
        return hash((len(self.values), self.values[0], self.values[-1], self.source))  # a file may hold a million

    @functools.cached_property
    def _sorted(self) -> Array:
        return np.array(self.values)

    def quantile(self, u: Array) -> Array:
        """The smallest value that at least a share u of them does not exceed."""
        n = len(self.values)
        place = np.clip(np.ceil(np.asarray(u) * n).astype(np.int64) - 1, 0, n - 1)
        return self._sorted[place]

    def cdf(self, x: Any) -> Array:
        """The share of values not above x."""
        return np.searchsorted(self._sorted, np.asarray(x, dtype=np.float64), side="right") / len(self.values)


Law = Fixed | Lognormal | Normal | Uniform | Loguniform | Triangular | Beta | Empirical


@dataclass(frozen=True)
class Cut:
    """A law within low..high: `quantile` maps u evenly onto the law's mass between them, bottom..top."""

    law: Law
    low: float
    high: float
    bottom: float
    top: float

    def quantile(self, u: Array, low: Array | None = None) -> Array:
        """The cut law's quantile; `low` (float64[n]) raises the lower end subject by subject."""
        if isinstance(self.law, Fixed):
            return self.law.quantile(u)
        least = self.low if low is None else np.maximum(self.low, low)
        bottom = self.bottom if low is None else _share_below(self.law, least)
        inner = bottom + np.asarray(u) * (self.top - bottom)
        return np.clip(self.law.quantile(np.clip(inner, 2.0**-60, 1.0 - 2.0**-53)), least, self.high)

    def share(self, x: Array) -> Array:
        """The cut law's distribution function."""
        if isinstance(self.law, Fixed):
            return self.law.cdf(x)
        return np.clip((self.law.cdf(x) - self.bottom) / (self.top - self.bottom), 0.0, 1.0)


def _share_below(law: Law, x: Any) -> Array:
    """The mass strictly below x."""
    if isinstance(law, Empirical):
        return np.searchsorted(law._sorted, np.asarray(x), side="left") / len(law.values)
    return law.cdf(x)


@functools.lru_cache(maxsize=1024)
def cut(law: Law, low: float, high: float) -> tuple[Cut, float]:
    """Return the law within its own ends and low..high, and the share of its mass that low..high cuts off.

    The share is of the law as the user cut it, so a user's own `low` and `high` never count as cut.
    """
    if isinstance(law, Fixed):
        return Cut(law, law.value, law.value, 0.0, 1.0), 0.0 if low <= law.value <= high else 1.0
    own = float(law.cdf(law.high) - _share_below(law, law.low))
    least, most = max(law.low, low), min(law.high, high)
    bottom, top = float(_share_below(law, least)), float(law.cdf(most))
    kept = top - bottom if most >= least else 0.0
    return Cut(law, least, most, bottom, top), max(1.0 - kept / own, 0.0) if own > 0.0 else 1.0
