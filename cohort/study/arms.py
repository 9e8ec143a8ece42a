"""[[arms]]: from checked values to protocols."""

from __future__ import annotations

import math
import re
from collections.abc import Callable, Mapping
from itertools import pairwise
from typing import Any

from cohort.errors import nearest
from cohort.model.catalogue import ModelCard
from cohort.model.inputs import LONGEST_AVERAGED_PERIOD_MIN
from cohort.model.protocol import (
    Arm,
    AtEquilibrium,
    AtFasting,
    AtState,
    Bolus,
    Clamp,
    Constant,
    Meal,
    Natural,
    OnOff,
    Shape,
    Sine,
    Start,
    Steps,
)
from cohort.study.tree import Quantity, Tree, dotted

Path = tuple[str | int, ...]

MOST_ARMS = 100
MOST_STOPS = 50_000
NAME = re.compile(r"[A-Za-z0-9](?:[A-Za-z0-9 ._+-]{0,58}[A-Za-z0-9])?")

NEEDED: dict[str, tuple[str, ...]] = {
    "constant": ("rate",),
    "steps": ("times", "rates"),
    "on-off": ("rate", "period"),
    "sine": ("mean", "relative_amplitude", "period"),
    "meal": ("time", "amount", "absorption"),
    "bolus": ("time", "amount"),
}
OPTIONAL: dict[str, tuple[str, ...]] = {
    "on-off": ("duty",),
    "sine": ("phase",),
    "meal": ("stages", "bioavailability", "repeat"),
}


def arms(tree: Tree, card: ModelCard, weighed: bool) -> tuple[Arm, ...]:
    """Build every arm, noting problems in `tree`; `weighed` says whether subjects have a body weight."""
    values = tree.values.get("arms", [])
    if not values:
        if not any(p.key.startswith("arms") for p in tree.problems):
            tree.problem(("arms",), "is missing; at least one [[arms]] is wanted")
        return ()
    if len(values) > MOST_ARMS:
        tree.problem(("arms",), f"{len(values)} arms; at most {MOST_ARMS} are allowed")
        return ()
    found: list[Arm] = []
    for i, value in enumerate(values):
        name = _name(tree, value, ("arms", i), [arm.name for arm in found], i)
        before = len(tree.problems)
        arm = _arm(tree, value, ("arms", i), card, name)
        if arm is not None and len(tree.problems) == before:
            _check(tree, arm, ("arms", i), weighed)
        if arm is not None:
            found.append(arm)
    return tuple(found)


def _name(tree: Tree, value: Mapping[str, Any], path: Path, taken: list[str], i: int) -> str:
    name = value.get("name")
    if name is None:
        if not _noted(tree, (*path, "name")):
            tree.problem(path, "name is missing")
        return f"arm {i + 1}"
    if not NAME.fullmatch(name):
        tree.problem((*path, "name"), f"{name[:60]!r} cannot name a folder; letters, digits, spaces and . _ + - within, at "
                     "most 60")  # fmt: skip
    like = [t for t in taken if _folded(t) == _folded(name)]
    if like:
        alike = f"is too much like {like[0]!r}, the name" if like[0].lower() != name.lower() else "is the name"
        tree.problem((*path, "name"), f"{name!r} {alike} of another arm")
    return str(name)


def _folded(name: str) -> str:
    """What a name comes to in the files of its figures."""
    return re.sub(r"[^a-z0-9._]+", "-", name.lower())


def _noted(tree: Tree, path: Path) -> bool:
    return any(p.key == dotted(path) or p.key.startswith(dotted(path) + ".") for p in tree.problems)


def _number(value: Any, otherwise: float) -> float:
    return otherwise if value is None else value.number if isinstance(value, Quantity) else float(value)


def _arm(tree: Tree, value: Mapping[str, Any], path: Path, card: ModelCard, name: str) -> Arm | None:
    if "duration" not in value:
        if not _noted(tree, (*path, "duration")):
            tree.problem(path, "duration is missing")
        return None
    duration, settle = _number(value["duration"], 0.0), _number(value.get("settle"), 0.0)
    if settle >= duration:
        tree.problem(
            (*path, "settle"), f"{settle:g} min is not allowed; it must be shorter than duration ({duration:g} min)"
        )
        return None
    steady = value.get("steady")
    return Arm(
        name,
        duration,
        settle,
        _start(tree, value, path, card),
        _shapes(tree, value.get("glucose", []), (*path, "glucose"), duration),
        _shapes(tree, value.get("insulin", []), (*path, "insulin"), duration),
        _number(value.get("secretion"), 1.0),
        _clamp(tree, value.get("clamp"), (*path, "clamp"), duration, card),
        None if steady is None else steady.number,
        steady is not None and "/kg" in steady.unit,
    )


def _start(tree: Tree, value: Mapping[str, Any], path: Path, card: ModelCard) -> Start:
    start = value.get("start", "fasting")
    if "displace" in value and start != "equilibrium":
        tree.problem((*path, "displace"), 'goes with start = "equilibrium"')
    if isinstance(start, dict):
        for state in start:
            if state not in card.states:
                tree.problem((*path, "start", state), f"not a state of {card.name}{nearest(state, card.states)}; its "
                             f"states: {', '.join(card.states)}")  # fmt: skip
        missing = [s for s in card.states if s not in start and not _noted(tree, (*path, "start", s))]
        if missing:
            tree.problem(
                (*path, "start"), f"{', '.join(missing)} missing; a state names all of {', '.join(card.states)}"
            )
        for state, number in start.items():
            if state in ("Ip", "Ii", "G") and number == 0:
                tree.problem((*path, "start", state), "0 is not allowed; an amount in the body must be > 0")
        return AtState({s: float(n) for s, n in start.items()})
    return AtEquilibrium(_number(value.get("displace"), 0.05)) if start == "equilibrium" else AtFasting()


def _clamp(tree: Tree, value: Mapping[str, Any] | None, path: Path, duration: float, card: ModelCard) -> Clamp | None:
    if value is None:
        return None
    if card.states[:3] != ("Ip", "Ii", "G"):
        tree.problem(path, f"needs a model whose glucose is an amount G in Vg; {card.name} is none")
        return None
    if "glucose" not in value:
        if not _noted(tree, (*path, "glucose")):
            tree.problem(path, 'glucose is missing: a concentration, or "own fasting"')
        return None
    begins = _number(value.get("from"), 0.0)
    if begins >= duration:
        tree.problem((*path, "from"), f"{begins:g} min is not allowed; the arm ends at {duration:g} min")
    target = value["glucose"]
    return Clamp(None if target == "own fasting" else target.number, begins)


def _shapes(tree: Tree, values: list[dict[str, Any]], path: Path, duration: float) -> tuple[Shape, ...]:
    found = (_shape(tree, value, (*path, i), duration) for i, value in enumerate(values))
    return tuple(shape for shape in found if shape is not None)


def _shape(tree: Tree, value: dict[str, Any], path: Path, duration: float) -> Shape | None:
    kind = value.get("shape")
    if kind is None:
        if not _noted(tree, (*path, "shape")):
            tree.problem(path, f"shape is missing: one of {', '.join(NEEDED)}")
        return None
    good = True
    for key in NEEDED[kind]:
        if key not in value:
            good = False
            if not _noted(tree, (*path, key)):
                tree.problem(path, f"{key} is missing; {kind} takes {', '.join(NEEDED[kind] + OPTIONAL.get(kind, ()))}")
    for key in value:
        if key != "shape" and key not in NEEDED[kind] + OPTIONAL.get(kind, ()):
            good = False
            tree.problem((*path, key), f"does not go with shape {kind!r}, which takes "
                         f"{', '.join(NEEDED[kind] + OPTIONAL.get(kind, ()))}")  # fmt: skip
    return MAKERS[kind](tree, value, path, duration) if good else None


def _per_kg(*values: Any) -> bool:
    return any(isinstance(v, Quantity) and "/kg" in v.unit for v in values)


def _constant(_tree: Tree, value: dict[str, Any], _path: Path, _duration: float) -> Shape:
    return Constant(value["rate"].number, _per_kg(value["rate"]))


def _steps(tree: Tree, value: dict[str, Any], path: Path, duration: float) -> Shape | None:
    times, rates = [t.number for t in value["times"]], value["rates"]
    if not times or len(times) != len(rates):
        tree.problem(path, f"times has {len(times)} entries, rates {len(rates)}; they must pair, at least one of each")
        return None
    if any(b <= a for a, b in pairwise(times)):
        tree.problem((*path, "times"), "must rise")
        return None
    if len({r.unit for r in rates}) > 1:
        tree.problem((*path, "rates"), "some are per kg and some are not; write all in one kind of unit")
        return None
    if times[-1] >= duration:
        tree.problem(
            (*path, "times"), f"the last step begins at {times[-1]:g} min, but the arm ends at {duration:g} min"
        )
        return None
    return Steps(tuple(times), tuple(r.number for r in rates), _per_kg(*rates))


def _period(tree: Tree, value: dict[str, Any], path: Path, duration: float) -> float | Natural | None:
    period = value["period"]
    if isinstance(period, dict):
        return Natural(float(period["natural"])) if "natural" in period else None
    if duration / period.number > MOST_STOPS:
        tree.problem((*path, "period"), f"{period.number:g} min makes {duration / period.number:,.0f} cycles in this arm; at "
                     f"most {MOST_STOPS:,} are allowed")  # fmt: skip
        return None
    return float(period.number)


def _on_off(tree: Tree, value: dict[str, Any], path: Path, duration: float) -> Shape | None:
    period = _period(tree, value, path, duration)
    if period is None:
        return None
    return OnOff(value["rate"].number, period, float(value.get("duty", 0.5)), _per_kg(value["rate"]))


def _sine(tree: Tree, value: dict[str, Any], path: Path, duration: float) -> Shape | None:
    period = _period(tree, value, path, duration)
    if period is None:
        return None
    mean, relative = value["mean"], float(value["relative_amplitude"])
    return Sine(mean.number, relative, period, float(value.get("phase", 0.0)), _per_kg(mean))


def _inside(tree: Tree, value: dict[str, Any], path: Path, duration: float) -> bool:
    time = value["time"].number
    if time >= duration:
        tree.problem((*path, "time"), f"{time:g} min is not allowed; the arm ends at {duration:g} min")
    return bool(time < duration)


def _meal(tree: Tree, value: dict[str, Any], path: Path, duration: float) -> Shape | None:
    if not _inside(tree, value, path, duration):
        return None
    repeat = value.get("repeat")
    if repeat is not None and duration / repeat.number > 5000:
        tree.problem((*path, "repeat"), f"{repeat.number:g} min makes more than 5,000 meals in this arm")
        return None
    return Meal(
        value["time"].number,
        value["amount"].number,
        value["absorption"].number,
        int(value.get("stages", 1)),
        float(value.get("bioavailability", 1.0)),
        None if repeat is None else repeat.number,
        _per_kg(value["amount"]),
    )


def _bolus(tree: Tree, value: dict[str, Any], path: Path, duration: float) -> Shape | None:
    if not _inside(tree, value, path, duration):
        return None
    return Bolus(value["time"].number, value["amount"].number, _per_kg(value["amount"]))


MAKERS: dict[str, Callable[[Tree, dict[str, Any], Path, float], Shape | None]] = {
    "constant": _constant,
    "steps": _steps,
    "on-off": _on_off,
    "sine": _sine,
    "meal": _meal,
    "bolus": _bolus,
}


def has_steady_input(arm: Arm) -> bool:
    """Whether the arm's inputs come to a steady value in the long run, or state one."""
    if arm.steady is not None:
        return True
    if arm.clamp is not None:
        return False
    return not any(_unsteady(shape) for shape in (*arm.glucose, *arm.insulin))


def pieces(shape: Shape, duration_min: float) -> int:
    """How many pieces a shape is integrated as: steps, meals, times that it is on."""
    if isinstance(shape, Steps):
        return len(shape.times_min)
    if isinstance(shape, Meal):
        return 1 if shape.repeat_min is None else math.ceil((duration_min - shape.time_min) / shape.repeat_min)
    if isinstance(shape, OnOff) and not isinstance(shape.period_min, Natural):
        return math.ceil(duration_min / shape.period_min)
    return 1


def _unsteady(shape: Shape) -> bool:
    if isinstance(shape, OnOff | Sine):
        return not isinstance(shape.period_min, Natural) and shape.period_min > LONGEST_AVERAGED_PERIOD_MIN
    return isinstance(shape, Meal | Bolus)


def _check(tree: Tree, arm: Arm, path: Path, weighed: bool) -> None:
    made = sum(pieces(shape, arm.duration_min) for shape in (*arm.glucose, *arm.insulin))
    if made > MOST_STOPS:
        tree.problem(
            path, f"its inputs make {made:,} steps, meals and cycles; at most {MOST_STOPS:,} an arm are allowed"
        )
    if isinstance(arm.start, AtEquilibrium) and not has_steady_input(arm):
        tree.problem((*path, "start"), '"equilibrium" needs a steady input, which an arm with meals, boluses, slow waves or a '
                     'clamp does not have; give steady, or start = "fasting"')  # fmt: skip
    if arm.steady is not None and arm.clamp is None and not any(_unsteady(s) for s in (*arm.glucose, *arm.insulin)):
        tree.problem((*path, "steady"), "this arm has a steady input of its own; steady is for arms that have none")
    if not weighed and (arm.steady_per_kg or any(s.per_kg for s in (*arm.glucose, *arm.insulin))):
        tree.problem(path, "has rates or amounts per kg, which need body weights: add [subjects.size] with a weight")
