"""Protocols as numbers: the inputs of an arm, for every subject, as pieces the compiled integrator adds up.

A piece acts on one channel (glucose or insulin) from `on` to `off` and is one of
    constant     amplitude
    decay        amplitude exp(-rate (t - on))                     one-stage meal: m/a, 1/a
    rise-decay   amplitude (t - on) exp(-rate (t - on))            two-stage meal: m/a^2, 1/a
    wave         amplitude sin(rate t + phase)
so that its Taylor coefficients at any time follow from a two-term recurrence. Between stops nothing jumps.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from cohort.model.protocol import Arm, Bolus, Constant, Meal, Natural, OnOff, Shape, Sine, Steps

Array = NDArray[np.float64]

CONSTANT, DECAY, RISE_DECAY, WAVE = range(4)
GLUCOSE, INSULIN = range(2)
MEAL_FORGOTTEN_AFTER = 60.0
"""A meal stops after this many time constants: e^-60 of it is left, below the last digit."""

LONGEST_AVERAGED_PERIOD_MIN = 360.0
"""A periodic input slower than this has no steady value."""


@dataclass(frozen=True)
class People:
    """What of n subjects the inputs depend on: weight (kg, NaN where none), own meal absorption (min) and
    bioavailability (NaN where the arm's hold), own period (min, NaN unless an input asks for it)."""

    body_weight_kg: Array
    meal_absorption_min: Array
    meal_bioavailability: Array
    natural_period_min: Array

    @property
    def count(self) -> int:
        return len(self.body_weight_kg)

    def take(self, rows: slice) -> People:
        """Return the chosen subjects."""
        return People(
            self.body_weight_kg[rows],
            self.meal_absorption_min[rows],
            self.meal_bioavailability[rows],
            self.natural_period_min[rows],
        )


@dataclass(frozen=True)
class Inputs:
    """Pieces and stops of n subjects.

    kind, channel: int64[pieces]; on, off, amplitude, rate, phase: float64[n, pieces];
    stops: float64[n, stops], rising, the last at the arm's end, padded with inf;
    bolus_time, bolus_amount: float64[n, boluses]; bolus_channel: int64[boluses].
    """

    kind: NDArray[np.int64]
    channel: NDArray[np.int64]
    on: Array
    off: Array
    amplitude: Array
    rate: Array
    phase: Array
    stops: Array
    bolus_time: Array
    bolus_amount: Array
    bolus_channel: NDArray[np.int64]

    @property
    def steady(self) -> bool:
        """True where every piece is constant between stops."""
        return bool(np.all(self.kind == CONSTANT))

    def take(self, rows: Sequence[int]) -> Inputs:
        """Return the chosen subjects' inputs."""
        some = list(rows)
        own = ("on", "off", "amplitude", "rate", "phase", "stops", "bolus_time", "bolus_amount")
        return replace(self, **{key: getattr(self, key)[some] for key in own})


class _Pieces:
    def __init__(self, people: People, duration: float) -> None:
        self.people, self.duration = people, duration
        self.rows: list[tuple[int, int, list[Array]]] = []
        self.boluses: list[tuple[int, Array, Array]] = []

    def full(self, value: float | Array) -> Array:
        return np.broadcast_to(np.asarray(value, dtype=np.float64), (self.people.count,))

    def scale(self, per_kg: bool) -> Array:
        return self.people.body_weight_kg if per_kg else np.ones(self.people.count)

    def add(self, kind: int, channel: int, on: float | Array, off: float | Array, amplitude: float | Array,
            rate: float | Array = 0.0, phase: float | Array = 0.0) -> None:  # fmt: skip
        self.rows.append((kind, channel, [self.full(v) for v in (on, off, amplitude, rate, phase)]))

    def shape(self, shape: Shape, channel: int) -> None:
        scale = self.scale(shape.per_kg)
        if isinstance(shape, Constant):
            self.add(CONSTANT, channel, 0.0, self.duration, shape.rate * scale)
        elif isinstance(shape, Steps):
            ends = (*shape.times_min[1:], self.duration)
            for on, off, rate in zip(shape.times_min, ends, shape.rates, strict=True):
                if on < self.duration:
                    self.add(CONSTANT, channel, on, min(off, self.duration), rate * scale)
        elif isinstance(shape, OnOff):
            self._on_off(shape, channel, shape.rate * scale)
        elif isinstance(shape, Sine):
            self.sine(shape, channel, self.full(self.duration), self.period(shape.period_min))
        elif isinstance(shape, Meal):
            self._meal(shape, channel, shape.amount_mg * scale)
        else:
            self.boluses.append((channel, self.full(shape.time_min), self.full(shape.amount * scale)))

    def sine(self, shape: Sine, channel: int, end: Array, period: Array) -> None:
        mean = shape.mean * self.scale(shape.per_kg)
        self.add(CONSTANT, channel, 0.0, end, mean)
        self.add(WAVE, channel, 0.0, end, mean * shape.relative_amplitude, 2.0 * np.pi / period, shape.phase)

    def period(self, period: float | Natural) -> Array:
        if isinstance(period, Natural):
            return period.factor * self.people.natural_period_min
        return self.full(period)

    def _on_off(self, shape: OnOff, channel: int, amplitude: Array) -> None:
        period = self.period(shape.period_min)
        shortest = np.nanmin(period) if np.isfinite(period).any() else self.duration
        for cycle in range(int(np.ceil(self.duration / shortest))):
            on = np.minimum(cycle * period, self.duration)
            off = np.minimum((cycle + shape.duty) * period, self.duration)
            self.add(CONSTANT, channel, on, off, amplitude)

    def _meal(self, shape: Meal, channel: int, amount: Array) -> None:
        own = self.people.meal_absorption_min
        a = np.where(np.isnan(own), shape.absorption_min, own)
        own = self.people.meal_bioavailability
        amount = amount * np.where(np.isnan(own), shape.bioavailability, own)
        for time in meal_times(shape, self.duration):
            off = np.minimum(time + MEAL_FORGOTTEN_AFTER * a, self.duration)
            kind = DECAY if shape.stages == 1 else RISE_DECAY
            self.add(kind, channel, time, off, amount / a if shape.stages == 1 else amount / (a * a), 1.0 / a)


def meal_times(meal: Meal, duration_min: float) -> list[float]:
    """When a meal is eaten within the arm, its repetitions included; min from the arm's beginning."""
    if meal.repeat_min is None:
        return [meal.time_min] if meal.time_min < duration_min else []
    count = int(np.ceil((duration_min - meal.time_min) / meal.repeat_min))
    return [meal.time_min + i * meal.repeat_min for i in range(max(count, 0))]


def inputs(arm: Arm, people: People) -> Inputs:
    """Return the arm's inputs for these people, the clamp apart."""
    pieces = _Pieces(people, arm.duration_min)
    for channel, shapes in ((GLUCOSE, arm.glucose), (INSULIN, arm.insulin)):
        for shape in shapes:
            pieces.shape(shape, channel)
    return _assembled(pieces, np.full(people.count, arm.duration_min))


def _assembled(pieces: _Pieces, duration: Array) -> Inputs:
    people = pieces.people
    columns = [np.column_stack(part) if part else np.empty((people.count, 0)) for part in _transposed(pieces)]
    times, amounts = (
        np.column_stack([b[i] for b in pieces.boluses]) if pieces.boluses else np.empty((people.count, 0))
        for i in (1, 2)
    )
    on, off, amplitude, rate, phase = (np.ascontiguousarray(c) for c in columns)
    return Inputs(
        np.array([r[0] for r in pieces.rows], dtype=np.int64),
        np.array([r[1] for r in pieces.rows], dtype=np.int64),
        on, off, amplitude, rate, phase,
        _stops(np.column_stack([on, off, times]), duration),
        np.ascontiguousarray(times), np.ascontiguousarray(amounts),
        np.array([b[0] for b in pieces.boluses], dtype=np.int64),
    )  # fmt: skip


def forcing(arm: Arm) -> OnOff | Sine | None:
    """The arm's first periodic input, glucose before insulin; None where it has none, or where others have another period."""
    found = [shape for shape in (*arm.glucose, *arm.insulin) if isinstance(shape, OnOff | Sine)]
    return found[0] if found and len({shape.period_min for shape in found}) == 1 else None


def is_forced(arm: Arm) -> bool:
    """Whether an arm has a periodic input."""
    return any(isinstance(shape, OnOff | Sine) for shape in (*arm.glucose, *arm.insulin))


def settles_to_forcing(arm: Arm) -> bool:
    """Whether an arm's inputs come to one periodic input with nothing else that goes on changing."""
    lasting = all(isinstance(s, Constant | Steps | OnOff | Sine) for s in (*arm.glucose, *arm.insulin))
    return lasting and arm.clamp is None and forcing(arm) is not None


def own_forcing_period(arm: Arm, own_period: Array) -> Array:
    """The period of an arm's periodic input for people of these own periods, min: float64[n]; NaN where there is none."""
    shape = forcing(arm)
    if shape is None:
        return np.full(len(own_period), np.nan)
    if isinstance(shape.period_min, Natural):
        return np.asarray(shape.period_min.factor * own_period, dtype=np.float64)
    return np.full(len(own_period), shape.period_min)


def has_natural(arm: Arm) -> bool:
    """Whether an input's period is a multiple of the subject's own."""
    shapes = (*arm.glucose, *arm.insulin)
    return any(isinstance(getattr(shape, "period_min", None), Natural) for shape in shapes)


def one_period(arm: Arm, people: People, period: Array) -> Inputs:
    """One period of an arm's long-run inputs, each subject's own (min): constants, last rates of steps, periodic inputs."""
    pieces = _Pieces(people, np.inf)
    for channel, shapes in ((GLUCOSE, arm.glucose), (INSULIN, arm.insulin)):
        for shape in shapes:
            scale = pieces.scale(shape.per_kg)
            if isinstance(shape, OnOff):
                pieces.add(CONSTANT, channel, 0.0, shape.duty * period, shape.rate * scale)
            elif isinstance(shape, Sine):
                pieces.sine(shape, channel, period, period)
            elif isinstance(shape, Constant | Steps):
                rate = shape.rate if isinstance(shape, Constant) else shape.rates[-1]
                pieces.add(CONSTANT, channel, 0.0, period, rate * scale)
    return _assembled(pieces, period)


def sine_period(mean: Array, relative_amplitude: Array, period: Array) -> Inputs:
    """One period of a glucose input mean (1 + a sin(2 pi t / period)) for n subjects, float64[n] each."""
    nobody = np.full(len(mean), np.nan)
    pieces = _Pieces(People(nobody, nobody, nobody, nobody), np.inf)
    pieces.add(CONSTANT, GLUCOSE, 0.0, period, mean)
    pieces.add(WAVE, GLUCOSE, 0.0, period, mean * relative_amplitude, 2.0 * np.pi / period)
    return _assembled(pieces, period)


def _transposed(pieces: _Pieces) -> list[list[Array]]:
    return [[row[2][i] for row in pieces.rows] for i in range(5)]


def _stops(times: Array, end: Array) -> Array:
    """Each row's distinct times in (0, end), then the end, then inf."""
    times = np.sort(np.where((times > 0.0) & (times < end[:, None]), times, np.inf), axis=1)
    repeated = np.zeros(times.shape, dtype=bool)
    repeated[:, 1:] = times[:, 1:] == times[:, :-1]
    times = np.sort(np.where(repeated, np.inf, times), axis=1)
    longest = int(np.isfinite(times).sum(axis=1).max(initial=0))
    stops = np.full((len(times), longest + 1), np.inf)
    stops[:, :longest] = times[:, :longest]
    stops[np.arange(len(times)), np.isfinite(times).sum(axis=1)] = end
    return stops


# ---- the steady input --------------------------------------------------------------------------------------------


def steady_input(arm: Arm, people: People) -> tuple[Array, Array] | None:
    """What the arm's inputs come to in the long run: (glucose mg/min, insulin mU/min), float64[n] each.

    Constants, the last rate of steps, the means of periodic inputs with a period up to 6 h. None where the arm has
    meals, boluses, slower periodic inputs or a clamp, unless it states `steady`.
    """
    ones = np.ones(people.count)
    weight = people.body_weight_kg
    parts = [_steady(shape) for shape in (*arm.glucose, *arm.insulin)]
    if arm.steady is not None:
        glucose = arm.steady * (weight if arm.steady_per_kg else ones)
        insulin = [_steady(shape) for shape in arm.insulin]
        if any(rate is None for rate in insulin):
            insulin = []
        return glucose, _total(insulin, arm.insulin, weight, ones)
    if arm.clamp is not None or any(rate is None for rate in parts):
        return None
    split = len(arm.glucose)
    return _total(parts[:split], arm.glucose, weight, ones), _total(parts[split:], arm.insulin, weight, ones)


def _total(rates: list[float | None], shapes: tuple[Shape, ...], weight: Array, ones: Array) -> Array:
    total = np.zeros(len(ones))
    for rate, shape in zip(rates, shapes, strict=False):
        assert rate is not None
        total = total + rate * (weight if shape.per_kg else ones)
    return total


def _steady(shape: Shape) -> float | None:
    if isinstance(shape, Constant):
        return shape.rate
    if isinstance(shape, Steps):
        return shape.rates[-1]
    if isinstance(shape, Meal | Bolus):
        return None
    if not isinstance(shape.period_min, Natural) and shape.period_min > LONGEST_AVERAGED_PERIOD_MIN:
        return None
    return shape.rate * shape.duty if isinstance(shape, OnOff) else shape.mean


def held(Gin: Array, Iin: Array, duration_min: Array) -> Inputs:
    """Constant inputs for n subjects, each for its own time: float64[n] mg/min, mU/min, min."""
    n = len(Gin)
    zeros, ends = np.zeros((n, 2)), np.column_stack([duration_min, duration_min])
    none = np.empty((n, 0))
    return Inputs(
        np.array([CONSTANT, CONSTANT]), np.array([GLUCOSE, INSULIN]), zeros, ends, np.column_stack([Gin, Iin]),
        zeros, zeros, np.ascontiguousarray(duration_min.reshape(n, 1)), none, none, np.empty(0, np.int64),
    )  # fmt: skip
