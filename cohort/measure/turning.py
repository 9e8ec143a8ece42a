"""Turning points, crossings and integrals of a recorded course, from its polynomials.

Functions take all steps' coefficients, float64[steps, order + 1], and which step: a view of one row would cost more
than most of them do.

A step's polynomial runs over 0 <= x <= 1. Where the slope (or else its own slope) cannot change sign, by comparing
its first coefficient with the sum of the others' sizes, the ends decide; elsewhere halves are settled in the same way
from their middles, and what is left is searched in eighths.
"""

from __future__ import annotations

import numpy as np

from cohort.compiled import fma, jit

_PARTS = 8
NEAR = 2e-5
JUMP = 1e-9
ROUGHLY = 3e-3
"""How small Newton's last change of x must be: the place is then exact to about its square, a turning point's value to
that squared again."""


@jit
def value(a, i, x):  # type: ignore[no-untyped-def]
    """The polynomial with coefficients a at x."""
    total = a[i, a.shape[1] - 1]
    for k in range(a.shape[1] - 2, -1, -1):
        total = fma(total, x, a[i, k])
    return total


@jit
def slope(a, i, x):  # type: ignore[no-untyped-def]
    """d/dx of the polynomial at x."""
    n = a.shape[1] - 1
    total = n * a[i, n]
    for k in range(n - 1, 0, -1):
        total = fma(total, x, k * a[i, k])
    return total


@jit
def integral(a, i, low, high):  # type: ignore[no-untyped-def]
    """The polynomial's integral over x = low..high."""
    top = 0.0
    bottom = 0.0
    for k in range(a.shape[1] - 1, -1, -1):
        part = a[i, k] / (k + 1)
        top = (top + part) * high
        bottom = (bottom + part) * low
    return top - bottom


@jit
def slope_and_bend(a, i, x):  # type: ignore[no-untyped-def]
    """First and second derivative of the polynomial at x."""
    n = a.shape[1] - 1
    first = n * a[i, n]
    second = 0.0
    for k in range(n - 1, 0, -1):
        second = fma(second, x, first)
        first = fma(first, x, k * a[i, k])
    return first, second


@jit
def _value_and_slope(a, i, x):  # type: ignore[no-untyped-def]
    total = a[i, a.shape[1] - 1]
    first = 0.0
    for k in range(a.shape[1] - 2, -1, -1):
        first = fma(first, x, total)
        total = fma(total, x, a[i, k])
    return total, first


@jit
def _slope_root(a, i, low, high, f_low, f_high, near):  # type: ignore[no-untyped-def]
    """Where the slope, f_low and f_high of opposite signs at low and high, is zero: Newton kept inside the bracket."""
    x = (low * f_high - high * f_low) / (f_high - f_low)
    for _ in range(60):
        f, g = slope_and_bend(a, i, x)
        if (f > 0.0) == (f_high > 0.0):
            high = x
        else:
            low = x
        following = x - f / g
        if not low <= following <= high:
            following = 0.5 * (low + high)
        if abs(following - x) <= near:
            return following
        x = following
    return x


@jit
def level_root(a, i, level, low, high):  # type: ignore[no-untyped-def]
    """Where the polynomial, on opposite sides of `level` at low and high, crosses it."""
    f_low, f_high = value(a, i, low) - level, value(a, i, high) - level
    x = (low * f_high - high * f_low) / (f_high - f_low)
    for _ in range(60):
        f, g = _value_and_slope(a, i, x)
        f -= level
        if (f > 0.0) == (f_high > 0.0):
            high = x
        else:
            low = x
        following = x - f / g
        if not low <= following <= high:
            following = 0.5 * (low + high)
        if abs(following - x) <= NEAR:  # the next change would be about its square
            return following
        x = following
    return x


@jit
def turns_in_step(a, summaries, i, found, near):  # type: ignore[no-untyped-def]
    """Write the places 0 < x <= 1 where the slope changes sign into `found`; return how many.

    summaries: float64[steps, SUMMARY] (`cohort.model.taylor`).
    """
    end_slope = summaries[i, 0]
    if abs(a[i, 1]) > summaries[i, 1]:
        return 0
    if 2.0 * abs(a[i, 2]) > summaries[i, 2]:
        if (a[i, 1] > 0.0) == (end_slope > 0.0) or a[i, 1] == 0.0:
            return 0
        found[0] = _slope_root(a, i, 0.0, 1.0, a[i, 1], end_slope, near)
        return 1
    # how far the slope can move from the middle of a stretch to its ends, per unit of x
    moving = 2.0 * abs(a[i, 2]) + summaries[i, 2]
    if abs(slope(a, i, 0.5)) > 0.5 * moving:
        return 0
    count = 0
    before = a[i, 1]
    for part in range(_PARTS):
        if part % (_PARTS // 2) == 0:
            middle = slope(a, i, 0.25 if part == 0 else 0.75)
            settled = abs(middle) > 0.25 * moving
        if settled:
            before = middle
            continue
        after = slope(a, i, (part + 1) / _PARTS)
        if before != 0.0 and (before > 0.0) != (after > 0.0):
            found[count] = _slope_root(
                a, i, part / _PARTS, (part + 1) / _PARTS, slope(a, i, part / _PARTS), after, near
            )
            count += 1
        if after != 0.0:
            before = after
    return count


@jit
def turning_points(start, step_size, a, summaries, near, times, values):  # type: ignore[no-untyped-def]
    """Write the turning points of one column of one course; return how many.

    start, step_size: float64[steps]; a: float64[steps, order + 1]; summaries: float64[steps, SUMMARY]; times, values:
    room for them; near: NEAR or ROUGHLY. Where an input jumps the slope may change sign between steps: such a corner is
    one as well, and where a dose moves the column at once both its values are.
    """
    found = np.empty(_PARTS)
    count = 0
    for i in range(start.shape[0]):
        if i > 0 and count + 1 < times.shape[0]:
            before = summaries[i - 1, 6]
            if abs(a[i, 0] - before) > JUMP * (abs(before) + abs(a[i, 0])):
                times[count], values[count] = start[i], before
                times[count + 1], values[count + 1] = start[i], a[i, 0]
                count += 2
            elif summaries[i - 1, 0] * a[i, 1] < 0.0:
                times[count], values[count] = start[i], a[i, 0]
                count += 1
        if abs(a[i, 1]) > summaries[i, 1]:  # most steps; the call would cost more than the answer
            continue
        for r in range(turns_in_step(a, summaries, i, found, near)):
            if count < times.shape[0]:
                times[count], values[count] = start[i] + found[r] * step_size[i], value(a, i, found[r])
                count += 1
    return count
