"""Arms with a glucose clamp: the arm as written until the clamp begins, then glucose held at its target.

Below target an instant dose lifts glucose to it; above, nothing is given until it has fallen there. Held, the
infusion is what use exceeds release by; where that would be negative it is zero and glucose is left to itself until
it falls back. One subject at a time: whether a subject is held is found within its steps.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from cohort.compiled import call_program, compile_program, jit
from cohort.model.body import Body
from cohort.model.clamped import clamp_steppers, until
from cohort.model.inputs import People, inputs
from cohort.model.protocol import Arm
from cohort.model.rest import at_rest
from cohort.model.taylor import SUMMARY
from cohort.simulate.course import Courses
from cohort.simulate.engine import DONE, OUT_OF_BUDGET, constant_rates, elementary, moving_rates, verdict
from cohort.simulate.run import assemble, fades, start_states, typical, with_secretion

Array = NDArray[np.float64]

FREE, HELD = range(2)
_PARTS = 8
_MEAN_STEP_MIN = 3.0
_SPARE_STEPS = 256


@dataclass(frozen=True)
class ClampedCourses:
    """courses: columns as asked for, then the clamp's rate (mg/min); dose_mg float64[n], the instant dose at its
    beginning; target_mg_dl float64[n]; off_target_min float64[n]: time since the clamp began, within the measured
    window, during which glucose was not held."""

    courses: Courses
    dose_mg: Array
    target_mg_dl: Array
    off_target_min: Array


def clamped_courses(body: Body, values: Array, people: People, arm: Arm, seen: tuple[str, ...]) -> ClampedCourses:
    """Simulate n subjects through an arm with a clamp; values float64[n, len(card.parameters)].

    `seen` must begin with glucose_mg_dl, which is what the clamp reads.
    """
    assert arm.clamp is not None
    assert seen[0] == "glucose_mg_dl"
    n = len(values)
    free, held = clamp_steppers(body, seen, fades(arm))
    pieces = until(inputs(arm, people), arm.clamp.from_min)
    x0 = start_states(body, values, people, arm)
    parameters = with_secretion(values, arm.secretion)
    prepared = [assemble(s, parameters, x0, typical(body), pieces, body.enters) for s in (free, held)]
    lead = body.card.states.index(body.traced.rest_of)
    per_mg_dl = 10.0 * values[:, body.card.parameters.index("Vg")]
    target = _targets(body, values, arm, per_mg_dl)
    capacity = int(arm.duration_min / _MEAN_STEP_MIN) + _SPARE_STEPS + 2 * pieces.stops.shape[1]
    columns, size = len(seen) + 1, free.order + 1
    start, step_size = np.empty((n, capacity)), np.empty((n, capacity))
    record = np.empty((n, capacity, columns * (size + len(SUMMARY))))
    n_steps, status = np.zeros(n, np.int64), np.full(n, OUT_OF_BUDGET, np.int64)
    final, dose, off = np.full(x0.shape, np.nan), np.zeros(n), np.zeros(n)
    i = pieces
    _integrate(
        *(compile_program(s.step) for s in (free, held)), *(compile_program(p) for p in elementary()),
        free.n_input_orders, prepared[0].x0, prepared[0].inverse_scale, prepared[0].constants, prepared[1].constants,
        i.kind, i.channel, i.on, i.off, i.amplitude, i.rate, i.phase, i.stops, i.bolus_time, i.bolus_amount,
        i.bolus_channel, prepared[0].enters, lead, target, per_mg_dl, arm.clamp.from_min, arm.settle_min,
        columns, size, start, step_size, record, n_steps, status, final, dose, off,
    )  # fmt: skip
    found = Courses(free.seen, size, start, step_size, record, n_steps, status, final)
    return ClampedCourses(found, dose, target, off)


def _targets(body: Body, values: Array, arm: Arm, per_mg_dl: Array) -> Array:
    assert arm.clamp is not None
    if arm.clamp.glucose_mg_dl is not None:
        return np.full(len(values), arm.clamp.glucose_mg_dl)
    zeros = np.zeros(len(values))
    rest = at_rest(body, with_secretion(values, 1.0), zeros, zeros).states
    return rest[:, body.card.states.index(body.traced.rest_of)] / per_mg_dl


@jit
def first_below(a, level):  # type: ignore[no-untyped-def]
    """The first x in 0 < x <= 1 where the polynomial a has fallen to the level, or 2 where it has not."""
    n = a.shape[0] - 1
    before = 0.0
    for part in range(1, _PARTS + 1):
        x = part / _PARTS
        total = a[n]
        for k in range(n - 1, -1, -1):
            total = total * x + a[k]
        if total < level:
            low, high = before, x
            for _ in range(80):
                middle = 0.5 * (low + high)
                total = a[n]
                for k in range(n - 1, -1, -1):
                    total = total * middle + a[k]
                if total < level:
                    high = middle
                else:
                    low = middle
            return high
        before = x
    return 2.0


@jit
def _integrate(  # type: ignore[no-untyped-def]
    free, held, exponential, circular, orders, x0, inverse_scale, free_constants, held_constants, kind, channel, on,
    off, amplitude, rate, phase, stops, bolus_time, bolus_amount, bolus_channel, enters, lead, targets, per_mg_dl,
    begins, settle, columns, size, start, step_size, record, n_steps, status, final, dose, off_target,
):  # fmt: skip
    n, states = x0.shape
    at_inputs = 2 * states + 1
    at_constants = at_inputs + 2 * orders
    sources = (
        np.zeros((at_constants + free_constants.shape[1], 1)),
        np.zeros((at_constants + held_constants.shape[1], 1)),
    )
    result = np.zeros((states + 2 + record.shape[2], 1))
    constants = np.zeros(2)
    scratch = np.empty(4)
    for b in range(n):
        x = x0[b].copy()
        target = targets[b]
        sources[0][at_constants:, 0] = free_constants[b]
        sources[1][at_constants:, 0] = held_constants[b]
        time, stop, mode = 0.0, 0, FREE
        clamped = False
        fresh = True
        while True:
            if fresh:
                for q in range(bolus_channel.shape[0]):
                    if bolus_time[b, q] == time:
                        x[enters[bolus_channel[q]]] += bolus_amount[b, q]
                if time == begins and not clamped:
                    clamped = True
                    if x[lead] / per_mg_dl[b] <= target:
                        dose[b] = target * per_mg_dl[b] - x[lead]
                        x[lead] = target * per_mg_dl[b]
                        mode = HELD
                fresh = False
            source = sources[0] if mode == FREE else sources[1]
            for i in range(states):
                source[i, 0] = x[i]
                source[states + i, 0] = inverse_scale[b, i]
            left = stops[b, stop] - time
            source[2 * states, 0] = left
            constant_rates(source, 0, at_inputs, orders, time, b, kind, channel, on, off, amplitude)
            constants[0], constants[1] = source[at_inputs, 0], source[at_inputs + orders, 0]
            moving_rates(source, 0, at_inputs, orders, time, left, b, kind, channel, on, off, amplitude, rate, phase,
                         exponential, circular, constants, scratch)  # fmt: skip
            call_program(free if mode == FREE else held, source, result)
            h = result[states, 0]
            if result[states + 1, 0] != 1.0:
                status[b] = verdict(result[:states, 0], h)
                break
            first = states + 2 if mode == FREE else states + 2 + (columns - 1) * size
            event = 2.0
            if clamped:
                event = first_below(result[first : first + size, 0], target if mode == FREE else 0.0)
            if event < 1.0:
                source[2 * states, 0] = max(event * h, 2e-7)
                call_program(free if mode == FREE else held, source, result)
                h = result[states, 0]
            if n_steps[b] == start.shape[1]:
                break
            start[b, n_steps[b]], step_size[b, n_steps[b]] = time, h
            record[b, n_steps[b]] = result[states + 2 :, 0]
            n_steps[b] += 1
            if clamped and mode == FREE:
                off_target[b] += max(time + h - max(time, settle), 0.0)
            for i in range(states):
                x[i] = result[i, 0]
            time = stops[b, stop] if event > 1.0 and h == left else time + h
            if event <= 1.0:
                if mode == FREE:
                    x[lead] = target * per_mg_dl[b]
                mode = HELD if mode == FREE else FREE
            if time == stops[b, stop]:
                fresh = True
                stop += 1
                if stop == stops.shape[1] or stops[b, stop] == np.inf:
                    status[b] = DONE
                    break
        final[b] = x
