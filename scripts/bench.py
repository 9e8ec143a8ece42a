"""How fast, at what accuracy: ratios against general-purpose integrators in the same run, and where a run's time goes.

    python3 scripts/bench.py [--quick]

Workload W: 48 h of the six-state model under 216 mg/min, all 20 parameters lognormal with CV 15 %, glucose and
insulin every minute; error is the largest relative error of glucose on that grid.
"""

from __future__ import annotations

import ctypes
import json
import os
import platform
import statistics
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

sys.path.insert(0, str(Path(__file__).resolve().parent))

ROOT = Path(__file__).resolve().parent.parent
GRID_END_MIN = 2880.0
INFUSION = 216.0
PANEL = 2000
ROUNDS = 5
RTOL = 1e-9
"""LSODA tolerance at which its worst error is about that of the engine."""


def main(quick: bool) -> int:
    """Measure every row and print them as a table and as JSON."""
    import numpy as np

    from cohort.model.body import body
    from cohort.model.inputs import People
    from cohort.model.protocol import Arm, AtState, Constant
    from cohort.simulate.run import courses, prepare

    found = body("hepatic-lag")
    rng = np.random.default_rng(2026)
    sigma = np.sqrt(np.log(1 + 0.15**2))
    nominal = np.array(list(found.card.nominal.values()))
    n = 500 if quick else PANEL
    values = nominal * np.exp(sigma * rng.normal(size=(n, len(nominal))))
    nobody = np.full(n, np.nan)
    people = People(nobody, nobody, nobody, nobody)
    start = AtState({"Ip": 200.0, "Ii": 200.0, "G": 12000.0, "x1": 60.0, "x2": 60.0, "x3": 60.0})
    arm = Arm("W", GRID_END_MIN, start=start, glucose=(Constant(INFUSION),))
    grid = np.arange(0.0, GRID_END_MIN + 1.0)

    kept = np.empty((n, 2, len(grid)))

    def engine(accuracy: tuple[int, float] | None = None, sample: bool = True) -> Any:
        prepared = prepare(found, values, people, arm, ("glucose_mg_dl", "insulin_mu_l"), False)
        if accuracy:
            from cohort.simulate.run import assemble, typical, with_secretion

            stepper = found.stepper(("glucose_mg_dl", "insulin_mu_l"), True, *accuracy, False)
            parameters = with_secretion(values, 1.0)
            prepared = assemble(stepper, parameters, prepared.x0, typical(found), prepared.inputs, found.enters)
        out = kept if sample else None
        steps = 0
        for rows, course in courses(prepared, GRID_END_MIN):
            steps += int(course.n_steps.sum())
            if out is not None:
                course.sample(grid, out[rows[0] : rows[-1] + 1])
        return out, steps, prepared.stepper.step.flops

    reference = engine((20, 1e-13))[0].copy()
    usual, steps, flops = engine()
    error = np.abs(usual[:, 0] / reference[:, 0] - 1).max(axis=1)
    plain = median_time(lambda: engine(sample=False)) / n
    gridded = median_time(engine) / n
    lsoda_time, lsoda_error = scipy_lsoda(python_rates(), values, reference, grid, 2 if quick else 6)
    native_time, native_error = scipy_lsoda(compiled_rates(found), values, reference, grid, 4 if quick else 12)
    rows: list[dict[str, Any]] = [
        row("W, polynomials recorded", 1 / plain, lsoda_time / plain, error.max()),
        row("W, values every minute too", 1 / gridded, lsoda_time / gridded, error.max()),
        row("SciPy solve_ivp LSODA, rates in Python", 1 / lsoda_time, 1.0, lsoda_error),
        row("SciPy solve_ivp LSODA, our compiled rates", 1 / native_time, lsoda_time / native_time, native_error),
    ]
    outcome_time = full_outcomes(values, arm)
    rows.append(row("full outcomes, cycles and windows", 1 / outcome_time, lsoda_time / outcome_time, error.max()))
    print(f"{platform.processor() or platform.machine()}, {os.cpu_count()} cores, Python {platform.python_version()}; "
          f"{n} subjects, one core, medians of {ROUNDS}")  # fmt: skip
    print(f"{'':42s}{'subjects/s':>12s}{'x LSODA':>10s}{'worst error':>13s}")
    for r in rows:
        print(f"{r['what']:42s}{r['per_second']:12,.0f}{r['ratio']:10,.0f}{r['error']:13.1e}")
    print(f"mean step {GRID_END_MIN * n / steps:.1f} min, {flops} operations a step, "
          f"{flops * steps / n / plain / 1e9:.1f} x 10^9 operations/s")  # fmt: skip
    print(f"full outcomes over plain integration: {plain / outcome_time:.2f} x the subjects/s")
    print(f"subjects within 1e-6: {(error <= 1e-6).sum()} of {n}")
    parts = whole_run(20_000 if quick else 200_000)
    print(json.dumps({"rows": rows, "run": parts}, indent=2))
    return 0


def row(what: str, per_second: float, ratio: float, error: float) -> dict[str, Any]:
    """One line of the table."""
    return {"what": what, "per_second": per_second, "ratio": ratio, "error": float(error)}


def median_time(function: Callable[[], Any]) -> float:
    """Median seconds of ROUNDS calls after one that is not counted."""
    function()
    times = []
    for _ in range(ROUNDS):
        began = time.perf_counter()
        function()
        times.append(time.perf_counter() - began)
    return statistics.median(times)


def scipy_lsoda(
    rates: Callable[[Any], Callable[[float, Any], Any]], values: Any, reference: Any, grid: Any, n: int
) -> tuple[float, float]:
    """Seconds a subject and worst error of SciPy's LSODA, at RTOL."""
    import numpy as np
    from scipy.integrate import solve_ivp

    began, worst = time.perf_counter(), 0.0
    for i in range(n):
        x0 = [200.0, 200.0, 12000.0, 60.0, 60.0, 60.0]
        got = solve_ivp(rates(values[i]), (0, GRID_END_MIN), x0, "LSODA", t_eval=grid, rtol=RTOL, atol=RTOL * 100)
        worst = max(worst, float(np.abs(got.y[2] / (10 * values[i, 2]) / reference[i, 0] - 1).max()))
    return (time.perf_counter() - began) / n, worst


def python_rates() -> Callable[[Any], Callable[[float, Any], Any]]:
    """The equations as a user would type them."""
    from math import exp

    def of(p: Any) -> Callable[[float, Any], Any]:
        Vp, Vi, Vg, E, tp, ti, td, Rm, a1, C1, Ub, C2, C3, U0, Um, beta, C4, Rg, alpha, C5 = p.tolist()
        kappa = (1 / Vi + 1 / (E * ti)) / C4

        def rates(_: float, x: Any) -> Any:
            Ip, Ii, G, x1, x2, x3 = x.tolist()
            f1 = Rm / (1 + exp((C1 - G / Vg) / a1))
            f2 = Ub * (1 - exp(-G / (C2 * Vg)))
            f4 = U0 + (Um - U0) / (1 + (kappa * Ii) ** -beta)
            f5 = Rg / (1 + exp(alpha * (x3 / Vp - C5)))
            exchange = E * (Ip / Vp - Ii / Vi)
            return [
                f1 - exchange - Ip / tp, exchange - Ii / ti, INFUSION - f2 - G / (C3 * Vg) * f4 + f5,
                3 * (Ip - x1) / td, 3 * (x1 - x2) / td, 3 * (x2 - x3) / td,
            ]  # fmt: skip

        return rates

    return of


def compiled_rates(found: Any) -> Callable[[Any], Callable[[float, Any], Any]]:
    """The same through our own compiled program."""
    import numpy as np

    from cohort.compiled import compile_program

    call = ctypes.CFUNCTYPE(None, ctypes.c_void_p, ctypes.c_void_p)(compile_program(found.rates))
    source, out = np.ones(29), np.empty(6)
    where, there = source.ctypes.data, out.ctypes.data

    def of(p: Any) -> Callable[[float, Any], Any]:
        source[6], source[7], source[8:28] = INFUSION, 0.0, p

        def rates(_: float, x: Any) -> Any:
            source[:6] = x
            call(where, there)
            return out

        return rates

    return of


def full_outcomes(values: Any, arm: Any) -> float:
    """Seconds a subject of every outcome, cycles included."""
    import numpy as np

    from cohort.measure.outcomes import outcomes

    n = len(values)
    wide = np.column_stack([values, np.full((n, 2), np.nan)])
    return median_time(lambda: outcomes("hepatic-lag", wide, np.full(n, np.nan), arm)) / n


def whole_run(count: int) -> dict[str, Any]:
    """A whole run of `count` subjects in one arm of 48 h: seconds with one and two workers, and where they go."""
    import cProfile
    import pstats

    from cohort.execute.run import run_study
    from cohort.study import load_study

    study_file = ROOT / "studies" / "steady-infusion.toml"
    found: dict[str, Any] = {"subjects": count}
    with tempfile.TemporaryDirectory() as folder:
        text = study_file.read_text().split("[[arms]]")[0]
        path = Path(folder) / "bench.toml"
        path.write_text(
            text + '[[arms]]\nname = "a"\nduration = "48 h"\nglucose = [{ shape = "constant", rate = 216 }]\n'
        )
        for workers in (1, 2):
            study = load_study(path, [f"subjects.count={count}"])
            done = run_study(study, Path(folder) / f"out{workers}", workers, quiet=True)
            found[f"seconds_{workers}_workers"] = round(done.seconds, 2)
        from cohort.execute.shards import SUB_BATCH, Shard, Work, commit
        from cohort.execute.stages import rows as make_rows
        from cohort.execute.stages import tables

        profile = cProfile.Profile()
        study = load_study(path, [f"subjects.count={16384}"])
        profile.enable()
        pieces = [make_rows(study, s, s + SUB_BATCH, ["a"]) for s in range(0, 16384, SUB_BATCH)]
        commit(study, Path(folder) / "profiled", Work(Shard(0, 0, 16384), tables(study)), pieces)
        profile.disable()
        stats: dict[tuple[str, int, str], Any] = pstats.Stats(profile).stats  # type: ignore[attr-defined]

        def seconds(file: str, name: str) -> float:
            times = [v[3] for k, v in stats.items() if k[0].endswith(file) and k[2] == name]
            return round(max(times, default=0.0), 3)

        found["seconds_of_one_shard_of_16384"] = {
            "draw": seconds("population/recipe.py", "draw"),
            "cycles": seconds("measure/regime.py", "cycles"),
            "courses and windows": seconds("measure/outcomes.py", "_measure"),
            "write": seconds("execute/shards.py", "commit"),
        }
    return found


if __name__ == "__main__":
    from setup_env import call as call_command
    from setup_env import ready

    if os.environ.get("COHORT_BENCH") != "inside":
        os.environ["COHORT_BENCH"] = "inside"
        sys.exit(call_command([str(ready("run")), str(Path(__file__).resolve()), *sys.argv[1:]]))
    sys.path.insert(0, str(ROOT))
    sys.exit(main("--quick" in sys.argv[1:]))
