"""Sampling schedules, and true courses as a clinic would read them: irregular, through an assay, with samples missed.

Every number that chance decides comes from the keyed uniforms of `population.uniforms`, so a subject's readings depend
on the seed, the arm, the schedule and the subject alone.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from cohort.population.functions import exp, normal_quantile
from cohort.population.uniforms import uniforms

Array = NDArray[np.float64]

MINUTES_PER_DAY = 1440.0


@dataclass(frozen=True)
class Schedule:
    """When samples are taken, in minutes after settling, and the share of them that is missed by chance."""

    name: str
    times_min: tuple[float, ...]
    missed: float = 0.0

    def __post_init__(self) -> None:
        steps = np.diff(self.times_min)
        if not np.all(np.isfinite(self.times_min)) or np.any(steps <= 0.0):
            raise ValueError(f"schedule {self.name!r}: sampling times must be finite and rise")
        if not 0.0 <= self.missed < 1.0:
            raise ValueError(f"schedule {self.name!r}: missed is {self.missed}; a share from 0 to below 1")


@dataclass(frozen=True)
class Reading:
    """How one analyte is read. All are relative: cv of the assay; SD and correlation time of the body's own
    irregularity, an AR(1) process; SD between subjects of the assay's drift over 24 h. Readings below
    `detection_limit` (in the analyte's unit) are recorded as that limit."""

    cv: float
    background_sd: float = 0.0
    background_time_min: float = 30.0
    drift_sd_per_day: float = 0.0
    detection_limit: float = 0.0

    def __post_init__(self) -> None:
        for name in ("cv", "background_sd", "drift_sd_per_day", "detection_limit"):
            if not getattr(self, name) >= 0.0:
                raise ValueError(f"{name} is {getattr(self, name)}; it must be 0 or more")
        if not self.background_time_min > 0.0:
            raise ValueError(f"background_time_min is {self.background_time_min}; it must be above 0")


def every(name: str, step_min: float, duration_min: float, start_min: float = 0.0, missed: float = 0.0) -> Schedule:
    """A regular schedule: from start to start + duration, both ends sampled where the step divides it."""
    count = int(duration_min / step_min + 1e-9) + 1
    return Schedule(name, tuple(start_min + step_min * i for i in range(count)), missed)


def observe(
    true: Array, schedule: Schedule, reading: Reading, seed: int, arm: str, analyte: str, subjects: tuple[int, int]
) -> Array:
    """Readings float64[n, times] of subjects start..stop-1 whose true values are float64[n, times]; NaN where missed.

    A missed sample is missed for every analyte. Readings are the product of the true value, 1 + background,
    1 + assay error and the drift, never below the detection limit.
    """
    start, stop = subjects
    n, width = stop - start, len(schedule.times_min)
    if true.shape != (n, width):
        raise ValueError(f"true values have the shape {true.shape}; {n} subjects at {width} times are ({n}, {width})")

    def chance(what: str, numbers: int = width) -> Array:
        name = "\0".join((arm, schedule.name, what))
        return uniforms(seed, "sampling", name, start, stop, numbers).reshape(n, numbers)

    seen = true.copy()
    if reading.background_sd:
        steps = normal_quantile(chance(f"{analyte} background"))
        irregular = reading.background_sd * autoregression(steps, schedule.times_min, reading.background_time_min)
        seen = seen * (1.0 + irregular)
    if reading.cv:
        seen = seen * (1.0 + reading.cv * normal_quantile(chance(f"{analyte} assay")))
    if reading.drift_sd_per_day:
        slope = reading.drift_sd_per_day * normal_quantile(chance(f"{analyte} drift", 1))
        elapsed = (np.asarray(schedule.times_min) - schedule.times_min[0]) / MINUTES_PER_DAY
        seen = seen * (1.0 + slope * elapsed)
    seen = np.maximum(seen, reading.detection_limit)
    return np.where(chance("missed") < schedule.missed, np.nan, seen) if schedule.missed else seen


def autoregression(normals: Array, times_min: Sequence[float], time_min: float) -> Array:
    """AR(1) of unit variance and correlation exp(-lag/time) at the given times, exact for unequal steps.

    `normals`: independent standard normals float64[n, times]; same shape returned.
    """
    kept = exp(-np.diff(times_min) / time_min)
    course = normals.copy()
    for i, phi in enumerate(kept):
        course[:, i + 1] = phi * course[:, i] + np.sqrt(1.0 - phi * phi) * normals[:, i + 1]
    return course
