"""The likelihood ratio of many series on one design, scanned over the band and the grid of backgrounds.

The trend is projected out, and the likelihood is that of what it leaves (restricted likelihood), the scale profiled:
l = -(n - 3)/2 log SS - (log det V + log det X' V^-1 X)/2. The statistic is twice the largest l with one harmonic minus
twice the largest without, each over all backgrounds.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from cohort.observe.design import Design
from cohort.population.functions import log

Array = NDArray[np.float64]
Codes = NDArray[np.int64]

_LOG2 = 0.6931471805599453
_AT_ONCE = 256


@dataclass(frozen=True, eq=False)
class Scan:
    """Per series: the statistic; the background fitted without a rhythm, and with one; the grid frequency of the best
    rhythm; and for white noise the largest share of the sum of squares a harmonic takes (Lomb-Scargle, trend out), and
    where."""

    statistic: Array
    fitted: Codes
    fitted_with: Codes
    frequency: Codes
    white_power: Array
    white_frequency: Codes


def scan_series(design: Design, values: Array) -> Scan:
    """Scan float64[n, times], NaN where a sample is missing; every series needs a spread above 0."""
    parts = [_block(design, values[i : i + _AT_ONCE]) for i in range(0, len(values), _AT_ONCE)]
    if not parts:
        empty, none = np.empty(0), np.empty(0, dtype=np.int64)
        return Scan(empty, none, none, none, empty, none)
    return Scan(*(np.concatenate([getattr(p, name) for p in parts]) for name in Scan.__dataclass_fields__))


def _block(design: Design, values: Array) -> Scan:
    missing = np.isnan(values)
    counts = (~missing).sum(axis=1)
    # sums in the samples' order: numpy's own summation depends on the shape of the block
    centre = np.add.accumulate(np.where(missing, 0.0, values), axis=1)[:, -1] / counts
    centred = np.where(missing, 0.0, values - centre[:, None])
    squares, power, place, determinant = _sums(design, centred, missing)
    freedom = 0.5 * (counts[:, None] - 3.0)
    left = np.maximum(squares - power, 1e-14 * squares)
    without = -freedom * log(squares) - 0.5 * determinant
    with_one = -freedom * log(left) - 0.5 * determinant
    fitted, fitted_with = without.argmax(axis=1), with_one.argmax(axis=1)
    rows = np.arange(len(values))
    return Scan(
        2.0 * (with_one[rows, fitted_with] - without[rows, fitted]),
        fitted,
        fitted_with,
        place[rows, fitted_with],
        power[:, 0] / squares[:, 0],
        place[:, 0],
    )


def _sums(design: Design, centred: Array, missing: NDArray[np.bool_]) -> tuple[Array, Array, Codes, Array]:
    """Per series and background: sum of squares, the most one harmonic takes, which, and the log determinant."""
    from cohort.observe.kernels import scan, scan_missing

    n, grid = len(centred), len(design.backgrounds)
    squares, power, determinant = (np.empty((grid, n)) for _ in range(3))
    place = np.empty((grid, n), dtype=np.int64)
    gappy: NDArray[np.bool_] = np.asarray(missing.any(axis=1))
    for k, b in enumerate(design.backgrounds):
        determinant[k] = b.log_determinant
        for chosen in (np.flatnonzero(~gappy), np.flatnonzero(gappy)):
            if not len(chosen):
                continue
            s, p, at = np.empty(len(chosen)), np.empty(len(chosen)), np.empty(len(chosen), dtype=np.int64)
            body = (b.phi, b.gain, b.root, b.trend, b.harmonics)
            if gappy[chosen[0]]:
                mantissa, exponent = np.empty(len(chosen)), np.empty(len(chosen), dtype=np.int64)
                scan_missing(
                    centred[chosen], missing[chosen], *body, *design.for_missing[k], s, p, at, mantissa, exponent
                )
                determinant[k, chosen] += log(mantissa) + _LOG2 * exponent
            else:
                scan(centred[chosen], *body, s, p, at)
            squares[k, chosen], power[k, chosen], place[k, chosen] = s, p, at
    return squares.T, power.T, place.T, determinant.T
