"""Turning points, crossings and integrals of a recorded course, from its polynomials.

A step's polynomial runs over 0 <= x <= 1. Where the slope (or else its own slope) cannot change sign, by comparing
its first coefficient with the sum of the others' sizes, the ends decide; elsewhere the step is searched in eighths.
"""

from __future__ import annotations

import numpy as np

from cohort.compiled import jit

_PARTS = 8


@jit
def value(a, x):  # type: ignore[no-untyped-def]
    """The polynomial with coefficients a at x."""
    total = a[a.shape[0] - 1]
    for k in range(a.shape[0] - 2, -1, -1):
        total = total * x + a[k]
    return total


@jit
def slope(a, x):  # type: ignore[no-untyped-def]
    """d/dx of the polynomial at x."""
    n = a.shape[0] - 1
    total = n * a[n]
    for k in range(n - 1, 0, -1):
        total = total * x + k * a[k]
    return total


@jit
def integral(a, low, high):  # type: ignore[no-untyped-def]
    """The polynomial's integral over x = low..high."""
    top = 0.0
    bottom = 0.0
    for k in range(a.shape[0] - 1, -1, -1):
        top = (top + a[k] / (k + 1)) * high
        bottom = (bottom + a[k] / (k + 1)) * low
    return top - bottom


@jit
def _slope_and_bend(a, x):  # type: ignore[no-untyped-def]
    n = a.shape[0] - 1
    first = n * a[n]
    second = 0.0
    for k in range(n - 1, 0, -1):
        second = second * x + first
        first = first * x + k * a[k]
    return first, second


@jit
def _value_and_slope(a, x):  # type: ignore[no-untyped-def]
    total = a[a.shape[0] - 1]
    first = 0.0
    for k in range(a.shape[0] - 2, -1, -1):
        first = first * x + total
        total = total * x + a[k]
    return total, first


@jit
def _slope_root(a, low, high, f_low, f_high):  # type: ignore[no-untyped-def]
    """Where the slope, f_low and f_high of opposite signs at low and high, is zero: Newton kept inside the bracket."""
    x = (low * f_high - high * f_low) / (f_high - f_low)
    for _ in range(60):
        f, g = _slope_and_bend(a, x)
        if (f > 0.0) == (f_high > 0.0):
            high = x
        else:
            low = x
        following = x - f / g
        if not low <= following <= high:
            following = 0.5 * (low + high)
        if abs(following - x) <= 1e-9:
            return following
        x = following
    return x


@jit
def level_root(a, level, low, high):  # type: ignore[no-untyped-def]
    """Where the polynomial, on opposite sides of `level` at low and high, crosses it."""
    f_low, f_high = value(a, low) - level, value(a, high) - level
    x = (low * f_high - high * f_low) / (f_high - f_low)
    for _ in range(60):
        f, g = _value_and_slope(a, x)
        f -= level
        if (f > 0.0) == (f_high > 0.0):
            high = x
        else:
            low = x
        following = x - f / g
        if not low <= following <= high:
            following = 0.5 * (low + high)
        if abs(following - x) <= 1e-9:
            return following
        x = following
    return x


@jit
def turns_in_step(a, summary, found):  # type: ignore[no-untyped-def]
    """Write the places 0 < x <= 1 where the slope changes sign into `found`; return how many.

    a: float64[order + 1]; summary: float64[SUMMARY] of the same step (`cohort.model.taylor`).
    """
    end_slope = summary[0]
    if abs(a[1]) > summary[1]:
        return 0
    if 2.0 * abs(a[2]) > summary[2]:
        if (a[1] > 0.0) == (end_slope > 0.0) or a[1] == 0.0:
            return 0
        found[0] = _slope_root(a, 0.0, 1.0, a[1], end_slope)
        return 1
    count = 0
    before = a[1]
    for part in range(_PARTS):
        after = slope(a, (part + 1) / _PARTS)
        if before != 0.0 and (before > 0.0) != (after > 0.0):
            found[count] = _slope_root(a, part / _PARTS, (part + 1) / _PARTS, slope(a, part / _PARTS), after)
            count += 1
        if after != 0.0:
            before = after
    return count


@jit
def turning_points(start, step_size, a, summaries, times, values):  # type: ignore[no-untyped-def]
    """Write the turning points of one column of one course; return how many.

    start, step_size: float64[steps]; a: float64[steps, order + 1]; summaries: float64[steps, SUMMARY]; times, values:
    room for them. Where an input jumps the slope may change sign between steps: such a corner is one as well.
    """
    found = np.empty(_PARTS)
    count = 0
    last = 0.0
    for i in range(start.shape[0]):
        if last * a[i, 1] < 0.0 and count < times.shape[0]:
            times[count], values[count] = start[i], a[i, 0]
            count += 1
        for r in range(turns_in_step(a[i], summaries[i], found)):
            if count < times.shape[0]:
                times[count], values[count] = start[i] + found[r] * step_size[i], value(a[i], found[r])
                count += 1
        last = summaries[i, 0]
    return count
