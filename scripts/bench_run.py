"""One run of a study with a watch on its compiled loops, in a process of its own: for `scripts/bench.py`.

Prints [seconds from the first part to the last, share of them and of the threads inside compiled loops, peak MB].
"""

from __future__ import annotations

import json
import resource
import sys
import time
from pathlib import Path
from typing import Any

sys.path.insert(0, str(Path(__file__).resolve().parent.parent))

LOOPS = {
    "cohort.simulate.run": ("integrate", "map_rows"),
    "cohort.measure.outcomes": ("window_rows", "meal_rows"),
    "cohort.measure.regime": ("orbit_rows",),
    "cohort.measure.cycle": ("_marks", "orbit_rows", "spectra", "solve_each", "leading_directions", "map_rows"),
    "cohort.model.rest": ("_solve", "_spectra"),
}
"""Compiled loops that Python calls in a run of outcomes."""


def main(path: str, count: str, threads: str, out: str) -> None:
    """Run it and print what was seen."""
    from importlib import import_module

    from cohort.execute.run import run_study
    from cohort.study import load_study

    inside = [0.0]

    def watched(loop: Any) -> Any:
        def timed(*arguments: Any) -> Any:
            began = time.perf_counter()
            found = loop(*arguments)
            inside[0] += time.perf_counter() - began
            return found

        return timed

    for module, names in LOOPS.items():
        room = import_module(module)
        for name in names:
            setattr(room, name, watched(getattr(room, name)))
    done = run_study(load_study(Path(path), [f"subjects.count={count}"]), Path(out), int(threads), quiet=True)
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1000
    print(json.dumps([done.seconds, inside[0] / done.seconds / int(threads), peak]))


if __name__ == "__main__":
    main(*sys.argv[1:])
