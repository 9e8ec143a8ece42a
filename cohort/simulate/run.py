"""Subjects through an arm: what one call of the integrator needs, gathered from body, people and protocol."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from cohort.compiled import LANES, call_program, compile_program, jit, row_width
from cohort.model.body import Body
from cohort.model.inputs import Inputs, People, has_natural, inputs, steady_input
from cohort.model.protocol import Arm, AtEquilibrium, AtState
from cohort.model.rest import at_rest
from cohort.model.taylor import Stepper
from cohort.simulate.course import Courses
from cohort.simulate.engine import OUT_OF_BUDGET, Lanes, elementary, integrate

Array = NDArray[np.float64]

BLOCK = 32
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

    def take(self, rows: Sequence[int]) -> Prepared:
        """Return the chosen subjects."""
        some = list(rows)
        return replace(
            self, x0=self.x0[some], inverse_scale=self.inverse_scale[some], constants=self.constants[some],
            inputs=self.inputs.take(some),
        )  # fmt: skip


@jit
def map_rows(program, inputs, outputs):  # type: ignore[no-untyped-def]
    """Run a compiled program on every row."""
    for row in range(inputs.shape[0]):
        call_program(program, inputs[row], outputs[row])


def with_secretion(values: Array, secretion: float) -> Array:
    """Append the arm's parameter to the subjects' own: float64[n, len(body.parameters)]."""
    return np.column_stack([values, np.full(len(values), secretion)])


def start_states(body: Body, values: Array, people: People, arm: Arm) -> Array:
    """Where subjects begin: float64[n, states]; NaN where the equilibrium they begin at does not exist, or an input has a
    multiple of a period of their own that they do not have."""
    begin = _begin(body, values, people, arm)
    if has_natural(arm):
        begin[np.isnan(people.natural_period_min)] = np.nan
    return begin


def _begin(body: Body, values: Array, people: People, arm: Arm) -> Array:
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
    loop = _Loop(prepared, min(block, max(prepared.count, 1)), capacity, record_from)
    late: list[int] = []
    for begin in range(0, prepared.count, loop.block):
        end = min(begin + loop.block, prepared.count)
        found = loop.run(begin, end)
        rows = np.arange(begin, end)
        fits = ~loop.overflow[begin:end]
        late += rows[~fits].tolist()
        yield (rows, found) if fits.all() else (rows[fits], found.take(fits))
    if late:
        del loop, found
        again = _Loop(prepared.take(late), 1, capacity * _LARGER, record_from)
        for i, b in enumerate(late):
            yield np.array([b]), again.run(i, i + 1)


class _Loop:
    """The record's memory, two blocks of which one is read while the other begins to fill, and the compiled loop."""

    def __init__(self, prepared: Prepared, block: int, capacity: int, record_from: float) -> None:
        stepper, n = prepared.stepper, prepared.count
        self.prepared, self.block, self.record_from, self.following = prepared, block, record_from, 0
        rows, width = 2 * block, row_width(stepper.step, stepper.carried, LANES)
        self.start, self.step_size = np.empty((rows, capacity)), np.empty((rows, capacity))
        self.record = np.empty((rows, capacity, width))
        self.n_steps, self.status = np.zeros(n, np.int64), np.full(n, OUT_OF_BUDGET, np.int64)
        self.final, self.overflow = np.full(prepared.x0.shape, np.nan), np.zeros(n, np.bool_)
        self.lanes = Lanes(stepper.step.n_inputs, (stepper.carried + width) * LANES)
        self.programs = (
            compile_program(stepper.step, LANES, stepper.carried),
            *(compile_program(program) for program in elementary()),
            stepper.n_input_orders,
            stepper.steady,
        )

    def run(self, begin: int, end: int) -> Courses:
        """The courses of subjects begin..end-1, a block or its rest; call for one block after the other."""
        p, i, lanes = self.prepared, self.prepared.inputs, self.lanes
        self.following = integrate(
            *self.programs, p.x0, p.inverse_scale, p.constants, i.kind, i.channel, i.on, i.off, i.amplitude, i.rate,
            i.phase, i.stops, i.bolus_time, i.bolus_amount, i.bolus_channel, p.enters,
            lanes.source, lanes.result, lanes.subject, lanes.time, lanes.until, lanes.stop, lanes.held,
            self.following, end, min(begin + 2 * self.block, p.count), self.record_from,
            self.start, self.step_size, self.record, self.n_steps, self.status, self.final, self.overflow,
        )  # fmt: skip
        first = begin % len(self.start)
        rows = slice(first, first + end - begin)
        return Courses(
            p.stepper.seen, p.stepper.order + 1, self.start[rows], self.step_size[rows], self.record[rows],
            self.n_steps[begin:end], self.status[begin:end], self.final[begin:end],
        )  # fmt: skip


def advance(prepared: Prepared) -> tuple[Array, NDArray[np.int64]]:
    """Integrate every subject to its last stop, recording nothing: (final states float64[n, states], status)."""
    n = prepared.count
    found = _Loop(prepared, max(n, 1), 0, np.inf).run(0, n)
    return found.final, found.status


def observe_states(body: Body, states: Array, Gin: Array, Iin: Array, parameters: Array) -> Array:
    """What a reader sees of the body in these states: float64[n, observed columns], in the model's order."""
    source = np.ascontiguousarray(np.column_stack([states, Gin, Iin, parameters]))
    seen = np.empty((len(states), len(body.traced.observed)))
    map_rows(compile_program(body.seen), source, seen)
    return seen
