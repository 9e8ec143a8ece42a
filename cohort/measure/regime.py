"""Which regime a body is in under its steady input: from eigenvalues and a converged orbit, never from counted peaks."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from cohort.measure.cycle import (
    ORBIT_COLUMNS,
    Held,
    Orbits,
    close,
    displaced,
    find_orbits,
    follow,
    linear_time,
    orbit_courses,
    orbit_rows,
)
from cohort.measure.roots import reading
from cohort.model.body import Body
from cohort.model.rest import at_rest
from cohort.quantities import REGIMES
from cohort.simulate.run import observe_states

Array = NDArray[np.float64]

SUSTAINED, DAMPED, QUIET, BISTABLE, UNDECIDED, FAILED = range(len(REGIMES))

BORDER_PER_MIN = 1e-7
RINGING_KEPT = 0.05
BISTABLE_SEARCHED_BELOW_PER_MIN = -1e-3
BISTABLE_FACTORS = (1.5, 0.6)
BISTABLE_ROUNDS = (6, 18, 36)
"""Cycles integrated from each displaced start before the search for a second attractor ends: 60 in all."""

CYCLE_COLUMNS = ("glucose_mg_dl", "insulin_mu_l", "secretion_mu_per_min")


@dataclass(frozen=True)
class Cycles:
    """What n subjects tend to under a constant input.

    regime: int8 codes into REGIMES; growth per min and linear period (min, NaN where the leading eigenvalue is real):
    float64[n]; equilibrium: float64[n, 2], glucose mg/dL and insulin mU/L; bistable_searched bool[n]; period, error
    (relative) float64[n]; own_period float64[n]: the orbit's, else that of the slowest ringing, NaN where nothing rings;
    turn: float64[n, 3, 4], per CYCLE_COLUMNS lowest, highest, mean and time of the highest.
    Orbit columns are NaN where there is no orbit.
    """

    regime: NDArray[np.int8]
    growth: Array
    linear_period: Array
    equilibrium: Array
    bistable_searched: NDArray[np.bool_]
    period: Array
    own_period: Array
    error: Array
    turn: Array


def cycles(body: Body, parameters: Array, Gin: Array, Iin: Array) -> Cycles:
    """Equilibrium, regime and orbit of every subject; parameters float64[n, len(body.parameters)]."""
    rest = at_rest(body, parameters, Gin, Iin)
    n = len(parameters)
    subjects = Held(body, parameters, Gin, Iin, rest)
    growth = rest.eigenvalues[:, 0].real.copy()
    imaginary = np.abs(rest.eigenvalues[:, 0].imag)
    with np.errstate(divide="ignore", invalid="ignore"):
        linear_period = np.where(imaginary > 0.0, 2.0 * np.pi / imaginary, np.nan)
    regime = _at_rest_regime(rest.eigenvalues)
    orbits = Orbits(np.zeros(n, bool), np.full(rest.states.shape, np.nan), *(np.full(n, np.nan) for _ in range(3)))
    rows = np.flatnonzero(regime == SUSTAINED)
    some = subjects.take(rows)
    _keep(orbits, rows, find_orbits(some, displaced(some)))
    regime[rows[~orbits.found[rows]]] = UNDECIDED
    searched = (growth > BISTABLE_SEARCHED_BELOW_PER_MIN) & (growth < 0.0) & (imaginary > 0.0)
    _search_second_attractor(subjects, np.flatnonzero(searched), regime, orbits)
    turn = np.full((n, len(CYCLE_COLUMNS), ORBIT_COLUMNS), np.nan)
    _measure(subjects, np.flatnonzero(orbits.found), orbits, turn)
    own = np.where(orbits.found, orbits.period, _ringing_period(rest.eigenvalues))
    return Cycles(
        regime, growth, linear_period, _seen_at_rest(subjects), searched, orbits.period, own, orbits.error, turn
    )  # fmt: skip


def _at_rest_regime(eigenvalues: NDArray[np.complex128]) -> NDArray[np.int8]:
    growth = eigenvalues[:, 0].real
    pair = _slowest_pair(eigenvalues)
    with np.errstate(divide="ignore", invalid="ignore"):
        rings = (pair.imag > 0.0) & (2.0 * np.pi * pair.real / pair.imag >= np.log(RINGING_KEPT))
    regime = np.where(rings, DAMPED, QUIET)
    regime = np.where(growth > BORDER_PER_MIN, SUSTAINED, regime)
    regime = np.where(np.abs(growth) <= BORDER_PER_MIN, UNDECIDED, regime)
    return np.where(np.isfinite(growth), regime, FAILED).astype(np.int8)


def _slowest_pair(eigenvalues: NDArray[np.complex128]) -> NDArray[np.complex128]:
    """Of each subject's complex eigenvalues the one that fades last; a real one where there is none."""
    slowest = np.where(eigenvalues.imag > 0.0, eigenvalues.real, -np.inf).argmax(axis=1)
    return np.asarray(eigenvalues[np.arange(len(eigenvalues)), slowest])


def _ringing_period(eigenvalues: NDArray[np.complex128]) -> Array:
    rate = _slowest_pair(eigenvalues).imag
    return np.asarray(np.where(rate > 0.0, 2.0 * np.pi / np.where(rate > 0.0, rate, 1.0), np.nan))


def _keep(orbits: Orbits, rows: NDArray[np.int64], found: Orbits) -> None:
    """Write the orbits found for `rows` into the whole."""
    some = rows[found.found]
    for mine, theirs in zip((orbits.found, orbits.state, orbits.period, orbits.error, orbits.multiplier),
                            (found.found, found.state, found.period, found.error, found.multiplier), strict=True):  # fmt: skip
        mine[some] = theirs[found.found]


def second_attractors(subjects: Held) -> Orbits:
    """Attracting orbits beside attracting equilibria, from glucose x 1.5 and x 0.6."""
    n = len(subjects.Gin)
    orbits = Orbits(
        np.zeros(n, bool), np.full(subjects.rest.states.shape, np.nan), *(np.full(n, np.nan) for _ in range(3))
    )
    _search_second_attractor(subjects, np.arange(n), np.zeros(n, np.int8), orbits)
    return orbits


def _search_second_attractor(subjects: Held, rows: NDArray[np.int64], regime: NDArray[np.int8], orbits: Orbits) -> None:
    """Look for an orbit beside an attracting equilibrium, from glucose x 1.5 and x 0.6.

    Amplitudes that shrink at every cycle, and at the end at least half as fast as the equilibrium itself attracts,
    are on their way to it; where they linger at a finite amplitude an orbit is closed.
    """
    lead = subjects.body.card.states.index(subjects.body.traced.rest_of)
    for factor in BISTABLE_FACTORS:
        left = rows[~orbits.found[rows]]
        state, period = subjects.rest.states.copy(), linear_time(subjects.rest)
        state[:, lead] *= factor
        for count in BISTABLE_ROUNDS:
            if not len(left):
                break
            some = subjects.take(left)
            state[left], period[left], amplitude, lingers = follow(some, state[left], period[left], count)
            left = left[lingers]
            found = close(subjects.take(left), state[left], period[left], amplitude[lingers])
            _keep(orbits, left, found)
            left = left[~found.found]
    regime[rows[orbits.found[rows]]] = BISTABLE


def _measure(subjects: Held, rows: NDArray[np.int64], orbits: Orbits, turn: Array) -> None:
    if not len(rows):
        return
    some = subjects.take(rows)
    for here, found in orbit_courses(some, orbits.state[rows], orbits.period[rows], CYCLE_COLUMNS):
        out = np.full((len(here), len(CYCLE_COLUMNS) * ORBIT_COLUMNS), np.nan)
        orbit_rows(*reading(found), out)
        turn[rows[here]] = out.reshape(len(here), len(CYCLE_COLUMNS), ORBIT_COLUMNS)


def _seen_at_rest(subjects: Held) -> Array:
    """Glucose (mg/dL) and insulin (mU/L) at the equilibrium: float64[n, 2]."""
    seen = observe_states(subjects.body, subjects.rest.states, subjects.Gin, subjects.Iin, subjects.parameters)
    columns = list(subjects.body.traced.observed)
    return seen[:, [columns.index("glucose_mg_dl"), columns.index("insulin_mu_l")]]
