"""Simulation by hand: named parameters in, courses out, for a notebook."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from cohort.errors import Problem, StudyError, nearest
from cohort.model.body import Body, body
from cohort.model.inputs import People, has_natural
from cohort.model.protocol import Arm
from cohort.quantities import INPUT_PARAMETERS
from cohort.simulate.clamp import clamped_courses
from cohort.simulate.course import Courses
from cohort.simulate.run import courses, prepare


def simulate(model: str | Body, parameters: Mapping[str, Any], arm: Arm, body_weight_kg: Any = None) -> Courses:
    """Take subjects through an arm.

    parameters: by symbol, numbers or arrays of one length n, in the units of `cohort models`; what is not named is
    at its published value. meal_absorption (min) and meal_bioavailability may be named too. body_weight_kg: number or
    array, needed by per-kg rates only. Returns the courses of n subjects (one where all are plain numbers) with
    every column of the model and, in arms with a clamp, its rate. Raises StudyError for names that do not exist, and for
    arms whose period is a multiple of the subject's own.
    """
    found = body(model) if isinstance(model, str) else model
    allowed = (*found.card.parameters, *INPUT_PARAMETERS)
    wrong = [
        Problem(p, f"not a parameter of {found.card.name}{nearest(p, allowed)}") for p in parameters if p not in allowed
    ]
    if has_natural(arm):
        wrong.append(Problem("arm", "a period here is stated in minutes; cohort.run knows each subject's own"))
    if wrong:
        raise StudyError(wrong)
    n = max((np.size(v) for v in (*parameters.values(), body_weight_kg)), default=1)

    def column(value: Any, otherwise: float) -> np.ndarray[Any, np.dtype[np.float64]]:
        return np.broadcast_to(np.asarray(otherwise if value is None else value, dtype=np.float64), (n,)).copy()

    values = np.column_stack([column(parameters.get(p), found.card.nominal[p]) for p in found.card.parameters])
    own = [column(parameters.get(p), np.nan) for p in INPUT_PARAMETERS]
    people = People(column(body_weight_kg, np.nan), own[0], own[1], np.full(n, np.nan))
    return simulate_values(found, values, people, arm, tuple(found.traced.observed))


def simulate_values(
    found: Body, values: np.ndarray[Any, np.dtype[np.float64]], people: People, arm: Arm, seen: tuple[str, ...]
) -> Courses:
    """As `simulate`, from arrays: float64[n, len(card.parameters)]; the courses have memory of their own."""
    if arm.clamp is not None:
        return clamped_courses(found, values, people, arm, seen).courses
    parts = []
    order = []
    for rows, part in courses(prepare(found, values, people, arm, seen), arm.duration_min):
        parts.append(part.copied(int(part.n_steps.max(initial=1))))
        order.append(rows)
    longest = max(part.start.shape[1] for part in parts)
    padded = [part.copied(longest) for part in parts]
    back = np.argsort(np.concatenate(order))
    arrays = [
        np.concatenate([getattr(part, name) for part in padded])[back]
        for name in ("start", "step_size", "record", "n_steps", "status", "final")
    ]
    return Courses(seen, padded[0].orders, *arrays)
