"""The body and one infinitesimal neighbour: exact tangents of the flow, derived from the same equations."""

from __future__ import annotations

import functools

from cohort.model.body import Body
from cohort.model.taylor import Stepper
from cohort.model.trace import Traced, derivative, name


@functools.cache
def tangent_stepper(body: Body, order: int, tolerance: float, steady: bool = True) -> Stepper:
    """A stepper of states x and then v, with v' = J(x) v. `steady`: as in `Body.stepper`.

    Where v is given an infinite scale the step size looks at x alone: lanes that hold one subject with different v take the
    same steps, and their v are columns of the exact derivative of what the integrator computes. Where x hardly moves but
    its neighbours fall towards it fast, v needs a scale of its own.
    """
    traced = body.traced
    moved = {state: name("d" + state) for state in traced.states}
    slopes = {"d" + state: derivative(rate, moved) for state, rate in traced.rates.items()}
    states = (*traced.states, *slopes)
    augmented = Traced(states, traced.parameters, {**traced.rates, **slopes}, {}, traced.rest_of, traced.rest)
    return Stepper(augmented, (), steady, order, tolerance, body.card.positive, watched=len(traced.states))
