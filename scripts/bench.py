"""How fast, at what accuracy: ratios against general-purpose integrators in the same run, and where a run's time goes.

    python3 scripts/bench.py [--quick | --full] [--out FOLDER]

Workload W: 48 h of the six-state model under 216 mg/min, all 20 parameters lognormal with CV 15 %, glucose and insulin
every minute; error is the largest relative error of glucose on that grid against order 20 at 1e-13. Every other method takes
the loosest tolerance of its ladder whose worst error is at most 1e-6. --quick: fewer subjects and no large runs; --full: the
runs of 10^6 and 2 x 10^6 subjects too (half an hour). FOLDER gets bench.json and bench.svg.
"""

from __future__ import annotations

import argparse
import datetime as dt
import json
import os
import platform
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

sys.path.insert(0, str(Path(__file__).resolve().parent))

ROOT = Path(__file__).resolve().parent.parent
GRID_END_MIN = 2880.0
ENOUGH = 1e-6
ROUNDS = 5
SPREADS = (0.15, 0.30)
SEEN = ("glucose_mg_dl", "insulin_mu_l")
LADDERS = {
    "SciPy solve_ivp LSODA, rates in Python": ("lsoda", 6, (1e-8, 3e-9, 1e-9)),
    "SUNDIALS CVODE, right-hand side in C": ("cvode", 400, (1e-8, 3e-9, 1e-9, 3e-10)),
    "Tsit5 in numba, one subject at a time": ("tsit5", 400, (1e-7, 3e-8, 1e-8, 3e-9)),
    "diffrax Dopri8, vmap and jit, float64": ("batch", 100, (1e-7, 3e-8, 1e-8, 3e-9)),
}


class Workload:
    """W on n subjects whose parameters have the given spread."""

    def __init__(self, n: int, spread: float, seed: int = 2026) -> None:
        import numpy as np

        from cohort.model.body import body
        from cohort.model.inputs import People
        from cohort.model.protocol import Arm, AtState, Constant

        self.body, self.n = body("hepatic-lag"), n
        nominal = np.array(list(self.body.card.nominal.values()))
        sigma = np.sqrt(np.log(1 + spread**2))
        self.values = nominal * np.exp(sigma * np.random.default_rng(seed).normal(size=(n, len(nominal))))
        nobody = np.full(n, np.nan)
        self.people = People(nobody, nobody, nobody, nobody)
        start = AtState({"Ip": 200.0, "Ii": 200.0, "G": 12000.0, "x1": 60.0, "x2": 60.0, "x3": 60.0})
        self.arm = Arm("W", GRID_END_MIN, start=start, glucose=(Constant(216.0),))
        self.grid, self.kept = np.arange(0.0, GRID_END_MIN + 1.0), np.empty((n, 2, int(GRID_END_MIN) + 1))
        self.reference = self.gridded((20, 1e-13))[0].copy()

    def prepared(self, accuracy: tuple[int, float] | None = None, summarised: bool = False) -> Any:
        """The integrator's arrays, at the usual or the given order and tolerance."""
        from cohort.simulate.run import assemble, prepare, typical, with_secretion

        found = prepare(self.body, self.values, self.people, self.arm, SEEN, summarised)
        if accuracy is None:
            return found
        stepper = self.body.stepper(SEEN, True, *accuracy, False)
        parameters = with_secretion(self.values, 1.0)
        return assemble(stepper, parameters, found.x0, typical(self.body), found.inputs, self.body.enters)

    def gridded(self, accuracy: tuple[int, float] | None = None) -> tuple[Any, int, int]:
        """(values on the grid, all steps, operations a step)."""
        from cohort.simulate.run import courses

        prepared, steps = self.prepared(accuracy), 0
        for rows, course in courses(prepared, GRID_END_MIN):
            steps += int(course.n_steps.sum())
            whole = rows[-1] - rows[0] + 1 == len(rows)
            if whole:
                course.sample(self.grid, self.kept[rows[0] : rows[-1] + 1])
            else:
                self.kept[rows] = course.sample(self.grid)
        return self.kept, steps, prepared.stepper.step.flops

    def polynomials(self) -> None:
        """The courses alone, recorded as polynomials."""
        from cohort.simulate.run import courses

        for _ in courses(self.prepared(), GRID_END_MIN):
            pass

    def windows(self) -> None:
        """Window outcomes from the polynomials, no grid."""
        import numpy as np

        from cohort.measure.roots import reading
        from cohort.measure.windows import GLUCOSE_WINDOW, INSULIN_WINDOW, LEVELS_MG_DL, window_rows
        from cohort.simulate.run import courses

        period, levels = np.full(self.n, 110.0), np.array(LEVELS_MG_DL)
        for rows, course in courses(self.prepared(summarised=True), GRID_END_MIN):
            out = np.full((len(rows), len(GLUCOSE_WINDOW) + len(INSULIN_WINDOW)), np.nan)
            window_rows(*reading(course), 0.0, GRID_END_MIN, period[rows], levels, out)

    def outcomes(self) -> None:
        """Every outcome, cycles included."""
        import numpy as np

        from cohort.measure.outcomes import outcomes

        wide = np.column_stack([self.values, np.full((self.n, 2), np.nan)])
        outcomes("hepatic-lag", wide, np.full(self.n, np.nan), self.arm)

    def errors(self, found: Any) -> Any:
        """Each subject's largest relative error of glucose."""
        import numpy as np

        return np.abs(found[:, 0] / self.reference[: len(found), 0] - 1).max(axis=1)


def main() -> int:
    """Measure every row; print the table, the rest and the JSON."""
    asked = argparse.ArgumentParser(description="how fast, at what accuracy")
    asked.add_argument("--quick", action="store_true")
    asked.add_argument("--full", action="store_true")
    asked.add_argument("--out", type=Path)
    options = asked.parse_args()
    found: dict[str, Any] = {"date": dt.date.today().isoformat(), "machine": machine()}
    print(f"{found['date']}, {found['machine']}")
    w = Workload(400 if options.quick else 2000, SPREADS[0])
    found["rows"] = engine_rows(w) + other_rows(w)
    print_rows(found["rows"])
    found["bound"] = bound(w, found["rows"][0]["per_second"])
    found["panels"] = panels(w)
    for name in ("bound", "panels"):
        print(f"{name}: {json.dumps(found[name])}")
    for name, measure in (("workers", workers), ("growth", growth), ("start", start_up)):
        found[name] = measure(options)
        print(f"{name}: {json.dumps(found[name])}", flush=True)
    if options.out:
        options.out.mkdir(parents=True, exist_ok=True)
        (options.out / "bench.json").write_text(json.dumps(found, indent=2) + "\n")
        plot(found["rows"], options.out / "bench.svg")
    return 0


def machine() -> str:
    """Processor, cores and Python, as far as the machine tells."""
    name = platform.processor() or platform.machine()
    info = Path("/proc/cpuinfo")
    if info.exists():
        models = [line.split(":")[1].strip() for line in info.read_text().splitlines() if line.startswith("model name")]
        name = models[0] if models else name
    from cohort.compiled import LANES

    return f"{name}, {os.cpu_count()} cores, {LANES} lanes, Python {platform.python_version()}"


def median_time(function: Callable[[], Any]) -> float:
    """Median seconds of ROUNDS calls after one that is not counted."""
    function()
    times = []
    for _ in range(ROUNDS):
        began = time.perf_counter()
        function()
        times.append(time.perf_counter() - began)
    return statistics.median(times)


def engine_rows(w: Workload) -> list[dict[str, Any]]:
    """Our own rows, the run that writes the grid first."""
    error = float(w.errors(w.gridded()[0]).max())
    steps: dict[str, Callable[[], Any]] = {"W, values every minute": w.gridded, "W, polynomials only": w.polynomials,
             "window outcomes, no grid": w.windows, "full outcomes with cycles": w.outcomes}  # fmt: skip
    return [row(what, w.n / median_time(function), error) for what, function in steps.items()]


def other_rows(w: Workload) -> list[dict[str, Any]]:
    """The others' rows, each at the loosest tolerance that is accurate enough."""
    import bench_others

    rows = []
    for what, (name, n, ladder) in LADDERS.items():
        why = getattr(bench_others, f"{name}_missing", lambda: "")()
        if why:
            print(f"{what}: {why}")
            continue
        some = w.values[:n]
        for tolerance in ladder:
            values, seconds = getattr(bench_others, name)(some, tolerance)
            error = float(w.errors(values).max())
            if error <= ENOUGH:
                break
        seconds = statistics.median([seconds, *(getattr(bench_others, name)(some, tolerance)[1] for _ in range(2))])
        rows.append(row(f"{what} ({tolerance:g})", len(some) / seconds, error))
    return rows


def row(what: str, per_second: float, error: float) -> dict[str, Any]:
    """One line of the table."""
    return {"what": what, "per_second": per_second, "error": error}


def print_rows(rows: list[dict[str, Any]]) -> None:
    """The table: subjects/s, how many times fewer than the first row, worst error."""
    print(f"{'':52s}{'subjects/s':>12s}{'first row is x':>16s}{'worst error':>13s}")
    for r in rows:
        r["ratio"] = rows[0]["per_second"] / r["per_second"]
        print(f"{r['what']:52s}{r['per_second']:12,.0f}{r['ratio']:16,.2f}{r['error']:13.1e}")


def bound(w: Workload, per_second: float) -> dict[str, Any]:
    """The counted arithmetic of W over what this core does of nothing but fused operations on full vectors."""
    _, steps, flops = w.gridded()
    sampling = 2 * (GRID_END_MIN + 1) * 12
    counted = flops * steps / w.n + sampling
    peak = peak_rate()
    return {
        "steps_a_subject": round(steps / w.n, 1), "operations_a_step": flops, "operations_a_subject": round(counted),
        "peak_operations_per_second": round(peak), "bound_subjects_per_second": round(peak / counted),
        "share_of_bound": round(per_second * counted / peak, 3),
    }  # fmt: skip


def peak_rate() -> float:
    """Operations/s of one core on 12 independent chains of fused operations on full vectors."""
    import numpy as np

    from cohort.compiled import LANES, call_program, compile_program, jit
    from cohort.program import Builder

    b = Builder("peak", 14)
    sums = list(range(12))
    for _ in range(400):
        sums = [b.fma(s, 12, 13) for s in sums]
    program = b.finish(sums)

    @jit
    def many(address, source, result, times):  # type: ignore[no-untyped-def]
        for _ in range(times):
            call_program(address, source, result)

    source, result = np.full((14, LANES), 0.5), np.empty((12, LANES))
    address = compile_program(program, LANES)
    return program.flops * LANES * 2000 / median_time(lambda: many(address, source, result, 2000))


def panels(w: Workload) -> dict[str, Any]:
    """Accuracy on panels of both spreads: worst and how many subjects within 1e-6."""
    found = {}
    for spread in SPREADS:
        one = w if spread == SPREADS[0] else Workload(w.n, spread)
        errors = one.errors(one.gridded()[0])
        found[f"{spread:.0%}"] = {
            "subjects": w.n,
            "within_1e-6": int((errors <= ENOUGH).sum()),
            "worst": float(errors.max()),
        }
    return found


# ---- whole runs ---------------------------------------------------------------------------------------------------

ONE_ARM = '[[arms]]\nname = "a"\nduration = "48 h"\nglucose = [{ shape = "constant", rate = 216 }]\n'


def one_arm(folder: Path) -> Path:
    """A study of one arm of 48 h, every parameter spread as in W."""
    text = (ROOT / "studies" / "steady-infusion.toml").read_text().split("[[arms]]")[0]
    path = folder / "bench.toml"
    path.write_text(text + ONE_ARM)
    return path


def timed_run(path: Path, count: int, threads: int, out: Path) -> tuple[float, float, float]:
    """(seconds from first part to last, share of them inside the compiled engine, peak MB) in a process of its own."""
    command = [
        sys.executable,
        str(Path(__file__).with_name("bench_run.py")),
        str(path),
        str(count),
        str(threads),
        str(out),
    ]
    done = subprocess.run(command, check=True, capture_output=True, text=True, cwd=ROOT)
    seconds, share, peak = json.loads(done.stdout.splitlines()[-1])
    return seconds, share, peak


def workers(options: argparse.Namespace) -> dict[str, Any]:
    """One worker against two on the same subjects, and the engine's share of one worker's time."""
    count = 20_000 if options.quick else 2_000_000 if options.full else 100_000
    with tempfile.TemporaryDirectory() as folder:
        path = one_arm(Path(folder))
        one = timed_run(path, count, 1, Path(folder) / "one")
        two = timed_run(path, count, 2, Path(folder) / "two")
    return {"subjects": count, "seconds_1": round(one[0], 2), "seconds_2": round(two[0], 2), "ratio": round(one[0] / two[0], 2),
            "engine_share_1": round(one[1], 3), "engine_share_2": round(two[1], 3)}  # fmt: skip


def growth(options: argparse.Namespace) -> dict[str, Any]:
    """Seconds and peak memory of growing cohorts with two workers, and the line through them."""
    import numpy as np

    counts = [1_000, 10_000] if options.quick else [1_000, 10_000, 100_000] + [1_000_000] * options.full
    measured = []
    with tempfile.TemporaryDirectory() as folder:
        path = one_arm(Path(folder))
        for count in counts:
            seconds, _, peak = timed_run(path, count, 2, Path(folder) / str(count))
            measured.append({"subjects": count, "seconds": round(seconds, 2), "peak_mb": round(peak)})
    n, s = (np.array([m[key] for m in measured], float) for key in ("subjects", "seconds"))
    weights = 1.0 / np.maximum(s, 0.1)  # relative residuals
    slope, at_none = np.polyfit(n, s, 1, w=weights)
    power = float(np.polyfit(np.log(n), np.log(np.maximum(s - min(at_none, s.min() / 2), 1e-3)), 1)[0])
    return {"runs": measured, "seconds_at_0": round(float(at_none), 2), "microseconds_a_subject": round(slope * 1e6, 1),
            "worst_residual": round(float(np.abs((at_none + slope * n) / s - 1).max()), 3), "power": round(power, 3)}  # fmt: skip


def start_up(options: argparse.Namespace) -> dict[str, Any]:
    """A warm command on 200 subjects: seconds until the last part is written, and until it has ended with the page."""
    times = []
    with tempfile.TemporaryDirectory() as folder:
        for attempt in range(2 if options.quick else 4):
            out = Path(folder) / str(attempt)
            command = [sys.executable, "-m", "cohort", "run", str(one_arm(Path(folder))), "--out", str(out), "--set",
                       "subjects.count=200"]  # fmt: skip
            wall, began = time.time(), time.perf_counter()
            subprocess.run(command, check=True, capture_output=True, cwd=ROOT)
            whole = time.perf_counter() - began
            parts = max(p.stat().st_mtime for p in out.rglob("part-*.parquet")) - wall
            times.append((parts, whole))
    warm = times[1:]
    written, ended = (round(statistics.median(column), 2) for column in zip(*warm, strict=True))
    return {"results_written": written, "command": ended}


def plot(rows: list[dict[str, Any]], path: Path) -> None:
    """Subjects a second of every row, on a log scale."""
    import matplotlib as mpl

    mpl.use("svg")
    import matplotlib.pyplot as plt

    figure, axes = plt.subplots(figsize=(8, 0.5 * len(rows) + 1), layout="constrained")
    axes.barh([r["what"] for r in rows][::-1], [r["per_second"] for r in rows][::-1], color="#446688")
    axes.set_xscale("log")
    axes.set_xlabel("subjects a second on one core, worst error of glucose at most 1e-6")
    figure.savefig(path)


if __name__ == "__main__":
    from setup_env import call as call_command
    from setup_env import ready

    if os.environ.get("COHORT_BENCH") != "inside":
        os.environ["COHORT_BENCH"] = "inside"
        sys.exit(call_command([str(ready("test")), str(Path(__file__).resolve()), *sys.argv[1:]]))
    sys.path.insert(0, str(ROOT))
    sys.exit(main())
