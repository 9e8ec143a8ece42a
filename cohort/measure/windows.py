"""What happens in the measured window: means, extremes, times in range, excursions and areas, exactly.

Everything is read from the polynomials: extremes are turning points or the window's ends, times are between exact
crossings, areas are integrals. No grid is involved.
"""

from __future__ import annotations

import numpy as np

from cohort.compiled import jit
from cohort.measure.turning import integral, level_root, mean_between, turning_points, turns_in_step, value, value_at

LEVELS_MG_DL = (54.0, 70.0, 140.0, 180.0, 250.0)
DAY_MIN = 1440.0

GLUCOSE_WINDOW = (
    "glucose_mean_mg_dl", "glucose_sd_mg_dl", "glucose_peak_mg_dl", "glucose_nadir_mg_dl", "time_to_peak_min",
    "time_below_54_min", "time_below_70_min", "time_above_140_min", "time_above_180_min", "time_above_250_min",
    "iauc_mg_dl_min", "glucose_mage_mg_dl", "whole_arm_glucose_peak_mg_dl", "whole_arm_glucose_nadir_mg_dl",
)  # fmt: skip
"""Columns of `glucose_window`, in order."""

INSULIN_WINDOW = ("insulin_mean_mu_l", "insulin_peak_mu_l", "insulin_nadir_mu_l")


@jit
def extremes(start, step_size, polynomials, n_steps, begin, end, times, values):  # type: ignore[no-untyped-def]
    """(highest, its time, lowest) over begin..end, both ends included."""
    count = turning_points(start, step_size, polynomials, n_steps, begin, end, times, values)
    highest = value_at(start, step_size, polynomials, n_steps, begin)
    lowest, when = highest, begin
    last = value_at(start, step_size, polynomials, n_steps, end)
    for i in range(count + 1):
        x = values[i] if i < count else last
        if x > highest:
            highest, when = x, times[i] if i < count else end
        lowest = min(lowest, x)
    return highest, when, lowest


@jit
def square_between(start, step_size, polynomials, n_steps, begin, end, centre):  # type: ignore[no-untyped-def]
    """The integral of (column - centre)^2 over begin..end.

    The square's coefficients beyond twice the order/2 + 1 are below the integrator's own error and are left out of
    whole steps; a step cut by the window's ends is squared in full.
    """
    order = polynomials.shape[1] - 1
    square = np.empty(2 * order + 1)
    total = 0.0
    for i in range(n_steps):
        low = max((begin - start[i]) / step_size[i], 0.0)
        high = min((end - start[i]) / step_size[i], 1.0)
        if not high > low:
            continue
        a = polynomials[i]
        highest = order + 2 if low == 0.0 and high == 1.0 else 2 * order
        for m in range(highest + 1):
            s = 0.0
            for j in range(max(0, m - order), min(m, order) + 1):
                left = a[j] - centre if j == 0 else a[j]
                right = a[m - j] - centre if m == j else a[m - j]
                s += left * right
            square[m] = s
        total += integral(square[: highest + 1], low, high) * step_size[i]
    return total


@jit
def time_above(start, step_size, polynomials, n_steps, begin, end, levels, above):  # type: ignore[no-untyped-def]
    """Add to above[q] the time spent above levels[q] within begin..end."""
    places = np.empty(12)
    for i in range(n_steps):
        low = max((begin - start[i]) / step_size[i], 0.0)
        high = min((end - start[i]) / step_size[i], 1.0)
        if not high > low:
            continue
        a = polynomials[i]
        spread = 0.0
        for k in range(1, a.shape[0]):
            spread += abs(a[k])
        pieces = -1
        for q in range(levels.shape[0]):
            if abs(a[0] - levels[q]) > spread:
                if a[0] > levels[q]:
                    above[q] += (high - low) * step_size[i]
                continue
            if pieces < 0:
                pieces = turns_in_step(a, places[1:]) + 1
            previous = low
            for p in range(pieces):
                following = high if p == pieces - 1 else min(max(places[p + 1], low), high)
                above[q] += _share_above(a, levels[q], previous, following) * step_size[i]
                previous = following


@jit
def _share_above(a, level, low, high):  # type: ignore[no-untyped-def]
    """How much of low..high, where the polynomial is monotone, lies above the level."""
    if high <= low:
        return 0.0
    first, last = value(a, low) > level, value(a, high) > level
    if first and last:
        return high - low
    if not first and not last:
        return 0.0
    x = level_root(a, level, low, high)
    return x - low if first else high - x


@jit
def area_above(start, step_size, polynomials, n_steps, begin, end, baseline):  # type: ignore[no-untyped-def]
    """The area between column and baseline where the column is higher, cut at the exact crossings."""
    places = np.empty(12)
    total = 0.0
    for i in range(n_steps):
        low = max((begin - start[i]) / step_size[i], 0.0)
        high = min((end - start[i]) / step_size[i], 1.0)
        if not high > low:
            continue
        a = polynomials[i]
        spread = 0.0
        for k in range(1, a.shape[0]):
            spread += abs(a[k])
        if a[0] < baseline - spread:
            continue
        if a[0] > baseline + spread:
            total += (integral(a, low, high) - baseline * (high - low)) * step_size[i]
            continue
        pieces = turns_in_step(a, places[1:]) + 1
        previous = low
        for p in range(pieces):
            following = high if p == pieces - 1 else min(max(places[p + 1], low), high)
            if following > previous:
                first, last = value(a, previous) > baseline, value(a, following) > baseline
                left, right = previous, following
                if first != last:
                    x = level_root(a, baseline, previous, following)
                    left, right = (previous, x) if first else (x, following)
                if first or last:
                    total += (integral(a, left, right) - baseline * (right - left)) * step_size[i]
            previous = following
    return total


@jit
def excursions(values, count, least, sizes):  # type: ignore[no-untyped-def]
    """Sizes of the swings between turning points that reach `least`; smaller reversals are passed over.

    values: the turning points in order. Positive sizes rise. Returns how many were written.
    """
    written = 0
    if count < 2:
        return 0
    high = low = values[0]
    anchor = values[0]
    direction = 0
    for i in range(1, count):
        x = values[i]
        if direction == 0:
            high, low = max(high, x), min(low, x)
            if x - low >= least and x > low:
                direction, anchor, high = 1, low, x
            elif high - x >= least and x < high:
                direction, anchor, low = -1, high, x
        elif direction == 1:
            if x > high:
                high = x
            elif high - x >= least:
                sizes[written] = high - anchor
                written += 1
                anchor, low, direction = high, x, -1
        elif x < low:
            low = x
        elif x - low >= least:
            sizes[written] = low - anchor
            written += 1
            anchor, high, direction = low, x, 1
    if direction != 0:
        sizes[written] = (high if direction == 1 else low) - anchor
        written += 1
    return written


@jit
def mage(start, step_size, polynomials, n_steps, begin, end, times, values):  # type: ignore[no-untyped-def]
    """Mean amplitude of glycaemic excursions over the window's whole days, NaN where there is none.

    Of each day: swings between its turning points of at least one SD of that day; the direction of the first such
    swing is the one that counts (Service et al., Diabetes 1970;19:644). The mean is over all days' swings.
    """
    sizes = np.empty(times.shape[0] + 1)
    total, number = 0.0, 0
    day = begin
    while day + DAY_MIN <= end:
        mean = mean_between(start, step_size, polynomials, n_steps, day, day + DAY_MIN)
        square = square_between(start, step_size, polynomials, n_steps, day, day + DAY_MIN, mean)
        count = turning_points(start, step_size, polynomials, n_steps, day, day + DAY_MIN, times, values)
        written = excursions(values, count, np.sqrt(square / DAY_MIN), sizes)
        for i in range(0, written, 2):
            total += abs(sizes[i])
            number += 1
        day += DAY_MIN
    return total / number if number > 0 else np.nan


@jit
def baseline(start, step_size, polynomials, n_steps, at, period):  # type: ignore[no-untyped-def]
    """The mean over one period before `at` (what is left of the past if less), the value at `at` where there is none."""
    begin = max(at - period, 0.0)
    if begin >= at:
        return value_at(start, step_size, polynomials, n_steps, at)
    return mean_between(start, step_size, polynomials, n_steps, begin, at)


@jit
def glucose_window(start, step_size, polynomials, n_steps, settle, end, period, levels, out):  # type: ignore[no-untyped-def]
    """Write one subject's GLUCOSE_WINDOW columns into out."""
    room = polynomials.shape[0] + 8
    times, values = np.empty(room), np.empty(room)
    mean = mean_between(start, step_size, polynomials, n_steps, settle, end)
    square = square_between(start, step_size, polynomials, n_steps, settle, end, mean)
    out[0], out[1] = mean, np.sqrt(max(square, 0.0) / (end - settle))
    out[2], when, out[3] = extremes(start, step_size, polynomials, n_steps, settle, end, times, values)
    out[4] = when - settle
    above = np.zeros(levels.shape[0])
    time_above(start, step_size, polynomials, n_steps, settle, end, levels, above)
    for q in range(levels.shape[0]):
        out[5 + q] = end - settle - above[q] if q < 2 else above[q]
    before = baseline(start, step_size, polynomials, n_steps, settle, period)
    out[10] = area_above(start, step_size, polynomials, n_steps, settle, end, before)
    out[11] = mage(start, step_size, polynomials, n_steps, settle, end, times, values)
    if settle == 0.0:
        out[12], out[13] = out[2], out[3]
    else:
        early, _, early_low = extremes(start, step_size, polynomials, n_steps, 0.0, settle, times, values)
        out[12], out[13] = max(out[2], early), min(out[3], early_low)


@jit
def insulin_window(start, step_size, polynomials, n_steps, settle, end, out):  # type: ignore[no-untyped-def]
    """Write one subject's INSULIN_WINDOW columns into out."""
    room = polynomials.shape[0] + 8
    times, values = np.empty(room), np.empty(room)
    out[0] = mean_between(start, step_size, polynomials, n_steps, settle, end)
    out[1], _, out[2] = extremes(start, step_size, polynomials, n_steps, settle, end, times, values)


@jit
def window_rows(start, step_size, coefficients, n_steps, status, settle, end, periods, levels, out):  # type: ignore[no-untyped-def]
    """GLUCOSE_WINDOW then INSULIN_WINDOW of every subject whose course is whole; rows of others are left alone."""
    for s in range(n_steps.shape[0]):
        if status[s] != -1:
            continue
        n = n_steps[s]
        glucose, insulin = coefficients[s, :n, 0], coefficients[s, :n, 1]
        glucose_window(start[s], step_size[s], glucose, n, settle, end, periods[s], levels, out[s])
        insulin_window(start[s], step_size[s], insulin, n, settle, end, out[s, 14:])
