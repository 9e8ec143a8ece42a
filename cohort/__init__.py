"""In-silico cohorts and sensitivity studies of ultradian insulin-glucose oscillations, for planning research.

Not for diagnosis, dosing or care of anyone. The verbs of the command line, in Python:

    study   = cohort.load_study("studies/steady-infusion.toml")
    print(cohort.check(study))
    results = cohort.run(study)
    results.outcomes("steady 180")
    cohort.simulate("hepatic-lag", {"td": 40.0}, arm)
"""

from __future__ import annotations

import os
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING

from cohort import simulate as simulate
from cohort.errors import CohortError, Problem, RunError, StudyError
from cohort.stores import place

if TYPE_CHECKING:
    from cohort.report.results import Results
    from cohort.study import Study

__all__ = ["CohortError", "Problem", "RunError", "StudyError", "check", "load_study", "open_results", "run", "simulate"]


def load_study(path: str | os.PathLike[str], overrides: Sequence[str] = (), model_code: bool = False) -> Study:
    """Read and check a study file; with `model_code` its model may be a Python file, which is run. Raises StudyError with
    every problem."""
    from cohort.study import load_study as load

    return load(path, overrides, model_code=model_code)


def check(study: Study) -> str:
    """The plan of a study in words: subjects, runs, time, memory, disk."""
    from cohort.study import describe, plan

    return describe(study, plan(study))


def run(
    study: Study, out: str | os.PathLike[str] | None = None, workers: int | None = None, quiet: bool = True
) -> Results:
    """Run a study, or carry on where it stopped; `out` is results/<study file's stem> unless named.

    With several models each has a folder of its own in there, and the first one's results are returned.
    """
    from cohort.execute.run import run_study
    from cohort.execute.several import run_several
    from cohort.report.several import compare
    from cohort.report.summary import rebuild

    folder = place(out) if out is not None else Path("results") / study.path.stem
    if study.others:
        run_several(study, folder, workers=workers, quiet=quiet)
        compare(folder)
        return open_results(folder / study.model)
    run_study(study, folder, workers, quiet=quiet)
    return rebuild(folder, verify=False)[0]


def open_results(folder: str | os.PathLike[str]) -> Results:
    """Open a result folder."""
    from cohort.report.results import Results

    return Results(place(folder))
