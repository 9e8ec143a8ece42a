"""Is there a rhythm in this sampled, noisy series? The likelihood ratio, and what people use, side by side.

A detection says that the band holds more regularity than the body's own AR(1) irregularity and the assay would leave.
It is no proof of a limit cycle: noise-driven damped rhythms and ring-downs are detected too.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from cohort.errors import nearest
from cohort.observe.design import BAND_MIN, FEWEST_SAMPLES, Design, make_design
from cohort.observe.null import null_table, serving
from cohort.observe.sampling import Reading, Schedule, observe
from cohort.observe.scan import Scan, scan_series
from cohort.observe.white import baluev_p, baluev_width
from cohort.quantities import ANALYTES, DETECTION_COLUMNS

Array = NDArray[np.float64]
Columns = dict[str, NDArray[Any]]

DETECT_IN = (*ANALYTES, "either", "both")
DECAYING_BELOW = 0.7


@dataclass(frozen=True)
class Rule:
    """What counts as detected: band of periods, min; false alarms of the whole rule; where a rhythm must show; and the
    swing of the nadir-to-peak rule in assay SDs."""

    band_min: tuple[float, float] = BAND_MIN
    false_alarm: float = 0.05
    detect_in: str = "glucose"
    swing_sds: float = 3.0

    def __post_init__(self) -> None:
        if self.detect_in not in DETECT_IN:
            allowed = ", ".join(DETECT_IN)
            raise ValueError(f"detect_in is {self.detect_in!r}; one of {allowed}{nearest(self.detect_in, DETECT_IN)}")
        if not 0.0 < self.false_alarm < 1.0:
            raise ValueError(f"false_alarm is {self.false_alarm}; a share above 0 and below 1")


def whole_rule(p_values: dict[str, Array], rule: Rule) -> Array:
    """The p-value of the whole rule from those of its analytes, float64[n]; NaN where one it needs is missing.

    The analytes' irregularity and assay errors are independent, so where neither has a rhythm the smaller of two
    p-values is below x with probability 1 - (1 - x)^2, and the larger with probability x^2.
    """
    if rule.detect_in in ANALYTES:
        return p_values[rule.detect_in]
    one, other = (p_values[a] for a in ANALYTES)
    if rule.detect_in == "either":
        smaller: Array = np.minimum(one, other)
        return 1.0 - (1.0 - smaller) * (1.0 - smaller)
    larger: Array = np.maximum(one, other)
    return larger * larger


def decide(rule_p: Array, rule: Rule) -> NDArray[np.int8]:
    """1 detected, 0 not, -1 unknown: int8[n]."""
    return np.where(np.isnan(rule_p), -1, rule_p <= rule.false_alarm).astype(np.int8)


def search(
    times_min: Array,
    values: Array,
    rule: Rule,
    assay_cv: float,
    forcing_period_min: Array | None = None,
    folder: Path | None = None,
    null_design: Design | None = None,
) -> Columns:
    """Search series of one analyte, float64[n, times] with NaN where a sample is missing, for a rhythm.

    Returns the columns of DETECTION_COLUMNS but for `detected`, `rule_p_value` and `decaying`, one number a series.
    `folder` keeps null tables between runs; `null_design`, a schedule much like this one with tables at hand, lends its
    own. Raises ValueError where the schedule can see no period of the band.
    """
    design = make_design(times_min, rule.band_min)
    samples = (~np.isnan(values)).sum(axis=1)
    note = _notes(values, samples)
    usable = np.flatnonzero(note < 0)
    found: Columns = {c.name: np.full(len(values), np.nan) for c in DETECTION_COLUMNS if c.kind == "float64"}
    found |= {"samples": samples.astype(np.int64), "note": note, "pulses": np.full(len(values), -1, dtype=np.int64)}
    del found["rule_p_value"]
    if len(usable):
        kept = np.ascontiguousarray(values[usable])
        scan = scan_series(design, kept)
        forcing = np.full(len(kept), np.nan) if forcing_period_min is None else forcing_period_min[usable]
        columns = {
            "p_value": _p_values(null_design or design, scan, len(design.times_min) - samples[usable], folder),
            **_white(design, scan, kept),
            **_shapes(design, scan, kept, rule, assay_cv, forcing),
        }
        for name, column in columns.items():
            found[name][usable] = column
    return found


def observations(
    true: dict[str, Array],
    schedule: Schedule,
    readings: dict[str, Reading],
    rule: Rule,
    seed: int,
    arm: str,
    subjects: tuple[int, int],
    forcing_period_min: Array | None = None,
    folder: Path | None = None,
) -> Columns:
    """What the clinic would find: true courses (glucose mg/dL, insulin mU/L, each float64[n, times]) of subjects
    start..stop-1 through one schedule.

    Returns columns, two rows a subject (glucose, then insulin): `subject`, `analyte` (codes into ANALYTES) and
    DETECTION_COLUMNS. Same numbers whatever the range of subjects.
    """
    start, stop = subjects
    times = np.asarray(schedule.times_min)
    parts = {}
    for analyte in ANALYTES:
        seen = observe(true[analyte], schedule, readings[analyte], seed, arm, analyte, subjects)
        parts[analyte] = search(times, seen, rule, readings[analyte].cv, forcing_period_min, folder)
    conclude(parts, rule)
    columns = {name: np.stack([parts[a][name] for a in ANALYTES], axis=1).ravel() for name in parts[ANALYTES[0]]}
    n = stop - start
    keys: Columns = {
        "subject": np.repeat(np.arange(start, stop, dtype=np.int64), len(ANALYTES)),
        "analyte": np.tile(np.arange(len(ANALYTES), dtype=np.int8), n),
    }
    return {**keys, **{c.name: columns[c.name] for c in DETECTION_COLUMNS}}


def conclude(parts: dict[str, Columns], rule: Rule) -> None:
    """Add `rule_p_value`, `detected` and `decaying` to the searched columns of each analyte, in place."""
    rule_p = whole_rule({a: np.asarray(p["p_value"], dtype=np.float64) for a, p in parts.items()}, rule)
    detected = decide(rule_p, rule)
    for part in parts.values():
        decaying = np.where(detected == 1, part["half_ratio"] < DECAYING_BELOW, -1).astype(np.int8)
        part |= {"rule_p_value": rule_p, "detected": detected, "decaying": decaying}


def _notes(values: Array, samples: NDArray[np.int64]) -> NDArray[np.int8]:
    flat = np.nanmax(np.where(samples[:, None] == 0, 0.0, values), axis=1) == np.nanmin(
        np.where(samples[:, None] == 0, 0.0, values), axis=1
    )
    return np.where(samples < FEWEST_SAMPLES, 0, np.where(flat, 1, -1)).astype(np.int8)


def _p_values(design: Design, scan: Scan, missing: NDArray[np.int64], folder: Path | None) -> Array:
    p = np.empty(len(missing))
    served = np.array([serving(design, int(m)) for m in missing])
    for m in np.unique(served):
        mine = served == m
        p[mine] = null_table(design, int(m), folder).p_values(scan.statistic[mine], scan.fitted[mine])
    return p


def _white(design: Design, scan: Scan, values: Array) -> dict[str, Array]:
    present = ~np.isnan(values)
    count = present.sum(axis=1)
    times = np.where(present, design.times_min, 0.0)
    mean = np.add.accumulate(times, axis=1)[:, -1] / count
    spread = np.add.accumulate(np.where(present, (times - mean[:, None]) ** 2, 0.0), axis=1)[:, -1] / count
    return {
        "lomb_scargle_power": scan.white_power,
        "lomb_scargle_p": baluev_p(scan.white_power, count, baluev_width(spread, *design.band_min)),
        "lomb_scargle_period_min": 1.0 / design.frequencies[scan.white_frequency],
    }


def _shapes(design: Design, scan: Scan, values: Array, rule: Rule, assay_cv: float, forcing: Array) -> Columns:
    """What takes each series by itself: the refined harmonic, pulses, autocorrelation and power at the forcing."""
    from cohort.observe.kernels import describe

    phi = np.stack([b.phi for b in design.backgrounds])
    rho = np.array([b.rho for b in design.backgrounds])
    step = float(design.times_min[1] - design.times_min[0])
    out = np.empty((len(values), 9))
    describe(
        values, design.times_min, phi, rho, scan.fitted_with, scan.frequency, design.frequencies,
        rule.swing_sds * assay_cv, 1.0 / forcing, _lags(design, step), out,
    )  # fmt: skip
    return {
        "period_min": 1.0 / out[:, 0],
        "period_se_min": out[:, 1] / (out[:, 0] * out[:, 0]),
        "amplitude": 2.0 * out[:, 2],
        "relative_amplitude": out[:, 2] / out[:, 4],
        "half_ratio": out[:, 3],
        "pulses": out[:, 5],
        "power_at_forcing": out[:, 6],
        "autocorrelation": out[:, 7],
        "autocorrelation_period_min": out[:, 8] * step,
    }


def _lags(design: Design, step: float) -> tuple[int, int]:
    """First and last lag of the autocorrelation in samples; (0, 0) where samples are not evenly spaced."""
    if np.ptp(np.diff(design.times_min)) > 1e-9 * step:
        return 0, 0
    longest = min(int(design.band_min[1] / step), len(design.times_min) // 2)
    return max(int(np.ceil(design.band_min[0] / step)), 1), longest
