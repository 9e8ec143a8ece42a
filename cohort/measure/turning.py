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
def _slope_root(a, low, high):  # type: ignore[no-untyped-def]
    """Where the slope, of opposite signs at low and high, is zero: secant steps kept inside the bracket (Illinois)."""
    f_low, f_high = slope(a, low), slope(a, high)
    side = 0
    x = low
    for _ in range(100):
        x = (low * f_high - high * f_low) / (f_high - f_low)
        f = slope(a, x)
        if f == 0.0 or high - low <= 1e-15:
            break
        if (f > 0.0) == (f_high > 0.0):
            if abs(high - x) <= 1e-15:
                break
            high, f_high = x, f
            if side == 1:
                f_low *= 0.5
            side = 1
        else:
            if abs(x - low) <= 1e-15:
                break
            low, f_low = x, f
            if side == -1:
                f_high *= 0.5
            side = -1
    return x


@jit
def level_root(a, level, low, high):  # type: ignore[no-untyped-def]
    """Where the polynomial, on opposite sides of `level` at low and high, crosses it."""
    f_low, f_high = value(a, low) - level, value(a, high) - level
    side = 0
    x = low
    for _ in range(100):
        if f_high == f_low:
            break
        x = (low * f_high - high * f_low) / (f_high - f_low)
        f = value(a, x) - level
        if f == 0.0 or high - low <= 1e-15:
            break
        if (f > 0.0) == (f_high > 0.0):
            high, f_high = x, f
            if side == 1:
                f_low *= 0.5
            side = 1
        else:
            low, f_low = x, f
            if side == -1:
                f_high *= 0.5
            side = -1
    return x


@jit
def turns_in_step(a, found):  # type: ignore[no-untyped-def]
    """Write the places 0 < x <= 1 where the slope changes sign into `found`; return how many."""
    n = a.shape[0]
    rest = 0.0
    end = a[1]
    for k in range(2, n):
        rest += k * abs(a[k])
        end += k * a[k]
    if abs(a[1]) > rest:
        return 0
    bend = 0.0
    for k in range(3, n):
        bend += k * (k - 1) * abs(a[k])
    if 2.0 * abs(a[2]) > bend:
        if (a[1] > 0.0) == (end > 0.0) or a[1] == 0.0:
            return 0
        found[0] = _slope_root(a, 0.0, 1.0)
        return 1
    count = 0
    before = a[1]
    for part in range(_PARTS):
        after = slope(a, (part + 1) / _PARTS)
        if before != 0.0 and (before > 0.0) != (after > 0.0):
            found[count] = _slope_root(a, part / _PARTS, (part + 1) / _PARTS)
            count += 1
        if after != 0.0:
            before = after
    return count


@jit
def turning_points(start, step_size, polynomials, n_steps, begin, end, times, values):  # type: ignore[no-untyped-def]
    """Write the turning points of one column strictly within begin..end; return how many.

    start, step_size: float64[steps]; polynomials: float64[steps, order + 1]; times, values: room for them. Where an
    input jumps the slope may change sign between steps: such a corner is a turning point as well.
    """
    found = np.empty(_PARTS)
    count = 0
    last = 0.0
    for i in range(n_steps):
        if start[i] + step_size[i] <= begin or start[i] >= end:
            continue
        a = polynomials[i]
        if last * a[1] < 0.0 and start[i] > begin and count < times.shape[0]:
            times[count], values[count] = start[i], a[0]
            count += 1
        for r in range(turns_in_step(a, found)):
            t = start[i] + found[r] * step_size[i]
            if begin < t < end and count < times.shape[0]:
                times[count], values[count] = t, value(a, found[r])
                count += 1
        last = slope(a, 1.0)
    return count


@jit
def mean_between(start, step_size, polynomials, n_steps, begin, end):  # type: ignore[no-untyped-def]
    """The column's mean over begin..end."""
    total = 0.0
    for i in range(n_steps):
        low = max((begin - start[i]) / step_size[i], 0.0)
        high = min((end - start[i]) / step_size[i], 1.0)
        if high > low:
            total += integral(polynomials[i], low, high) * step_size[i]
    return total / (end - begin)


@jit
def value_at(start, step_size, polynomials, n_steps, t):  # type: ignore[no-untyped-def]
    """The column at time t, from the step that begins at or before it."""
    i = 0
    while i + 1 < n_steps and start[i + 1] <= t:
        i += 1
    return value(polynomials[i], min((t - start[i]) / step_size[i], 1.0))
