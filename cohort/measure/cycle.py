"""Limit cycles: the orbit a body tends to under a constant input, found as a fixed point of the flow, not waited for.

First `approach` brings a state near the orbit: a few cycles are integrated, and the change of the peak-to-trough
amplitude A from cycle to cycle is extrapolated with the amplitude equation of a Hopf bifurcation,
    ln(A_next / A) = growth x period x (1 - A^2 / A_inf^2),
so that a subject near the border, whose transient lasts for weeks, costs no more than another. Then `close` solves
    flow(x, T) = x,   rate(x) . dx = 0
for state and period by Newton's method with exact tangents of the flow, to the integrator's accuracy. An orbit that
repels (a Floquet multiplier beyond 1) or has shrunk onto the equilibrium is no answer.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from cohort.compiled import compile_program, jit
from cohort.measure.roots import reading
from cohort.measure.turning import NEAR, turning_points
from cohort.model.body import Body
from cohort.model.inputs import held
from cohort.model.linear import leading_directions, solve_each
from cohort.model.rest import Rest, spectrum
from cohort.model.tangent import tangent_stepper
from cohort.simulate.engine import DONE
from cohort.simulate.run import advance, assemble, courses, map_rows, typical

Array = NDArray[np.float64]
Bools = NDArray[np.bool_]

ORDER = 16
TOLERANCE = 1e-12
ROUGH, FINE = (8, 1e-5), (12, 1e-9)
"""Order and tolerance of tangents: those that steer Newton, and those that a multiplier next to 1 is judged by."""

ROUNDS = (12, 20, 40, 60)
"""Cycles integrated before each attempt to close the orbit: the stated horizon is their sum."""

NEWTON_ROUNDS = 4
CHORD_STEPS = 6
CONVERGED = 1e-9
ACCEPTED = 1e-7
_FIRST_DISPLACEMENT = 0.08


@dataclass(frozen=True)
class Held:
    """n subjects under constant inputs: parameters float64[n, body.parameters], Gin, Iin and their rest."""

    body: Body
    parameters: Array
    Gin: Array
    Iin: Array
    rest: Rest

    def take(self, rows: NDArray[np.int64] | Bools) -> Held:
        """Return the chosen subjects."""
        rest = Rest(self.rest.states[rows], self.rest.eigenvalues[rows], self.rest.jacobians[rows])
        return Held(self.body, self.parameters[rows], self.Gin[rows], self.Iin[rows], rest)


@dataclass(frozen=True)
class Orbits:
    """Closed orbits: found bool[n]; state float64[n, states] on it; period (min); error: the last Newton correction
    (period relative, state relative to the orbit's size); multiplier: modulus of the leading Floquet multiplier
    apart from 1. NaN where not found."""

    found: Bools
    state: Array
    period: Array
    error: Array
    multiplier: Array


def linear_time(rest: Rest) -> Array:
    """A first guess of the period: 2 pi / |Im| of the leading pair, or of two real unstable values 2 pi / sqrt(product)."""
    leading, second = rest.eigenvalues[:, 0], rest.eigenvalues[:, min(1, rest.eigenvalues.shape[1] - 1)]
    real = np.sqrt(np.maximum(leading.real * second.real, 1e-300))
    rate = np.where(leading.imag != 0.0, np.abs(leading.imag), np.where(second.real > 0.0, real, np.abs(leading.real)))
    return 2.0 * np.pi / rate


def displaced(held_: Held) -> Array:
    """Start states off the equilibrium along its leading eigenvector, the lead state moved by a typical amplitude."""
    lead = held_.body.card.states.index(held_.body.traced.rest_of)
    direction = np.empty_like(held_.rest.states)
    leading_directions(held_.rest.jacobians, np.ascontiguousarray(held_.rest.eigenvalues[:, 0]), lead, direction)
    size = _FIRST_DISPLACEMENT * typical(held_.body)[lead]
    start: Array = held_.rest.states + size * direction
    if held_.body.card.positive:
        start = np.where(start > 0.1 * held_.rest.states, start, 0.1 * held_.rest.states)
    return start


def find_orbits(subjects: Held, start: Array, rounds: tuple[int, ...] = ROUNDS) -> Orbits:
    """Find the attracting orbit that `start` (float64[n, states]) leads to, where there is one."""
    n = len(start)
    out = Orbits(
        np.zeros(n, bool), np.full(start.shape, np.nan), *(np.full(n, np.nan) for _ in range(3))
    )  # fmt: skip
    state, period = start.copy(), linear_time(subjects.rest)
    left = np.flatnonzero(np.all(np.isfinite(start), axis=1) & np.isfinite(period))
    for cycles in rounds:
        if not len(left):
            break
        some = subjects.take(left)
        state[left], period[left], amplitude, alive = approach(some, state[left], period[left], cycles)
        near = left[alive]
        found = close(subjects.take(near), state[near], period[near], amplitude[alive])
        for mine, theirs in zip((out.state, out.period, out.error, out.multiplier),
                                (found.state, found.period, found.error, found.multiplier), strict=True):  # fmt: skip
            mine[near[found.found]] = theirs[found.found]
        out.found[near[found.found]] = True
        left = left[~out.found[left]]
    return out


# ---- towards the orbit -------------------------------------------------------------------------------------------


def approach(subjects: Held, state: Array, period: Array, cycles: int) -> tuple[Array, Array, Array, Bools]:
    """Integrate about `cycles` cycles and extrapolate.

    Returns (state, period, amplitude of the lead column, alive); alive is False where nothing oscillates any more.
    """
    final, marks = _run_cycles(subjects, state, period, cycles)
    return _extrapolate(subjects, final, period, marks)


def follow(subjects: Held, state: Array, period: Array, cycles: int) -> tuple[Array, Array, Array, Bools]:
    """Integrate about `cycles` cycles towards an attracting equilibrium or past it.

    Returns (state, period, amplitude, lingers): lingers is False where the amplitude fell in the last cycle at least
    half as fast as it does next to the equilibrium, so that no orbit holds it up.
    """
    final, marks = _run_cycles(subjects, state, period, cycles)
    last, before, last_period, _ = marks.T
    with np.errstate(all="ignore"):
        change = np.log(last / before)
    linear = subjects.rest.eigenvalues[:, 0].real * last_period
    lingers = np.isfinite(change) & (change > 0.5 * linear)
    return final, np.where(np.isfinite(last_period), last_period, period), last, lingers


def _run_cycles(subjects: Held, state: Array, period: Array, cycles: int) -> tuple[Array, Array]:
    stepper = subjects.body.stepper((_lead_column(subjects.body),), True)
    pieces = held(subjects.Gin, subjects.Iin, cycles * period)
    prepared = assemble(stepper, subjects.parameters, state, typical(subjects.body), pieces, subjects.body.enters)
    marks = np.full((len(state), 4), np.nan)
    final = np.full(state.shape, np.nan)
    for rows, found in courses(prepared, float(np.max(cycles * period))):
        some = np.empty((len(rows), 4))
        _marks(*reading(found), some)
        marks[rows], final[rows] = some, found.final
    return final, marks


def _extrapolate(subjects: Held, final: Array, period: Array, marks: Array) -> tuple[Array, Array, Array, Bools]:
    last, before, last_period, _ = marks.T
    alive = np.isfinite(last) & np.isfinite(final).all(axis=1) & (last > 0.0)
    with np.errstate(all="ignore"):
        change = np.log(last / before)
        linear = subjects.rest.eigenvalues[:, 0].real * last_period
        squared = linear / (linear - change)
    hopf = np.isfinite(squared) & (squared > 0.0) & (subjects.rest.eigenvalues[:, 0].imag != 0.0) & (linear < 0.3)
    factor = np.where(hopf, np.sqrt(np.clip(np.where(hopf, squared, 1.0), 0.01, 9.0)), 1.0)
    rest = subjects.rest.states
    moved = rest + (final - rest) * factor[:, None]
    if subjects.body.card.positive:
        moved = np.where(moved > 0.0, moved, final)
    known = np.isfinite(last_period)
    return moved, np.where(known, last_period, period), last * factor, alive & known


@jit
def _marks(roots, start, step_size, coefficients, summaries, n_steps, status, out):  # type: ignore[no-untyped-def]
    """Of each course: its last two peak-to-trough amplitudes and its last two periods, NaN if it has none."""
    room = start.shape[1] + 8
    times, values = np.empty(room), np.empty(room)
    peak_time, peak, trough = np.empty(room), np.empty(room), np.empty(room)
    for s in range(n_steps.shape[0]):
        out[s] = np.nan
        if status[s] != DONE:
            continue
        n = n_steps[s]
        count = turning_points(
            roots, start[s, :n], step_size[s, :n], coefficients[s, 0, :n], summaries[s, 0, :n], NEAR, times, values
        )
        peaks = 0
        for i in range(1, count - 1):
            if values[i] > values[i - 1] and values[i] > values[i + 1]:
                peak_time[peaks], peak[peaks], trough[peaks] = times[i], values[i], values[i + 1]
                peaks += 1
        if peaks >= 3:
            out[s, 0] = peak[peaks - 1] - trough[peaks - 1]
            out[s, 1] = peak[peaks - 2] - trough[peaks - 2]
            out[s, 2] = peak_time[peaks - 1] - peak_time[peaks - 2]
            out[s, 3] = peak_time[peaks - 2] - peak_time[peaks - 3]


def _lead_column(body: Body) -> str:
    return next(iter(body.traced.observed))


# ---- closing the orbit -------------------------------------------------------------------------------------------


def close(subjects: Held, state: Array, period: Array, amplitude: Array) -> Orbits:
    """Newton's method for flow(x, T) = x from states near an orbit of about the given amplitude of the lead column."""
    n, size = state.shape
    x, T = state.copy(), period.copy()
    error = np.full(n, np.inf)
    monodromy = np.full((n, size, size), np.nan)
    going = np.arange(n)
    for attempt in range(NEWTON_ROUNDS):
        if not len(going):
            break
        some = subjects.take(going)
        monodromy[going] = _monodromy(some, x[going], T[going], FINE if attempt else ROUGH)
        x[going], T[going], error[going] = _chords(some, x[going], T[going], monodromy[going])
        going = going[np.isfinite(error[going]) & (error[going] > CONVERGED)]
    multiplier = _second_multiplier(monodromy)
    close_to_one = np.flatnonzero((multiplier > 0.98) & (error <= ACCEPTED))  # the first point's tangents are too rough
    some = subjects.take(close_to_one)
    multiplier[close_to_one] = _second_multiplier(_monodromy(some, x[close_to_one], T[close_to_one], FINE))
    swing = _lead_swing(subjects, x, T)
    with np.errstate(invalid="ignore"):
        good = (error <= ACCEPTED) & (multiplier < 1.0) & (swing > 0.5 * amplitude) & (0.3 * period < T)
        good &= 1.7 * period > T
    return Orbits(good, x, T, error, multiplier)


def _chords(subjects: Held, x: Array, T: Array, monodromy: Array) -> tuple[Array, Array, Array]:
    """Newton steps with the tangents of the first point: (state, period, size of the last correction)."""
    n, size = x.shape
    x, T, error = x.copy(), T.copy(), np.full(n, np.inf)
    stepper = subjects.body.stepper((), True, ORDER, TOLERANCE)
    scale = typical(subjects.body)
    system = np.zeros((n, size + 1, size + 1))
    system[:, :size, :size] = monodromy - np.eye(size)
    going = np.arange(n)
    for _ in range(CHORD_STEPS):
        some = subjects.take(going)
        pieces = held(some.Gin, some.Iin, T[going])
        prepared = assemble(stepper, some.parameters, x[going], scale, pieces, subjects.body.enters)
        after, status = advance(prepared)
        rate_after, rate = _rates(some, after), _rates(some, x[going])
        system[going, :size, size] = rate_after
        system[going, size, :size] = rate
        right = np.column_stack([x[going] - after, np.zeros(len(going))])
        change = np.empty_like(right)
        solve_each(system[going], right, change)
        correction = np.abs(change[:, :size] / scale).max(axis=1)
        relative = np.maximum(correction, np.abs(change[:, size]) / T[going])
        good = (status == DONE) & np.isfinite(relative) & (relative < 0.7)
        good &= T[going] + change[:, size] > 0.0
        if subjects.body.card.positive:
            good &= (x[going] + change[:, :size] > 0.0).all(axis=1)
        shrinking = relative < 0.5 * error[going]
        error[going[~good]] = np.nan
        moving = going[good]
        x[moving] += change[good, :size]
        T[moving] += change[good, size]
        error[moving] = relative[good]
        going = moving[(relative[good] > CONVERGED) & shrinking[good]]
        if not len(going):
            break
    return x, T, error


def _rates(subjects: Held, x: Array) -> Array:
    source = np.column_stack([x, subjects.Gin, subjects.Iin, subjects.parameters])
    out = np.empty(x.shape)
    map_rows(compile_program(subjects.body.rates), np.ascontiguousarray(source), out)
    return out


def _monodromy(subjects: Held, x: Array, T: Array, accuracy: tuple[int, float] = ROUGH) -> Array:
    """The derivative of flow(x, T) with respect to x: float64[n, states, states]."""
    n, size = x.shape
    scale = typical(subjects.body)
    starts = np.concatenate(
        [np.repeat(x, size, axis=0), np.tile(np.diag(scale), (n, 1))], axis=1
    )  # column j of subject s is row s * size + j
    wide = np.concatenate([scale, np.full(size, np.inf)])
    pieces = held(*(np.repeat(v, size) for v in (subjects.Gin, subjects.Iin, T)))
    parameters = np.repeat(subjects.parameters, size, axis=0)
    final, _ = advance(assemble(tangent_stepper(subjects.body, *accuracy), parameters, starts, wide, pieces, (0, 0)))
    columns = final[:, size:].reshape(n, size, size) / scale[None, :, None]
    return np.ascontiguousarray(columns.transpose(0, 2, 1))


def _second_multiplier(monodromy: Array) -> Array:
    """Modulus of the largest Floquet multiplier, the one nearest to 1 left out: float64[n]."""
    n, size, _ = monodromy.shape
    values = np.full((n, size), np.nan + 0j)
    spectra(monodromy, values)
    distance = np.abs(values - 1.0)
    distance[np.isnan(distance)] = np.inf
    kept = np.abs(values)
    kept[np.arange(n), distance.argmin(axis=1)] = 0.0
    return np.asarray(kept.max(axis=1), dtype=np.float64)


@jit
def spectra(matrices, values):  # type: ignore[no-untyped-def]
    """Write the eigenvalues of each matrix, float64[n, m, m], into complex128[n, m]; those of one not finite stay."""
    for s in range(matrices.shape[0]):
        if np.all(np.isfinite(matrices[s])):
            spectrum(matrices[s], values[s])


def orbit_courses(subjects: Held, x: Array, T: Array, seen: tuple[str, ...]):  # type: ignore[no-untyped-def]
    """One recorded turn of each orbit, at the accuracy it was closed with; as `cohort.simulate.run.courses`."""
    stepper = subjects.body.stepper(seen, True, ORDER, TOLERANCE)
    pieces = held(subjects.Gin, subjects.Iin, T)
    prepared = assemble(stepper, subjects.parameters, x, typical(subjects.body), pieces, subjects.body.enters)
    return courses(prepared, float(np.max(T, initial=1.0)))


def _lead_swing(subjects: Held, x: Array, T: Array) -> Array:
    """Peak-to-trough of the lead column over one turn: float64[n], NaN where the turn could not be made."""
    swing = np.full(len(T), np.nan)
    fine = np.flatnonzero(np.isfinite(x).all(axis=1) & np.isfinite(T) & (T > 0.0))
    if len(fine):
        some = subjects.take(fine)
        for rows, found in orbit_courses(some, x[fine], T[fine], (_lead_column(subjects.body),)):
            out = np.full((len(rows), ORBIT_COLUMNS), np.nan)
            orbit_rows(*reading(found), out)
            swing[fine[rows]] = out[:, 1] - out[:, 0]
    return swing


ORBIT_COLUMNS = 4
"""Of each recorded column: lowest, highest, mean, time of the highest."""


@jit
def orbit_rows(roots, start, step_size, coefficients, summaries, n_steps, status, out):  # type: ignore[no-untyped-def]
    """Lowest, highest, mean and time of the highest of every column over one turn: out float64[n, 4 x columns]."""
    columns = coefficients.shape[1]
    room = start.shape[1] + 8
    times, values = np.empty(room), np.empty(room)
    for s in range(n_steps.shape[0]):
        if status[s] != DONE:
            continue
        n = n_steps[s]
        end = start[s, n - 1] + step_size[s, n - 1]
        for c in range(columns):
            a = coefficients[s, c, :n]
            count = turning_points(roots, start[s, :n], step_size[s, :n], a, summaries[s, c, :n], NEAR, times, values)
            low = high = a[0, 0]
            when = 0.0
            for i in range(count):
                if values[i] > high:
                    high, when = values[i], times[i]
                low = min(low, values[i])
            total = 0.0
            for i in range(n):
                total += summaries[s, c, i, 4] * step_size[s, i]
            out[s, 4 * c], out[s, 4 * c + 1], out[s, 4 * c + 2], out[s, 4 * c + 3] = low, high, total / end, when
