"""How a periodic input captures a body: the return map at the forcing period, its fixed points and their multipliers.

P takes a state through one forcing period. A body is locked n:m where, after m periods and no fewer, the state is back
(P^m(x) = x, solved by Newton's method with exact tangents, attracting) and insulin has n maxima in them. The map is
iterated for some periods from the equilibrium at the mean input; the way it comes back says which m to try.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from cohort.compiled import jit
from cohort.measure.cycle import ACCEPTED, CONVERGED, FINE, ORDER, TOLERANCE, spectra
from cohort.measure.roots import reading
from cohort.measure.turning import NEAR, turning_points
from cohort.measure.windows import excursions
from cohort.model.body import Body
from cohort.model.inputs import Inputs, People, forcing, one_period
from cohort.model.linear import solve_each
from cohort.model.protocol import Arm, Sine
from cohort.model.rest import at_rest
from cohort.model.tangent import tangent_stepper
from cohort.simulate.engine import DONE
from cohort.simulate.run import advance, assemble, courses, typical

Array = NDArray[np.float64]
Bools = NDArray[np.bool_]
Rows = NDArray[np.int64]

MOST_PERIODS = 24
"""The longest repeat looked for, in forcing periods."""

ROUNDS = (30, 90, 240)
"""Forcing periods iterated before each attempt."""

REPEATS = 1e-6
APERIODIC_ABOVE = 1e-3
"""A state that after all rounds does not come back closer than this (of its typical size) is called aperiodic."""

PROMINENCE = 0.1
EXACT = 1e-9
NEAR_ENOUGH = 0.1
"""States that come back no nearer than this (of their typical size) after m periods are no start for Newton's method."""

ATTEMPTS = 8
_ROOM = 48

LOCKED, APERIODIC, UNDECIDED, FAILED = range(4)


@dataclass(frozen=True)
class Responses:
    """What n subjects do under a periodic input.

    kind: int64[n], LOCKED, APERIODIC, UNDECIDED or FAILED; maxima, periods: int64[n], n and m of n:m (m is MOST_PERIODS
    where aperiodic), 0 where unknown; forcing_period, response_period, amplitude (glucose, peak to trough, mg/dL), lag (min,
    from the input's peak to the highest glucose, locked only), multiplier (modulus of the leading Floquet multiplier,
    locked only): float64[n], NaN where unknown; state: float64[n, states], on the repeat or the last one reached.
    """

    kind: NDArray[np.int64]
    maxima: NDArray[np.int64]
    periods: NDArray[np.int64]
    forcing_period: Array
    response_period: Array
    amplitude: Array
    lag: Array
    multiplier: Array
    state: Array

    def words(self) -> NDArray[np.object_]:
        """Of each "n:m", "aperiodic" or "undecided"; None where failed: object[n]."""
        said = {APERIODIC: "aperiodic", UNDECIDED: "undecided", FAILED: None}
        found = zip(self.kind, self.maxima, self.periods, strict=True)
        words = np.empty(len(self.kind), dtype=object)
        words[:] = [f"{n}:{m}" if kind == LOCKED else said[int(kind)] for kind, n, m in found]
        return words


@dataclass(frozen=True)
class Forced:
    """Subjects and one period of what they are given."""

    body: Body
    parameters: Array
    pieces: Inputs

    def take(self, rows: Rows) -> Forced:
        return Forced(self.body, self.parameters[rows], self.pieces.take(rows.tolist()))

    def step(self, x: Array) -> tuple[Array, Bools]:
        """The state one forcing period later, and whether it was reached."""
        stepper = self.body.stepper((), self.pieces.steady, ORDER, TOLERANCE)
        prepared = assemble(stepper, self.parameters, x, typical(self.body), self.pieces, self.body.enters)
        after, status = advance(prepared)
        return after, status == DONE

    def tangents(self, x: Array, accuracy: tuple[int, float] = FINE) -> tuple[Array, Array]:
        """(state one period later, derivative of it with respect to x: float64[n, states, states])."""
        n, size = x.shape
        scale = typical(self.body)
        starts = np.concatenate([np.repeat(x, size, axis=0), np.tile(np.diag(scale), (n, 1))], axis=1)
        rows = np.repeat(np.arange(n), size)
        stepper = tangent_stepper(self.body, *accuracy, steady=self.pieces.steady)
        wide = np.concatenate([scale, scale])  # on a forced orbit x may hardly move while its neighbours fall in fast
        some = self.take(rows)
        final, _ = advance(assemble(stepper, some.parameters, starts, wide, some.pieces, (0, 0)))
        columns = final[:, size:].reshape(n, size, size) / scale[None, :, None]
        return final[::size, :size], np.ascontiguousarray(columns.transpose(0, 2, 1))


def respond(
    body: Body, parameters: Array, people: People, arm: Arm, mean: tuple[Array, Array], period: Array
) -> Responses:
    """Find what each subject comes to under the arm's periodic input.

    parameters: float64[n, len(body.parameters)]; mean: glucose (mg/min) and insulin (mU/min) inputs at their means; period:
    the forcing period (min), float64[n], NaN where there is none (such subjects fail).
    """
    pieces = one_period(arm, people, np.where(np.isfinite(period), period, 1.0))
    start = at_rest(body, parameters, *mean).states
    return responses(body, parameters, pieces, start, period, _input_peak(arm, period))


def responses(body: Body, parameters: Array, pieces: Inputs, start: Array, period: Array, peak: Array) -> Responses:
    """As `respond`, from one period of inputs, the states to begin at (float64[n, states]) and the time of the input's peak."""
    known = np.flatnonzero(np.isfinite(period) & np.isfinite(start).all(axis=1))
    found = _empty(len(start), start.shape[1], period)
    if not len(known):
        return found
    some = Forced(body, parameters, pieces).take(known)
    kind, periods, multiplier, state = _settle(some, start[known])
    maxima, amplitude, when = _measure(some, state, np.maximum(periods, 1))
    locked, fine = kind == LOCKED, np.isin(kind, (LOCKED, APERIODIC))
    response = np.where(maxima > 0, periods * period[known] / np.maximum(maxima, 1), np.nan)
    found.kind[known], found.periods[known] = kind, np.where(fine, periods, 0)
    found.maxima[known] = np.where(fine, maxima, 0)
    found.response_period[known] = np.where(fine, response, np.nan)
    found.amplitude[known] = np.where(fine, amplitude, np.nan)
    found.lag[known] = np.where(locked, np.mod(when - peak[known], period[known]), np.nan)
    found.multiplier[known], found.state[known] = np.where(locked, multiplier, np.nan), state
    return found


def _empty(n: int, states: int, period: Array) -> Responses:
    whole, nothing = np.zeros(n, np.int64), np.full(n, np.nan)
    return Responses(
        np.full(n, FAILED), whole, whole.copy(), period.copy(), nothing, nothing.copy(), nothing.copy(), nothing.copy(),
        np.full((n, states), np.nan),
    )  # fmt: skip


def _input_peak(arm: Arm, period: Array) -> Array:
    """When in its period the first periodic input is at its highest (a sine) or goes on (on-off), min."""
    shape = forcing(arm)
    if not isinstance(shape, Sine):
        return np.zeros(len(period))
    quarter = 0.25 if shape.relative_amplitude >= 0.0 else 0.75
    return np.asarray(np.mod(quarter - shape.phase / (2.0 * np.pi), 1.0) * period)


# ---- settling and closing -----------------------------------------------------------------------------------------


def _settle(forced: Forced, x: Array) -> tuple[Rows, Rows, Array, Array]:
    """(kind, m, multiplier, state on the repeat or the last one reached) of every subject."""
    n, scale = len(x), typical(forced.body)
    kind, periods, multiplier = np.full(n, UNDECIDED), np.full(n, MOST_PERIODS), np.full(n, np.nan)
    state, left = x.copy(), np.arange(n)
    for rounds in ROUNDS:
        if not len(left):
            break
        some = forced.take(left)
        trail, fine = _iterate(some, state[left], rounds)
        state[left] = trail[:, -1]
        kind[left[~fine]] = FAILED
        left, some, trail = left[fine], some.take(np.flatnonzero(fine)), trail[fine]
        back = np.abs((trail[:, -2::-1] - trail[:, -1:]) / scale)  # column m - 1: how near the state is after m periods
        distance = back.max(axis=2)
        done = _close(some, trail[:, -1], distance)
        kind[left[done[0]]] = LOCKED
        for mine, theirs in zip((periods, multiplier, state), done[1:], strict=True):
            mine[left[done[0]]] = theirs[done[0]]
        if rounds == ROUNDS[-1]:
            nearest = distance.min(axis=1, initial=np.inf)
            kind[left[~done[0] & (nearest > APERIODIC_ABOVE)]] = APERIODIC
        left = left[~done[0]]
    return kind, periods, multiplier, state


def _iterate(forced: Forced, x: Array, periods: int) -> tuple[Array, Bools]:
    """The last MOST_PERIODS + 1 states of so many periods: float64[n, MOST_PERIODS + 1, states]; whether all were reached."""
    fine, trail = np.ones(len(x), bool), [x]
    for _ in range(periods):
        x, reached = forced.step(x)
        fine &= reached
        trail = [*trail[-MOST_PERIODS:], x]
    return np.stack(trail, axis=1), fine


def _close(forced: Forced, x: Array, distance: Array) -> tuple[Bools, Rows, Array, Array]:
    """Close the repeats that the distances (float64[n, MOST_PERIODS]) hint at: (found, m, multiplier, state)."""
    n = len(x)
    found, periods, multiplier, state = np.zeros(n, bool), np.zeros(n, np.int64), np.full(n, np.nan), x.copy()
    for wanted_of_all in _candidates(distance):
        left = np.flatnonzero(~found & (wanted_of_all > 0))
        wanted = wanted_of_all[left]
        for m in np.unique(wanted):
            rows = left[wanted == m]
            good, where, size = newton(forced.take(rows), x[rows], int(m))
            good &= size < 1.0
            found[rows[good]], periods[rows[good]] = True, m
            state[rows[good]], multiplier[rows[good]] = where[good], size[good]
    return found, periods, multiplier, state


def _candidates(distance: Array) -> list[Rows]:
    """Which m to try, in turn, 0 for none: 1, then the two fewest that come back nearly as near as the best."""
    n = len(distance)
    near = distance <= np.maximum(4.0 * distance.min(axis=1, initial=np.inf)[:, None], EXACT)
    near &= distance < NEAR_ENOUGH
    found = [np.where(distance[:, 0] < 1.0, 1, 0)]
    for _ in range(2):
        first = near.argmax(axis=1)
        found.append(np.where(near.any(axis=1) & (first > 0), first + 1, 0))
        near[np.arange(n), first] = False
    return found


def newton(forced: Forced, x: Array, m: int) -> tuple[Bools, Array, Array]:
    """Solve P^m(x) = x from x: (solved, state, modulus of the leading multiplier).

    A solution that repeats after fewer periods is none for m.
    """
    n, size = x.shape
    scale, x = typical(forced.body), x.copy()
    error, multiplier = np.full(n, np.inf), np.full(n, np.nan)
    going = np.arange(n)
    for _ in range(ATTEMPTS):
        some = forced.take(going)
        after, derivative = x[going], np.tile(np.eye(size), (len(going), 1, 1))
        for _ in range(m):
            after, one = some.tangents(after)
            derivative = one @ derivative
        exact = x[going]
        for _ in range(m):
            exact, _ = some.step(exact)
        change = np.empty_like(exact)
        solve_each(np.ascontiguousarray(derivative - np.eye(size)), np.ascontiguousarray(x[going] - exact), change)
        relative = np.abs(change / scale).max(axis=1)
        multiplier[going] = _leading(derivative)
        usable = np.isfinite(relative) & (relative < 3.0)
        if forced.body.card.positive:
            usable &= (x[going] + change > 0.0).all(axis=1)
        x[going[usable]] += change[usable]
        error[going] = np.where(usable, relative, np.nan)
        going = going[usable & (relative > CONVERGED)]
        if not len(going):
            break
    return (error <= ACCEPTED) & ~_sooner(forced, x, m, scale), x, multiplier


def _leading(matrices: Array) -> Array:
    values = np.full(matrices.shape[:2], np.nan + 0j)
    spectra(np.ascontiguousarray(matrices), values)
    return np.asarray(np.abs(values).max(axis=1))


def _sooner(forced: Forced, x: Array, m: int, scale: Array) -> Bools:
    """Whether a state that repeats after m periods already does after fewer."""
    sooner, after = np.zeros(len(x), bool), x
    for j in range(1, m):
        after, _ = forced.step(after)
        if m % j == 0:
            with np.errstate(invalid="ignore"):
                sooner |= np.abs((after - x) / scale).max(axis=1) < REPEATS
    return sooner


# ---- measuring ----------------------------------------------------------------------------------------------------


def _measure(forced: Forced, x: Array, periods: Rows) -> tuple[Rows, Array, Array]:
    """(insulin maxima, glucose peak to trough, time of the highest glucose) over each subject's periods from x."""
    n = len(x)
    stepper = forced.body.stepper(("glucose_mg_dl", "insulin_mu_l"), forced.pieces.steady, ORDER, TOLERANCE)
    times, values = np.full((2, n, MOST_PERIODS * _ROOM), np.nan), np.full((2, n, MOST_PERIODS * _ROOM), np.nan)
    counts = np.zeros((2, n), np.int64)
    lengths = forced.pieces.stops.max(axis=1, initial=0.0, where=np.isfinite(forced.pieces.stops))
    for k in range(int(periods.max(initial=0))):
        here = np.flatnonzero(periods > k)
        some = forced.take(here)
        prepared = assemble(stepper, some.parameters, x[here], typical(forced.body), some.pieces, forced.body.enters)
        for rows, course in courses(prepared, float(lengths[here].max())):
            _collect(*reading(course), here[rows], k * lengths, times, values, counts)
            x = _with(x, here[rows], course.final)
    maxima, swing, when = np.zeros(n, np.int64), np.empty(n), np.empty(n)
    _read(times, values, counts, PROMINENCE, maxima, swing, when)
    return maxima, swing, when


def _with(x: Array, rows: Rows, values: Array) -> Array:
    x = x.copy()
    x[rows] = values
    return x


@jit
def _collect(roots, start, step_size, coefficients, summaries, n_steps, status, rows, begin, times, values, counts):  # type: ignore[no-untyped-def]
    """Append each course's turning points and its first value; times count from the repeat's beginning."""
    room = start.shape[1] + 64
    places, heights = np.empty(room), np.empty(room)
    for b in range(n_steps.shape[0]):
        n, s = n_steps[b], rows[b]
        if status[b] != DONE:
            continue
        for c in range(2):
            a = coefficients[b, c, :n]
            count = turning_points(roots, start[b, :n], step_size[b, :n], a, summaries[b, c, :n], NEAR, places, heights)
            for i in range(-1, count):
                if counts[c, s] < times.shape[2]:
                    times[c, s, counts[c, s]] = begin[s] + (places[i] if i >= 0 else 0.0)
                    values[c, s, counts[c, s]] = heights[i] if i >= 0 else a[0, 0]
                    counts[c, s] += 1


@jit
def _read(times, values, counts, prominence, maxima, swing, when):  # type: ignore[no-untyped-def]
    """Of each subject, over its repeat as a circle: maxima of insulin that stand out, and glucose's swing and highest place."""
    for s in range(maxima.shape[0]):
        n = counts[0, s]
        swing[s], when[s] = np.nan, np.nan
        if n > 0:
            top = np.argmax(values[0, s, :n])
            swing[s], when[s] = values[0, s, top] - np.min(values[0, s, :n]), times[0, s, top]
        n = counts[1, s]
        if n < 2:
            continue
        around = values[1, s, :n]
        lowest = np.argmin(around)
        ring, sizes = np.empty(n + 1), np.empty(n + 2)
        for i in range(n + 1):
            ring[i] = around[(lowest + i) % n]
        span = np.max(around) - np.min(around)
        if not span > 0.0:
            continue
        written = excursions(ring, prominence * span, sizes)
        for i in range(written):
            maxima[s] += sizes[i] > 0.0
