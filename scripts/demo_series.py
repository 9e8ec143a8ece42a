"""Make studies/halden-series.csv: twelve invented people of Lake Halden Clinic, sampled every 20 min for 12 h.

python3 scripts/demo_series.py
"""

from __future__ import annotations

import os
import sys
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parent))

ROOT = Path(__file__).resolve().parent.parent
PEOPLE = 12
STUDY = ROOT / "studies" / "sampling.toml"
OUT = ROOT / "studies" / "halden-series.csv"


def table() -> str:
    """The series as CSV text: people of studies/sampling.toml through its assay errors, every 13th sample missed."""
    import numpy as np

    from cohort.measure.outcomes import outcomes
    from cohort.observe.sampling import every, observe
    from cohort.population import draw
    from cohort.study import load_study

    study = load_study(STUDY)
    arm, schedule = study.arms[0], every("demo", 20.0, 720.0, missed=0.03)
    assert study.sampling is not None
    people = draw(study.recipe, 0, PEOPLE)
    times = np.array(schedule.times_min)
    found = outcomes(study.model, people.values, people.body_weight_kg, arm, arm.settle_min + times)
    seen = [
        observe(np.ascontiguousarray(found.sampled[:, i]), schedule, study.sampling.readings[analyte], study.seed, arm.name,
                analyte, (0, PEOPLE))
        for i, analyte in enumerate(("glucose", "insulin"))
    ]  # fmt: skip
    lines = ["subject,time (min),glucose (mg/dL),insulin (mU/L)"]
    for person in range(PEOPLE):
        for k, minute in enumerate(times):
            if np.isfinite(seen[0][person, k]):
                lines.append(f"H{person + 1:02d},{minute:g},{seen[0][person, k]:.1f},{seen[1][person, k]:.2f}")
    return "\n".join(lines) + "\n"


if __name__ == "__main__":
    from setup_env import call as call_command
    from setup_env import ready

    if os.environ.get("COHORT_DEMO") != "inside":
        os.environ["COHORT_DEMO"] = "inside"
        sys.exit(call_command([str(ready("run")), str(Path(__file__).resolve())]))
    sys.path.insert(0, str(ROOT))
    OUT.write_text(table())
