"""exp, log and the normal law from exact operations only, so that a subject's values never depend on a library.

numpy's + - * / sqrt, rint, frexp and ldexp are exact or correctly rounded on every machine; its exp and log are not.
All functions take and return float64 arrays (or scalars).
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

_LN2_HIGH = 0.6931471803691238  # its low 21 bits are zero, so k x _LN2_HIGH is exact for |k| < 2^20
_LN2_LOW = 1.9082149292705877e-10
_LOG2E = 1.4426950408889634
_EXP_TERMS = 14
_LOG_TERMS = 12
_ROOT_TWO_PI = 2.5066282746310002


def exp(x: Any) -> Array:
    """e^x to about 1 ulp for |x| < 700, held there outside."""
    x = np.clip(np.asarray(x, dtype=np.float64), -700.0, 700.0)
    k = np.rint(x * _LOG2E)
    r = (x - k * _LN2_HIGH) - k * _LN2_LOW
    total = np.full_like(r, 1.0 / math.factorial(_EXP_TERMS))
    for n in range(_EXP_TERMS - 1, -1, -1):
        total = total * r + 1.0 / math.factorial(n)
    scaled: Array = np.ldexp(total, np.nan_to_num(k).astype(np.int64))
    return scaled


def log(x: Any) -> Array:
    """ln x to about 2 ulp for x > 0; NaN for x < 0, -inf at 0."""
    x = np.asarray(x, dtype=np.float64)
    with np.errstate(invalid="ignore", divide="ignore"):
        m, e = np.frexp(x)
        small = m < math.sqrt(0.5)
        m, e = np.where(small, m + m, m), e - small
        f = m - 1.0
        s = f / (2.0 + f)
        z = s * s
        total = np.full_like(z, 2.0 / (2 * _LOG_TERMS + 1))
        for n in range(_LOG_TERMS - 1, 0, -1):
            total = total * z + 2.0 / (2 * n + 1)
        value = e * _LN2_HIGH + (2.0 * s + (total * z * s + e * _LN2_LOW))
        return np.where(x > 0.0, np.where(np.isinf(x), x, value), np.where(x == 0.0, -np.inf, np.nan))


def power(base: Any, exponent: float) -> Array:
    """base^exponent for base > 0 to about 4 ulp; exact for exponents 0 and 1."""
    base = np.asarray(base, dtype=np.float64)
    if exponent in (0.0, 1.0):
        return base.copy() if exponent else np.ones_like(base)
    return exp(exponent * log(base))


def sine(x: float) -> float:
    """sin x for |x| <= 1, by its series."""
    term = total = x
    for n in range(1, 12):
        term = -term * x * x / (2 * n * (2 * n + 1))
        total += term
    return total


# Wichura, Algorithm AS 241 (PPND16), Appl Stat 1988;37:477-484: numerators and denominators by region, rising powers
_CENTRE = (
    (3.3871328727963666080e0, 1.3314166789178437745e2, 1.9715909503065514427e3, 1.3731693765509461125e4,
     4.5921953931549871457e4, 6.7265770927008700853e4, 3.3430575583588128105e4, 2.5090809287301226727e3),
    (1.0, 4.2313330701600911252e1, 6.8718700749205790830e2, 5.3941960214247511077e3, 2.1213794301586595867e4,
     3.9307895800092710610e4, 2.8729085735721942674e4, 5.2264952788528545610e3),
)  # fmt: skip
_SHOULDER = (
    (1.42343711074968357734e0, 4.63033784615654529590e0, 5.76949722146069140550e0, 3.64784832476320460504e0,
     1.27045825245236838258e0, 2.41780725177450611770e-1, 2.27238449892691845833e-2, 7.74545014278341407640e-4),
    (1.0, 2.05319162663775882187e0, 1.67638483018380384940e0, 6.89767334985100004550e-1, 1.48103976427480074590e-1,
     1.51986665636164571966e-2, 5.47593808499534494600e-4, 1.05075007164441684324e-9),
)  # fmt: skip
_TAIL = (
    (6.65790464350110377720e0, 5.46378491116411436990e0, 1.78482653991729133580e0, 2.96560571828504891230e-1,
     2.65321895265761230930e-2, 1.24266094738807843860e-3, 2.71155556874348757815e-5, 2.01033439929228813265e-7),
    (1.0, 5.99832206555887937690e-1, 1.36929880922735805310e-1, 1.48753612908506148525e-2, 7.86869131145613259100e-4,
     1.84631831751005468180e-5, 1.42151175831644588870e-7, 2.04426310338993978564e-15),
)  # fmt: skip


def _ratio(r: Array, region: tuple[tuple[float, ...], tuple[float, ...]]) -> Array:
    top, bottom = (np.full_like(r, c[-1]) for c in region)
    for a, b in zip(region[0][-2::-1], region[1][-2::-1], strict=True):
        top, bottom = top * r + a, bottom * r + b
    return top / bottom


def normal_quantile(u: Any) -> Array:
    """The standard normal law's quantile for 0 < u < 1 (Wichura's AS 241), to about 1e-16 relative."""
    u = np.asarray(u, dtype=np.float64)
    q = u - 0.5
    central: Array = _ratio(0.180625 - q * q, _CENTRE) * q
    if np.all(np.abs(q) <= 0.425):
        return central
    with np.errstate(invalid="ignore", divide="ignore"):
        r = np.sqrt(-log(np.where(q < 0.0, u, 1.0 - u)))
        far = np.where(r <= 5.0, _ratio(r - 1.6, _SHOULDER), _ratio(r - 5.0, _TAIL))
    return np.where(np.abs(q) <= 0.425, central, np.where(q < 0.0, -far, far))


def normal_cdf(z: Any) -> Array:
    """The standard normal law's distribution function, to about 3e-13 of itself; 0 and 1 at the infinities."""
    z = np.clip(np.nan_to_num(np.asarray(z, dtype=np.float64), posinf=40.0, neginf=-40.0), -37.0, 40.0)
    size = np.abs(z)
    density = exp(-0.5 * z * z) / _ROOT_TWO_PI
    near = np.minimum(size, 3.0)
    term, series = near, near
    for n in range(1, 60):
        term = term * near * near / (2 * n + 1)
        series = series + term
    far = np.maximum(size, 3.0)
    fraction = far
    for n in range(80, 0, -1):
        fraction = far + n / fraction
    tail = np.where(size <= 3.0, 0.5 - density * series, density / fraction)
    share: Array = np.where(z < 0.0, tail, 1.0 - tail)
    return share


def log_gamma(x: float) -> float:
    """ln Gamma(x) for x > 0: Stirling's series after shifting x above 12."""
    shift = 0.0
    while x < 12.0:
        shift += float(log(x))
        x += 1.0
    z = 1.0 / (x * x)
    series = (1 / 12 - z * (1 / 360 - z * (1 / 1260 - z * (1 / 1680 - z * (1 / 1188 - z * 691 / 360360))))) / x
    return (x - 0.5) * float(log(x)) - x + 0.9189385332046727 + series - shift


def log_beta(a: float, b: float) -> float:
    """ln B(a, b)."""
    return log_gamma(a) + log_gamma(b) - log_gamma(a + b)


def beta_fraction(x: Array, a: Any, b: Any) -> Array:
    """The continued fraction h in I_x(a, b) = x^a (1 - x)^b h / (a B(a, b)), by Lentz; for x <= (a + 1)/(a + b + 2)."""
    x = np.asarray(x, dtype=np.float64)
    c, d = np.ones_like(x), 1.0 / _away(1.0 - (a + b) * x / (a + 1.0))
    h = d
    # the count never follows the data: bits must not depend on company
    rounds = 30 + int(4.0 * math.sqrt(float(np.max(a + b))))
    for m in range(1, rounds):
        even = m * (b - m) * x / ((a + 2 * m - 1) * (a + 2 * m))
        d, c = 1.0 / _away(1.0 + even * d), _away(1.0 + even / c)
        h = h * d * c
        odd = -(a + m) * (a + b + m) * x / ((a + 2 * m) * (a + 2 * m + 1))
        d, c = 1.0 / _away(1.0 + odd * d), _away(1.0 + odd / c)
        h = h * d * c
    return h


def beta_cdf(x: Array, a: float, b: float) -> Array:
    """The regularised incomplete beta function I_x(a, b), 0 <= x <= 1."""
    x = np.asarray(x, dtype=np.float64)
    turned = x > (a + 1.0) / (a + b + 2.0)
    y = np.where(turned, 1.0 - x, x)
    first, second = np.where(turned, b, a), np.where(turned, a, b)
    inside = np.clip(y, 1e-300, 1.0 - 1e-16)
    front = exp(first * log(inside) + second * log(1.0 - inside) - log_beta(a, b)) / first
    value = np.where(y <= 0.0, 0.0, front * beta_fraction(inside, first, second))
    return np.where(turned, 1.0 - value, value)


def _away(x: Array) -> Array:
    return np.where(np.abs(x) < 1e-300, 1e-300, x)
