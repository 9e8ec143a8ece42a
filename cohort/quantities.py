"""Every name a user may write or read: symbol, meaning, unit, allowed range and source.

Plain data, imported by everyone. Published values belong to the models (`cohort.model`), since two models may give
one symbol two values; what a symbol means and where it may physically lie is the same in all of them.
"""

from __future__ import annotations

from dataclasses import dataclass

GLUCOSE_MG_DL_PER_MMOL_L = 18.016
"""Molar mass of glucose, 180.16 g/mol, as a factor between mg/dL and mmol/L."""

INSULIN_PMOL_PER_MU = 6.00
"""Knopp, Holder-Pearson & Chase, J Diabetes Sci Technol 2019;13:597: the one right factor."""

REFERENCE_WEIGHT_KG = 70.0


@dataclass(frozen=True)
class Quantity:
    """A named number: what it means, its unit (`1` for none) and the closed physical range `low`..`high`."""

    name: str
    meaning: str
    unit: str
    low: float
    high: float


PARAMETERS: dict[str, Quantity] = {
    q.name: q
    for q in (
        Quantity("Vp", "volume in which plasma insulin is spread", "L", 0.05, 150.0),
        Quantity("Vi", "volume in which interstitial insulin is spread", "L", 0.2, 550.0),
        Quantity("Vg", "volume in which glucose is spread", "L", 0.2, 500.0),
        Quantity("E", "exchange of insulin between plasma and interstitium", "L/min", 0.002, 20.0),
        Quantity("tp", "time constant of insulin degradation in plasma", "min", 0.1, 300.0),
        Quantity("ti", "time constant of insulin degradation in the interstitium", "min", 1.0, 5000.0),
        Quantity("td", "total delay from plasma insulin to the liver's response", "min", 0.5, 1000.0),
        Quantity("Rm", "highest rate of insulin secretion", "mU/min", 1.0, 10000.0),
        Quantity("a1", "glucose step over which secretion rises e-fold below its half-point", "mg/L", 10.0, 10000.0),
        Quantity("C1", "glucose concentration at half the highest secretion", "mg/L", 50.0, 50000.0),
        Quantity("Ub", "highest glucose use that needs no insulin", "mg/min", 0.5, 3500.0),
        Quantity("C2", "glucose concentration scale of the use that needs no insulin", "mg/L", 2.0, 7000.0),
        Quantity("C3", "glucose concentration scale of the use that insulin drives", "mg/L", 20.0, 50000.0),
        Quantity("U0", "insulin-driven use factor with no insulin", "mg/min", 0.1, 2000.0),
        Quantity("Um", "insulin-driven use factor at the highest insulin", "mg/min", 1.0, 50000.0),
        Quantity("beta", "steepness of insulin's effect on glucose use", "1", 0.2, 20.0),
        Quantity(
            "C4", "interstitial insulin concentration at the half-point of its effect on use", "mU/L", 1.0, 4000.0
        ),
        Quantity("Rg", "highest rate of glucose release by the liver", "mg/min", 1.0, 9000.0),
        Quantity("alpha", "steepness of insulin's braking of glucose release", "L/mU", 0.005, 15.0),
        Quantity("C5", "insulin concentration at half the highest glucose release", "mU/L", 0.5, 1300.0),
        Quantity("gamma", "steepness of glucose's own braking of its release", "1", 0.1, 100.0),
        Quantity("C6", "glucose over C3 Vg at half that braking", "1", 0.05, 40.0),
        Quantity("Sb", "lowest rate of glucose's second way out", "mg/min", 0.0, 400.0),
        Quantity("Sm", "highest rate of glucose's second way out", "mg/min", 1.0, 3000.0),
        Quantity("delta", "steepness of glucose's second way out, negative", "1", -50.0, -0.05),
        Quantity("C7", "glucose over C3 Vg at half of the second way out", "1", 0.05, 40.0),
    )
}

INPUT_PARAMETERS: dict[str, Quantity] = {
    q.name: q
    for q in (
        Quantity("meal_absorption", "time constant of glucose appearance after a meal", "min", 1.0, 600.0),
        Quantity("meal_bioavailability", "share of a meal's glucose that reaches the circulation", "1", 0.0, 1.0),
    )
}
"""Properties of a person that act on the arms' inputs, not on the body's equations."""


REGIMES = ("sustained", "damped", "quiet", "bistable", "undecided", "failed")
FAILURES = ("not finite", "step too small", "left the physical range", "out of budget", "process died")
CYCLE_NOTES = ("no steady input", "at the mean input")
ANALYTES = ("glucose", "insulin")
DETECTION_NOTES = ("too few samples", "constant")
KEPT_BECAUSE = ("typical", "borderline", "extreme")


@dataclass(frozen=True)
class Column:
    """A column of a result table. kind: int64, float64, bool, text, or words (one of `words`, as codes on the way)."""

    name: str
    kind: str
    unit: str
    meaning: str
    words: tuple[str, ...] = ()


def _cycle_columns(short: str, unit: str, shown: str, what: str) -> tuple[Column, ...]:
    return (
        Column(f"{short}_amplitude_{unit}", "float64", shown, f"{what}: peak to trough of the limit cycle; 0 if none"),
        Column(f"{short}_relative_amplitude", "float64", "1", f"{what}: half of peak to trough over the cycle's mean"),
        Column(f"cycle_{short}_min_{unit}", "float64", shown, f"{what}: lowest value on the limit cycle"),
        Column(f"cycle_{short}_max_{unit}", "float64", shown, f"{what}: highest value on the limit cycle"),
        Column(f"cycle_{short}_mean_{unit}", "float64", shown, f"{what}: mean over the limit cycle"),
    )


CYCLE_OUTCOMES: tuple[Column, ...] = (
    Column("regime", "words", "", "what the subject tends to under the arm's steady input", REGIMES),
    Column("failure", "words", "", "why the row failed", FAILURES),
    Column("cycle_note", "words", "", "why cycle outcomes are null, or what they speak of", CYCLE_NOTES),
    Column("forced", "bool", "", "the arm has a periodic input; cycle outcomes are those of the unforced body"),
    Column("oscillates", "bool", "", "sustained or bistable; null for undecided and failed"),
    Column("bistable_searched", "bool", "", "a second attractor was looked for beside a stable equilibrium"),
    Column("equilibrium_glucose_mg_dl", "float64", "mg/dL", "plasma glucose at the equilibrium"),
    Column("equilibrium_insulin_mu_l", "float64", "mU/L", "plasma insulin at the equilibrium"),
    Column("growth_per_min", "float64", "1/min", "largest real part of the equilibrium's eigenvalues"),
    Column("linear_period_min", "float64", "min", "2 pi over the imaginary part of that eigenvalue; null if real"),
    Column("period_min", "float64", "min", "period of the limit cycle"),
    Column("cycle_error", "float64", "1", "relative size of the last correction when the limit cycle was closed"),
    *_cycle_columns("glucose", "mg_dl", "mg/dL", "plasma glucose"),
    *_cycle_columns("insulin", "mu_l", "mU/L", "plasma insulin"),
    *_cycle_columns("secretion", "mu_per_min", "mU/min", "insulin secretion"),
    Column("insulin_lag_min", "float64", "min", "from the glucose peak to the insulin peak of the limit cycle"),
)

WINDOW_OUTCOMES: tuple[Column, ...] = (
    Column("glucose_mean_mg_dl", "float64", "mg/dL", "mean glucose in the measured window"),
    Column("glucose_sd_mg_dl", "float64", "mg/dL", "standard deviation of glucose over the window's time"),
    Column("glucose_cv", "float64", "1", "that standard deviation over the mean"),
    Column("glucose_peak_mg_dl", "float64", "mg/dL", "highest glucose in the window"),
    Column("glucose_nadir_mg_dl", "float64", "mg/dL", "lowest glucose in the window"),
    Column("glucose_range_mg_dl", "float64", "mg/dL", "peak minus nadir"),
    Column("time_to_peak_min", "float64", "min", "from the window's beginning to its highest glucose"),
    Column("time_below_54_min", "float64", "min", "time below 54 mg/dL in the window"),
    Column("time_below_70_min", "float64", "min", "time below 70 mg/dL in the window"),
    Column("time_above_140_min", "float64", "min", "time above 140 mg/dL in the window"),
    Column("time_above_180_min", "float64", "min", "time above 180 mg/dL in the window"),
    Column("time_above_250_min", "float64", "min", "time above 250 mg/dL in the window"),
    Column("time_in_range_70_180_min", "float64", "min", "time from 70 to 180 mg/dL in the window"),
    Column("iauc_mg_dl_min", "float64", "mg/dL min",
           "area above the mean of one linear period before the window (60 min where there is none)"),
    Column("glucose_mage_mg_dl", "float64", "mg/dL",
           "mean of swings of at least one SD, in the direction of each whole day's first; null under one day"),
    Column("insulin_mean_mu_l", "float64", "mU/L", "mean plasma insulin in the window"),
    Column("insulin_peak_mu_l", "float64", "mU/L", "highest plasma insulin in the window"),
    Column("insulin_nadir_mu_l", "float64", "mU/L", "lowest plasma insulin in the window"),
    Column("whole_arm_glucose_peak_mg_dl", "float64", "mg/dL", "highest glucose of the whole arm, settling included"),
    Column("whole_arm_glucose_nadir_mg_dl", "float64", "mg/dL", "lowest glucose of the whole arm, settling included"),
)  # fmt: skip

CLAMP_OUTCOMES: tuple[Column, ...] = (
    Column("clamp_rate_mean_mg_per_min", "float64", "mg/min", "mean infusion that held glucose, over the window"),
    Column("clamp_rate_mean_mg_per_kg_min", "float64", "mg/kg/min", "the same by body weight; null without weights"),
    Column("clamp_off_target_min", "float64", "min", "time in the window since the clamp began with glucose not held"),
    Column("clamp_dose_mg", "float64", "mg", "instant dose that lifted glucose to its target"),
    Column("clamp_target_mg_dl", "float64", "mg/dL", "the value glucose was held at"),
)

FORCED_OUTCOMES: tuple[Column, ...] = (
    Column("forcing_period_min", "float64", "min", "period of the arm's periodic input"),
    Column("locking", "text", "",
           "n:m, n insulin maxima in m forcing cycles after which the state repeats; aperiodic; undecided"),
    Column("response_period_min", "float64", "min", "m forcing periods over n; their mean spacing where aperiodic"),
    Column("response_glucose_amplitude_mg_dl", "float64", "mg/dL", "peak to trough of glucose under the periodic input"),
    Column("response_lag_min", "float64", "min",
           "from the input's peak (switching on) to the highest glucose; null unless locked"),
    Column("response_multiplier", "float64", "1",
           "modulus of the leading Floquet multiplier of the return map; null unless locked"),
)  # fmt: skip

MEAL_OUTCOMES: tuple[Column, ...] = (
    Column("meal", "int64", "", "which meal of the arm, from 1"),
    Column("meal_time_min", "float64", "min", "when it was eaten, from the arm's beginning"),
    Column("baseline_mg_dl", "float64", "mg/dL",
           "mean of one linear period before the meal (60 min where there is none)"),
    Column("peak_mg_dl", "float64", "mg/dL", "highest glucose until the next meal or the arm's end"),
    Column("time_to_peak_min", "float64", "min", "from the meal to that peak"),
    Column("iauc_mg_dl_min", "float64", "mg/dL min", "area above the baseline in 2 h, or to the next meal"),
    Column("ringing_cycles", "float64", "1", "rises and falls beyond 1 mg/dL after the meal's peak"),
)  # fmt: skip

COURSE_COLUMNS: tuple[Column, ...] = (
    Column("why", "words", "", "why this subject's course is kept", KEPT_BECAUSE),
    Column("time_min", "float64", "min", "time from the arm's beginning"),
    Column("glucose_mg_dl", "float64", "mg/dL", "plasma glucose"),
    Column("insulin_mu_l", "float64", "mU/L", "plasma insulin"),
    Column("secretion_mu_per_min", "float64", "mU/min", "insulin secretion"),
    Column("release_mg_per_min", "float64", "mg/min", "glucose release by the liver"),
)

KEY_COLUMNS: dict[str, Column] = {
    c.name: c
    for c in (
        Column("subject", "int64", "", "the virtual subject, from 0"),
        Column("arm", "text", "", "what was done"),
        Column("model", "text", "", "the body's equations"),
        Column("stratum", "text", "", "the subgroup the subject belongs to"),
        Column("id", "text", "", "the subject's own name, from the table of subjects"),
        Column("person", "int64", "", "the person this is one draw of, from the table of subjects"),
        Column("schedule", "text", "", "when samples were taken"),
        Column("refused", "text", "", "why the series was not searched"),
        Column("analyte", "words", "", "what was read", ANALYTES),
        Column("body_weight_kg", "float64", "kg", "body weight; null without sizes"),
    )
}

INCIDENCE_COLUMNS: tuple[Column, ...] = (
    Column("arm", "text", "", "what was done"),
    Column("schedule", "text", "", "the schedule of what was detected; null for regimes, which need none"),
    Column("stratum", "text", "", "the subgroup, or everyone"),
    Column(
        "regime",
        "text",
        "",
        "the regime counted; oscillates: sustained and bistable; or what a schedule detects, truly oscillating or not",
    ),
    Column("n", "int64", "", "subjects in it"),
    Column("share", "float64", "1", "their share, weighted where people are matched; unresolved subjects counted half"),
    Column("low", "float64", "1", "lower end of the 95 % interval of Monte Carlo error"),
    Column("high", "float64", "1", "upper end"),
    Column("denominator", "int64", "", "subjects counted"),
    Column(
        "unresolved", "int64", "", "undecided or failed subjects, counted once as no and once as yes by the interval"
    ),
    Column("method", "text", "", "how the interval was made"),
)

WEIGHT_COLUMNS: tuple[Column, ...] = (
    Column("subject", "int64", "", "the virtual subject, from 0"),
    Column("eligible", "bool", "", "within all bounds of subjects.eligible"),
    Column("weight", "float64", "1", "weight in every count; 0 for who is not eligible"),
)

POPULATION_COLUMNS: tuple[Column, ...] = (
    Column("draw", "int64", "", "draw of the population; 0 is the stated one"),
    Column("arm", "text", "", "what was done"),
    Column("schedule", "text", "", "the schedule of what was detected; null where nothing is sampled"),
    Column("stratum", "text", "", "the subgroup, or everyone"),
    Column("n", "int64", "", "subjects counted (eligible ones)"),
    Column("oscillating", "int64", "", "of them sustained or bistable; null without a steady input"),
    Column("unresolved", "int64", "", "of them undecided or failed"),
    Column("detected", "int64", "", "of them detected through the schedule"),
    Column("detected_oscillating", "int64", "", "of them detected and oscillating"),
)

RECRUITMENT_COLUMNS: tuple[Column, ...] = (
    Column("arm", "text", "", "what was done; of differences: one arm minus another"),
    Column("schedule", "text", "", "the schedule of what is detected; of differences: one minus another"),
    Column("stratum", "text", "", "the subgroup, or everyone"),
    Column("counted", "text", "", "oscillates, detected, or detected split into truly oscillating and not"),
    Column("recruited", "int64", "", "people recruited; null in rows on the number to recruit"),
    Column("expected", "float64", "1", "how many of them are expected to finish and be counted"),
    Column("low", "float64", "1", "lower end of the central 90 % interval for that many real people"),
    Column("high", "float64", "1", "upper end"),
    Column(
        "at_least_wanted",
        "float64",
        "1",
        "probability of at least as many as wanted; in rows on power, of telling the two strata apart",
    ),
    Column("to_recruit", "int64", "", "fewest recruits for as many as wanted with the assurance asked for"),
    Column("share", "float64", "1", "the share it rests on"),
    Column(
        "share_sd", "float64", "1", "its SD: Monte Carlo error, and uncertainty of the population where that is stated"
    ),
    Column("uncertainty", "text", "", "what the interval holds"),
    Column("refused", "text", "", "why there is no number"),
)

RANKING_COLUMNS: tuple[Column, ...] = (
    Column("stratum", "text", "", "the subgroup ranked"),
    Column("arm", "text", "", "what was done"),
    Column(
        "kind", "text", "", "design: a row of the design; plain: an independent row; redraw: one with a factor redrawn"
    ),
    Column("doubling", "int64", "", "the doubling the row came with: 0 holds each replicate's first 16 points"),
    Column("replicate", "int64", "", "scramble of the design, or trajectory; of redraws the attempt, from 1"),
    Column("block", "text", "", "A, B, or one with a factor of the other; step of a trajectory; the factor redrawn"),
    Column("position", "int64", "", "point within its replicate"),
)

ESTIMANDS: dict[str, str] = {
    "everyone": "share of the variance over everyone",
    "unresolved as no": "share of the variance over everyone, unresolved runs counted as not oscillating",
    "unresolved as yes": "share of the variance over everyone, unresolved runs counted as oscillating",
    "elementary effects": "change when one factor moves across the middle 95 % of its law, the rest anywhere",
    "association": "how well one factor predicts it, correlations included",
    "fair share": "each factor's share of the variance, what several do together split evenly",
    "left unexplained": "share of the variance that stays if all the other factors are known",
    "association among oscillators": "how well one factor predicts it among those who oscillate, selection included",
    "mechanism among oscillators": "share of the variance that stays if one factor is redrawn within those who oscillate",
    "fair share among oscillators": "each factor's share of the variance among those who oscillate",
    "association among those with one": "how well one factor predicts it among those who have it",
    "fair share among those with one": "each factor's share of the variance among those who have it",
    "difference between arms": "the first arm's index minus the second's, same people",
}
"""What an index speaks of: the column `estimand`, and the sentence that goes with it."""

VERDICTS = ("decides", "matters through interactions", "matters little", "cannot be told from nothing at this size")

SENSITIVITY_COLUMNS: tuple[Column, ...] = (
    Column("arm", "text", "", "what was done; of differences: one arm minus another"),
    Column("stratum", "text", "", "the subgroup ranked"),
    Column("outcome", "text", "", "the outcome; periods in their logarithm"),
    Column("estimand", "text", "", "what the index speaks of"),
    Column("parameter", "text", "", "the factor: a parameter, weight, or a group; null where the whole is refused"),
    Column("other", "text", "", "the second factor of a pair"),
    Column("index", "text", "", "S1, ST, S2, mu, mu_star, sigma, shapley or T"),
    Column("value", "float64", "1", "the index; mu, mu_star and sigma in the outcome's unit"),
    Column("low", "float64", "1", "lower end of its 95 % interval"),
    Column("high", "float64", "1", "upper end"),
    Column("n", "int64", "", "runs it rests on"),
    Column("method", "text", "", "estimator and interval"),
    Column("floor", "float64", "1", "what an input without influence, or the engine's tolerance alone, may give"),
    Column("verdict", "text", "", "the same in words"),
    Column("refused", "text", "", "why there is no value"),
)

CONVERGENCE_COLUMNS: tuple[Column, ...] = (
    *(c for c in SENSITIVITY_COLUMNS if c.name in ("arm", "stratum", "outcome", "estimand", "parameter", "index")),
    Column("doubling", "int64", "", "doublings of the design's first 16 points a replicate"),
    *(c for c in SENSITIVITY_COLUMNS if c.name in ("value", "low", "high", "n")),
)

DETECTION_COLUMNS: tuple[Column, ...] = (
    Column("detected", "bool", "", "the whole rule finds a rhythm in the series; no proof of a limit cycle"),
    Column("rule_p_value", "float64", "1", "p-value of the whole rule, all its analytes together"),
    Column("p_value", "float64", "1", "of this series' likelihood ratio, from simulated series without a rhythm"),
    Column("period_min", "float64", "min", "period of the best harmonic, detected or not"),
    Column("period_se_min", "float64", "min", "its standard error, given that it is the right peak"),
    Column("amplitude", "float64", "mg/dL or mU/L", "peak to trough of the best harmonic"),
    Column("relative_amplitude", "float64", "1", "half of peak to trough over the series' mean"),
    Column("half_ratio", "float64", "1", "its amplitude in the second half over that in the first"),
    Column("decaying", "bool", "", "that ratio is below 0.7; null where nothing is detected"),
    Column("samples", "int64", "", "samples present"),
    Column("note", "words", "", "why the series could not be searched", DETECTION_NOTES),
    Column("lomb_scargle_power", "float64", "1", "highest normalised power of the band; white noise only"),
    Column("lomb_scargle_p", "float64", "1", "Baluev's p-value of that power; white noise only"),
    Column("lomb_scargle_period_min", "float64", "min", "where that power lies; white noise only"),
    Column("autocorrelation", "float64", "1", "highest peak of the autocorrelation in the band; evenly sampled only"),
    Column("autocorrelation_period_min", "float64", "min", "its lag"),
    Column("pulses", "int64", "", "rises and falls beyond the stated number of assay SDs"),
    Column("power_at_forcing", "float64", "1", "normalised power at the forcing period; null without forcing"),
)


# ---- maps --------------------------------------------------------------------------------------------------------

_BORN = (
    Column("kind", "text", "", "hopf: a rhythm begins; fold: the leading eigenvalue is real"),
    Column("period_min", "float64", "min", "period of what is born there"),
    Column("lyapunov", "float64", "1/min",
           "first Lyapunov coefficient, states over their typical sizes: < 0 born small and attracting"),
    Column("born", "text", "", "the same in words"),
)  # fmt: skip
MAP_WINDOW_COLUMNS: tuple[Column, ...] = (
    Column("variable", "text", "", "the parameter, or infusion, that is changed alone"),
    Column("unit", "text", "", "its unit"),
    Column("own", "float64", "", "its value in the body that is mapped"),
    Column("oscillates", "bool", "", "the body that is mapped oscillates"),
    _BORN[0],
    Column("border", "float64", "", "where stability changes; null: nowhere in the physical range"),
    Column("oscillates_side", "text", "", "above or below the border"),
    *_BORN[1:],
    Column("distance", "float64", "1", "border over own, minus 1"),
    Column(
        "fold", "float64", "", "where the orbit beside a stable equilibrium ends; null where there is no such strip"
    ),
)
_PLACE = (
    Column("x_name", "text", "", "the first variable"),
    Column("y_name", "text", "", "the second variable"),
    Column("x", "float64", "", "value of the first variable, in its own unit"),
    Column("y", "float64", "", "value of the second variable, in its own unit"),
)
MAP_REGION_COLUMNS: tuple[Column, ...] = (
    *_PLACE,
    *(c for c in CYCLE_OUTCOMES if c.name in ("growth_per_min", "oscillates", "period_min", "glucose_amplitude_mg_dl")),
)
MAP_BORDER_COLUMNS: tuple[Column, ...] = (
    Column("curve", "int64", "", "which curve, from 0"),
    Column("point", "int64", "", "which point along it"),
    *_PLACE,
    *_BORN,
    Column(
        "fold_x", "float64", "", "x where the orbit beside a stable equilibrium ends; null where there is no such strip"
    ),
    Column("fold_y", "float64", "", "y of the same place"),
)
_FORCED_PLACE = (
    Column("forcing_period_min", "float64", "min", "period of the sine"),
    Column("relative_amplitude", "float64", "1", "its amplitude over its mean"),
)
MAP_LOCKING_COLUMNS: tuple[Column, ...] = (*_FORCED_PLACE, *FORCED_OUTCOMES[1:])
MAP_TONGUE_COLUMNS: tuple[Column, ...] = (
    Column("curve", "int64", "", "which curve, from 0"),
    Column("point", "int64", "", "which point along it"),
    FORCED_OUTCOMES[1],
    Column("kind", "text", "", "fold: meets an orbit that repels; torus: a second frequency; flip: its period doubles"),
    *_FORCED_PLACE,
)

COMPARISON_COLUMNS: tuple[Column, ...] = (
    Column("arm", "text", "", "what was done"),
    Column("stratum", "text", "", "everyone, or a stratum"),
    Column("model", "text", "", "the body's equations"),
    Column("share", "float64", "1", "share that oscillates in this model"),
    Column("low", "float64", "1", "lower end of its 95 % interval"),
    Column("high", "float64", "1", "upper end"),
    Column("period_min", "float64", "min", "median period of the oscillators (everyone only)"),
    Column(
        "glucose_amplitude_mg_dl", "float64", "mg/dL", "median glucose amplitude of the oscillators (everyone only)"
    ),
    Column("glucose_mean_mg_dl", "float64", "mg/dL", "median of mean glucose (everyone only)"),
)
