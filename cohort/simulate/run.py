"""Subjects through an arm: what one call of the integrator needs, gathered from body, people and protocol."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from cohort.compiled import LANES, call_program, compile_program, jit
from cohort.model.body import Body
from cohort.model.inputs import Inputs, People, inputs, steady_input
from cohort.model.protocol import Arm, AtEquilibrium, AtState
from cohort.model.rest import at_rest
from cohort.model.taylor import SUMMARY, Stepper
from cohort.simulate.course import Courses
from cohort.simulate.engine import OUT_OF_BUDGET, elementary, integrate

Array = NDArray[np.float64]

BLOCK = 128
"""Subjects whose courses are in memory together: enough to keep every lane busy, few enough for the cache."""

_MEAN_STEP_MIN = 3.5
_SPARE_STEPS = 64
_LARGER = 16

FADING_BELOW = 0.1
"""Factors on secretion below this are taken as suppression."""


@dataclass(frozen=True)
class Prepared:
    """Everything the integrator needs for n subjects: start states, constants and inputs."""

    stepper: Stepper
    x0: Array
    inverse_scale: Array
    constants: Array
    inputs: Inputs
    enters: NDArray[np.int64]

    @property
    def count(self) -> int:
        return len(self.x0)


@jit
def map_rows(program, inputs, outputs):  # type: ignore[no-untyped-def]
    """Run a compiled program on every row."""
    for row in range(inputs.shape[0]):
        call_program(program, inputs[row], outputs[row])


def with_secretion(values: Array, secretion: float) -> Array:
    """Append the arm's parameter to the subjects' own: float64[n, len(body.parameters)]."""
    return np.column_stack([values, np.full(len(values), secretion)])


def start_states(body: Body, values: Array, people: People, arm: Arm) -> Array:
    """Where subjects begin: float64[n, states]; NaN where the equilibrium they begin at does not exist."""
    n = len(values)
    if isinstance(arm.start, AtState):
        return np.tile([arm.start.values[s] for s in body.card.states], (n, 1))
    if isinstance(arm.start, AtEquilibrium):
        steady = steady_input(arm, people)
        assert steady is not None, "an arm that starts at its equilibrium has a steady input"
        states = at_rest(body, with_secretion(values, arm.secretion), *steady).states
        states[:, body.card.states.index(body.traced.rest_of)] *= 1.0 + arm.start.displace
        return states
    return at_rest(body, with_secretion(values, 1.0), np.zeros(n), np.zeros(n)).states


def prepare(
    body: Body, values: Array, people: People, arm: Arm, seen: tuple[str, ...], summarised: bool = True
) -> Prepared:
    """Gather what `courses` needs. values: float64[n, len(card.parameters)] in canonical order."""
    pieces = inputs(arm, people)
    x0 = start_states(body, values, people, arm)
    parameters = with_secretion(values, arm.secretion)
    stepper = body.stepper(seen, pieces.steady, summarised=summarised, relative=fades(arm))
    return assemble(stepper, parameters, x0, typical(body), pieces, body.enters)


def fades(arm: Arm) -> bool:
    """Whether insulin may fade away in an arm, so that errors must be measured by what is left of it."""
    return arm.secretion < FADING_BELOW


def typical(body: Body) -> Array:
    """The size of each state, float64[states]."""
    return np.array([body.card.typical[s] for s in body.card.states])


def assemble(
    stepper: Stepper, parameters: Array, x0: Array, scale: Array, pieces: Inputs, enters: tuple[int, int]
) -> Prepared:
    """Compute the constants of each subject and bring all arrays to the form the loop takes."""
    constants = np.empty((len(parameters), len(stepper.hoisted.outputs)))
    map_rows(compile_program(stepper.hoisted), np.ascontiguousarray(parameters), constants)
    inverse = np.ascontiguousarray(np.broadcast_to(1.0 / scale, x0.shape))
    return Prepared(stepper, np.ascontiguousarray(x0), inverse, constants, pieces, np.array(enters))


def courses(
    prepared: Prepared, duration_min: float, record_from: float = 0.0, block: int = BLOCK
) -> Iterator[tuple[NDArray[np.int64], Courses]]:
    """Yield (row numbers, their courses) until every subject is done.

    The arrays of a yielded `Courses` are reused by the next: take what is needed before going on. Subjects whose
    course does not fit the usual record come last, alone, in a larger one; those that overflow it as well end with
    the status `out of budget`.
    """
    capacity = int((duration_min - record_from) / _MEAN_STEP_MIN) + _SPARE_STEPS + prepared.inputs.stops.shape[1]
    loop = _Loop(prepared, min(block, max(prepared.count, 1)), capacity)
    late: list[int] = []
    for begin in range(0, prepared.count, block):
        end = min(begin + block, prepared.count)
        found = loop.run(begin, end, record_from)
        rows = np.arange(begin, end)
        fits = ~loop.overflow[begin:end]
        late += rows[~fits].tolist()
        yield (rows, found) if fits.all() else (rows[fits], found.take(fits))
    if late:
        loop = _Loop(prepared, 1, capacity * _LARGER)
        for b in late:
            yield np.array([b]), loop.run(b, b + 1, record_from)


class _Loop:
    """The record's memory, reused from block to block, and the call of the compiled loop."""

    def __init__(self, prepared: Prepared, rows: int, capacity: int) -> None:
        stepper, n = prepared.stepper, prepared.count
        self.prepared = prepared
        columns = len(stepper.seen)
        self.start, self.step_size = np.empty((rows, capacity)), np.empty((rows, capacity))
        self.coefficients = np.empty((rows, columns, capacity, stepper.order + 1))
        self.summaries = np.empty((rows, columns, capacity, len(SUMMARY) if stepper.summarised else 0))
        self.n_steps, self.status = np.zeros(n, np.int64), np.full(n, OUT_OF_BUDGET, np.int64)
        self.final, self.overflow = np.full(prepared.x0.shape, np.nan), np.zeros(n, np.bool_)
        self.programs = (
            compile_program(stepper.step, LANES),
            *(compile_program(program) for program in elementary()),
            stepper.n_input_orders,
            stepper.steady,
        )

    def run(self, begin: int, end: int, record_from: float) -> Courses:
        p, i = self.prepared, self.prepared.inputs
        integrate(
            *self.programs, p.x0, p.inverse_scale, p.constants, i.kind, i.channel, i.on, i.off, i.amplitude, i.rate,
            i.phase, i.stops, i.bolus_time, i.bolus_amount, i.bolus_channel, p.enters, begin, end, record_from,
            self.start, self.step_size, self.coefficients, self.summaries, self.n_steps, self.status, self.final,
            self.overflow,
        )  # fmt: skip
        rows = min(end - begin, len(self.start))
        return Courses(
            p.stepper.seen, self.start[:rows], self.step_size[:rows], self.coefficients[:rows],
            self.summaries[:rows],
            self.n_steps[begin:end], self.status[begin:end], self.final[begin:end],
        )  # fmt: skip


def advance(prepared: Prepared) -> tuple[Array, NDArray[np.int64]]:
    """Integrate every subject to its last stop, recording nothing: (final states float64[n, states], status)."""
    loop = _Loop(prepared, 1, 1)
    found = loop.run(0, prepared.count, np.inf)
    return found.final, found.status


def observe_states(body: Body, states: Array, Gin: Array, Iin: Array, parameters: Array) -> Array:
    """What a reader sees of the body in these states: float64[n, observed columns], in the model's order."""
    source = np.ascontiguousarray(np.column_stack([states, Gin, Iin, parameters]))
    seen = np.empty((len(states), len(body.traced.observed)))
    map_rows(compile_program(body.seen), source, seen)
    return seen
