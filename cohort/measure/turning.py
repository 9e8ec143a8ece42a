"""Turning points, crossings and integrals of a recorded course, from its polynomials.

Functions take all steps' coefficients, float64[steps, order + 1], and which step: a view of one row would cost more
than most of them do.

A step's polynomial runs over 0 <= x <= 1. Where the slope (or else its own slope) cannot change sign, by comparing
its first coefficient with the sum of the others' sizes, the ends decide; elsewhere halves are settled in the same way
from their middles, and what is left is searched in eighths.
"""

from __future__ import annotations

import numpy as np

from cohort.compiled import LANES, call_program, fma, jit

_PARTS = 8
NEAR = 2e-5
JUMP = 1e-9
ROUNDING = 1e-13
ROUGHLY = 3e-3
"""How small Newton's last change of x must be: the place is then exact to about its square, a turning point's value to
that squared again."""

WHOLE = np.arange(64.0)
RECIPROCALS = np.array([np.inf, *(1.0 / k for k in range(1, 64))])
THIRDS = WHOLE * (WHOLE - 1.0) * (WHOLE - 2.0)


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
    total = WHOLE[n] * a[i, n]
    for k in range(n - 1, 0, -1):
        total = fma(total, x, WHOLE[k] * a[i, k])
    return total


@jit
def integral(a, i, low, high):  # type: ignore[no-untyped-def]
    """The polynomial's integral over x = low..high."""
    top = 0.0
    bottom = 0.0
    for k in range(a.shape[1] - 1, -1, -1):
        part = a[i, k] * RECIPROCALS[k + 1]
        top = (top + part) * high
        bottom = (bottom + part) * low
    return top - bottom


@jit
def slope_and_bend(a, i, x):  # type: ignore[no-untyped-def]
    """First and second derivative of the polynomial at x."""
    n = a.shape[1] - 1
    first = WHOLE[n] * a[i, n]
    second = 0.0
    for k in range(n - 1, 0, -1):
        second = fma(second, x, first)
        first = fma(first, x, WHOLE[k] * a[i, k])
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
def sign_changes(a, summaries, i):  # type: ignore[no-untyped-def]
    """How often the slope changes sign within step i: 0 or 1 where that is certain, else -1.

    It cannot where its first coefficient outweighs the rest, and changes at most once where its own slope cannot change
    sign. Else each half step, then each quarter, is judged by its chord: over a length h the slope is off the chord by at most
    bend h^2/8 and as steep as the chord but for bend h/2, bend being the largest that the slope's second derivative can be.
    """
    first, last = a[i, 1], summaries[i, 0]
    if abs(first) > summaries[i, 1]:
        return 0
    if first == 0.0 or last == 0.0:
        return -1
    if 2.0 * abs(a[i, 2]) > summaries[i, 2]:
        return int((first > 0.0) != (last > 0.0))
    middle = slope(a, i, 0.5)
    bend = ROUNDING * summaries[i, 1]
    for k in range(3, a.shape[1]):
        bend += THIRDS[k] * abs(a[i, k])
    left, right = _chord(first, middle, 0.5, bend), _chord(middle, last, 0.5, bend)
    if left < 0:
        quarter = slope(a, i, 0.25)
        left = _both(_chord(first, quarter, 0.25, bend), _chord(quarter, middle, 0.25, bend))
    if right < 0:
        quarter = slope(a, i, 0.75)
        right = _both(_chord(middle, quarter, 0.25, bend), _chord(quarter, last, 0.25, bend))
    changes = _both(left, right)
    return changes if changes < 2 else -1


@jit
def _chord(begin, end, length, bend):  # type: ignore[no-untyped-def]
    """Sign changes between two values of the slope `length` apart: 0, 1, or -1 where the chord cannot tell."""
    off = bend * length * length / 8.0
    if abs(end - begin) > 4.0 * off:  # it rises or falls throughout
        return int((begin > 0.0) != (end > 0.0))
    return 0 if (begin > 0.0) == (end > 0.0) and min(abs(begin), abs(end)) > off else -1


@jit
def _both(first, second):  # type: ignore[no-untyped-def]
    return -1 if first < 0 or second < 0 else first + second


@jit
def turns_in_step(a, summaries, i, found, near):  # type: ignore[no-untyped-def]
    """Write the places 0 < x <= 1 where the slope changes sign into `found`; return how many.

    summaries: float64[steps, SUMMARY] (`cohort.model.taylor`).
    """
    certain = sign_changes(a, summaries, i)
    if certain == 1:
        found[0] = _slope_root(a, i, 0.0, 1.0, a[i, 1], summaries[i, 0], near)
    if certain >= 0:
        return certain
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
def turning_points(roots, start, step_size, a, summaries, near, times, values):  # type: ignore[no-untyped-def]
    """Write the turning points of one column of one course; return how many.

    roots: `cohort.measure.roots.roots` of the column's orders; start, step_size: float64[steps]; a: float64[steps,
    order + 1]; summaries: float64[steps, SUMMARY]; times, values: room for them; near: NEAR or ROUGHLY. Where an input
    jumps the slope may change sign between steps: such a corner is one as well, and where a dose moves the column at
    once both its values are. Steps with one turn, nearly all that have any, are solved LANES at once.
    """
    found = np.empty(_PARTS)
    room, orders = times.shape[0], a.shape[1]
    source, result = np.zeros((orders + 1, LANES)), np.empty((3, LANES))
    step, place = np.empty(LANES, np.int64), np.empty(LANES, np.int64)
    pending = count = 0
    for i in range(start.shape[0]):
        if i > 0 and count + 1 < room:
            before = summaries[i - 1, 6]
            if abs(a[i, 0] - before) > JUMP * (abs(before) + abs(a[i, 0])):
                times[count], values[count] = start[i], before
                times[count + 1], values[count + 1] = start[i], a[i, 0]
                count += 2
            elif summaries[i - 1, 0] * a[i, 1] < 0.0:
                times[count], values[count] = start[i], a[i, 0]
                count += 1
        if abs(a[i, 1]) > summaries[i, 1] or count >= room:  # most steps
            continue
        certain = sign_changes(a, summaries, i)
        if certain == 1:
            for k in range(orders):
                source[k, pending] = a[i, k]
            source[orders, pending], step[pending], place[pending] = summaries[i, 0], i, count
            pending, count = pending + 1, count + 1
            if pending == LANES:
                _solve_turns(roots, source, result, step, place, start, step_size, a, summaries, near, times, values)
                pending = 0
        if certain >= 0:
            continue
        for r in range(turns_in_step(a, summaries, i, found, near)):
            if count < room:
                times[count], values[count] = start[i] + found[r] * step_size[i], value(a, i, found[r])
                count += 1
    if pending > 0:
        step[pending:], place[pending:] = step[0], place[0]
        for k in range(orders + 1):
            source[k, pending:] = source[k, 0]
        _solve_turns(roots, source, result, step, place, start, step_size, a, summaries, near, times, values)
    return count


@jit
def _solve_turns(roots, source, result, step, place, start, step_size, a, summaries, near, times, values):  # type: ignore[no-untyped-def]
    """Fill in the turning points at `place` of the steps `step`, one a lane."""
    call_program(roots.turn, source, result)
    for l in range(LANES):
        i, x, there = step[l], result[0, l], result[1, l]
        if not result[2, l] <= near:
            x = _slope_root(a, i, 0.0, 1.0, a[i, 1], summaries[i, 0], near)
            there = value(a, i, x)
        times[place[l]], values[place[l]] = start[i] + x * step_size[i], there
