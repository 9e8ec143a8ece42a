"""Where a step's polynomial turns, or crosses a level, for several steps at once: Newton's method without branches.

A step's polynomial a runs over 0 <= x <= 1. What is sought has one place there, told by the ends' signs; the parabola
through both ends with the first end's slope gives a guess within the step, and three Newton steps bring the place below
the integrator's own error. How far the last one moved is an output: where that is too much, callers search again.
"""

from __future__ import annotations

import functools
from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from cohort.compiled import LANES, compile_program
from cohort.program import Builder, Program
from cohort.simulate.course import Courses

Array = NDArray[np.float64]
Whole = NDArray[np.int64]

ROUNDS = 3


class Roots(NamedTuple):
    """Addresses of the programs `turn` and `cross` for polynomials of as many coefficients, LANES steps at once."""

    turn: int
    cross: int


@functools.cache
def roots(orders: int) -> Roots:
    """The compiled programs for polynomials of `orders` coefficients."""
    return Roots(compile_program(turn(orders), LANES), compile_program(cross(orders), LANES))


@functools.cache
def turn(orders: int) -> Program:
    """a[orders], a'(1) -> (place where a' changes sign, a there, size of the last correction of the place)."""
    b = Builder("turn", orders + 1)
    slopes = [b.mul(b.constant(float(k)), k) for k in range(1, orders)]
    x = _guess(b, slopes[0], slopes[1], orders) if orders > 2 else b.constant(0.5)
    change = b.constant(0.0)
    for _ in range(ROUNDS if orders > 2 else 0):
        x, change = _newton(b, slopes, x)
    return b.finish([x, _horner(b, range(orders), x), change])


@functools.cache
def cross(orders: int) -> Program:
    """a[orders], a(1), level -> (place where a crosses the level, integral of a from 0 to there, last correction)."""
    b = Builder("cross", orders + 2)
    off = [b.sub(0, orders + 1), *range(1, orders)]
    x = _guess(b, off[0], off[1], b.sub(orders, orders + 1))
    change = b.constant(0.0)
    for _ in range(ROUNDS):
        x, change = _newton(b, off, x)
    area = _horner(b, [b.mul(b.constant(1.0 / (k + 1)), k) for k in range(orders)], x)
    return b.finish([x, b.mul(area, x), change])


def _guess(b: Builder, at_0: int, slope_at_0: int, at_1: int) -> int:
    """The root in 0..1 of the parabola f(0), f'(0), f(1), whose ends have opposite signs."""
    bend = b.sub(b.sub(at_1, at_0), slope_at_0)
    spread = b.sqrt(b.fnma(b.mul(b.constant(4.0), bend), at_0, b.mul(slope_at_0, slope_at_0)))
    signed = b.if_less(at_0, b.constant(0.0), b.neg(spread), spread)
    return _inside(b, b.div(b.add(at_0, at_0), b.sub(signed, slope_at_0)))


def _newton(b: Builder, a: Sequence[int], x: int) -> tuple[int, int]:
    value, slope = a[-1], b.constant(0.0)
    for coefficient in reversed(a[:-1]):
        slope = b.fma(slope, x, value)
        value = b.fma(value, x, coefficient)
    following = _inside(b, b.sub(x, b.div(value, slope)))
    return following, b.absolute(b.sub(following, x))


def _horner(b: Builder, a: Sequence[int], x: int) -> int:
    total = a[-1]
    for coefficient in reversed(a[:-1]):
        total = b.fma(total, x, coefficient)
    return total


def _inside(b: Builder, x: int) -> int:
    return b.smaller(b.constant(1.0), b.larger(b.constant(0.0), x))


def reading(course: Courses) -> tuple[Roots, Array, Array, Array, Array, Whole, Whole]:
    """What every compiled reader of courses takes first: roots, start, step_size, coefficients, summaries, n_steps, status."""
    arrays = (course.start, course.step_size, course.coefficients, course.summaries, course.n_steps, course.status)
    return roots(course.orders), *arrays
