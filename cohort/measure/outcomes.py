"""Every outcome of every subject in one arm, as columns."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from cohort.measure.entrain import respond
from cohort.measure.meals import MEAL_COLUMNS, meal_rows
from cohort.measure.regime import BISTABLE, FAILED, SUSTAINED, UNDECIDED, Cycles, cycles
from cohort.measure.roots import reading
from cohort.measure.windows import GLUCOSE_WINDOW, INSULIN_WINDOW, LEVELS_MG_DL, column_means, window_rows
from cohort.model.body import Body, body
from cohort.model.inputs import (
    People,
    has_natural,
    is_forced,
    meal_times,
    own_forcing_period,
    settles_to_forcing,
    steady_input,
)
from cohort.model.protocol import Arm, Meal
from cohort.quantities import CLAMP_OUTCOMES
from cohort.simulate.clamp import ClampedCourses, clamped_courses
from cohort.simulate.course import Courses
from cohort.simulate.engine import DONE, NOT_FINITE
from cohort.simulate.run import BLOCK, courses, prepare, with_secretion

Array = NDArray[np.float64]
Columns = dict[str, NDArray[np.generic]]

SEEN = ("glucose_mg_dl", "insulin_mu_l")
BASELINE_MIN = 60.0
"""How far back a baseline reaches where there is no linear period."""

CLAMP_COLUMNS = tuple(column.name for column in CLAMP_OUTCOMES)


@dataclass(frozen=True)
class Rows:
    """One arm's tables: `outcomes` with a row a subject, `meals` with a row a subject and meal (`row` says whose);
    sampled: glucose (mg/dL) and insulin (mU/L) at the times asked for, float64[n, 2, times], NaN where a course failed."""

    outcomes: Columns
    meals: Columns
    sampled: Array


def outcomes(
    model: str | Body,
    values: Array,
    body_weight_kg: Array,
    arm: Arm,
    sample_min: Array | None = None,
    responses: bool = True,
) -> Rows:
    """Simulate and measure n subjects in one arm.

    values: float64[n, len(parameters) + 2], canonical order, then meal_absorption (min) and meal_bioavailability
    (NaN where the arm's hold); body_weight_kg: float64[n], NaN where there is none; sample_min: rising times from the
    arm's beginning at which courses are sampled as well; responses: whether what periodic inputs add is
    wanted. Missing numbers are NaN; words are
    int8 codes into REGIMES, FAILURES and CYCLE_NOTES; booleans int8; -1 is missing.
    """
    found = body(model) if isinstance(model, str) else model
    own = np.ascontiguousarray(values[:, : len(found.card.parameters)])
    people = People(body_weight_kg, values[:, -2], values[:, -1], np.full(len(values), np.nan))
    steady = steady_input(arm, people)
    tends = None if steady is None else cycles(found, with_secretion(own, arm.secretion), *steady)
    if tends is not None:
        people = replace(people, natural_period_min=tends.own_period)
    period = np.full(len(values), np.nan) if tends is None else tends.linear_period
    period = np.where(np.isfinite(period), period, BASELINE_MIN)
    read = _measure(found, own, people, arm, period, np.empty(0) if sample_min is None else sample_min)
    forced = is_forced(arm)
    columns = _cycle_columns(tends, read.status, forced) | {"forced": np.full(len(values), int(forced), np.int8)}
    columns |= _window_columns(read.window, arm.duration_min - arm.settle_min)
    if arm.clamp is not None:
        columns |= {name: read.clamp[:, i].copy() for i, name in enumerate(CLAMP_COLUMNS)}
    if forced and responses:
        columns |= _response_columns(
            found, with_secretion(own, arm.secretion), people, arm, columns["regime"] == FAILED
        )
    return Rows(columns, _meal_table(read.meals, eaten(arm)), read.sampled)


def with_own_periods(found: Body, own: Array, people: People, arm: Arm) -> People:
    """The same people with their own periods (min), where an input of the arm asks for them."""
    steady = steady_input(arm, people) if has_natural(arm) else None
    if steady is None:
        return people
    return replace(people, natural_period_min=cycles(found, with_secretion(own, arm.secretion), *steady).own_period)


@dataclass
class _Measured:
    """What the courses of one arm give, filled block by block."""

    window: Array
    meals: Array
    clamp: Array
    status: NDArray[np.int64]
    sample_min: Array
    sampled: Array


def _measure(found: Body, own: Array, people: People, arm: Arm, period: Array, sample_min: Array) -> _Measured:
    """Integrate the arm and read its courses."""
    n, times = len(own), eaten(arm)
    read = _Measured(
        np.full((n, len(GLUCOSE_WINDOW) + len(INSULIN_WINDOW)), np.nan),
        np.full((n, len(times), len(MEAL_COLUMNS)), np.nan),
        np.full((n, len(CLAMP_COLUMNS)), np.nan),
        np.full(n, NOT_FINITE),
        sample_min,
        np.full((n, len(SEEN), len(sample_min)), np.nan),
    )
    if arm.clamp is not None:
        for begin in range(0, n, BLOCK):
            rows = np.arange(begin, min(begin + BLOCK, n))
            block = slice(begin, begin + BLOCK)
            clamped = clamped_courses(found, own[block], people.take(block), arm, SEEN)
            _read(read, rows, clamped.courses, arm, times, period)
            _read_clamp(read.clamp, rows, clamped, arm, people.body_weight_kg[block])
    else:
        for rows, course in courses(prepare(found, own, people, arm, SEEN), arm.duration_min):
            _read(read, rows, course, arm, times, period)
    return read


def _read(read: _Measured, rows: NDArray[np.int64], course: Courses, arm: Arm, times: Array, period: Array) -> None:
    read.status[rows] = course.status
    some = np.full((len(rows), read.window.shape[1]), np.nan)
    window_rows(*reading(course), arm.settle_min, arm.duration_min, period[rows], np.array(LEVELS_MG_DL), some)
    read.window[rows] = some
    if len(read.sample_min):
        read.sampled[rows] = course.sample(read.sample_min)[:, : len(SEEN)]  # clamps have a column more
        read.sampled[rows[course.status != DONE]] = np.nan
    if len(times):
        eating = np.full((len(rows), *read.meals.shape[1:]), np.nan)
        meal_rows(*reading(course), times, arm.duration_min, period[rows], eating)
        read.meals[rows] = eating


def _read_clamp(out: Array, rows: NDArray[np.int64], clamped: ClampedCourses, arm: Arm, weight: Array) -> None:
    assert arm.clamp is not None
    begin = max(arm.settle_min, arm.clamp.from_min)
    rate = np.full(len(rows), np.nan)
    column_means(*reading(clamped.courses), len(SEEN), begin, arm.duration_min, rate)
    whole = clamped.courses.status == DONE
    off = np.where(whole, clamped.off_target_min, np.nan)
    dose, target = np.where(whole, clamped.dose_mg, np.nan), np.where(whole, clamped.target_mg_dl, np.nan)
    out[rows] = np.column_stack([rate, rate / weight, off, dose, target])


def eaten(arm: Arm) -> Array:
    """Times of the arm's glucose meals in order, float64[meals]; meals at the same minute count once."""
    times = {t for shape in arm.glucose if isinstance(shape, Meal) for t in meal_times(shape, arm.duration_min)}
    return np.array(sorted(times))


def _response_columns(found: Body, parameters: Array, people: People, arm: Arm, failed: NDArray[np.bool_]) -> Columns:
    """FORCED_OUTCOMES; null where the arm does not come to one periodic input, or the row failed."""
    n, steady = len(parameters), steady_input(arm, people)
    period = own_forcing_period(arm, people.natural_period_min)
    names = ("response_period_min", "response_glucose_amplitude_mg_dl", "response_lag_min", "response_multiplier")
    words = np.full(n, None, dtype=object)
    columns: Columns = {"forcing_period_min": period, "locking": words} | {name: np.full(n, np.nan) for name in names}
    if steady is None or not settles_to_forcing(arm):
        return columns
    seen = respond(found, parameters, people, arm, steady, np.where(failed, np.nan, period))
    numbers = (seen.response_period, seen.amplitude, seen.lag, seen.multiplier)
    return columns | {"locking": seen.words()} | dict(zip(names, numbers, strict=True))


def _meal_table(meals: Array, times: Array) -> Columns:
    n, count, _ = meals.shape
    table: Columns = {
        "row": np.repeat(np.arange(n), count),
        "meal": np.tile(np.arange(1, count + 1), n),
        "meal_time_min": np.tile(times, n),
    }
    flat = meals.reshape(n * count, len(MEAL_COLUMNS))
    return table | {column: flat[:, i].copy() for i, column in enumerate(MEAL_COLUMNS)}


def _window_columns(window: Array, length_min: float) -> Columns:
    names = (*GLUCOSE_WINDOW, *INSULIN_WINDOW)
    columns: dict[str, Array] = {name: window[:, i].copy() for i, name in enumerate(names)}
    columns["glucose_range_mg_dl"] = columns["glucose_peak_mg_dl"] - columns["glucose_nadir_mg_dl"]
    columns["glucose_cv"] = columns["glucose_sd_mg_dl"] / columns["glucose_mean_mg_dl"]
    outside = columns["time_above_180_min"] + columns["time_below_70_min"]
    columns["time_in_range_70_180_min"] = length_min - outside
    return dict(columns)


def _cycle_columns(tends: Cycles | None, status: NDArray[np.int64], forced: bool) -> Columns:
    """Regime, equilibrium and orbit; a course that failed makes the row `failed` and keeps its equilibrium only."""
    n = len(status)
    failed = status != DONE
    note = np.full(n, 0 if tends is None else 1 if forced else -1, np.int8)
    columns: Columns = {"cycle_note": note, "failure": np.where(failed, status, -1).astype(np.int8)}
    if tends is None:
        nothing = np.full(n, np.nan)
        regime = np.where(failed, FAILED, -1).astype(np.int8)
        words: Columns = {"regime": regime, "oscillates": np.full(n, -1, np.int8)}
        return columns | words | {name: nothing.copy() for name in NUMBERS} | {"bistable_searched": note * 0 - 1}
    regime = np.where(failed, FAILED, tends.regime).astype(np.int8)
    columns["failure"] = np.where((regime == FAILED) & ~failed, NOT_FINITE, columns["failure"]).astype(np.int8)
    columns |= {"regime": regime, "oscillates": _oscillates(regime)}
    columns["bistable_searched"] = tends.bistable_searched.astype(np.int8)
    known = ~np.isin(regime, (UNDECIDED, FAILED))
    return columns | _numbers(tends, regime, known)


def _oscillates(regime: NDArray[np.int8]) -> NDArray[np.int8]:
    yes, unknown = np.isin(regime, (SUSTAINED, BISTABLE)), np.isin(regime, (UNDECIDED, FAILED))
    return np.where(unknown, -1, yes).astype(np.int8)


def _numbers(tends: Cycles, regime: NDArray[np.int8], known: NDArray[np.bool_]) -> Columns:
    orbit = np.isin(regime, (SUSTAINED, BISTABLE))
    columns: dict[str, Array] = {
        "equilibrium_glucose_mg_dl": tends.equilibrium[:, 0].copy(),
        "equilibrium_insulin_mu_l": tends.equilibrium[:, 1].copy(),
        "growth_per_min": np.where(known | (regime == UNDECIDED), tends.growth, np.nan),
        "linear_period_min": np.where(known, tends.linear_period, np.nan),
        "period_min": np.where(orbit, tends.period, np.nan),
        "cycle_error": np.where(orbit, tends.error, np.nan),
    }
    for c, (short, unit) in enumerate(CYCLE_UNITS.items()):
        low, high, mean, _ = tends.turn[:, c].T
        swing = np.where(orbit, high - low, np.where(known, 0.0, np.nan))
        columns[f"{short}_amplitude_{unit}"] = swing
        columns[f"{short}_relative_amplitude"] = np.where(orbit, 0.5 * swing / mean, swing)
        for word, number in (("min", low), ("max", high), ("mean", mean)):
            columns[f"cycle_{short}_{word}_{unit}"] = np.where(orbit, number, np.nan)
    lag = np.mod(tends.turn[:, 1, 3] - tends.turn[:, 0, 3], tends.period)
    columns["insulin_lag_min"] = np.where(orbit, lag, np.nan)
    return dict(columns)


CYCLE_UNITS = {"glucose": "mg_dl", "insulin": "mu_l", "secretion": "mu_per_min"}

NUMBERS = (
    "equilibrium_glucose_mg_dl", "equilibrium_insulin_mu_l", "growth_per_min", "linear_period_min", "period_min",
    "cycle_error", "insulin_lag_min",
    *(f"{s}_amplitude_{u}" for s, u in CYCLE_UNITS.items()),
    *(f"{s}_relative_amplitude" for s in CYCLE_UNITS),
    *(f"cycle_{s}_{w}_{u}" for s, u in CYCLE_UNITS.items() for w in ("min", "max", "mean")),
)  # fmt: skip
"""Cycle outcomes that are numbers."""
