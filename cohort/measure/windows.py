"""What happens in the measured window: means, extremes, times in range, excursions and areas, exactly.

Everything is read from the polynomials: extremes are turning points or the window's ends, times are between exact
crossings, areas are integrals. No grid is involved.
"""

from __future__ import annotations

import numpy as np

from cohort.compiled import LANES, call_program, jit
from cohort.measure.scan import (
    area_to,
    extremes,
    mean_between,
    polished,
    scan,
    sd_between,
    step_at,
    turns_between,
    value_at,
)
from cohort.measure.turning import ROUGHLY, integral, level_root, turns_in_step, value

LEVELS_MG_DL = (54.0, 70.0, 140.0, 180.0, 250.0)
DAY_MIN = 1440.0
CLOSE = 1e-4
"""How small Newton's last change of a crossing's place must be: what is left is about its square."""

GLUCOSE_WINDOW = (
    "glucose_mean_mg_dl", "glucose_sd_mg_dl", "glucose_peak_mg_dl", "glucose_nadir_mg_dl", "time_to_peak_min",
    "time_below_54_min", "time_below_70_min", "time_above_140_min", "time_above_180_min", "time_above_250_min",
    "iauc_mg_dl_min", "glucose_mage_mg_dl", "whole_arm_glucose_peak_mg_dl", "whole_arm_glucose_nadir_mg_dl",
)  # fmt: skip
"""Columns of `glucose_window`, in order."""

INSULIN_WINDOW = ("insulin_mean_mu_l", "insulin_peak_mu_l", "insulin_nadir_mu_l")


@jit
def above(s, begin, end, level):  # type: ignore[no-untyped-def]
    """(time above the level, area above it) within begin..end, cut at the exact crossings.

    Whole steps that rise or fall throughout are solved LANES at once.
    """
    time, area = 0.0, 0.0
    orders = s.a.shape[1]
    source, result = np.zeros((orders + 2, LANES)), np.empty((3, LANES))
    step = np.empty(LANES, np.int64)
    pending = 0
    for i in range(step_at(s, begin), s.start.shape[0]):
        h = s.step_size[i]
        if s.start[i] >= end:
            break
        a = s.a
        if a[i, 0] + s.summaries[i, 3] < level:
            continue
        whole = s.start[i] >= begin and s.start[i] + h <= end
        if whole and a[i, 0] - s.summaries[i, 3] > level:
            time += h
            area += (s.summaries[i, 4] - level) * h
        elif whole and abs(a[i, 1]) > s.summaries[i, 1]:
            if (a[i, 0] > level) != (s.summaries[i, 6] > level):
                for k in range(orders):
                    source[k, pending] = a[i, k]
                source[orders, pending], source[orders + 1, pending] = s.summaries[i, 6], level
                step[pending] = i
                pending += 1
                if pending == LANES:
                    more = _solve_crossings(s, source, result, step, pending, level)
                    time, area, pending = time + more[0], area + more[1], 0
            elif a[i, 0] > level:
                time += h
                area += (s.summaries[i, 4] - level) * h
        else:
            more = _above_in_step(s, i, begin, end, level)
            time, area = time + more[0], area + more[1]
    if pending > 0:
        more = _solve_crossings(s, source, result, step, pending, level)
        time, area = time + more[0], area + more[1]
    return time, area


@jit
def _solve_crossings(s, source, result, step, pending, level):  # type: ignore[no-untyped-def]
    """(time, area) above the level in the first `pending` of the steps `step`, each crossed once."""
    call_program(s.roots.cross, source, result)
    time, area = 0.0, 0.0
    for l in range(pending):
        i = step[l]
        x, before = result[0, l], result[1, l]
        if not result[2, l] <= CLOSE:
            x = level_root(s.a, i, level, 0.0, 1.0)
            before = integral(s.a, i, 0.0, x)
        if s.a[i, 0] > level:
            time += x * s.step_size[i]
            area += (before - level * x) * s.step_size[i]
        else:
            time += (1.0 - x) * s.step_size[i]
            area += (s.summaries[i, 4] - before - level * (1.0 - x)) * s.step_size[i]
    return time, area


@jit
def _above_in_step(s, i, begin, end, level):  # type: ignore[no-untyped-def]
    """(time, area) above the level in the part of step i within begin..end, whatever it does there."""
    places = np.empty(12)
    time, area = 0.0, 0.0
    h, a = s.step_size[i], s.a
    low = max((begin - s.start[i]) / h, 0.0)
    high = min((end - s.start[i]) / h, 1.0)
    if not high > low:
        return time, area
    pieces = turns_in_step(a, s.summaries, i, places, ROUGHLY) + 1
    previous = low
    for p in range(pieces):
        following = high if p == pieces - 1 else min(max(places[p], low), high)
        if following > previous:
            first, last = value(a, i, previous) > level, value(a, i, following) > level
            left, right = previous, following
            if first != last:
                x = level_root(a, i, level, previous, following)
                left, right = (previous, x) if first else (x, following)
            if first or last:
                time += (right - left) * h
                area += (integral(a, i, left, right) - level * (right - left)) * h
        previous = following
    return time, area


@jit
def excursions(values, least, sizes):  # type: ignore[no-untyped-def]
    """Sizes of the swings between turning points that reach `least`; smaller reversals are passed over.

    values: the turning points in order. Positive sizes rise. Returns how many were written.
    """
    written = 0
    if values.shape[0] < 2:
        return 0
    high = low = anchor = values[0]
    direction = 0
    for x in values[1:]:
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
def mage(s, begin, end):  # type: ignore[no-untyped-def]
    """Mean amplitude of glycaemic excursions over the window's whole days, NaN where there is none.

    Of each day: swings between its turning points of at least one SD of that day; the direction of the first such
    swing is the one that counts (Service et al., Diabetes 1970;19:644). The mean is over all days' swings.
    """
    sizes = np.empty(s.values.shape[0] + 1)
    total, number = 0.0, 0
    day = begin
    while day + DAY_MIN <= end:
        first, last = turns_between(s, day, day + DAY_MIN)
        written = excursions(s.values[first:last], sd_between(s, day, day + DAY_MIN), sizes)
        for i in range(0, written, 2):
            total += abs(sizes[i])
            number += 1
        day += DAY_MIN
    return total / number if number > 0 else np.nan


@jit
def baseline(s, at, period):  # type: ignore[no-untyped-def]
    """The mean over one period before `at` (what is left of the past if less), the value at `at` where there is none."""
    begin = max(at - period, s.start[0])
    if begin >= at:
        return value_at(s, at)
    return mean_between(s, begin, at)


@jit
def glucose_window(s, settle, end, period, levels, out):  # type: ignore[no-untyped-def]
    """Write one subject's GLUCOSE_WINDOW columns into out."""
    out[0], out[1] = mean_between(s, settle, end), sd_between(s, settle, end)
    out[2], when, out[3] = extremes(s, settle, end)
    out[4] = polished(s, when) - settle
    for q in range(levels.shape[0]):
        if levels[q] > out[2]:
            time = 0.0
        elif levels[q] < out[3]:
            time = end - settle
        else:
            time, _ = above(s, settle, end, levels[q])
        out[5 + q] = end - settle - time if q < 2 else time
    before = baseline(s, settle, period)
    if before <= out[3]:
        out[10] = area_to(s, end) - area_to(s, settle) - before * (end - settle)
    else:
        _, out[10] = above(s, settle, end, before)
    out[11] = mage(s, settle, end)
    out[12], _, out[13] = extremes(s, s.start[0], end)


@jit
def insulin_window(start, step_size, a, summaries, settle, end, out):  # type: ignore[no-untyped-def]
    """Write one subject's INSULIN_WINDOW columns into out: mean, highest, lowest over settle..end.

    Only steps that could hold a new extreme, by how far the column can move within them, are searched for one.
    """
    places = np.empty(12)
    n = start.shape[0]
    first = max(np.searchsorted(start, settle, side="right") - 1, 0)
    highest = lowest = value(a, first, (settle - start[first]) / step_size[first])
    area = 0.0
    for i in range(first, n):
        low = max((settle - start[i]) / step_size[i], 0.0)
        high = min((end - start[i]) / step_size[i], 1.0)
        if low == 0.0 and high == 1.0:
            area += summaries[i, 4] * step_size[i]
            last = summaries[i, 6]
            highest, lowest = max(highest, a[i, 0]), min(lowest, a[i, 0])  # a dose may have come between
        elif high > low:
            area += integral(a, i, low, high) * step_size[i]
            last = value(a, i, high)
        else:
            continue
        highest, lowest = max(highest, last), min(lowest, last)
    for i in range(first, n):
        if a[i, 0] + summaries[i, 3] <= highest and a[i, 0] - summaries[i, 3] >= lowest:
            continue
        for r in range(turns_in_step(a, summaries, i, places, ROUGHLY)):
            if settle < start[i] + places[r] * step_size[i] < end:
                x = value(a, i, places[r])
                highest, lowest = max(highest, x), min(lowest, x)
    out[0], out[1], out[2] = area / (end - settle), highest, lowest


@jit
def window_rows(roots, start, step_size, coefficients, summaries, n_steps, status, settle, end, periods, levels, out):  # type: ignore[no-untyped-def]
    """GLUCOSE_WINDOW then INSULIN_WINDOW of every subject whose course is whole; rows of others are left alone."""
    for b in range(n_steps.shape[0]):
        if status[b] != -1:
            continue
        n = n_steps[b]
        glucose = scan(roots, start[b, :n], step_size[b, :n], coefficients[b, 0, :n], summaries[b, 0, :n])
        glucose_window(glucose, settle, end, periods[b], levels, out[b])
        insulin, marks = coefficients[b, 1, :n], summaries[b, 1, :n]
        insulin_window(start[b, :n], step_size[b, :n], insulin, marks, settle, end, out[b, 14:])


@jit
def column_means(roots, start, step_size, coefficients, summaries, n_steps, status, column, begin, end, out):  # type: ignore[no-untyped-def]
    """The mean of one recorded column over begin..end of every subject whose course is whole: out float64[n]."""
    for b in range(n_steps.shape[0]):
        if status[b] == -1:
            n = n_steps[b]
            read = scan(roots, start[b, :n], step_size[b, :n], coefficients[b, column, :n], summaries[b, column, :n])
            out[b] = mean_between(read, begin, end)
