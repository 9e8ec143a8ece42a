"""Taylor recurrences of a traced model: one step of the integrator as a straight-line program.

Every expression is brought to the form constant + sum of coefficient x series, the coefficients depending on
parameters only (computed once a subject, the `hoisted` program). A series is a state, an input, or one of
    e  = exp(v)        e' = e v'
    s  = 1/(1+exp(-v)) s' = (s - s^2) v'
    l  = ln y          l' = y'/y
    p  = x y,  q = x/y
whose coefficients follow order by order from Cauchy products, exactly; no exponential is needed inside a step
beyond the value at its start. (Moore, Interval Analysis, 1966, chapter 11, from memory.)
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from functools import cached_property

from cohort.model.trace import INPUTS, Symbol, Traced, evaluator, exp, log
from cohort.program import Builder, Program

ORDER = 12
TOLERANCE = 1e-8
LONGEST_STEP_MIN = 30.0
SHORTEST_STEP_MIN = 1e-7
LARGEST = 1e6
"""A state beyond this multiple of its scale has left the physical range."""

SUMMARY = ("end_slope", "slope_rest", "bend_rest", "spread", "area", "square", "end")
"""Of each recorded polynomial a over 0 <= x <= 1: a'(1); sum k |a_k| from k = 2; sum k (k-1) |a_k| from k = 3;
sum |a_k| from k = 1; the integral of a; the integral of (a - a_0)^2 without products beyond order + 2; a(1)."""

ZERO, ONE = Symbol("const", value=0.0), Symbol("const", value=1.0)


@dataclass(frozen=True)
class Series:
    """What a coefficient multiplies: kind `state`, `input`, `exp`, `logistic`, `log`, `product`, `quotient`, `sum`."""

    kind: str
    symbol: str = ""
    parts: tuple[Affine | Series, ...] = ()


@dataclass(frozen=True)
class Affine:
    """constant + sum of coefficient x series; constant and coefficients hold parameters only."""

    constant: Symbol
    terms: tuple[tuple[Series, Symbol], ...] = ()

    def plus(self, other: Affine) -> Affine:
        total = dict(self.terms)
        for series, coefficient in other.terms:
            total[series] = total[series] + coefficient if series in total else coefficient
        return Affine(self.constant + other.constant, tuple(total.items()))

    def times(self, factor: Symbol) -> Affine:
        return Affine(self.constant * factor, tuple((s, c * factor) for s, c in self.terms))

    def alone(self) -> tuple[Series, Symbol]:
        """Return the varying part as one series and its coefficient."""
        if len(self.terms) == 1:
            return self.terms[0]
        return Series("sum", parts=(Affine(ZERO, self.terms),)), ONE


class Reader:
    """Brings a graph to affine form."""

    def __init__(self, traced: Traced) -> None:
        self._varying = {s: Series("state", s) for s in traced.states} | {i: Series("input", i) for i in INPUTS}
        self._done: dict[Symbol, Affine] = {}

    def affine(self, node: Symbol) -> Affine:
        if node not in self._done:
            self._done[node] = self._read(node)
        return self._done[node]

    def _read(self, node: Symbol) -> Affine:
        if node.op == "const":
            return Affine(node)
        if node.op == "name":
            return Affine(ZERO, ((self._varying[node.value], ONE),)) if node.value in self._varying else Affine(node)
        parts = [self.affine(o) for o in node.operands]
        if not any(part.terms for part in parts):
            return Affine(node)
        return getattr(self, "_" + node.op)(*parts)  # type: ignore[no-any-return]

    def _add(self, a: Affine, b: Affine) -> Affine:
        return a.plus(b)

    def _mul(self, a: Affine, b: Affine) -> Affine:
        if not a.terms:
            return b.times(a.constant)
        if not b.terms:
            return a.times(b.constant)
        (x, cx), (y, cy) = a.alone(), b.alone()
        product = Series("product", parts=(x, y) if repr(x) <= repr(y) else (y, x))
        crossed = Affine(ZERO, ((x, b.constant * cx),)) if b.constant is not ZERO else Affine(ZERO)
        other = Affine(ZERO, ((y, a.constant * cy),)) if a.constant is not ZERO else Affine(ZERO)
        return Affine(a.constant * b.constant, ((product, cx * cy),)).plus(crossed).plus(other)

    def _div(self, a: Affine, b: Affine) -> Affine:
        if not b.terms:
            return a.times(ONE / b.constant)
        return Affine(ZERO, ((Series("quotient", parts=(a, b)), ONE),))

    def _exp(self, v: Affine) -> Affine:
        return Affine(ZERO, ((Series("exp", parts=(Affine(ZERO, v.terms),)), exp(v.constant)),))

    def _logistic(self, v: Affine) -> Affine:
        return Affine(ZERO, ((Series("logistic", parts=(v,)), ONE),))

    def _log(self, v: Affine) -> Affine:
        if v.constant is ZERO and len(v.terms) == 1:
            series, coefficient = v.terms[0]
            alone = Affine(ZERO, ((series, ONE),))
            return Affine(log(coefficient), ((Series("log", parts=(alone,)), ONE),))
        return Affine(ZERO, ((Series("log", parts=(v,)), ONE),))


@dataclass
class Recurrences:
    """Writes Taylor coefficients into a builder on demand: `value(s, k)` of a series, `prime(s, k)` of its slope."""

    builder: Builder
    starts: dict[Series, int]
    inputs: dict[tuple[str, int], int]
    hoisted: dict[Symbol, int]
    rates: dict[str, Affine]
    _values: dict[tuple[Series, int], int] = field(default_factory=dict)
    _primes: dict[tuple[Series, int], int] = field(default_factory=dict)

    def value(self, series: Series, k: int) -> int:
        key = (series, k)
        if key not in self._values:
            self._values[key] = self._start(series) if k == 0 else self._later(series, k)
        return self._values[key]

    def prime(self, series: Series, k: int) -> int:
        key = (series, k)
        if key not in self._primes:
            self._primes[key] = self._slope(series, k)
        return self._primes[key]

    def affine(self, form: Affine, k: int) -> int:
        """Coefficient k of an affine form, the series that are known first added first."""
        total = self.coefficient(form.constant) if k == 0 else self.builder.constant(0.0)
        for series, coefficient in sorted(form.terms, key=lambda term: _lateness(term[0])):
            total = self.builder.fma(self.coefficient(coefficient), self.value(series, k), total)
        return total

    def coefficient(self, node: Symbol) -> int:
        return self.builder.constant(node.value) if node.op == "const" else self.hoisted[node]

    def _start(self, series: Series) -> int:
        b = self.builder
        if series.kind == "state":
            return self.starts[series]
        if series.kind == "input":
            return self.inputs[series.symbol, 0]
        if series.kind in ("exp", "logistic", "log"):
            method = {"exp": b.exp, "logistic": b.logistic, "log": b.log}[series.kind]
            return method(self.affine(_form(series), 0))
        return self._later(series, 0)

    def _later(self, series: Series, k: int) -> int:
        b = self.builder
        if series.kind == "input":
            return self.inputs.get((series.symbol, k), b.constant(0.0))
        if series.kind == "sum":
            return self.affine(_form(series), k)
        if series.kind == "product":
            x, y = series.parts
            assert isinstance(x, Series)
            assert isinstance(y, Series)
            return self._square(x, k) if x == y else self._convolve(lambda i: self.value(x, i), y, k, prime=False)
        if series.kind == "quotient":
            return self._quotient(series, k)
        return b.mul(self.prime(series, k - 1), b.constant(1.0 / k))

    def _slope(self, series: Series, k: int) -> int:
        b = self.builder
        if series.kind == "state":
            return self.affine(self.rates[series.symbol], k)
        if series.kind in ("exp", "logistic"):
            argument, coefficient = _form(series).alone()
            left = self._bell if series.kind == "logistic" else self.value
            total = self._convolve(lambda i: left(series, i), argument, k, prime=True)
            return b.mul(self.coefficient(coefficient), total)
        if series.kind == "log":
            return self._log_slope(series, k)
        if series.kind == "sum":
            terms = _form(series).terms
            total = b.constant(0.0)
            for part, coefficient in terms:
                total = b.fma(self.coefficient(coefficient), self.prime(part, k), total)
            return total
        return b.mul(b.constant(float(k + 1)), self.value(series, k + 1))

    def _convolve(self, left, right: Series, k: int, prime: bool) -> int:  # type: ignore[no-untyped-def]
        """sum of left(i) right(k-i), the oldest coefficients first so that the newest wait for nothing."""
        get = self.prime if prime else self.value
        total = self.builder.constant(0.0)
        for i in _middle_first(k):
            total = self.builder.fma(left(i), get(right, k - i), total)
        return total

    def _square(self, x: Series, k: int) -> int:
        b = self.builder
        total = b.constant(0.0)
        for i in reversed(range((k + 1) // 2)):
            total = b.fma(self.value(x, i), self.value(x, k - i), total)
        total = b.add(total, total)
        return b.fma(self.value(x, k // 2), self.value(x, k // 2), total) if k % 2 == 0 else total

    def _bell(self, s: Series, k: int) -> int:
        """Coefficient k of s - s^2."""
        b = self.builder
        one_less = b.sub(b.constant(1.0), self.value(s, 0))
        if k == 0:
            return b.mul(self.value(s, 0), one_less)
        inner = b.constant(0.0)
        for i in reversed(range(1, (k + 1) // 2)):
            inner = b.fma(self.value(s, i), self.value(s, k - i), inner)
        inner = b.add(inner, inner)
        if k % 2 == 0:
            inner = b.fma(self.value(s, k // 2), self.value(s, k // 2), inner)
        return b.sub(b.mul(self.value(s, k), b.sub(one_less, self.value(s, 0))), inner)

    def _log_slope(self, series: Series, k: int) -> int:
        b, y = self.builder, _form(series)
        argument, coefficient = y.alone()
        top = b.mul(self.coefficient(coefficient), self.prime(argument, k))
        for j in _newest_last(k):
            top = b.fnma(self.affine(y, j), self.prime(series, k - j), top)
        return b.mul(top, b.div(b.constant(1.0), self.affine(y, 0)))

    def _quotient(self, series: Series, k: int) -> int:
        b = self.builder
        top, bottom = (part for part in series.parts if isinstance(part, Affine))
        total = self.affine(top, k)
        for j in range(1, k + 1):
            total = b.fnma(self.affine(bottom, j), self.value(series, k - j), total)
        return b.div(total, self.affine(bottom, 0))


def _form(series: Series) -> Affine:
    form = series.parts[0]
    assert isinstance(form, Affine)
    return form


def _middle_first(k: int) -> list[int]:
    return sorted(range(k + 1), key=lambda i: (abs(2 * i - k), i))


def _newest_last(k: int) -> list[int]:
    return [j for j in _middle_first(k) if j > 0]


def _lateness(series: Series) -> int:
    return ("input", "state", "sum", "log", "exp", "logistic", "quotient", "product").index(series.kind)


@dataclass(frozen=True)
class Stepper:
    """One Taylor step of a model, as programs and the places of their inputs and outputs.

    hoisted: parameters (traced.parameters, in order) -> constants.
    step: inputs  x[n], 1/scale[n], time to the next stop, input coefficients, constants;
          outputs x after the step[n], step, health (1 where all is well), coefficients[seen][order + 1],
          summaries[seen][SUMMARY].
    Input coefficients are orders 0..order-1 of Gin, then of Iin; only order 0 where `steady`. Coefficients are of
    powers of (time since the step began) / step. States of an infinite scale have no part in the step size, those after
    the first `watched` none in the health. Summaries
    are what measures need; who only samples leaves them out. `relative` measures each state by its own present size in
    place of the given scale: for arms in which one may fade away.
    """

    traced: Traced
    seen: tuple[str, ...]
    steady: bool
    order: int = ORDER
    tolerance: float = TOLERANCE
    positive: bool = True
    watched: int | None = None
    summarised: bool = True
    relative: bool = False

    @cached_property
    def _affine(self) -> tuple[dict[str, Affine], dict[str, Affine]]:
        reader = Reader(self.traced)
        rates = {state: reader.affine(rate) for state, rate in self.traced.rates.items()}
        return rates, {column: reader.affine(self.traced.observed[column]) for column in self.seen}

    @cached_property
    def _constants(self) -> tuple[Symbol, ...]:
        found: dict[Symbol, None] = {}

        def visit(form: Affine | Series) -> None:
            if isinstance(form, Series):
                for part in form.parts:
                    visit(part)
                return
            for node in (form.constant, *(coefficient for _, coefficient in form.terms)):
                if node.op != "const":
                    found[node] = None
            for series, _ in form.terms:
                visit(series)

        for forms in self._affine:
            for form in forms.values():
                visit(form)
        return tuple(found)

    @cached_property
    def hoisted(self) -> Program:
        return evaluator("hoisted", self.traced.parameters, self._constants)

    @property
    def carried(self) -> int:
        """How many outputs of a step drive the next: states, step and health; what follows is the record."""
        return len(self.traced.states) + 2

    @property
    def n_input_orders(self) -> int:
        return 1 if self.steady else self.order

    @cached_property
    def step(self) -> Program:
        n, orders = len(self.traced.states), self.n_input_orders
        first_input = 2 * n + 1
        first_constant = first_input + len(INPUTS) * orders
        builder = Builder("step", first_constant + len(self._constants))
        rates, observed = self._affine
        recurrences = Recurrences(
            builder,
            {Series("state", s): i for i, s in enumerate(self.traced.states)},
            {(symbol, k): first_input + c * orders + k for c, symbol in enumerate(INPUTS) for k in range(orders)},
            {node: first_constant + i for i, node in enumerate(self._constants)},
            rates,
        )
        states = [Series("state", s) for s in self.traced.states]
        h = self._step_size(builder, recurrences, states, left=2 * n)
        after = [self._advance(builder, recurrences, s, h) for s in states]
        health = self._health(builder, after[: self.watched], h, n)
        powers = [builder.constant(1.0), h]
        for k in range(2, self.order + 1):
            powers.append(builder.mul(powers[k // 2], powers[k - k // 2]))
        seen = [
            builder.mul(recurrences.affine(observed[c], k), powers[k]) for c in self.seen for k in range(self.order + 1)
        ]
        size = self.order + 1
        columns = range(len(self.seen)) if self.summarised else ()
        summaries = [self._summary(builder, seen[c * size : (c + 1) * size]) for c in columns]
        return builder.finish([*after, h, health, *seen, *(x for row in summaries for x in row)])

    def _summary(self, b: Builder, a: Sequence[int]) -> list[int]:
        end_slope, slope_rest, bend_rest, spread = a[1], b.constant(0.0), b.constant(0.0), b.absolute(a[1])
        area, end = b.fma(b.constant(0.5), a[1], a[0]), a[len(a) - 1]
        for k in range(2, len(a)):
            size = b.absolute(a[k])
            end_slope = b.fma(b.constant(float(k)), a[k], end_slope)
            slope_rest = b.fma(b.constant(float(k)), size, slope_rest)
            if k > 2:
                bend_rest = b.fma(b.constant(float(k * (k - 1))), size, bend_rest)
            spread = b.add(spread, size)
            area = b.fma(b.constant(1.0 / (k + 1)), a[k], area)
        square = b.constant(0.0)
        for m in range(2, self.order + 3):
            half = b.constant(0.0)
            for j in range(max(1, m - self.order), (m + 1) // 2):
                half = b.fma(a[j], a[m - j], half)
            half = b.add(half, half)
            if m % 2 == 0:
                half = b.fma(a[m // 2], a[m // 2], half)
            square = b.fma(b.constant(1.0 / (m + 1)), half, square)
        for k in range(len(a) - 2, -1, -1):
            end = b.add(end, a[k])
        return [end_slope, slope_rest, bend_rest, spread, area, square, end]

    def _step_size(self, b: Builder, recurrences: Recurrences, states: Sequence[Series], left: int) -> int:
        """min over the last two orders k of (tolerance / |x_k|)^(1/k), x in units of its scale, at most to the stop."""
        n = len(self.traced.states)
        shortest = None
        for k in (self.order - 1, self.order):
            largest = b.constant(1e-290)
            for i, state in enumerate(states):
                size = b.absolute(recurrences.value(state, k))
                own = b.absolute(recurrences.value(state, 0))
                term = b.div(size, own) if self.relative else b.mul(size, n + i)
                largest = b.larger(largest, term)
            exponent = b.mul(b.log(b.mul(largest, b.constant(1.0 / self.tolerance))), b.constant(-1.0 / k))
            shortest = exponent if shortest is None else b.smaller(shortest, exponent)
        assert shortest is not None
        h = b.smaller(b.constant(LONGEST_STEP_MIN), b.exp(shortest))
        return b.if_less(left, h, left, h)

    def _advance(self, b: Builder, recurrences: Recurrences, state: Series, h: int) -> int:
        total = recurrences.value(state, self.order)
        for k in range(self.order - 1, -1, -1):
            total = b.fma(total, h, recurrences.value(state, k))
        return total

    def _health(self, b: Builder, after: Sequence[int], h: int, n: int) -> int:
        one, zero = b.constant(1.0), b.constant(0.0)
        total, lowest = zero, one
        for i, x in enumerate(after):
            relative = b.mul(x, n + i)
            total = b.add(total, b.absolute(relative))
            lowest = b.smaller(relative, lowest)
        health = b.if_less(total, b.constant(LARGEST), one, zero)
        if self.positive:
            health = b.if_less(zero, lowest, health, zero)
        return b.if_less(b.constant(SHORTEST_STEP_MIN), h, health, zero)
