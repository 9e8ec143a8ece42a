"""The shape of run.json: what a report reads of it is checked once, before any of it is used."""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

from cohort.errors import unprintable
from cohort.model.catalogue import MODELS
from cohort.reading import Maybe, Shape, misfit, read_json

_LONGEST = 100_000
_LARGEST = 10**15


def _text(value: Any) -> bool:
    return isinstance(value, str) and len(value) <= _LONGEST and not unprintable(value)


def _name(value: Any) -> bool:
    """Of a folder right below another: no way up, no way elsewhere."""
    return _text(value) and 0 < len(value) <= 100 and "/" not in value and not value.startswith(".")


def _model(value: Any) -> bool:
    return isinstance(value, str) and value in MODELS


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


_OUTCOME = {"arm": _name, "outcome": _text}
RECORD: dict[str, Shape] = {
    "title": _text, "model": _model, "seed": _seed, "count": _whole, "shards": _whole, "draw": _text, "state": _text,
    "arms": [_name], "strata": [_text], "varied": [_text], "overrides": [_text], "versions": {None: _text},
    "arm_facts": {None: {
        "hours": _number, "window_hours": _number, "steady_mg_per_min": Maybe(_number, absent=False), "disagrees": _flag,
        "forcing_period_min": Maybe(_number)}},
    "sampling": Maybe({
        "schedules": [_name], "unseen": {None: _text}, "false_pulses_per_h": {None: _number}, "optimistic": _flag,
        "rule": {"band_min": (_number, _number), "false_alarm": _number, "detect_in": _text, "swing_sds": _number}}),
    "recruitment": Maybe({"sizes": [_whole], "want": Maybe(_whole, absent=False), "assurance": _share, "evaluable": _share}),
    "selection": Maybe({"eligible": [{**_OUTCOME, "low": _bound, "high": _bound}],
                        "match": [{**_OUTCOME, "mean": _number, "sd": _number}]}),
    "persons": Maybe(_flag), "population": Maybe({"outer": _whole, "inner": _whole}),
    "fasting": Maybe({None: {"n": _whole, "glucose_mg_dl": [Maybe(_number)], "insulin_mu_l": [Maybe(_number)]}}),
}  # fmt: skip
RANKING: dict[str, Shape] = {
    "ranking": {"method": _text, "outcomes": [_text], "base": _whole, "replicates": _whole, "tolerance": _number,
                "max_runs": _whole, "second_order": _flag, "trajectories": _whole, "levels": _whole, "groups": {None: [_text]}},
    "scaling": _text, "given": _flag, "selected": _flag, "matched": _flag,
    "arms": [{"name": _name, "slot": _whole, "absent": {None: _text}}],
    "strata": [{
        "design": {"method": _text, "seed": _seed, "stratum": _text, "names": [_text], "replicates": _whole,
                   "factors": [{"name": _text, "columns": [_whole]}], "second_order": _flag, "levels": _whole},
        "index": _whole, "refused": _text, "doubling": _doubling, "stopped": _text, "plain": _whole, "redrawn": _whole}],
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
