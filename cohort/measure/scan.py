"""One reading of a course's column, from which everything else is asked: running integrals and turning points."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from cohort.compiled import jit
from cohort.measure.roots import Roots
from cohort.measure.turning import ROUGHLY, integral, slope_and_bend, turning_points, value

Array = NDArray[np.float64]


class Scan(NamedTuple):
    """A column of one course, read.

    roots: `cohort.measure.roots.roots`; start, step_size: float64[steps]; a: float64[steps, order + 1]; summaries:
    float64[steps, SUMMARY]; area, square: float64[steps + 1], the integrals of the column and of (column - centre)^2 from
    the course's beginning to each step's start; times, values: float64[turns], all turning points.
    """

    roots: Roots
    start: Array
    step_size: Array
    a: Array
    summaries: Array
    centre: float
    area: Array
    square: Array
    times: Array
    values: Array


@jit
def scan(roots, start, step_size, a, summaries):  # type: ignore[no-untyped-def]
    """Read one column: start, step_size float64[steps], a float64[steps, order + 1], summaries float64[steps, SUMMARY];
    roots of as many orders."""
    n = start.shape[0]
    centre = a[0, 0]
    area, square = np.zeros(n + 1), np.zeros(n + 1)
    for i in range(n):
        off = a[i, 0] - centre
        whole = summaries[i, 4]
        area[i + 1] = area[i] + whole * step_size[i]
        part = summaries[i, 5] + off * (2.0 * (whole - a[i, 0]) + off)
        square[i + 1] = square[i] + part * step_size[i]
    room = n + 64
    times, values = np.empty(room), np.empty(room)
    count = turning_points(roots, start, step_size, a, summaries, ROUGHLY, times, values)
    return Scan(roots, start, step_size, a, summaries, centre, area, square, times[:count], values[:count])


@jit
def _square(a, order):  # type: ignore[no-untyped-def]
    """The integral of the polynomial's square over 0..1, without products beyond order + 2: they are below the
    integrator's own error."""
    total = 0.0
    for m in range(order + 3):
        half = 0.0
        for j in range(max(0, m - order), (m + 1) // 2):
            half += a[j] * a[m - j]
        half += half
        if m % 2 == 0:
            half += a[m // 2] * a[m // 2]
        total += half * (1.0 / (m + 1))
    return total


@jit
def step_at(s, t):  # type: ignore[no-untyped-def]
    """The step that holds time t (of two that meet there, the later)."""
    return max(np.searchsorted(s.start, t, side="right") - 1, 0)


@jit
def value_at(s, t):  # type: ignore[no-untyped-def]
    """The column at time t."""
    i = step_at(s, t)
    return value(s.a, i, min((t - s.start[i]) / s.step_size[i], 1.0))


@jit
def area_to(s, t):  # type: ignore[no-untyped-def]
    """The column's integral from the course's beginning to t."""
    i = step_at(s, t)
    return s.area[i] + integral(s.a, i, 0.0, min((t - s.start[i]) / s.step_size[i], 1.0)) * s.step_size[i]


@jit
def square_to(s, t):  # type: ignore[no-untyped-def]
    """The integral of (column - centre)^2 from the course's beginning to t."""
    i = step_at(s, t)
    x = min((t - s.start[i]) / s.step_size[i], 1.0)
    if x == 0.0:
        return s.square[i]
    part = s.a[i].copy()
    part[0] -= s.centre
    power = 1.0
    for k in range(part.shape[0]):
        part[k] *= power
        power *= x
    return s.square[i] + _square(part, part.shape[0] - 1) * x * s.step_size[i]


@jit
def mean_between(s, begin, end):  # type: ignore[no-untyped-def]
    """The column's mean over begin..end."""
    return (area_to(s, end) - area_to(s, begin)) / (end - begin)


@jit
def sd_between(s, begin, end):  # type: ignore[no-untyped-def]
    """The column's standard deviation over begin..end."""
    off = mean_between(s, begin, end) - s.centre
    return np.sqrt(max((square_to(s, end) - square_to(s, begin)) / (end - begin) - off * off, 0.0))


@jit
def turns_between(s, begin, end):  # type: ignore[no-untyped-def]
    """(first, last + 1) of the turning points strictly within begin..end."""
    first = np.searchsorted(s.times, begin, side="right")
    return first, max(np.searchsorted(s.times, end, side="left"), first)


EQUAL = 1e-6
"""Peaks this close to the highest, relatively, count as it: less than that is not promised."""


@jit
def extremes(s, begin, end):  # type: ignore[no-untyped-def]
    """(highest, when it is first reached, lowest) over begin..end, both ends included.

    On a settled rhythm every peak is as high as any other to the last digits: the first within EQUAL of it counts.
    """
    at_begin, at_end = value_at(s, begin), value_at(s, end)
    highest, lowest = max(at_begin, at_end), min(at_begin, at_end)
    first, last = turns_between(s, begin, end)
    for i in range(first, last):
        highest, lowest = max(highest, s.values[i]), min(lowest, s.values[i])
    enough = highest - EQUAL * abs(highest)
    if at_begin >= enough:
        return highest, begin, lowest
    for i in range(first, last):
        if s.values[i] >= enough:
            return highest, s.times[i], lowest
    return highest, end, lowest


@jit
def polished(s, t):  # type: ignore[no-untyped-def]
    """A turning point's time to full accuracy; corners and ends stay where they are."""
    i = step_at(s, t)
    begin = (t - s.start[i]) / s.step_size[i]
    x = begin
    for _ in range(3):
        f, g = slope_and_bend(s.a, i, x)
        x -= f / g
    return s.start[i] + x * s.step_size[i] if abs(x - begin) < 1e-3 and 0.0 < x < 1.0 else t
