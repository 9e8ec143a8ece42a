"""[sampling] and [recruitment]: from checked values to schedules, readings, the detector's rule and predictions."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import Any

from cohort.model.protocol import Arm
from cohort.observe.design import BAND_MIN, MOST_SAMPLES, searched_band
from cohort.observe.detector import Rule
from cohort.observe.sampling import Reading, Schedule
from cohort.quantities import ANALYTES
from cohort.study.arms import NAME
from cohort.study.keys import YEAR_MIN
from cohort.study.tree import Quantity, Tree

USUAL_CV = {"glucose": 0.02, "insulin": 0.06}
USUAL_SD = {"glucose": 0.03, "insulin": 0.06}
USUAL_TIME_MIN = 30.0
MOST_RECRUITS = 5000
MOST_SIZES = 100
MOST_SCHEDULES = 100


@dataclass(frozen=True)
class Sampling:
    """What the clinic would see: schedules, how each analyte is read, and what counts as detected; warnings by schedule
    say what of the band it cannot see."""

    schedules: tuple[Schedule, ...]
    readings: dict[str, Reading]
    rule: Rule
    unseen: dict[str, str]


@dataclass(frozen=True)
class Recruitment:
    """Predictions for real people: numbers recruited, oscillators wanted with probability `assurance`, share of recruits
    who finish."""

    sizes: tuple[int, ...]
    want: int | None
    assurance: float
    evaluable: float


def sampling(tree: Tree, arms: Sequence[Arm]) -> Sampling | None:
    """Build [sampling], or None where there is none; every problem is noted in `tree`."""
    if "sampling" not in tree.values:
        return None
    values = tree.values["sampling"]
    band = BAND_MIN
    if "band" in values:
        found = [q.number for q in values["band"]]
        if len(found) != 2 or not found[0] < found[1]:
            tree.problem(("sampling", "band"), "two periods are wanted, the shorter first")
        else:
            band = (found[0], found[1])
    rule = Rule(band, float(values.get("false_alarm", 0.05)), values.get("detect_in", "glucose"))
    readings = {analyte: _reading(values, analyte) for analyte in ANALYTES}
    schedules: list[Schedule] = []
    unseen: dict[str, str] = {}
    listed = values.get("schedules", [])
    if not listed and not any(p.key.startswith("sampling.schedules") for p in tree.problems):
        tree.problem(("sampling",), "schedules is missing: when samples are taken")
    if len(listed) > MOST_SCHEDULES:
        tree.problem(("sampling", "schedules"), f"{len(listed)} schedules; at most {MOST_SCHEDULES} are allowed")
        return None
    for i, value in enumerate(listed):
        made = _schedule(tree, value, i, [s.name for s in schedules])
        if made is None:
            continue
        schedules.append(made)
        unseen[made.name] = _seen(tree, i, made, rule)
        for arm in arms:
            window = arm.duration_min - arm.settle_min
            if made.times_min[-1] > window + 1e-9:
                tree.problem(("sampling", "schedules", i), f"{made.name!r} ends {made.times_min[-1] / 60:g} h after settling, "
                             f"and arm {arm.name!r} has {window / 60:g} h there")  # fmt: skip
    return Sampling(tuple(schedules), readings, rule, unseen)


def _reading(values: dict[str, Any], analyte: str) -> Reading:
    background = values.get(f"{analyte}_background", {})
    limit = values.get(f"{analyte}_detection_limit")
    return Reading(
        float(values.get(f"{analyte}_cv", USUAL_CV[analyte])), float(background.get("sd", USUAL_SD[analyte])),
        background["time"].number if "time" in background else USUAL_TIME_MIN,
        float(values.get(f"{analyte}_drift", 0.0)), limit.number if limit is not None else 0.0,
    )  # fmt: skip


def _schedule(tree: Tree, value: dict[str, Any], i: int, before: list[str]) -> Schedule | None:
    path = ("sampling", "schedules", i)
    name = value.get("name")
    if not name:
        tree.problem(path, "name is missing")
        return None
    if not NAME.fullmatch(name):
        tree.problem((*path, "name"), f"{name[:60]!r} cannot name a folder; letters, digits, spaces and . _ + - within")
    if name in before:
        tree.problem((*path, "name"), f"{name!r} is the name of another schedule")
    times = _times(tree, value, path)
    if times is None:
        return None
    if len(times) > MOST_SAMPLES:
        tree.problem(path, f"{len(times):,} samples; at most {MOST_SAMPLES:,} a series are allowed")
        return None
    return Schedule(name, times, float(value.get("missed", 0.0)))


def _times(tree: Tree, value: dict[str, Any], path: tuple[str | int, ...]) -> tuple[float, ...] | None:
    def number(key: str, other: float) -> float:
        found = value.get(key)
        return found.number if isinstance(found, Quantity) else other

    if "times" in value:
        for key in ("every", "start", "duration"):
            if key in value:
                tree.problem((*path, key), "not allowed beside times")
        times = tuple(q.number for q in value["times"])
        if not times:
            tree.problem((*path, "times"), "is empty; it says when samples are taken")
            return None
        if any(b <= a for a, b in pairwise(times)):
            tree.problem((*path, "times"), "sampling times must rise")
            return None
        return times
    if "every" not in value or "duration" not in value:
        tree.problem(path, "every and duration are needed (or times)")
        return None
    step, begin, length = number("every", 1.0), number("start", 0.0), number("duration", 1.0)
    if begin + length > YEAR_MIN:
        tree.problem(path, f"ends {begin + length:g} min after settling; an arm lasts at most {YEAR_MIN:,.0f} min")
        return None
    count = int(min(length / step, 1e6) + 1e-9) + 1
    return tuple(begin + step * k for k in range(min(count, MOST_SAMPLES + 1)))


def _seen(tree: Tree, i: int, schedule: Schedule, rule: Rule) -> str:
    """What the schedule cannot see; a problem where that is everything."""
    import numpy as np

    try:
        _, warning = searched_band(np.array(schedule.times_min), rule.band_min)
    except ValueError as error:
        tree.problem(("sampling", "schedules", i), f"{schedule.name!r}: {error}")
        return ""
    if warning:
        tree.warnings.append(tree.place(("sampling", "schedules", i), f"{schedule.name!r}: {warning}"))
    return warning


def recruitment(tree: Tree) -> Recruitment | None:
    """Build [recruitment], or None where there is none."""
    if "recruitment" not in tree.values:
        return None
    values = tree.values["recruitment"]
    sizes = values.get("sizes", [])
    if len(sizes) > MOST_SIZES:
        tree.problem(("recruitment", "sizes"), f"{len(sizes):,} sizes; at most {MOST_SIZES} are allowed")
        return None
    for i, size in enumerate(sizes):
        if size != int(size) or not 1 <= size <= MOST_RECRUITS:
            tree.problem(
                ("recruitment", "sizes", i), f"{size:g} is not allowed; a whole number from 1 to {MOST_RECRUITS:,}"
            )
    if not sizes and "want" not in values and not any(p.key.startswith("recruitment") for p in tree.problems):
        tree.problem(("recruitment",), "sizes or want is missing: for how many people, or how many oscillators")
    if "want" not in values and "assurance" in values:
        tree.warnings.append(tree.place(("recruitment", "assurance"), "has no part without want"))
    return Recruitment(
        tuple(dict.fromkeys(int(s) for s in sizes)), values.get("want"), float(values.get("assurance", 0.9)),
        float(values.get("evaluable", 1.0)),
    )  # fmt: skip
