"""The shape of run.json: what a report reads of it is checked once, before any of it is used."""

from __future__ import annotations

import math
import re
from pathlib import Path
from typing import Any

from cohort.errors import unprintable
from cohort.model.catalogue import MODELS
from cohort.reading import Maybe, Shape, misfit, read_json

_LONGEST = 100_000
_OWN = re.compile(r"[^/\x00-\x1f]{1,100}@[0-9a-f]{8}")
_LARGEST = 10**15


def is_text(value: Any) -> bool:
    """Printable text of a reasonable length."""
    return isinstance(value, str) and len(value) <= _LONGEST and not unprintable(value)


def is_name(value: Any) -> bool:
    """The name of a folder right below another: no way up, no way elsewhere."""
    return is_text(value) and 0 < len(value) <= 100 and "/" not in value and not value.startswith(".")


def _model(value: Any) -> bool:
    """A model that ships, or a user's own, which the record says all of that a reader needs."""
    return isinstance(value, str) and (value in MODELS or _OWN.fullmatch(value) is not None)


def _flag(value: Any) -> bool:
    return isinstance(value, bool)


def _whole(value: Any) -> bool:
    return isinstance(value, int) and not isinstance(value, bool) and 0 <= value <= _LARGEST


def _seed(value: Any) -> bool:
    return isinstance(value, int) and not isinstance(value, bool) and 0 <= value < 2**63


def _bound(value: Any) -> bool:
    return isinstance(value, int | float) and not isinstance(value, bool) and abs(value) <= math.inf


def _number(value: Any) -> bool:
    return _bound(value) and abs(value) <= _LARGEST


def _share(value: Any) -> bool:
    return _number(value) and 0.0 < value <= 1.0


def _doubling(value: Any) -> bool:
    return _whole(value) and value <= 40


_OUTCOME = {"arm": is_name, "outcome": is_text}
RECORD: dict[str, Shape] = {
    "title": is_text, "model": _model, "seed": _seed, "count": _whole, "shards": _whole, "draw": is_text, "state": is_text,
    "arms": [is_name], "strata": [is_text], "varied": [is_text], "overrides": [is_text], "versions": {None: is_text},
    "arm_facts": {None: {
        "hours": _number, "window_hours": _number, "steady_mg_per_min": Maybe(_number, absent=False), "disagrees": _flag,
        "forcing_period_min": Maybe(_number), "forced": Maybe(_flag)}},
    "model_facts": Maybe({"title": is_text, "source": is_text, "limits": [is_text]}), "units": Maybe({None: is_text}),
    "sampling": Maybe({
        "schedules": [is_name], "unseen": {None: is_text}, "false_pulses_per_h": {None: _number}, "optimistic": _flag,
        "rule": {"band_min": (_number, _number), "false_alarm": _number, "detect_in": is_text, "swing_sds": _number}}),
    "recruitment": Maybe({"sizes": [_whole], "want": Maybe(_whole, absent=False), "assurance": _share, "evaluable": _share}),
    "selection": Maybe({"eligible": [{**_OUTCOME, "low": _bound, "high": _bound}],
                        "match": [{**_OUTCOME, "mean": _number, "sd": _number}]}),
    "persons": Maybe(_flag), "population": Maybe({"outer": _whole, "inner": _whole}),
    "fasting": Maybe({None: {"n": _whole, "glucose_mg_dl": [Maybe(_number)], "insulin_mu_l": [Maybe(_number)]}}),
}  # fmt: skip
RANKING: dict[str, Shape] = {
    "ranking": {"method": is_text, "outcomes": [is_text], "base": _whole, "replicates": _whole, "tolerance": _number,
                "max_runs": _whole, "second_order": _flag, "trajectories": _whole, "levels": _whole, "groups": {None: [is_text]}},
    "scaling": is_text, "given": _flag, "selected": _flag, "matched": _flag,
    "arms": [{"name": is_name, "slot": _whole, "absent": {None: is_text}}],
    "strata": [{
        "design": {"method": is_text, "seed": _seed, "stratum": is_text, "names": [is_text], "replicates": _whole,
                   "factors": [{"name": is_text, "columns": [_whole]}], "second_order": _flag, "levels": _whole},
        "index": _whole, "refused": is_text, "doubling": _doubling, "stopped": is_text, "plain": _whole, "redrawn": _whole}],
}  # fmt: skip


def read_record(folder: Path) -> dict[str, Any]:
    """run.json of a result folder. Raises OSError or ValueError, with what is wrong, where it is none."""
    found = read_json(folder / "run.json")
    wrong = misfit(found, RECORD)
    if wrong:
        raise ValueError(f"{wrong} is missing or not as a run writes it")
    arms = found["arms"]
    selection = found.get("selection") or {"eligible": [], "match": []}
    chosen = [entry["arm"] for entry in (*selection["eligible"], *selection["match"])]
    if not arms or not found["strata"] or len(set(arms)) < len(arms) or not {*arms, *chosen} <= set(found["arm_facts"]):
        raise ValueError("arms, strata and arm_facts do not belong together")
    record: dict[str, Any] = found
    return record
