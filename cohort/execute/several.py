"""One study in several models: a whole result folder for each, side by side in one, and never a pooled number."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

from cohort.errors import Problem, StudyError
from cohort.execute.run import Finished, run_study
from cohort.study import Study
from cohort.tables import write_bytes


def run_several(study: Study, out: Path, **how: Any) -> Finished:
    """Run the study in each of its models, into out/<model>; how: as `run_study`. models.json names them.

    Raises StudyError where the folder holds something else, and what `run_study` raises.
    """
    every = (study, *study.others)
    record = {"title": study.title, "models": [one.model for one in every], "lacks": _lacks(every)}
    path = out / "models.json"
    if path.exists() and json.loads(path.read_text()).get("models") != record["models"]:
        raise StudyError(
            [Problem("model", "another list of models is in this folder; name another with --out", str(out))]
        )
    if not path.exists() and out.exists() and any(not p.name.startswith(".") for p in out.iterdir()):
        raise StudyError(
            [Problem("", "is not empty and holds no models.json; name an empty folder with --out", str(out))]
        )
    out.mkdir(parents=True, exist_ok=True)
    write_bytes(path, (json.dumps(record, indent=2) + "\n").encode())
    done = [run_study(one, out / one.model, **how) for one in every]
    return Finished(out, sum(d.simulated for d in done), sum(d.kept for d in done), sum(d.seconds for d in done))


def _lacks(every: tuple[Study, ...]) -> dict[str, list[str]]:
    """Of each model the varied parameters of the others that it does not have."""
    varied = list(dict.fromkeys(p for one in every for p in one.recipe.varied))
    return {one.model: [p for p in varied if p not in one.recipe.names] for one in every}
