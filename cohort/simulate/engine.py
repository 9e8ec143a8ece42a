"""The compiled integrator: many subjects through one arm, several at a time, each as if it were alone.

Every lane of the vector holds one subject at its own time. A call of the step program takes all lanes one Taylor
step forward; the loop below records the step's polynomials, moves each lane to its next stop (where inputs jump),
and gives a lane whose subject has ended the next subject. No step is ever rejected and no lane looks at another, so
a subject's numbers are the same alone, in company, and in any order. The loop knows no model.
"""

from __future__ import annotations

import functools

import numpy as np

from cohort.compiled import LANES, call_program, copy_lanes, jit
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
    source, result, subject, time, until, stop, held, following, end, limit, record_from,
    start, step_size, record, n_steps, status, final, overflow,
):  # fmt: skip
    """Integrate until every subject before `end` is done; lanes that fall free take subjects before `limit`.

    Returns the subject that the next free lane takes, which the next call is given as `following`; between calls the
    lanes' state stays in source, result, subject, time, until, stop and held (`Lanes`).
    x0, inverse_scale, final: float64[n, states]; constants: float64[n, hoisted]; inputs as in
    `cohort.model.inputs.Inputs`; enters: state that each channel enters. Row b modulo rows of the record: start and
    step_size float64[rows, capacity] and record float64[rows, capacity, width] (`cohort.simulate.course.Courses`) of the
    steps that end after `record_from`; n_steps int64[n]; status int64[n], DONE or an index into FAILURES; overflow
    bool[n] where the record was too small (the subject must be done again with a larger one).
    """
    states = x0.shape[1]
    rows, capacity, width = record.shape
    kept = record.reshape(-1)
    at_inputs = 2 * states + 1
    at_constants = at_inputs + 2 * orders
    carried = (states + 2) * LANES
    scratch = np.empty(4)
    left = 0
    for l in range(LANES):
        if subject[l] < 0 and following < limit:
            subject[l], following = following, following + 1
            _seat(source, l, subject[l], x0, inverse_scale, constants, at_constants, time, stop, n_steps)
            until[l] = _stretch(source, l, subject[l], at_inputs, orders, time, stop, stops, held, kind, channel, on,
                                off, amplitude, bolus_time, bolus_amount, bolus_channel, enters)  # fmt: skip
        left += 0 <= subject[l] < end
    while left > 0:
        for l in range(LANES):
            source[2 * states, l] = until[l] - time[l]
        if not steady:
            for l in range(LANES):
                if subject[l] >= 0:
                    moving_rates(source, l, at_inputs, orders, time[l], until[l] - time[l], subject[l], kind, channel,
                                 on, off, amplitude, rate, phase, exponential, circular, held[l], scratch)  # fmt: skip
        call_program(step, source, result)
        for i in range(states):
            for l in range(LANES):
                source[i, l] = result[i * LANES + l]
        for l in range(LANES):
            b = subject[l]
            if b < 0:
                continue
            h = result[states * LANES + l]
            ended = result[(states + 1) * LANES + l] != 1.0
            if ended:
                status[b] = verdict(source[:states, l], h)
            elif time[l] + h > record_from:
                s, i = b % rows, n_steps[b]
                if i < capacity:
                    start[s, i], step_size[s, i] = time[l], h
                    copy_lanes(result, carried + l * width, kept, (s * capacity + i) * width, width)
                    n_steps[b] = i + 1
                else:
                    status[b], overflow[b], ended = OUT_OF_BUDGET, True, True
            if not ended:
                if h != source[2 * states, l]:
                    time[l] += h
                    continue
                time[l] = until[l]
                ended = stop[l] == stops.shape[1] or stops[b, stop[l]] == np.inf
                if ended:
                    status[b] = DONE
            if ended:
                for i in range(states):
                    final[b, i] = source[i, l]
                left -= b < end
                if following >= limit:
                    subject[l] = -1
                    continue
                left += following < end
                subject[l], following = following, following + 1
                _seat(source, l, subject[l], x0, inverse_scale, constants, at_constants, time, stop, n_steps)
            until[l] = _stretch(source, l, subject[l], at_inputs, orders, time, stop, stops, held, kind, channel, on,
                                off, amplitude, bolus_time, bolus_amount, bolus_channel, enters)  # fmt: skip
    return following


class Lanes:
    """What the integrator's lanes hold between calls; none holds a subject to begin with."""

    def __init__(self, inputs: int, outputs: int) -> None:
        self.source = np.zeros((inputs, LANES))
        self.result = np.zeros(outputs)
        self.subject, self.stop = np.full(LANES, -1, np.int64), np.zeros(LANES, np.int64)
        self.time, self.until, self.held = np.zeros(LANES), np.zeros(LANES), np.zeros((LANES, 2))


@jit
def _seat(source, l, b, x0, inverse_scale, constants, at_constants, time, stop, n_steps):  # type: ignore[no-untyped-def]
    """Put subject b into lane l, at time 0."""
    states = x0.shape[1]
    for i in range(states):
        source[i, l] = x0[b, i]
        source[states + i, l] = inverse_scale[b, i]
    for i in range(constants.shape[1]):
        source[at_constants + i, l] = constants[b, i]
    time[l], stop[l], n_steps[b] = 0.0, 0, 0


@jit
def _stretch(  # type: ignore[no-untyped-def]
    source, l, b, at, orders, time, stop, stops, held, kind, channel, on, off, amplitude, bolus_time, bolus_amount,
    bolus_channel, enters,
):  # fmt: skip
    """Begin what lies between two stops in lane l: doses now, constant inputs from now on. Returns the next stop."""
    for q in range(bolus_channel.shape[0]):
        if bolus_time[b, q] == time[l]:
            source[enters[bolus_channel[q]], l] += bolus_amount[b, q]
    constant_rates(source, l, at, orders, time[l], b, kind, channel, on, off, amplitude)
    held[l, 0], held[l, 1] = source[at, l], source[at + orders, l]
    stop[l] += 1
    return stops[b, stop[l] - 1]
