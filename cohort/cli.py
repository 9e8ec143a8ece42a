"""The command line: one short function a command. Exit codes: 0 done, 2 the study or the call is wrong, 3 the run
could not finish (what is there is kept), 130 interrupted."""

from __future__ import annotations

import argparse
import io
import json
import re
import sys
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import TYPE_CHECKING

from cohort.errors import CohortError, Problem, RunError, StudyError
from cohort.stores import place

if TYPE_CHECKING:
    from cohort.observe.detector import Rule
    from cohort.observe.series import Found
    from cohort.observe.table import Series
    from cohort.study import Plan, Study

INTERRUPTED = 130
ASSAY_CV = {"glucose": 0.02, "insulin": 0.06}
"""Usual assay errors (common practice), which the nadir-to-peak rule counts in."""

EXAMPLES = {
    "check": (
        "cohort check studies/steady-infusion.toml",
        "cohort check my-study.toml --set subjects.count=100_000 --workers 8",
    ),
    "run": (
        "cohort run studies/steady-infusion.toml",
        "cohort run my-study.toml --out results/wide --set subjects.parameters.td.lognormal.cv=0.4",
        "cohort run my-study.toml --json | python3 -m json.tool",
        "cohort run my-study.toml --scheduler tcp://head:8786 --out /shared/results/my-study",
    ),
    "report": ("cohort report results/steady-infusion",),
    "certify": ("cohort certify studies/steady-infusion.toml 500",),
    "detect": (
        "cohort detect studies/halden-series.csv",
        "cohort detect series.csv --time h --glucose mmol/L --study studies/sampling.toml",
    ),
    "models": ("cohort models", "cohort models hepatic-lag"),
    "schema": ("cohort schema > study.schema.json",),
}

DESCRIPTION = """In-silico cohorts and sensitivity studies of ultradian insulin-glucose oscillations.

For research planning. Virtual subjects are not patients; not for diagnosis, dosing or care."""


def check(words: argparse.Namespace) -> int:
    """Print the plan, or every problem."""
    from cohort.study import describe, load_study, plan

    study = load_study(words.study, words.set, words.allow_outside, words.allow_model_code)
    for one in (study, *study.others):
        found = plan(one, words.workers)
        print(describe(one, found))
        _warn(one.warnings)
        _fits(one, found, Path("results"))
    return 0


def _fits(study: Study, found: Plan, out: Path) -> None:
    """Raise StudyError where the plan needs more memory or disk than this machine has."""
    from cohort.execute.limits import lacking

    problems = lacking(found, out)
    if problems:
        raise StudyError([Problem("", text, str(study.path)) for text in problems])


def run(words: argparse.Namespace) -> int:
    """Run a study and print what came out."""
    from cohort.execute.run import run_study
    from cohort.execute.several import run_several
    from cohort.study import load_study, plan

    study = load_study(words.study, words.set, words.allow_outside, words.allow_model_code)
    for one in (study, *study.others):
        _warn(one.warnings)
    folder = place(words.out) if words.out else Path("results") / study.path.stem
    _fits(study, plan(study, words.workers), folder)
    running = run_several if study.others else run_study
    done = running(study, folder, workers=words.workers, log=Path(words.log) if words.log else None,
                   scheduler=words.scheduler, mixed=words.mixed_machines, only=words.shards, lock=not words.no_lock)  # fmt: skip
    if words.shards:
        print(
            f"{done.simulated:,} runs in {done.seconds:.1f} s. When every share is done, run without --shards to finish"
        )
        return 0
    _say(folder, words.json, verify=False)
    if words.json:
        return 0
    kept = f", {done.kept:,} were there" if done.kept else ""
    print(f"\n{done.simulated:,} runs in {done.seconds:.1f} s{kept}. To read and to share:\n{folder / 'report.html'}")
    return 0


def report(words: argparse.Namespace) -> int:
    """Rebuild tables and summary from the result files."""
    _say(place(words.folder), words.json)
    return 0


def _say(folder: Path, as_json: bool, verify: bool = True) -> None:
    """Rebuild a result folder's tables and page, and print what came out; verify: as in `rebuild`."""
    from cohort.report import several
    from cohort.report.summary import closing_words, rebuild

    if several.is_several(folder):
        summary = several.compare(folder, verify)
        text = several.words(summary)
    else:
        _, summary = rebuild(folder, verify=verify)
        text = closing_words(summary)
    print(json.dumps(summary, indent=2) if as_json else text)


def models(words: argparse.Namespace) -> int:
    """Print the models, or one in full."""
    from cohort.report.models import describe_model, list_models

    print(describe_model(words.name) if words.name else list_models())
    return 0


def schema(_: argparse.Namespace) -> int:
    """Print the JSON Schema of the study file."""
    from cohort.study.schema import json_schema

    print(json.dumps(json_schema(), indent=2))
    return 0


def certify(words: argparse.Namespace) -> int:
    """Integrate some subjects again at high order and tight tolerance."""
    from cohort.execute.certify import certify_study
    from cohort.study import load_study

    found = certify_study(load_study(words.study, words.set, words.allow_outside, words.allow_model_code), words.n)
    print(found.words())
    return 0 if found.kept else 3


def detect(words: argparse.Namespace) -> int:
    """Look for a rhythm in a clinic's own sampled series."""
    from cohort.execute.stages import null_folder
    from cohort.observe.series import detect_series, lines
    from cohort.observe.table import read_series
    from cohort.study import load_study

    study = load_study(words.study, words.set, words.allow_outside, words.allow_model_code) if words.study else None
    rule, assay = _rule(words, study)
    units = {k: v for k, v in (("time", words.time), ("glucose", words.glucose), ("insulin", words.insulin)) if v}
    series = read_series(Path(words.series), units)
    found = detect_series(series, rule, assay, null_folder())
    for warning in found.warnings:
        print(f"note: {warning}", file=sys.stderr)
    print("\n".join(lines(found, rule)))
    if study is not None:
        print("\n" + "\n".join(_corrected(study, words.arm, series, found, rule)))
    folder = Path(words.out) if words.out else Path("results") / f"{Path(words.series).stem} series"
    _keep(folder, series, found)
    print("\nDetection is a statement about a sampled, noisy series; it is not proof of a limit cycle. For research only;\n"
          f"not for diagnosis, dosing or care. detections.parquet and series.svg are in\n{folder}")  # fmt: skip
    return 0


def _rule(words: argparse.Namespace, study: Study | None) -> tuple[Rule, dict[str, float]]:
    """What counts as detected, and the assay errors: the study's, where there is one, else the usual ones."""
    from dataclasses import replace

    from cohort.observe.detector import Rule

    rule, assay = Rule(), dict(ASSAY_CV)
    if study is not None and study.sampling is not None:
        rule = study.sampling.rule
        assay = {analyte: reading.cv for analyte, reading in study.sampling.readings.items()}
    if words.false_alarm is not None:
        rule = replace(rule, false_alarm=words.false_alarm)
    return (replace(rule, detect_in=words.detect_in) if words.detect_in else rule), assay


def _corrected(study: Study, arm: str | None, series: Sequence[Series], found: Found, rule: Rule) -> list[str]:
    """The share that truly oscillates, by the detector's errors on the study's virtual people."""
    from cohort.execute.detect import correct, validate
    from cohort.observe.series import detected_people, schedules

    known = schedules(series)
    k, n = detected_people(found)
    if not known or not n:
        return ["no series could be searched, so there is no share to correct"]
    times, rows = max(known, key=lambda one: len(one[1]))
    missed = 1.0 - sum(len(series[r].values) for r in rows) / (len(rows) * len(times))
    tried = validate(study, arm, times, min(max(missed, 0.0), 0.9), rule)
    share = correct(study, k, n, tried)
    se, sp = (f"{a:,} of {b:,} ({100 * a / b:.0f} %)" for a, b in (tried.sensitive, tried.specific))
    clipped = " (the plain correction fell outside 0 to 100 % and was cut there)" if share.clipped else ""
    return [
        f"{k} of {n} people detected. Of the virtual people of {tried.arm!r}, sampled like {len(rows)} of {len(series)} series,",
        f"the rule finds {se} who oscillate and passes over {sp} who do not.",
        f"Corrected for that, {100 * share.share:.0f} % truly oscillate (95 %: {100 * share.low:.0f} % to "
        f"{100 * share.high:.0f} %), if people are as in this model{clipped}",
    ]


def _keep(folder: Path, series: Sequence[Series], found: Found) -> None:
    """Write detections.parquet and series.svg."""
    from cohort.report.series import keep_series

    try:
        keep_series(folder, series, found)
    except OSError as error:
        raise RunError(f"{folder}: {(error.strerror or str(error)).lower()}") from None


def _warn(warnings: Sequence[Problem]) -> None:
    for warning in warnings:
        print(f"note: {warning}", file=sys.stderr)


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog="cohort", description=DESCRIPTION, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    commands = parser.add_subparsers(metavar="COMMAND", required=True)

    def command(name: str, function: Callable[[argparse.Namespace], int], text: str) -> argparse.ArgumentParser:
        examples = "examples:\n" + "\n".join(f"  {line}" for line in EXAMPLES[name])
        made = commands.add_parser(
            name, help=text, description=text, epilog=examples, formatter_class=argparse.RawDescriptionHelpFormatter
        )
        made.set_defaults(function=function)
        return made

    def with_study(made: argparse.ArgumentParser) -> None:
        made.add_argument("study", metavar="STUDY", help="a study file, such as studies/steady-infusion.toml")
        made.add_argument("--set", action="append", default=[], metavar="KEY=VALUE",
                          help="override a value: subjects.count=500, arms.fasting.duration='12 h'")  # fmt: skip
        made.add_argument("--allow-outside", action="store_true", help="data files may lie outside the study's folder")
        made.add_argument("--allow-model-code", action="store_true", help="run the study's own model, a Python file")

    checking = command("check", check, "say what a study would do, or every problem in it")
    with_study(checking)
    checking.add_argument("--workers", type=_positive, metavar="N", help="workers to plan for (default: the cores)")
    running = command("run", run, "run a study, or carry on where it stopped")
    with_study(running)
    running.add_argument("--out", metavar="DIR", help="result folder (default: results/<study>), or s3://bucket/prefix")
    running.add_argument("--no-lock", action="store_true", help="do not hold the folder against other runs")
    running.add_argument("--workers", type=_positive, metavar="N", help="how many at once (default: the cores)")
    running.add_argument("--json", action="store_true", help="print summary.json instead of words")
    running.add_argument(
        "--scheduler", type=_address, metavar="ADDRESS", help="a dask.distributed cluster to do it on, tcp://host:8786"
    )
    running.add_argument("--mixed-machines", action="store_true", help="accept workers of other versions or processors")
    running.add_argument("--shards", type=_fraction, metavar="K/N", help="only the K-th of N shares, for job arrays")
    running.add_argument("--log", metavar="FILE", help="add what happens, and when, to this file")
    reporting = command("report", report, "rebuild tables and summary from the result files")
    reporting.add_argument("folder", metavar="DIR")
    reporting.add_argument("--json", action="store_true", help="print summary.json instead of words")
    certifying = command("certify", certify, "integrate some subjects again at high order; print the worst differences")
    with_study(certifying)
    certifying.add_argument("n", nargs="?", type=_positive, default=200, metavar="N", help="how many (default 200)")
    looking = command("detect", detect, "look for a rhythm in a clinic's own sampled series")
    looking.add_argument("series", metavar="SERIES.csv", help="long (a row a sample) or wide (a column a subject)")
    for name in ("time", "glucose", "insulin"):
        looking.add_argument(f"--{name}", metavar="UNIT", help=f"unit of {name} where the header does not give it")
    looking.add_argument(
        "--false-alarm", type=_share, metavar="P", help="of the whole rule (default 0.05, or the study's)"
    )
    looking.add_argument("--detect-in", choices=("glucose", "insulin", "either", "both"),
                         help="where a rhythm must show (default glucose, or the study's)")  # fmt: skip
    looking.add_argument(
        "--allow-outside", action="store_true", help="the study's data files may lie outside its folder"
    )
    looking.add_argument("--allow-model-code", action="store_true", help="run the study's own model, a Python file")
    looking.add_argument(
        "--study", metavar="STUDY", help="correct the share by the detector's errors on its virtual people"
    )
    looking.add_argument("--arm", metavar="NAME", help="the study's arm that the people were in")
    looking.add_argument(
        "--set", action="append", default=[], metavar="KEY=VALUE", help="override a value of the study"
    )
    looking.add_argument(
        "--out", metavar="DIR", help="where detections.parquet and series.svg go (default: results/...)"
    )
    listing = command("models", models, "models, parameters, units, published values, sources")
    listing.add_argument("name", nargs="?", metavar="NAME")
    command("schema", schema, "JSON Schema of the study file, for editors")
    return parser


def _share(text: str) -> float:
    try:
        share = float(text)
    except ValueError:
        share = 0.0
    if not 0.0 < share < 0.5:
        raise argparse.ArgumentTypeError(f"{text!r} is not a share above 0 and below 0.5")
    return share


def _address(text: str) -> str:
    """A scheduler's address; without a port its client would wait for long and end in a traceback of its own."""
    if not re.fullmatch(r"(?:[a-z]+://)?(?:\[[0-9a-fA-F:]+\]|[^\s:/\[\]]+):[0-9]{1,5}", text):
        raise argparse.ArgumentTypeError(f"{text[:60]!r} is no address such as tcp://host:8786")
    return text


def _fraction(text: str) -> tuple[int, int]:
    share, sign, shares = text.partition("/")
    if not (sign and share.isdigit() and shares.isdigit() and 1 <= int(share) <= int(shares) <= 100_000):
        raise argparse.ArgumentTypeError(f"{text!r} is not K/N with 1 <= K <= N, such as 3/100")
    return int(share), int(shares)


def _positive(text: str) -> int:
    if not text.isdigit() or not 0 < int(text) < 10**6:
        raise argparse.ArgumentTypeError(f"{text!r} is not a whole number above 0")
    return int(text)


def main(words: Sequence[str] | None = None) -> int:
    """Run one command and return its exit code; no traceback reaches a user."""
    for stream in (sys.stdout, sys.stderr):
        if isinstance(stream, io.TextIOWrapper):
            stream.reconfigure(errors="backslashreplace")  # a terminal may not know a letter of a title
    parsed = _parser().parse_args(words)
    try:
        function: Callable[[argparse.Namespace], int] = parsed.function
        return function(parsed)
    except StudyError as error:
        n = len(error.problems)
        print(f"{error}\n{n} problem{'s' * (n > 1)} found; nothing was run", file=sys.stderr)
        return error.exit_code
    except CohortError as error:
        print(error, file=sys.stderr)
        return error.exit_code
    except MemoryError:
        print("there is not enough memory for this; what was finished is kept", file=sys.stderr)
        return RunError.exit_code
    except KeyboardInterrupt:
        print("\ninterrupted; what was finished is kept, run again to carry on", file=sys.stderr)
        return INTERRUPTED
    except BrokenPipeError:
        sys.stderr.close()
        return 0
