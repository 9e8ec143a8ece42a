"""What the detector needs to know of a schedule before any series: the band it can see, and its whitened bases."""

from __future__ import annotations

import functools
import hashlib
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from cohort.population.functions import exp, log

Array = NDArray[np.float64]

BAND_MIN = (60.0, 240.0)
FEWEST_SAMPLES = 8
MOST_SAMPLES = 1000
_COMMON_PERIOD = 110.0
CUT = 2.05
"""The shortest period that is searched, in sampling steps."""
PER_RESOLUTION = 5
"""Frequencies a reciprocal of the record's length."""
MOST_BASIS = 4_000_000
"""Samples times frequencies: what is held of them, for every covariance of the grid, is 400 bytes each."""
TAUS_MIN = (10.0, 20.0, 40.0, 80.0, 180.0)
RHOS = (0.3, 0.5, 0.7, 0.85, 1.0)
_SMALLEST_CORRELATION = 0.05


def alias_min(period_min: float, step_min: float) -> float:
    """The period that a rhythm sampled every `step_min` seems to have: the nearest alias of its frequency."""
    frequency = 1.0 / period_min
    folded = abs(frequency - round(frequency * step_min) / step_min)
    return 1.0 / folded if folded > 0.0 else float("inf")


def typical_step(times_min: Array) -> float:
    """The median step between samples, min."""
    return float(np.median(np.diff(times_min)))


def searched_band(times_min: Array, band_min: tuple[float, float] = BAND_MIN) -> tuple[tuple[float, float], str]:
    """The band that a schedule can see, (shortest, longest) period in min, and a warning, empty if there is none.

    Shorter periods than 2.05 steps are aliases and are cut, as are those longer than the record.
    Raises ValueError where nothing is left, or the schedule has too few or too many samples.
    """
    low, high = band_min
    if not 0.0 < low < high:
        raise ValueError(f"band is {low:g} to {high:g} min; two periods above 0, the shorter first")
    if not FEWEST_SAMPLES <= len(times_min) <= MOST_SAMPLES:
        raise ValueError(f"{len(times_min)} samples; the detector takes {FEWEST_SAMPLES} to {MOST_SAMPLES} a series")
    step, length = typical_step(times_min), float(times_min[-1] - times_min[0])
    short, long = max(low, CUT * step), min(high, length)
    if not short < long:
        raise ValueError(
            f"sampled every {step:g} min for {length:g} min, no period from {low:g} to {high:g} min can be seen: "
            f"it takes a step below {high / CUT:.3g} min and a record longer than {max(low, CUT * step):.3g} min"
        )
    searched = frequency_count((short, long), length)
    if searched * len(times_min) > MOST_BASIS:
        raise ValueError(
            f"{len(times_min)} samples within {length:g} min take {searched:,} periods from {short:.3g} to {long:g} min; at most "
            f"{MOST_BASIS // len(times_min):,} are searched. Split the record where nothing was sampled"
        )
    said = []
    if short > low:
        said.append(
            f"sampled every {step:g} min, {_alias_words(low, step)}periods below {short:.3g} min are not searched"
        )
    elif step > low / 3.0:
        said.append(f"sampled every {step:g} min, fewer than three samples a period at {low:g} min")
    if long < high:
        said.append(f"periods above the record's {long:g} min are not searched")
    return (short, long), "; ".join(said)


def frequency_count(band_min: tuple[float, float], length_min: float) -> int:
    """How many frequencies are searched from one period to another in a record of this length."""
    short, long = band_min
    return max(int(np.ceil((1.0 / short - 1.0 / long) * length_min * PER_RESOLUTION)), 8) + 1


def _alias_words(low: float, step: float) -> str:
    """What becomes of a rhythm that the schedule hides: 110 min, as people have it, or the band's shortest."""
    period = _COMMON_PERIOD if low <= _COMMON_PERIOD < 2.0 * step else low
    if period >= 2.0 * step:
        return ""
    alias = alias_min(period, step)
    seems = f"appears as {alias:.0f} min" if alias < float("inf") else "does not appear at all"
    return f"{period:g} min {seems}; "


@dataclass(frozen=True, eq=False)
class Background:
    """One covariance rho exp(-lag/tau) + (1 - rho) I on a schedule, with the bases whitened by it."""

    tau_min: float
    rho: float
    phi: Array
    gain: Array
    root: Array
    trend: Array
    harmonics: Array
    log_determinant: float


@dataclass(frozen=True, eq=False)
class Design:
    """A schedule made ready: times in min, frequencies in 1/min rising, a Background for each covariance of the grid
    (the first is white), and `key`, a digest of all that its null tables depend on."""

    times_min: Array
    band_min: tuple[float, float]
    warning: str
    frequencies: Array
    backgrounds: tuple[Background, ...]
    key: str

    @functools.cached_property
    def for_missing(self) -> tuple[tuple[Array, Array], ...]:
        """For each background the whitened indicators [times, times] and their products with the harmonics."""
        from cohort.observe.kernels import indicators

        made = []
        for b in self.backgrounds:
            rows = np.empty((len(b.phi), len(b.phi)))
            indicators(b.trend, b.phi, b.gain, b.root, rows)
            made.append((rows, _product(rows, b.harmonics)))
        return tuple(made)


def _product(rows: Array, harmonics: Array) -> Array:
    from cohort.observe.kernels import _projections

    out = np.empty((len(rows), harmonics.shape[1]))
    for row, total in zip(rows, out, strict=True):
        _projections(row, harmonics, total)
    return out


def covariances(step_min: float) -> tuple[tuple[float, float], ...]:
    """(tau, rho) of the grid: white, then every AR(1) that differs from white at this sampling step."""
    kept = [(tau, rho) for tau in TAUS_MIN for rho in RHOS if rho * np.exp(-step_min / tau) >= _SMALLEST_CORRELATION]
    return ((1.0, 0.0), *kept)


def make_design(times_min: Array, band_min: tuple[float, float] = BAND_MIN) -> Design:
    """Prepare a schedule. Raises ValueError as `searched_band` does.

    Times are counted from the first sample; schedules that differ by a shift share one design.
    """
    times = np.asarray(times_min, dtype=np.float64) - times_min[0]
    band, warning = searched_band(times, band_min)
    key = hashlib.blake2b(np.append(times, band).tobytes(), digest_size=12).hexdigest()
    return _prepared(times.tobytes(), band, warning, key)


@functools.lru_cache(maxsize=8)
def _prepared(raw: bytes, band: tuple[float, float], warning: str, key: str) -> Design:
    times = np.frombuffer(raw)
    count = frequency_count(band, float(times[-1]))
    frequencies = 1.0 / band[1] + (1.0 / band[0] - 1.0 / band[1]) * np.arange(count) / (count - 1)
    grid = covariances(typical_step(times))
    return Design(times, band, warning, frequencies, tuple(_background(times, frequencies, *c) for c in grid), key)


def steps_kept(times_min: Array, tau_min: float) -> Array:
    """exp(-step/tau) at each time, the first 0 (nothing came before)."""
    return np.append(0.0, exp(-np.diff(times_min) / tau_min))


def _background(times: Array, frequencies: Array, tau: float, rho: float) -> Background:
    from cohort.observe.kernels import TREND, bases, gains

    phi = steps_kept(times, tau)
    gain, root = np.empty_like(phi), np.empty_like(phi)
    gains(phi, rho, gain, root)
    trend, harmonics = np.empty((len(times), TREND)), np.empty((len(times), 2 * len(frequencies)))
    gram = bases(times, frequencies, phi, gain, root, trend, harmonics)
    return Background(tau, rho, phi, gain, root, trend, harmonics, float(log(gram) + 2.0 * log(root).sum()))
