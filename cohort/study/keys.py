"""Every key of the study file, once: path, kind, meaning, default, range. Spelling, types and the README rest on it.

In a path `*` is a name of the user's, `[]` an entry of a list. Kinds: text, whole, number, quantity, word, and lists
of texts, quantities or tables; `table` is a group of keys.
"""

from __future__ import annotations

import functools
from dataclasses import dataclass

from cohort.quantities import INPUT_PARAMETERS, PARAMETERS


@dataclass(frozen=True)
class Key:
    """One key. units: kinds of quantity it may be, the first for plain numbers (`parameter`: that of the parameter);
    words: what is allowed; low, high: the allowed range of numbers."""

    path: str
    kind: str
    meaning: str
    default: str = ""
    units: tuple[str, ...] = ()
    words: tuple[str, ...] = ()
    low: float = -float("inf")
    high: float = float("inf")
    above: bool = False


YEAR_MIN = 366 * 1440.0
MOST_SUBJECTS = 10**9

_GLUCOSE = (("mg/min", "mg/kg/min"), ("mg", "mg/kg"))
_INSULIN = (("mU/min", "mU/kg/min"), ("mU", "mU/kg"))


def _law_keys(base: str, units: tuple[str, ...]) -> list[Key]:
    def quantity(name: str, meaning: str, default: str = "") -> Key:
        return Key(f"{base}.{name}", "quantity", meaning, default, units)

    def share(name: str, meaning: str) -> Key:
        return Key(f"{base}.{name}", "number", meaning, "0", low=0.0, high=5.0)

    def group(name: str, meaning: str) -> Key:
        return Key(f"{base}.{name}", "table", meaning)

    return [
        group("lognormal", "a lognormal law"),
        quantity("lognormal.median", "its median"),
        Key(f"{base}.lognormal.cv", "number", "its coefficient of variation", low=0.0, high=5.0, above=True),
        quantity("lognormal.low", "cut below this", "none"),
        quantity("lognormal.high", "cut above this", "none"),
        share("lognormal.median_rse", "relative standard error of the median"),
        share("lognormal.cv_rse", "relative standard error of the coefficient of variation"),
        group("normal", "a normal law"),
        quantity("normal.mean", "mean of the uncut law"),
        quantity("normal.sd", "standard deviation of the uncut law"),
        quantity("normal.low", "cut below this", "none"),
        quantity("normal.high", "cut above this", "none"),
        share("normal.mean_rse", "relative standard error of the mean"),
        share("normal.cv_rse", "relative standard error of the coefficient of variation"),
        group("uniform", "even between two values"),
        quantity("uniform.low", "least value"),
        quantity("uniform.high", "greatest value"),
        group("loguniform", "even in the logarithm between two values"),
        quantity("loguniform.low", "least value"),
        quantity("loguniform.high", "greatest value"),
        group("triangular", "a triangular law"),
        quantity("triangular.low", "least value"),
        quantity("triangular.mode", "most likely value"),
        quantity("triangular.high", "greatest value"),
        group("beta", "a beta law stretched over two values"),
        quantity("beta.low", "least value"),
        quantity("beta.high", "greatest value"),
        Key(f"{base}.beta.alpha", "number", "first shape", low=0.0, high=1e4, above=True),
        Key(f"{base}.beta.beta", "number", "second shape", low=0.0, high=1e4, above=True),
        group("empirical", "values seen, from a file"),
        Key(f"{base}.empirical.file", "text", "CSV or Parquet file, named from the study's folder"),
        Key(f"{base}.empirical.column", "text", "its column, in plain numbers of the parameter's unit"),
    ]


def _shape_keys(base: str, what: str, units: tuple[tuple[str, ...], tuple[str, ...]], meals: bool) -> list[Key]:
    rate, amount = units
    shapes = ("constant", "steps", "on-off", "sine", "meal", "bolus")
    keys = [
        Key(base, "tables", f"{what} given, shapes that add up", "[]"),
        Key(f"{base}[].shape", "word", "constant, steps, on-off, sine, meal or bolus",
            words=shapes if meals else tuple(s for s in shapes if s != "meal")),
        Key(f"{base}[].rate", "quantity", "rate of constant and on-off", units=rate, low=0.0, high=1e6),
        Key(f"{base}[].times", "quantities", "when each rate of steps begins, rising", units=("min",), low=0.0),
        Key(f"{base}[].rates", "quantities", "rates of steps", units=rate, low=0.0, high=1e6),
        Key(f"{base}[].period", "quantity", "period of on-off and sine, or { natural = 0.8 }: times the subject's own",
            units=("min",), low=1.0, high=YEAR_MIN),
        Key(f"{base}[].period.natural", "number", "period as a multiple of the subject's own", low=0.05, high=20.0),
        Key(f"{base}[].duty", "number", "share of each period of on-off that is on", "0.5", low=0.0, high=1.0, above=True),
        Key(f"{base}[].mean", "quantity", "mean of sine", units=rate, low=0.0, high=1e6),
        Key(f"{base}[].relative_amplitude", "number", "amplitude of sine over its mean", low=0.0, high=1.0),
        Key(f"{base}[].phase", "number", "phase of sine, radians", "0"),
        Key(f"{base}[].time", "quantity", "when a meal or bolus is given", units=("min",), low=0.0, high=YEAR_MIN),
        Key(f"{base}[].amount", "quantity", "amount of a meal or bolus", units=amount, low=0.0, high=1e7),
    ]  # fmt: skip
    if meals:
        keys += [
            Key(f"{base}[].absorption", "quantity", "time constant of a meal's appearance", units=("min",), low=1.0,
                high=1440.0),
            Key(f"{base}[].stages", "whole", "1: at once falling; 2: rising first", "1", low=1, high=2),
            Key(f"{base}[].bioavailability", "number", "share of a meal that appears", "1", low=0.0, high=1.0),
            Key(f"{base}[].repeat", "quantity", "the meal again and again after this time", "none", units=("min",), low=1.0,
                high=YEAR_MIN),
        ]  # fmt: skip
    return keys


def _subject_keys() -> list[Key]:
    return [
        Key("subjects", "table", "who is simulated"),
        Key("subjects.count", "whole", "how many", low=1, high=MOST_SUBJECTS),
        Key("subjects.draw", "word", "how they are drawn", "random", words=("random", "latin-hypercube", "sobol")),
        Key("subjects.table", "text", "a CSV or Parquet file of subjects, instead of count and draw"),
        Key("subjects.parameters", "table", "laws and fixed values by parameter; the rest stays as published"),
        Key("subjects.parameters.*", "quantity", "a value for everyone, or a law", "as published", ("parameter",)),
        *_law_keys("subjects.parameters.*", ("parameter",)),
        Key("subjects.population", "table", "draws of the population itself, as uncertain as its *_rse say"),
        Key("subjects.population.outer", "whole", "how many draws", "200", low=8, high=100_000),
        Key("subjects.population.inner", "whole", "subjects in each", "256", low=16, high=10**6),
        Key("subjects.size", "table", "body weight, which rates per kg need"),
        Key("subjects.size.weight", "quantity", "a weight for everyone, or a law", units=("kg",), low=2.0, high=400.0),
        *_law_keys("subjects.size.weight", ("kg",)),
        Key("subjects.size.scaling", "word", "how parameters follow weight", "none",
            words=("none", "per-kg", "allometric")),
        Key("subjects.correlations", "tables", "rank correlations between parameters", "[]"),
        Key("subjects.correlations[].pair", "texts", "two varied parameters"),
        Key("subjects.correlations[].spearman", "number", "Spearman's rank correlation", low=-1.0, high=1.0),
        Key("subjects.strata", "tables", "subgroups that cover everyone", "[]"),
        Key("subjects.strata[].name", "text", "its name"),
        Key("subjects.strata[].share", "number", "its share of the people", low=0.0, high=1.0, above=True),
        Key("subjects.strata[].parameters", "table", "its own laws and values, over those of everyone"),
        Key("subjects.strata[].parameters.*", "quantity", "a value, or a law", units=("parameter",)),
        *_law_keys("subjects.strata[].parameters.*", ("parameter",)),
        Key("subjects.strata[].weight", "quantity", "its own body weight: a value, or a law", units=("kg",), low=2.0,
            high=400.0),
        *_law_keys("subjects.strata[].weight", ("kg",)),
        Key("subjects.strata[].correlations", "tables", "its own rank correlations, instead of everyone's"),
        Key("subjects.strata[].correlations[].pair", "texts", "two varied parameters"),
        Key("subjects.strata[].correlations[].spearman", "number", "Spearman's rank correlation", low=-1.0, high=1.0),
        Key("subjects.eligible", "table", "who is recruited, by ARM.OUTCOME"),
        Key("subjects.eligible.*", "outcomes", "least and greatest value of that outcome"),
        Key("subjects.match", "table", "published summaries that weights bring the cohort to, by ARM.OUTCOME"),
        Key("subjects.match.*", "table", "a published mean and SD"),
        Key("subjects.match.*.mean", "outcome", "the mean to match"),
        Key("subjects.match.*.sd", "outcome", "the SD to match"),
    ]  # fmt: skip


def _arm_keys() -> list[Key]:
    return [
        Key("arms", "tables", "what is done to every subject"),
        Key("arms[].name", "text", "its name"),
        Key("arms[].duration", "quantity", "how long it lasts, settling included", units=("min",), low=0.0, high=YEAR_MIN,
            above=True),
        Key("arms[].settle", "quantity", "how long before the measured window", "0 min", units=("min",), low=0.0,
            high=YEAR_MIN),
        Key("arms[].start", "word", "fasting, equilibrium, or a state { Ip = 200, ... }", "fasting",
            words=("fasting", "equilibrium")),
        Key("arms[].start.*", "number", "the amount of a state variable at the start", low=0.0, high=1e9),
        Key("arms[].displace", "number", "how far glucose begins from the equilibrium", "0.05", low=-0.9, high=10.0),
        *_shape_keys("arms[].glucose", "glucose", _GLUCOSE, meals=True),
        *_shape_keys("arms[].insulin", "insulin", _INSULIN, meals=False),
        Key("arms[].secretion", "number", "factor on the pancreas's own secretion", "1", low=0.0, high=10.0),
        Key("arms[].clamp", "table", "glucose held at a value from a time on"),
        Key("arms[].clamp.glucose", "quantity", 'the value, or "own fasting"', units=("mg/dL",), low=20.0, high=1000.0),
        Key("arms[].clamp.from", "quantity", "when it begins", "0 min", units=("min",), low=0.0, high=YEAR_MIN),
        Key("arms[].steady", "quantity", "the steady input of arms that have none of their own", "none",
            units=("mg/min", "mg/kg/min"), low=0.0, high=1e6),
    ]  # fmt: skip


def _clinic_keys() -> list[Key]:
    time = ("min",)
    limits = {"glucose": "mg/dL", "insulin": "mU/L"}
    return [
        Key("sampling", "table", "what the clinic would see, for every arm"),
        *(
            Key(f"sampling.{analyte}_cv", "number", f"assay error of {analyte}, relative", default, low=0.0, high=2.0)
            for analyte, default in (("glucose", "0.02"), ("insulin", "0.06"))
        ),
        *(
            Key(f"sampling.{analyte}_background{part}", kind, meaning, default, units=units, low=0.0, above=part == ".time")
            for analyte, sd in (("glucose", "0.03"), ("insulin", "0.06"))
            for part, kind, meaning, default, units in (
                ("", "table", f"the body's own irregularity of {analyte}, AR(1)", "", ()),
                (".sd", "number", "its relative standard deviation; 0: none", sd, ()),
                (".time", "quantity", "its correlation time", "30 min", time),
            )
        ),
        *(
            Key(f"sampling.{analyte}_drift", "number", f"SD between subjects of the assay's relative drift of {analyte} in "
                "24 h", "0", low=0.0, high=1.0)
            for analyte in limits
        ),
        *(
            Key(f"sampling.{analyte}_detection_limit", "quantity", f"readings of {analyte} below are recorded as this", "0",
                (unit,), low=0.0)
            for analyte, unit in limits.items()
        ),
        Key("sampling.band", "quantities", "periods among which an oscillation is looked for", "60 to 240 min", time, low=1.0),
        Key("sampling.false_alarm", "number", "false alarms of the whole rule", "0.05", low=0.0, high=0.5, above=True),
        Key("sampling.detect_in", "word", "where an oscillation must show", "glucose",
            words=("glucose", "insulin", "either", "both")),
        Key("sampling.schedules", "tables", "when samples are taken"),
        Key("sampling.schedules[].name", "text", "its name"),
        Key("sampling.schedules[].every", "quantity", "time between samples", units=time, low=0.1),
        Key("sampling.schedules[].times", "quantities", "sampling times after settling, instead of every", units=time,
            low=0.0),
        Key("sampling.schedules[].start", "quantity", "first sample, after settling", "0 h", time, low=0.0),
        Key("sampling.schedules[].duration", "quantity", "how long samples are taken", units=time, low=1.0),
        Key("sampling.schedules[].missed", "number", "share of samples missed", "0", low=0.0, high=0.9),
        Key("recruitment", "table", "predictions for real people"),
        Key("recruitment.sizes", "numbers", "numbers of people recruited", low=1),
        Key("recruitment.want", "whole", "oscillators wanted", low=1, high=1000),
        Key("recruitment.assurance", "number", "with this probability", "0.9", low=0.5, high=0.9999),
        Key("recruitment.evaluable", "number", "share of recruits who finish", "1", low=0.05, high=1.0),
    ]  # fmt: skip


def _ranking_keys() -> list[Key]:
    def key(name: str, kind: str, meaning: str, default: str = "", words: tuple[str, ...] = (), low: float = 1.0,
            high: float = 1e9) -> Key:  # fmt: skip
        return Key(f"ranking.{name}", kind, meaning, default, words=words, low=low, high=high)

    return [
        Key("ranking", "table", "which parameters decide"),
        key("method", "word", "sobol or morris", words=("sobol", "morris")),
        key("outcomes", "texts", "outcomes to rank for"),
        key("base", "whole", "points of one replicate, a power of two; doubled as needed", "256", high=2**30),
        key("replicates", "whole", "independent scrambles", "8", low=2, high=64),
        key("tolerance", "number", "double until every half-width is below this", "0.05", low=1e-6, high=1.0),
        key("max_runs", "whole", "never more runs of the ranking than this, all arms", "200000", high=1e12),
        Key("ranking.second_order", "yes/no", "pairs as well", "false"),
        key("trajectories", "whole", "trajectories of morris", "20", low=4, high=100_000),
        key("levels", "whole", "levels of morris, even", "4", low=2, high=64),
        Key("ranking.groups", "table", "parameters moved together, by name"),
        Key("ranking.groups.*", "texts", "the parameters of a group"),
    ]


def _map_keys() -> list[Key]:
    rate = ("mg/min",)
    return [
        Key("map", "table", "where oscillation lives around one body, and which forcing captures it"),
        Key(
            "map.infusion",
            "quantity",
            "glucose input where it is no axis; mean of the forcing",
            "216 mg/min",
            rate,
            low=0.0,
            high=1e5,
        ),
        Key("map.secretion", "number", "a factor on the pancreas's own secretion", "1", low=0.0, high=100.0),
        Key("map.points", "whole", "points of each axis", "60", low=10, high=400),
        Key(
            "map.windows",
            "texts",
            'parameters (and infusion) to find the windows of oscillation in, one at a time; ["all"]',
        ),
        Key(
            "map.region", "table", "two of infusion and the parameters, each with its range: the region of oscillation"
        ),
        Key("map.region.*", "table", "the range of one"),
        Key("map.region.*.low", "quantity", "from", units=("parameter",), low=0.0),
        Key("map.region.*.high", "quantity", "to", units=("parameter",), low=0.0, above=True),
        Key("map.forcing", "table", "sine forcing of the infusion: locking over its period and amplitude"),
        Key("map.forcing.period", "table", "range of the forcing period"),
        Key("map.forcing.period.low", "quantity", "from", "50 min", ("min",), low=5.0, high=1440.0),
        Key("map.forcing.period.high", "quantity", "to", "300 min", ("min",), low=5.0, high=1440.0),
        Key("map.forcing.relative_amplitude", "table", "range of the amplitude over the mean"),
        Key("map.forcing.relative_amplitude.low", "number", "from", "0.02", low=0.0, high=1.0, above=True),
        Key("map.forcing.relative_amplitude.high", "number", "to", "0.8", low=0.0, high=1.0, above=True),
    ]


KEYS: dict[str, Key] = {
    key.path: key
    for key in (
        Key("title", "text", "the study's question", "the file's name"),
        Key(
            "model",
            "word",
            "the body: a name that `cohort models` prints, a Python file of your own, or a list of these",
            "hepatic-lag",
        ),
        Key("seed", "whole", "where all randomness comes from", low=0, high=2**63 - 1),
        *_subject_keys(),
        *_arm_keys(),
        *_clinic_keys(),
        *_ranking_keys(),
        Key("output", "table", "what is kept beside the outcomes"),
        Key("output.time_courses", "whole", "how many subjects keep their time courses", "20", low=0, high=10_000),
        Key("output.every", "quantity", "time between their points", "5 min", ("min",), low=0.01, high=1440.0),
        *_map_keys(),
    )
}


def parameter_unit(symbol: str) -> str:
    """The unit a parameter's values are kept in."""
    return (PARAMETERS.get(symbol) or INPUT_PARAMETERS[symbol]).unit


@functools.cache
def children(pattern: str) -> tuple[str, ...]:
    """Names of the keys directly under a table's pattern; `*` where any name is allowed."""
    base = f"{pattern}." if pattern else ""
    rests = (path[len(base) :] for path in KEYS if path.startswith(base))
    return tuple(dict.fromkeys(r for r in rests if r and "." not in r and "[]" not in r))
