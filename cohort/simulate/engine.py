"""The compiled integrator: many subjects through one arm, several at a time, each as if it were alone.

Every lane of the vector holds one subject at its own time. A call of the step program takes all lanes one Taylor
step forward; the loop below records the step's polynomials, moves each lane to its next stop (where inputs jump),
and gives a lane whose subject has ended the next subject. No step is ever rejected and no lane looks at another, so
a subject's numbers are the same alone, in company, and in any order. The loop knows no model.
"""

from __future__ import annotations

import functools

import numpy as np

from cohort.compiled import LANES, call_program, jit
from cohort.model.inputs import CONSTANT, DECAY, RISE_DECAY, WAVE
from cohort.program import Builder, Program
from cohort.quantities import FAILURES

NOT_FINITE, STEP_TOO_SMALL, OUT_OF_RANGE, OUT_OF_BUDGET, PROCESS_DIED = range(len(FAILURES))
DONE = -1
"""Status of a subject that reached the arm's end; other statuses index FAILURES."""


@functools.cache
def elementary() -> tuple[Program, Program]:
    """exp x, and (sin x, cos x), as programs of one input."""
    exponential, circular = Builder("exp", 1), Builder("sin_cos", 1)
    return exponential.finish([exponential.exp(0)]), circular.finish(circular.sin_cos(0))


@jit
def constant_rates(source, l, at, orders, t, b, kind, channel, on, off, amplitude):  # type: ignore[no-untyped-def]
    """Set lane l's input coefficients of order 0 to the constants that act from time t on; clear the others."""
    for i in range(2 * orders):
        source[at + i, l] = 0.0
    for p in range(kind.shape[0]):
        if kind[p] == CONSTANT and on[b, p] <= t < off[b, p]:
            source[at + channel[p] * orders, l] += amplitude[b, p]


@jit
def moving_rates(  # type: ignore[no-untyped-def]
    source, l, at, orders, t, left, b, kind, channel, on, off, amplitude, rate, phase, exponential, circular, held,
    scratch,
):  # fmt: skip
    """Set lane l's input coefficients at time t within a stretch that ends `left` later; `held` are its constants."""
    for i in range(2 * orders):
        source[at + i, l] = 0.0
    source[at, l] = held[0]
    source[at + orders, l] = held[1]
    middle = t + 0.5 * left
    for p in range(kind.shape[0]):
        if kind[p] == CONSTANT or not on[b, p] <= middle < off[b, p]:
            continue
        first = at + channel[p] * orders
        r = rate[b, p]
        if kind[p] == WAVE:
            scratch[0] = r * t + phase[b, p]
            call_program(circular, scratch, scratch[1:])
            even, odd = amplitude[b, p] * scratch[1], amplitude[b, p] * scratch[2]
            factor = 1.0
            for k in range(orders):
                term = even if k % 2 == 0 else odd
                source[first + k, l] += factor * (term if k % 4 < 2 else -term)
                factor *= r / (k + 1)
            continue
        scratch[0] = -r * (t - on[b, p])
        call_program(exponential, scratch, scratch[1:])
        term = amplitude[b, p] * scratch[1]
        if kind[p] == DECAY:
            for k in range(orders):
                source[first + k, l] += term
                term *= -r / (k + 1)
        elif kind[p] == RISE_DECAY:
            value = term * (t - on[b, p])
            before = 0.0
            for k in range(orders):
                source[first + k, l] += value + before
                value *= -r / (k + 1)
                before = term
                term *= -r / (k + 1)


@jit
def verdict(x, h):  # type: ignore[no-untyped-def]
    """The failure of an unhealthy step."""
    for value in x:
        if not np.isfinite(value):
            return NOT_FINITE
    return STEP_TOO_SMALL if not h > 1e-6 else OUT_OF_RANGE


@jit
def integrate(  # type: ignore[no-untyped-def]
    step, exponential, circular, orders, steady, x0, inverse_scale, constants,
    kind, channel, on, off, amplitude, rate, phase, stops, bolus_time, bolus_amount, bolus_channel, enters,
    begin, end, record_from, start, step_size, coefficients, summaries, n_steps, status, final, overflow,
):  # fmt: skip
    """Integrate subjects begin..end-1 from time 0 to their last stop.

    x0, inverse_scale, final: float64[n, states]; constants: float64[n, hoisted]; inputs as in
    `cohort.model.inputs.Inputs`; enters: state that each channel enters. Row s = b - begin of the record: start and
    step_size float64[rows, capacity], coefficients float64[rows, columns, capacity, order + 1] and summaries
    float64[rows, columns, capacity, SUMMARY] of the steps that end after `record_from`; n_steps int64[n];
    status int64[n], DONE or an index into FAILURES; overflow bool[n] where the record was
    too small (the subject must be done again with a larger one).
    """
    states = x0.shape[1]
    columns, size, marks = coefficients.shape[1], coefficients.shape[3], summaries.shape[3]
    capacity = start.shape[1]
    at_inputs = 2 * states + 1
    at_constants = at_inputs + 2 * orders
    source = np.zeros((at_constants + constants.shape[1], LANES))
    result = np.zeros((states + 2 + columns * (size + marks), LANES))
    subject = np.full(LANES, -1, dtype=np.int64)
    time = np.zeros(LANES)
    stop = np.zeros(LANES, dtype=np.int64)
    held = np.zeros((LANES, 2))
    scratch = np.empty(4)
    following = begin
    busy = 0
    for l in range(LANES):
        if following < end:
            subject[l] = following
            stop[l] = -1
            time[l] = 0.0
            following += 1
            busy += 1
    while busy > 0:
        for l in range(LANES):
            b = subject[l]
            if b < 0:
                continue
            if stop[l] == -1:  # a new subject
                for i in range(states):
                    source[i, l] = x0[b, i]
                    source[states + i, l] = inverse_scale[b, i]
                for i in range(constants.shape[1]):
                    source[at_constants + i, l] = constants[b, i]
                n_steps[b] = 0
                time[l] = 0.0
            if stop[l] == -1 or time[l] == stops[b, stop[l]]:  # a new stretch
                for q in range(bolus_channel.shape[0]):
                    if bolus_time[b, q] == time[l]:
                        source[enters[bolus_channel[q]], l] += bolus_amount[b, q]
                stop[l] += 1
                constant_rates(source, l, at_inputs, orders, time[l], b, kind, channel, on, off, amplitude)
                held[l, 0] = source[at_inputs, l]
                held[l, 1] = source[at_inputs + orders, l]
            left = stops[b, stop[l]] - time[l]
            source[2 * states, l] = left
            if not steady:
                moving_rates(source, l, at_inputs, orders, time[l], left, b, kind, channel, on, off, amplitude, rate,
                             phase, exponential, circular, held[l], scratch)  # fmt: skip
        call_program(step, source, result)
        for l in range(LANES):
            b = subject[l]
            if b < 0:
                continue
            h = result[states, l]
            ended = False
            if result[states + 1, l] != 1.0:
                status[b] = verdict(result[:states, l], h)
                ended = True
            else:
                if time[l] + h > record_from:
                    s, i = b - begin, n_steps[b]
                    if i < capacity:
                        start[s, i] = time[l]
                        step_size[s, i] = h
                        at = states + 2
                        for c in range(columns):
                            for j in range(size):
                                coefficients[s, c, i, j] = result[at + j, l]
                            at += size
                        for c in range(columns):
                            for j in range(marks):
                                summaries[s, c, i, j] = result[at + j, l]
                            at += marks
                        n_steps[b] = i + 1
                    else:
                        status[b] = OUT_OF_BUDGET
                        overflow[b] = True
                        ended = True
                for i in range(states):
                    source[i, l] = result[i, l]
                time[l] = stops[b, stop[l]] if h == source[2 * states, l] else time[l] + h
                if time[l] == stops[b, -1] or (stop[l] + 1 < stops.shape[1] and time[l] == stops[b, stop[l]]
                                               and stops[b, stop[l] + 1] == np.inf):  # fmt: skip
                    status[b] = DONE
                    ended = True
            if ended:
                for i in range(states):
                    final[b, i] = source[i, l]
                if following < end:
                    subject[l] = following
                    stop[l] = -1
                    following += 1
                else:
                    subject[l] = -1
                    busy -= 1
