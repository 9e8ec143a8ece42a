"""What people use for evenly distributed white noise: the Lomb-Scargle periodogram with Baluev's p-value, and pulses.

These are printed beside the likelihood ratio, never instead of it: in the body's own correlated irregularity their
false alarms are many times the nominal rate.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from cohort.observe.sampling import Reading, Schedule, observe
from cohort.population.functions import exp, log, log_gamma

Array = NDArray[np.float64]


def lomb_scargle(times_min: Array, values: Array, frequencies: Array, degree: int = 2) -> Array:
    """Normalised power (SS0 - SS1)/SS0 at each frequency, 1/min: float64[frequencies].

    SS0 is the sum of squares about a polynomial of the given degree, SS1 that about it and a harmonic, fitted together.
    Degree 0 is the generalised periodogram (floating mean) of Zechmeister & Kuerster, A&A 2009;496:577.
    """
    x = np.asarray(times_min, dtype=np.float64)
    x = 2.0 * (x - x[0]) / (x[-1] - x[0]) - 1.0
    trend = np.linalg.qr(np.stack([x**k for k in range(degree + 1)], axis=1))[0]

    def left(columns: Array) -> Array:
        return columns - trend @ (trend.T @ columns)

    y = left(np.asarray(values, dtype=np.float64))
    turns = 2.0 * np.pi * np.outer(frequencies, np.asarray(times_min) - times_min[0])
    power = np.empty(len(frequencies))
    for i, turn in enumerate(turns):
        harmonic = left(np.stack([np.cos(turn), np.sin(turn)], axis=1))
        residual = y - harmonic @ np.linalg.lstsq(harmonic, y, rcond=None)[0]
        power[i] = 1.0 - (residual @ residual) / (y @ y)
    return power


def single_p(power: Array, samples: Array | int, trend: int = 3) -> Array:
    """False-alarm probability of a normalised power at one frequency stated beforehand, in white noise."""
    freedom = np.asarray(samples, dtype=np.float64) - trend - 2.0
    return exp(0.5 * freedom * log(np.maximum(1.0 - np.asarray(power), 1e-300)))


def baluev_width(times_variance: Array | float, shortest_min: float, longest_min: float) -> Array:
    """W of Baluev (MNRAS 2008;385:1279): the band's width in frequency by the spread of the sampling times."""
    width: Array = (1.0 / shortest_min - 1.0 / longest_min) * np.sqrt(4.0 * math.pi * np.asarray(times_variance))
    return width


def baluev_p(power: Array, samples: Array | int, width: Array | float, trend: int = 3) -> Array:
    """False-alarm probability of the highest normalised power of the band, in white noise (Baluev 2008).

    `trend` counts the parameters taken out before (3 for a quadratic), `width` is from `baluev_width`.
    """
    z = np.clip(np.asarray(power, dtype=np.float64), 0.0, 1.0 - 1e-15)
    n = np.broadcast_to(np.asarray(samples, dtype=np.float64) - trend, z.shape)
    counts, which = np.unique(n, return_inverse=True)
    gamma = np.sqrt(2.0 / counts) * exp(np.array([log_gamma(h / 2.0) - log_gamma((h - 1.0) / 2.0) for h in counts]))
    tau = gamma[which].reshape(n.shape) * width * exp(0.5 * (n - 3.0) * log(1.0 - z)) * np.sqrt(0.5 * n * z)
    return 1.0 - (1.0 - single_p(z, samples, trend)) * exp(-tau)


def false_pulses_per_h(
    schedule: Schedule, reading: Reading, swing_sds: float, mean: float = 100.0, simulated: int = 1024
) -> float:
    """Pulses an hour that the nadir-to-peak rule finds where nothing pulses: a steady value read as `reading` says.

    The rule: a rise from nadir to peak and the fall after it, both above `swing_sds` assay SDs. By simulation, with its
    own fixed stream; the same schedule and reading always give the same number.
    """
    from cohort.observe.kernels import pulses

    steady = np.full((simulated, len(schedule.times_min)), mean)
    series = observe(steady, schedule, reading, 0, "steady", "calibration", (0, simulated))
    swing = swing_sds * reading.cv * mean
    found = sum(pulses(y[~np.isnan(y)], swing) for y in series)
    return float(found / simulated / ((schedule.times_min[-1] - schedule.times_min[0]) / 60.0))
