"""[map]: from checked values to what is mapped."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from cohort.errors import nearest
from cohort.model.catalogue import ModelCard
from cohort.population.laws import Fixed
from cohort.population.recipe import Recipe
from cohort.quantities import PARAMETERS
from cohort.study.tree import Tree

INFUSION = "infusion"
INFUSION_RANGE = (1.0, 5000.0)
ALL = "all"


@dataclass(frozen=True)
class Axis:
    """A variable (a parameter, or infusion in mg/min) and its range."""

    name: str
    low: float
    high: float


@dataclass(frozen=True)
class Maps:
    """What is mapped around one body.

    values: its parameters, in the model's order; infusion (mg/min), secretion: what else holds; windows: variables to find
    windows in; region: two axes; forcing: ranges of forcing period (min) and relative amplitude; points of each axis.
    """

    values: tuple[float, ...]
    infusion: float
    secretion: float
    windows: tuple[str, ...]
    region: tuple[Axis, Axis] | None
    forcing: tuple[Axis, Axis] | None
    points: int


def maps(tree: Tree, card: ModelCard, recipe: Recipe) -> Maps | None:
    """Build [map], or None where there is none; every problem is noted in `tree`.

    The body is the published one, with the values that [subjects.parameters] gives everyone.
    """
    if "map" not in tree.values:
        return None
    values = tree.values["map"]
    known = (INFUSION, *card.parameters)
    asked = [name for name in ("windows", "region", "forcing") if name in values]
    if not asked and not any(p.key.startswith("map") for p in tree.problems):
        tree.problem(("map",), "asks for nothing; give windows, region or forcing")
    same = {name: law.value for name, law in recipe.strata[0].laws.items() if isinstance(law, Fixed)}
    body = tuple(float(same.get(p, card.nominal[p])) for p in card.parameters)
    infusion = values["infusion"].number if "infusion" in values else 216.0
    return Maps(
        body, infusion, float(values.get("secretion", 1.0)), _windows(tree, values.get("windows", []), known),
        _region(tree, values["region"], known) if "region" in values else None,
        _forcing(tree, values["forcing"]) if "forcing" in values else None, values.get("points", 60),
    )  # fmt: skip


def _windows(tree: Tree, names: list[str], known: tuple[str, ...]) -> tuple[str, ...]:
    if names == [ALL]:
        return known
    for i, name in enumerate(names):
        if name not in known:
            tree.problem(("map", "windows", i), f"{name[:60]!r} is no parameter of this model{nearest(name, known)}; infusion, "
                         f"{ALL!r} or one of {', '.join(known[1:])}")  # fmt: skip
    return tuple(dict.fromkeys(names))


def _region(tree: Tree, values: Mapping[str, Any], known: tuple[str, ...]) -> tuple[Axis, Axis] | None:
    for name in values:
        if name not in known:
            tree.problem(("map", "region", name), f"no parameter of this model{nearest(name, known)}; infusion or one of "
                         f"{', '.join(known[1:])}")  # fmt: skip
            return None
    if len(values) != 2:
        tree.problem(("map", "region"), f"{len(values)} axes; two are wanted, such as td and infusion")
        return None
    axes = [_axis(tree, name, value) for name, value in values.items()]
    return (axes[0], axes[1]) if axes[0] is not None and axes[1] is not None else None


def _axis(tree: Tree, name: str, value: Mapping[str, Any]) -> Axis | None:
    path = ("map", "region", name)
    for end in ("low", "high"):
        if end not in value:
            if not any(p.key.startswith(f"map.region.{name}") for p in tree.problems):
                tree.problem(path, f"{end} is missing")
            return None
    low, high = value["low"].number, value["high"].number
    least, most = INFUSION_RANGE if name == INFUSION else (PARAMETERS[name].low, PARAMETERS[name].high)
    if not least <= low < high <= most:
        tree.problem(path, f"{low:g} to {high:g} is not allowed; rising, within {least:g} to {most:g}")
        return None
    return Axis(name, low, high)


def _forcing(tree: Tree, values: Mapping[str, Any]) -> tuple[Axis, Axis] | None:
    axes = []
    for name, (low, high) in {"period": (50.0, 300.0), "relative_amplitude": (0.02, 0.8)}.items():
        given = values.get(name, {})
        ends = [given.get(end, usual) for end, usual in (("low", low), ("high", high))]
        numbers = [end if isinstance(end, int | float) else end.number for end in ends]
        if not numbers[0] < numbers[1]:
            tree.problem(("map", "forcing", name), f"{numbers[0]:g} to {numbers[1]:g} is not allowed; it must rise")
            return None
        axes.append(Axis(name, float(numbers[0]), float(numbers[1])))
    return axes[0], axes[1]
