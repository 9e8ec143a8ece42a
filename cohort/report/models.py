"""The models in words: what `cohort models` prints."""

from __future__ import annotations

import textwrap

from cohort.errors import Problem, StudyError, nearest
from cohort.model.catalogue import MODELS, ModelCard
from cohort.quantities import INPUT_PARAMETERS, PARAMETERS


def list_models() -> str:
    """One paragraph a model."""
    lines = []
    for card in MODELS.values():
        lines += [card.name, *textwrap.wrap(card.title, 76, initial_indent="  ", subsequent_indent="  "), ""]
    return "\n".join([*lines, "cohort models NAME prints parameters, units, published values and sources."])


def describe_model(name: str) -> str:
    """One model in full: source, states, every parameter with unit, published value and physical range, limits."""
    if name not in MODELS:
        allowed = ", ".join(MODELS)
        raise StudyError([Problem("", f"{name!r} is not a model{nearest(name, MODELS)}; one of {allowed}")])
    card = MODELS[name]
    lines = [f"{card.name}: {card.title}", "", *textwrap.wrap(f"Source: {card.source}", 78), ""]
    lines += [f"States (amounts): {', '.join(card.states)}; insulin in mU, G in mg", "", *_parameters(card)]
    lines += ["", "They may vary too (properties of a person that act on meals):"]
    lines += [
        f"  {q.name:22s}{q.unit:>8s}{'':11s}{_range(q.low, q.high)}  {q.meaning}" for q in INPUT_PARAMETERS.values()
    ]
    lines += ["", "Known limits:"]
    for limit in card.limits:
        lines += textwrap.wrap(limit, 76, initial_indent="- ", subsequent_indent="  ")
    return "\n".join(lines)


def _parameters(card: ModelCard) -> list[str]:
    lines = [f"{'':2s}{'symbol':8s}{'published':>10s}  {'unit':8s}{'physical range':20s}meaning"]
    for symbol in card.parameters:
        q = PARAMETERS[symbol]
        unit = "" if q.unit == "1" else q.unit
        lines.append(f"  {symbol:8s}{card.nominal[symbol]:10g}  {unit:8s}{_range(q.low, q.high):20s}{q.meaning}")
    return lines


def _range(low: float, high: float) -> str:
    return f"{low:g} to {high:g}"
