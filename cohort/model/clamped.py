"""The body under a glucose clamp: glucose held still, and the infusion that takes as one more thing to see."""

from __future__ import annotations

import functools
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from cohort.model.body import Body
from cohort.model.inputs import GLUCOSE, Inputs
from cohort.model.taylor import Stepper
from cohort.model.trace import Symbol, name, substitute

ZERO = Symbol("const", value=0.0)
CLAMP_RATE = "clamp_rate_mg_per_min"


@functools.cache
def clamp_steppers(body: Body, seen: tuple[str, ...], relative: bool = False) -> tuple[Stepper, Stepper]:
    """(free, held): steps of the body left to itself and of the body whose glucose is held.

    Both record `seen` and then CLAMP_RATE: zero in the free body; in the held one the balance of glucose, what use
    exceeds release by. Both read inputs as series, so one loop can drive either.
    """
    traced = body.traced
    lead = traced.rest_of
    needed = -substitute(traced.rates[lead], {"Gin": ZERO})
    free = replace(traced, observed={**traced.observed, CLAMP_RATE: ZERO * name(lead)})
    held = replace(traced, rates={**traced.rates, lead: ZERO}, observed={**traced.observed, CLAMP_RATE: needed})
    columns = (*seen, CLAMP_RATE)
    positive = body.card.positive
    return (
        Stepper(free, columns, False, positive=positive, relative=relative),
        Stepper(held, columns, False, positive=positive, relative=relative),
    )


def until(inputs: Inputs, from_min: float) -> Inputs:
    """The same inputs with every glucose piece and bolus ended where the clamp begins, which becomes a stop."""
    glucose = inputs.channel == GLUCOSE
    on, off = inputs.on.copy(), inputs.off.copy()
    off[:, glucose] = np.minimum(off[:, glucose], from_min)
    on[:, glucose] = np.minimum(on[:, glucose], from_min)
    late = (inputs.bolus_channel == GLUCOSE) & (inputs.bolus_time >= from_min)
    amount = np.where(late, 0.0, inputs.bolus_amount)
    return replace(inputs, on=on, off=off, stops=_with_stop(inputs.stops, from_min), bolus_amount=amount)


def _with_stop(stops: NDArray[np.float64], time: float) -> NDArray[np.float64]:
    if time <= 0.0:
        return stops
    known = (stops == time).any(axis=1)
    extra = np.where(known, np.inf, time)
    return np.sort(np.column_stack([stops, extra]), axis=1)
