"""What a table's content depends on, as a digest; and what of a study may change without touching what is there."""

from __future__ import annotations

import hashlib
import json
from ast import literal_eval
from collections.abc import Mapping
from dataclasses import fields, is_dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from cohort.compiled import detector_identity, kernel_identity, kernel_sources
from cohort.infer.ranking import Design, Ranking
from cohort.model.protocol import Arm
from cohort.model.taylor import ORDER, TOLERANCE
from cohort.observe.sampling import Schedule
from cohort.population.laws import Empirical
from cohort.quantities import (
    CLAMP_OUTCOMES,
    COURSE_COLUMNS,
    CYCLE_OUTCOMES,
    FORCED_OUTCOMES,
    MEAL_OUTCOMES,
    WINDOW_OUTCOMES,
)
from cohort.study import Study

COLUMNS = (CYCLE_OUTCOMES, WINDOW_OUTCOMES, CLAMP_OUTCOMES, FORCED_OUTCOMES, MEAL_OUTCOMES, COURSE_COLUMNS)

GROWING = ("subjects.count", "ranking.base", "ranking.max_runs")
"""Keys that may grow in a folder that holds results; arms and outcomes to rank may be added."""

UNSEEN = (
    "title",
    "output.",
    "map.",
    "ranking.tolerance",
    "recruitment.",
    "subjects.eligible.",
    "subjects.match.",
    "subjects.population.",
)
"""Keys that no stored number depends on."""


def plain(value: Any) -> Any:
    """Dataclasses, mappings and arrays as what JSON can hold, floats exactly."""
    if isinstance(value, Empirical):
        return ["Empirical", _digest([x.hex() for x in value.values])]
    if is_dataclass(value) and not isinstance(value, type):
        return [type(value).__name__, {f.name: plain(getattr(value, f.name)) for f in fields(value)}]
    if isinstance(value, Mapping):
        return {str(k): plain(v) for k, v in sorted(value.items())}
    if isinstance(value, np.ndarray):
        return [str(value.dtype), hashlib.blake2b(np.ascontiguousarray(value).tobytes(), digest_size=16).hexdigest()]
    if isinstance(value, list | tuple):
        return [plain(v) for v in value]
    return float(value).hex() if isinstance(value, float) else value


def _digest(value: Any) -> str:
    text = json.dumps(value, sort_keys=True, separators=(",", ":"))
    return hashlib.blake2b(text.encode(), digest_size=16).hexdigest()


def subjects_identity(study: Study) -> str:
    """Of subjects/: the recipe without its count (with it where the draw depends on it), and the model's name."""
    recipe = plain(study.recipe)[1]
    if study.recipe.draw != "latin-hypercube" and study.recipe.table is None:
        recipe.pop("count")
    return _digest(["subjects", study.model, recipe, kernel_identity()])


def arm_identity(study: Study, arm: Arm, table: str) -> str:
    """Of an arm's table: its subjects, the protocol, kernels and accuracy. Other arms are not in it."""
    return _digest([table, subjects_identity(study), plain(arm), ORDER, TOLERANCE, plain(COLUMNS)])


def courses_identity(study: Study, arm: Arm, *chosen: NDArray[Any]) -> str:
    """Of an arm's kept courses: the arm's own identity, and who was chosen, why, and at which times."""
    return _digest([arm_identity(study, arm, "time_courses"), plain(chosen)])


def seen_identity(study: Study, arm: str, schedule: Schedule) -> str:
    """Of an arm's observations through one schedule: the arm's own identity, the schedule, errors and the rule."""
    assert study.sampling is not None
    readings = {analyte: plain(reading) for analyte, reading in study.sampling.readings.items()}
    return _digest(["observations", arm, plain(schedule), readings, plain(study.sampling.rule), detector_identity()])


def population_identity(study: Study, arm: Arm) -> str:
    """Of an arm's counts by draw of the population: laws with their uncertainty, inner subjects, eligibility, schedules."""
    recipe = plain(study.recipe)[1]
    recipe.pop("count")
    chosen = [plain(study.selection.eligible), [plain(a) for a in study.arms if a.name in study.selection.arms]]
    seen = [seen_identity(study, "", s) for s in study.sampling.schedules] if study.sampling else []
    kernels = [kernel_identity(), ORDER, TOLERANCE]
    return _digest(["population", study.model, recipe, plain(arm), chosen, seen, *kernels])


def ranking_identity(study: Study, design: Design, arm: Arm) -> str:
    """Of an arm's runs of a ranking: the stratum's laws, the design without its size, the arm, kernels and accuracy."""
    recipe = plain(study.recipe)[1]
    for key in ("count", "draw", "population"):
        recipe.pop(key)
    recipe["strata"] = [plain(replace(s, share=1.0)) for s in study.recipe.strata if s.name == design.stratum]
    kernels = [kernel_identity(), ORDER, TOLERANCE, plain(COLUMNS)]
    return _digest(["ranking", study.model, recipe, plain(design), plain(arm), *kernels])


def _arm_of(key: str, settings: Mapping[str, str]) -> str:
    """The name of the arm a key belongs to; names may hold dots, so the arms' own name keys decide."""
    names = [value for k, value in settings.items() if k.startswith("arms.") and k == f"arms.{value}.name"]
    return max((name for name in names if key.startswith(f"arms.{name}.")), key=len, default="")


def first_difference(before: Mapping[str, str], now: Mapping[str, str], arms: set[str], draw: str) -> str | None:
    """The first key of two studies' settings that differs and may not, or None.

    arms: names that were there before; draw: how people are drawn (a Latin hypercube cannot grow).
    """
    for key in dict.fromkeys((*before, *now)):
        if key.startswith(UNSEEN) or before.get(key) == now.get(key):
            continue
        if key.startswith(("ranking.", "sampling.")) and not any(k.startswith(key.split(".")[0] + ".") for k in before):
            continue
        if key.startswith("sampling.schedules.") and _schedule_of(key, now) not in _schedules(before):
            continue
        if key in GROWING and _grown(key, before, now) and not (key == "subjects.count" and draw == "latin-hypercube"):
            continue
        if key == "ranking.outcomes" and set(literal_eval(before[key])) <= set(literal_eval(now.get(key, "[]"))):
            continue
        if key.startswith("arms.") and key not in before and _arm_of(key, now) not in arms:
            continue
        return key
    return None


def changed_files(before: Mapping[str, Any], study: Study) -> str:
    """In words, which of the study's data files and of the package's sources differ from those in a run's record. Raises
    what a record of another shape raises."""
    data = _unlike(before["files"], dict(study.files))
    sources = _unlike(before.get("sources", {}), kernel_sources())
    if data:
        return f"another {', another '.join(data)}"
    made = dict(before["versions"]).get("cohort", "?")
    more = f" and {len(sources) - 3} more" if len(sources) > 3 else ""
    unlike = f"another {', '.join(sources[:3])}{more}" if sources else "other defaults or columns"
    return f"a version of this package (cohort {made}) with {unlike}"


def _unlike(before: Mapping[str, str], now: Mapping[str, str]) -> list[str]:
    return [name for name in sorted({*before, *now}) if before.get(name) != now.get(name)]


def _schedules(settings: Mapping[str, str]) -> set[str]:
    head = "sampling.schedules."
    return {value for k, value in settings.items() if k.startswith(head) and k == f"{head}{value}.name"}


def _schedule_of(key: str, settings: Mapping[str, str]) -> str:
    names = [n for n in _schedules(settings) if key.startswith(f"sampling.schedules.{n}.")]
    return max(names, key=len, default="")


def _grown(key: str, before: Mapping[str, str], now: Mapping[str, str]) -> bool:
    usual = {"ranking.base": Ranking.base, "ranking.max_runs": Ranking.max_runs}
    return int(now.get(key, usual.get(key, 0))) >= int(before.get(key, usual.get(key, 0)))
