"""A model ready to compute: its card, its traced equations, and the programs derived from them."""

from __future__ import annotations

import functools
from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property
from typing import Any

from cohort.errors import Problem, StudyError, nearest
from cohort.model import equations
from cohort.model.catalogue import MODELS, MOST_STAGES, ModelCard
from cohort.model.taylor import ORDER, TOLERANCE, Stepper
from cohort.model.trace import INPUTS, Symbol, Traced, derivative, evaluator, name, substitute, trace
from cohort.program import Program

ARM_PARAMETERS = ("secretion",)
"""Parameters that the arm sets, after the model's own."""


@dataclass(frozen=True)
class Body:
    """A model's card and its traced equations; programs are derived on first use."""

    card: ModelCard
    traced: Traced

    @property
    def parameters(self) -> tuple[str, ...]:
        """Names of what every program below takes as parameters, in order: the card's, then the arm's."""
        return (*self.card.parameters, *ARM_PARAMETERS)

    @functools.cache  # noqa: B019 - bodies live as long as the process
    def stepper(
        self,
        seen: tuple[str, ...],
        steady: bool,
        order: int = ORDER,
        tolerance: float = TOLERANCE,
        summarised: bool = True,
        relative: bool = False,
    ) -> Stepper:
        """One Taylor step that records the `seen` columns; `steady` where the inputs are constant within a step."""
        return Stepper(
            self.traced,
            seen,
            steady,
            order,
            tolerance,
            positive=self.card.positive,
            summarised=summarised,
            relative=relative,
        )

    @cached_property
    def rates(self) -> Program:
        """States, Gin, Iin, parameters -> rates of change."""
        return evaluator("rates", self._names, list(self.traced.rates.values()))

    @cached_property
    def seen(self) -> Program:
        """States, Gin, Iin, parameters -> every observed column, in the order of `traced.observed`."""
        return evaluator("seen", self._names, list(self.traced.observed.values()))

    @cached_property
    def jacobian(self) -> Program:
        """States, Gin, Iin, parameters -> d(rate i)/d(state j), row after row."""
        columns = [{state: Symbol("const", value=1.0)} for state in self.traced.states]
        slopes = [derivative(rate, along) for rate in self.traced.rates.values() for along in columns]
        return evaluator("jacobian", self._names, slopes)

    @cached_property
    def second(self) -> Program:
        """States, Gin, Iin, parameters, u, v -> second derivative of the rates along u and v."""
        return self._along(("u", "v"))

    @cached_property
    def third(self) -> Program:
        """States, Gin, Iin, parameters, u, v, w -> third derivative of the rates along u, v and w."""
        return self._along(("u", "v", "w"))

    def _along(self, directions: tuple[str, ...]) -> Program:
        rates, names = list(self.traced.rates.values()), list(self._names)
        for direction in directions:
            along = {state: name(f"{direction}.{state}") for state in self.traced.states}
            rates = [derivative(rate, along) for rate in rates]
            names += [f"{direction}.{state}" for state in self.traced.states]
        return evaluator("along " + " ".join(directions), names, rates)

    @cached_property
    def balance(self) -> Program:
        """The leading state at rest, Gin, Iin, parameters -> its rate there, the rate's slope, all states at rest."""
        lead = self.traced.rest_of
        rate = substitute(self.traced.rates[lead], self.traced.rest)
        slope = derivative(rate, {lead: Symbol("const", value=1.0)})
        rest = [self.traced.rest[state] for state in self.traced.states]
        return evaluator("balance", (lead, *INPUTS, *self.parameters), [rate, slope, *rest])

    @cached_property
    def enters(self) -> tuple[int, int]:
        """Which state, by index, a bolus of glucose and one of insulin raises: the one whose rate holds the input."""
        slopes = [[derivative(r, {i: Symbol("const", value=1.0)}) for r in self.traced.rates.values()] for i in INPUTS]
        held = [[node.op == "const" and node.value == 1.0 for node in row] for row in slopes]
        return held[0].index(True) if any(held[0]) else 0, held[1].index(True) if any(held[1]) else 0

    @property
    def _names(self) -> tuple[str, ...]:
        return (*self.traced.states, *INPUTS, *self.parameters)

    def __hash__(self) -> int:
        return hash(self.card.name)


def make_body(card: ModelCard, text: Callable[..., Any], at_rest: Callable[..., Any] | None = None) -> Body:
    """Trace a model's text. Raises ValueError where text and card name different states, KeyError for unknown names."""
    traced = trace(text, at_rest, (*card.parameters, *ARM_PARAMETERS))
    if traced.states != card.states:
        raise ValueError(f"{card.name}: the equations give {traced.states}, the card {card.states}")
    return Body(card, traced)


_TEXTS: dict[str, tuple[Callable[..., Any], Callable[..., Any]]] = {
    "hepatic-lag": (equations.hepatic_lag, equations.lag_at_rest),
    "prompt-liver": (equations.prompt_liver, equations.insulin_at_rest),
    "steady-liver": (equations.steady_liver, equations.insulin_at_rest),
    "release-by-glucose": (equations.release_by_glucose, equations.lag_at_rest),
    **{f"lag-chain-{n}": equations.lag_chain(n) for n in range(1, MOST_STAGES + 1)},
}


OWN: dict[str, Body] = {}
"""Bodies of users' own models (`cohort.model.own`)."""


@functools.cache
def body(model: str) -> Body:
    """Return the body of a model by name. Raises StudyError for an unknown one."""
    if model not in MODELS:
        allowed = ", ".join(MODELS)
        raise StudyError([Problem("model", f"{model!r} is not a model{nearest(model, MODELS)}; one of {allowed}")])
    return OWN[model] if model in OWN else make_body(MODELS[model], *_TEXTS[model])
